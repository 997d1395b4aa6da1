"""A take's tones and an airframe: causes ranked, harmonic families joined, motors told apart."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from framegrade.airframe import Airframe
from framegrade.isolator import transmissibility
from framegrade.records import TakeRecord
from framegrade.sources import wording
from framegrade.sources.causes import UNNAMED_RESONANCE, Order, Swing, orders_of
from framegrade.sources.inference import Share, infer, reachable
from framegrade.sources.lines import Line, View, lines_of, view_of
from framegrade.sources.throttle import Followed

#: Probability from which the first cause is "named" (if something besides the line itself supports it) or "likely".
NAMED, LIKELY = 0.90, 0.60
#: Causes less likely than this are not listed; where nothing fits, what fits least badly is, down to the second figure.
LEAST_SHARE, LEAST_SHARE_UNEXPLAINED = 0.02, 0.001
MOST_CANDIDATES = 4
#: Lines of one shaft agree on its speed within this many standard deviations.
SAME_SHAFT = 2.5
#: Shafts this close to one another are motors of one flight speed.
NEAR_SHAFTS = 0.12
#: Standard deviations of the readout that a folded tone implies: relative, and in cycles per frame height.
READOUT_SPREAD, CYCLES_SPREAD = 0.015, 0.02
#: A readout that leaves a folded tone without a candidate pays this (natural logarithm).
UNFIT_TONE = 7.0


@dataclass(frozen=True)
class Candidate:
    """One possible cause of a tone.

    Attributes
    ----------
    cause : str
        "once per turn", "isolator resonance", ...
    parts : str
        What makes it.
    order : int or None
        Cycles for each turn of a shaft; None if nothing turns.
    shaft_rpm : float
        Implied speed; NaN if nothing turns.
    frequency_hz : float
        The tone's, or the candidate frequency this cause goes with.
    readout_s : float
        The readout this frequency would need; NaN when the readout is known or the shutter global.
    probability : float
        0 to 1, given the airframe file and the expectations in `causes`.
    reason : str
    """

    cause: str
    parts: str
    order: int | None
    shaft_rpm: float
    frequency_hz: float
    readout_s: float
    probability: float
    reason: str


@dataclass(frozen=True)
class ToneTrace:
    """One vibration of a take and what may make it.

    Attributes
    ----------
    axes : tuple of str
        Where it was seen, strongest first.
    frequency_hz, frequency_ci_hz : float
        And 95 % half-width; NaN when only candidates are known.
    amplitude_px : float
        Peak, native pixels, root of the summed squares over the axes.
    throttle : str or None
        "follows", "stays" or "drifts" while the throttle changed.
    low_hz, high_hz : float
        Range it swept; NaN when it did not.
    candidates : tuple of Candidate
        Likeliest first; of an unexplained tone what fits least badly, or nothing.
    confidence : {"named", "likely", "one of", "unexplained"}
        "named": one cause with 90 % or more and support beyond the line itself; "likely": 60 % or more; "one of":
        several fit; "unexplained": nothing in the airframe file fits better than a cause that is not in it.
    why : str
        What the confidence rests on.
    ruled_out : tuple of str
        Orders whose speed is out of reach, a clause each.
    isolator_gain : float
        What the isolator passes on at this frequency (transmissibility); NaN without one.
    isolator : str or None
        The same in words.
    advice : str
    shaft : int or None
        Number of the shaft in `TakeTrace.shafts`, from 1.
    """

    axes: tuple[str, ...]
    frequency_hz: float
    frequency_ci_hz: float
    amplitude_px: float
    throttle: str | None
    low_hz: float
    high_hz: float
    candidates: tuple[Candidate, ...]
    confidence: str
    why: str
    ruled_out: tuple[str, ...]
    isolator_gain: float
    isolator: str | None
    advice: str
    shaft: int | None


@dataclass(frozen=True)
class Shaft:
    """One shaft and the lines that are its orders.

    Attributes
    ----------
    speed_rpm, speed_ci_rpm : float
        And 95 % half-width.
    orders : tuple of int
    frequency_hz : tuple of float
        In the order of `orders`.
    """

    speed_rpm: float
    speed_ci_rpm: float
    orders: tuple[int, ...]
    frequency_hz: tuple[float, ...]


@dataclass(frozen=True)
class TakeTrace:
    """All tones of a take with their causes.

    Attributes
    ----------
    clip : str
    tones : tuple of ToneTrace
        Strongest first.
    shafts : tuple of Shaft
        Slowest first.
    notes : tuple of str
        Sentences about the take as a whole.
    """

    clip: str
    tones: tuple[ToneTrace, ...]
    shafts: tuple[Shaft, ...]
    notes: tuple[str, ...]


def trace_take(record: TakeRecord, airframe: Airframe) -> TakeTrace:
    """Explain the tones of one take.

    Parameters
    ----------
    record : TakeRecord
    airframe : Airframe

    Returns
    -------
    TakeTrace
        No candidate's shaft speed is out of the airframe's reach.
    """
    view = view_of(record)
    lines, followed = lines_of(record, view)
    clip = str(record.take["clip"])
    if not lines:
        return TakeTrace(clip, (), (), ("no tone stands out of this take: there is nothing to trace",))
    readings = _readings(lines, airframe, view)
    first = [_first_order(reading) for reading in readings]
    shafts, shaft_of = _shafts(lines, first)
    tones = tuple(_tone(line, reading, airframe, view, _family(at, lines, first), shaft_of[at])
                  for at, (line, reading) in enumerate(zip(lines, readings)))
    return TakeTrace(clip, tones, shafts, _notes(tones, shafts, airframe, view, followed))


# --- readings: shares, with the readout they need --------------------------------------------------------------------


@dataclass(frozen=True)
class _Reading:
    """A cause of a line with its share and the readout it goes with (NaN when that is known)."""

    share: Share
    readout_s: float


def _readings(lines: Sequence[Line], airframe: Airframe, view: View) -> list[list[_Reading]]:
    """Likeliest first, for each line."""
    if view.shutter != "unknown":
        return [[_Reading(share, math.nan) for share in shares] for shares in infer(lines, airframe, view).shares]
    return _over_readouts(lines, airframe, view)


def _over_readouts(lines: Sequence[Line], airframe: Airframe, view: View) -> list[list[_Reading]]:
    """One readout holds for all tones of a take: each is tried, and weighed by what the lines then say together."""
    tried = []
    for readout in _distinct(sorted({r for line in lines for r in line.readout_s})):
        chosen = [_at_readout(line, readout) for line in lines]
        fitting = [line for line, _ in chosen if line is not None]
        if not fitting:
            continue
        result = infer(fitting, airframe, view)
        shares = iter(result.shares)
        tried.append((result.log_evidence + sum(worth for _, worth in chosen), readout,
                      [next(shares) if line is not None else () for line, _ in chosen]))
    if not tried:
        return [[] for _ in lines]
    evidence = np.array([worth for worth, _, _ in tried])
    weight = np.exp(evidence - evidence.max())
    weight /= weight.sum()
    readings: list[list[_Reading]] = [[] for _ in lines]
    for w, (_, readout, of_lines) in zip(weight, tried):
        for at, shares in enumerate(of_lines):
            readings[at] += [_Reading(Share(s.cause, s.frequency_hz, w * s.probability), readout) for s in shares]
    return [_merged(one) for one in readings]


def _distinct(readouts: list[float]) -> list[float]:
    """Readouts further apart than the cycles per frame can tell."""
    kept: list[float] = []
    for readout in readouts:
        if not kept or readout > kept[-1] * (1 + READOUT_SPREAD):
            kept.append(readout)
    return kept


def _at_readout(line: Line, readout_s: float) -> tuple[Line | None, float]:
    """A line with the frequency it has at a readout, and the logarithm of how well that readout fits."""
    spread = math.hypot(READOUT_SPREAD, CYCLES_SPREAD / max(abs(line.cycles_per_frame), 1e-6))
    off = np.abs(np.log(np.array(line.readout_s) / readout_s)) / spread
    at = int(np.argmin(off))
    worth = -0.5 * float(off[at]) ** 2
    if worth < -UNFIT_TONE:
        return None, -UNFIT_TONE
    f = line.frequency_hz[at]
    return Line((f,), line.sigma_hz, line.axes, line.amplitude_px, low_hz=f, high_hz=f), worth


def _merged(readings: list[_Reading]) -> list[_Reading]:
    """The same cause at the same frequency once, with the likeliest of its readouts."""
    best: dict[tuple, _Reading] = {}
    for one in readings:
        key = (one.share.cause, round(one.share.frequency_hz, 6))
        if key in best:
            old = best[key]
            total = Share(one.share.cause, one.share.frequency_hz, old.share.probability + one.share.probability)
            readout = one.readout_s if one.share.probability > old.share.probability else old.readout_s
            best[key] = _Reading(total, readout)
        else:
            best[key] = one
    return sorted(best.values(), key=lambda one: -one.share.probability)


# --- families and shafts ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Turn:
    """A line read as an order of a shaft: the speed in turns a second with its standard deviation."""

    order: int
    frequency_hz: float
    speed_hz: float
    sigma_hz: float


def _first_order(readings: Sequence[_Reading]) -> tuple[Share, float] | None:
    """First cause of a line that is an order of a shaft; None when its first cause is not."""
    if readings and isinstance(readings[0].share.cause, Order):
        return readings[0].share, readings[0].readout_s
    return None


def _turns(lines: Sequence[Line], first) -> list[_Turn | None]:
    turns = []
    for line, one in zip(lines, first):
        if one is None:
            turns.append(None)
            continue
        k, f = one[0].cause.multiple, one[0].frequency_hz
        turns.append(_Turn(k, f, f / k, line.sigma_hz / k))
    return turns


def _agree(a: _Turn, b: _Turn) -> bool:
    return abs(a.speed_hz - b.speed_hz) < SAME_SHAFT * math.hypot(a.sigma_hz, b.sigma_hz)


def _family(at: int, lines: Sequence[Line], first) -> list[tuple[float, int]]:
    """Other lines of the same shaft, at other orders: (frequency, order)."""
    turns = _turns(lines, first)
    if turns[at] is None:
        return []
    return sorted((turn.frequency_hz, turn.order) for other, turn in enumerate(turns)
                  if other != at and turn is not None and turn.order != turns[at].order and _agree(turn, turns[at]))


def _shafts(lines: Sequence[Line], first) -> tuple[tuple[Shaft, ...], list[int | None]]:
    """Lines grouped by the shaft they are orders of; and for each line its shaft's number."""
    turns = _turns(lines, first)
    groups: list[list[int]] = []
    # the strongest line, and so the surest, first: others join the shaft they agree with best
    for at, turn in enumerate(turns):
        if turn is None:
            continue
        fits = [g for g in groups if all(_agree(turn, turns[o]) and turn.order != turns[o].order for o in g)]
        if fits:
            min(fits, key=lambda g: abs(turns[g[0]].speed_hz - turn.speed_hz)).append(at)
        else:
            groups.append([at])
    groups.sort(key=lambda g: turns[g[0]].speed_hz)
    shafts, shaft_of = [], [None] * len(lines)
    for number, group in enumerate(groups, 1):
        weight = np.array([turns[at].sigma_hz ** -2 for at in group])
        speed = float(np.sum(weight * [turns[at].speed_hz for at in group]) / weight.sum())
        order = sorted(group, key=lambda at: turns[at].order)
        shafts.append(Shaft(60 * speed, 60 * 1.96 * float(weight.sum()) ** -0.5, tuple(turns[at].order for at in order),
                            tuple(turns[at].frequency_hz for at in order)))
        for at in group:
            shaft_of[at] = number
    return tuple(shafts), shaft_of


# --- one tone --------------------------------------------------------------------------------------------------------


def _tone(line: Line, readings: Sequence[_Reading], airframe: Airframe, view: View, family,
          shaft: int | None) -> ToneTrace:
    candidates: list[Candidate] = []
    unexplained = not readings or readings[0].share.cause is None
    least = LEAST_SHARE_UNEXPLAINED if unexplained else LEAST_SHARE
    for one in readings:
        if one.share.cause is None or one.share.probability < least or len(candidates) == MOST_CANDIDATES:
            continue
        candidates.append(_candidate(line, one, airframe, view, family if not candidates else []))
    confidence, why = _confidence(line, readings, candidates, airframe, family, view)
    top = readings[0].share if readings else None
    cause = None if confidence == "unexplained" or top is None else top.cause
    known = line.known
    frequency = line.frequency_hz[0] if known else math.nan
    swept = known and line.throttle in ("follows", "drifts")
    mount = airframe.mount
    passed = math.nan if mount.isolator_hz is None or not known else float(
        transmissibility(frequency, mount.isolator_hz, mount.isolator_damping_ratio))
    return ToneTrace(
        line.axes, frequency, line.ci_hz, line.amplitude_px, line.throttle,
        line.low_hz if swept else math.nan, line.high_hz if swept else math.nan, tuple(candidates), confidence, why,
        _ruled_out(line, airframe), passed, wording.isolator_words(airframe, passed),
        wording.advice(airframe, cause),
        shaft if isinstance(cause, Order) else None,
    )


def _candidate(line: Line, one: _Reading, airframe: Airframe, view: View, family) -> Candidate:
    cause, f = one.share.cause, one.share.frequency_hz
    if isinstance(cause, Swing):
        return Candidate(cause.name, cause.parts, None, math.nan, f, one.readout_s, one.share.probability,
                         wording.swing_reason(airframe, cause, f, line.throttle))
    k = cause.multiple
    swept = (60 * line.low_hz / k, 60 * line.high_hz / k) if line.throttle in ("follows", "drifts") else None
    once = f / k
    missing = k > 1 and not any(order == 1 for _, order in family) and float(view.sees(np.array([once]))[0]) > 0.5
    reason = wording.order_reason(airframe, cause, f, family, once if missing else None, line.throttle, swept)
    return Candidate(cause.name, cause.parts, k, 60 * once, f, one.readout_s, one.share.probability, reason)


def _confidence(line, readings, candidates, airframe, family, view) -> tuple[str, str]:
    if not candidates or readings[0].share.cause is None:
        return "unexplained", ("nothing in the airframe file fits well: a part that is not in it, or another speed "
                               "than stated")
    first = candidates[0]
    support = _support(line, first, airframe, family)
    percent = wording.percent(first.probability)
    if first.probability >= NAMED and support and view.shutter == "known":
        return "named", f"{percent}: {', '.join(support)}"
    if first.probability >= LIKELY:
        lone = "nothing but its frequency speaks for it"
        lacks = {"unknown": "the readout time is not known", "known": "" if support else lone,
                 "global": "a global shutter shows candidate frequencies only"}[view.shutter]
        return "likely", f"{percent}: {', '.join(filter(None, [*support, lacks]))}"
    return "one of", f"the first has {percent}: what is known does not part them"


def _support(line, first: Candidate, airframe: Airframe, family) -> list[str]:
    """What speaks for the first cause besides the line's own frequency."""
    found = []
    if first.order is None:
        if line.throttle == "stays":
            found.append("it stays while the throttle changes")
        if first.cause not in ("slow oscillation", UNNAMED_RESONANCE.name):
            found.append("a resonance given in the airframe file")
        return found
    if family:
        found.append("harmonics of one shaft")
    if airframe.hover_rpm is not None and abs(first.shaft_rpm / airframe.hover_rpm - 1) < wording.NEAR_HOVER:
        found.append("close to hover speed")
    if line.throttle == "follows":
        found.append("it follows the throttle")
    return found


def _ruled_out(line: Line, airframe: Airframe) -> tuple[str, ...]:
    if not line.known:
        return ()
    return tuple(wording.out_of_reach_words(airframe, order, line.low_hz, line.high_hz) for order in orders_of(airframe)
                 if not reachable(airframe, order.multiple, line.low_hz, line.high_hz))


# --- the take as a whole ---------------------------------------------------------------------------------------------


def _notes(tones: Sequence[ToneTrace], shafts: Sequence[Shaft], airframe: Airframe, view: View,
           followed: Sequence[Followed]) -> tuple[str, ...]:
    notes = []
    if view.shutter == "unknown":
        notes.append(_readout_note(tones))
    elif view.shutter == "global":
        notes.append("a global shutter folds every vibration below half the frame rate: frequencies are the candidates "
                     "that fit the airframe best")
    if airframe.motors > 1 and shafts:
        notes.append(_motors_note(shafts, airframe, view))
    notes += _throttle_notes(followed)
    return tuple(note for note in notes if note)


def _readout_note(tones: Sequence[ToneTrace]) -> str:
    implied: dict[float, float] = {}
    for tone in tones:
        if tone.candidates and math.isfinite(tone.candidates[0].readout_s):
            first = tone.candidates[0]
            implied[first.readout_s] = max(implied.get(first.readout_s, 0.0), first.probability)
    if not implied:
        return "the readout time is not known, and no candidate frequency fits a speed within reach"
    best = max(implied, key=lambda r: implied[r])
    return (f"the readout time is not known: the causes given would need one of {1e3 * best:.1f} ms "
            f"({wording.percent(implied[best])}); measure it to be sure")


def _motors_note(shafts: Sequence[Shaft], airframe: Airframe, view: View) -> str:
    once = [shaft for shaft in shafts if 1 in shaft.orders]
    middle = float(np.median([shaft.speed_rpm for shaft in once])) if once else math.nan
    near = [shaft for shaft in once if abs(shaft.speed_rpm / middle - 1) < NEAR_SHAFTS]
    base = near or list(shafts)
    resolution = view.resolution_hz(base[0].speed_rpm / 60)
    limit = (f"in {view.duration_s:.1f} s, motors closer than {resolution:.2g} Hz ({60 * resolution:.0f} rpm) run "
             "together into one line")
    if len(near) >= airframe.motors:
        return f"all {airframe.motors} motors stand apart: {_speeds(near)}"
    if len(near) > 1:
        return f"{len(near)} of {airframe.motors} motors stand apart, {_speeds(near)}; {limit}"
    longer = "; a longer take parts closer ones" if view.duration_s < 8 else ""
    return f"which of the {airframe.motors} motors it is cannot be told from one take: {limit}{longer}"


def _speeds(shafts: Sequence[Shaft]) -> str:
    return "at " + ", ".join(f"{shaft.speed_rpm:.0f}" for shaft in shafts) + " rpm"


def _throttle_notes(followed: Sequence[Followed]) -> list[str]:
    if not followed:
        return []
    by = {word: [f for f in followed if f.throttle == word] for word in ("follows", "stays", "drifts")}
    parts = []
    if by["follows"]:
        swept = ", ".join(f"{f.low_hz:.0f} to {f.high_hz:.0f} Hz" for f in by["follows"])
        parts.append(f"{swept} {'move together: they turn' if len(by['follows']) > 1 else 'moves'}")
    if by["stays"]:
        parts.append(", ".join(f"{f.frequency_hz:.1f} Hz" for f in by["stays"]) + " stays: a resonance")
    if by["drifts"]:
        parts.append(", ".join(f"{f.low_hz:.0f} to {f.high_hz:.0f} Hz" for f in by["drifts"]) + " moves by itself")
    notes = ["the throttle changed during the take: " + "; ".join(parts)]
    passed = sorted({round(f.passed_hz, 1) for f in followed if f.passed_hz is not None})
    if passed:
        notes.append("a tone swells as it passes " + ", ".join(f"{f:.1f} Hz" for f in passed) + ": a resonance there")
    return notes
