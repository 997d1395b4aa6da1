"""Tracing campaign: simulated airframes whose tones are explained, against what made them.

Run from the project's top folder (about ten minutes on one core)::

    python -m tests.bench.trace            # writes tests/bench/trace.csv and trace.md
    python -m tests.bench.trace --count 40 # fewer airframes, nothing written

Every airframe is seeded. Motors with their own speeds, unbalance, blade pass, twice per turn and electrical order,
resonances and a slow oscillation go through an isolator, an exposure and what a rolling shutter sees, into a table of
tones with measuring errors: lines in blind intervals and weak ones are missing, close ones run together, an encoder's
trace may be added. The amounts are drawn wide and from other laws than the expectations that `framegrade.sources` ranks
with. Further airframes are traced without a readout time, with a global shutter, and from row signals that the
simulator makes and `framegrade.measure` analyses, steady and with a throttle change.
"""

from __future__ import annotations

import argparse
import dataclasses
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from framegrade import measure, records
from framegrade.airframe import Airframe, Mount
from framegrade.records import TakeRecord
from framegrade.rows import RowSignals
from framegrade.simulate import flight_from_dict, row_signals, transmissibility
from framegrade.sources import TakeTrace, trace_take
from framegrade.spectrum.folded import candidates as folded_candidates
from framegrade.spectrum.response import exposure_clock, highest_frequency_hz
from framegrade.spectrum.tones import LEAST_TONE_PX1920
from framegrade.spectrum.tracks import track_tones, tracks_to_extra
from tests.fake_take import make_record
from tests.signals import frame_times, from_angles
from tests.signals import row_signals as signals_of

HERE = Path(__file__).parent
BANDS = 30
#: How near a traced frequency must be to a true one to be about it (relative).
SAME = 0.006


@dataclass(frozen=True)
class Source:
    """One true vibration: `order` is None for what does not turn."""

    frequency_hz: float
    order: int | None
    what: str
    amplitude_px: np.ndarray  # (3,), yaw, pitch, roll as the picture shows it


@dataclass(frozen=True)
class Case:
    """A simulated take: its airframe file, its true sources and its measured tones."""

    airframe: Airframe
    sources: tuple[Source, ...]
    tones: tuple[tuple[str, float, float, float, float, int | None, str], ...]
    frame_rate_hz: float
    readout_s: float
    duration_s: float
    true_reach_rpm: tuple[float, float]


def _lognormal(rng: np.random.Generator, middle: float, spread: float) -> float:
    return middle * math.exp(spread * rng.normal())


def draw_case(rng: np.random.Generator) -> Case:
    """One airframe in one take, with at least one tone of a shaft in its table."""
    while True:
        case = _draw(rng)
        if any(order is not None for *_, order, _ in case.tones):
            return case


def _draw(rng: np.random.Generator) -> Case:
    blades, motors = int(rng.integers(2, 5)), int(rng.choice([1, 3, 4, 4, 6, 8]))
    cells = int(rng.integers(3, 9))
    no_load = math.exp(rng.uniform(math.log(6000), math.log(32000)))
    poles = int(rng.choice([12, 14, 14, 24, 28]))
    full = no_load * rng.uniform(0.70, 0.86)
    hover = full / math.sqrt(rng.uniform(1.6, 4.0))  # thrust grows as the square of speed
    idle = full * rng.uniform(0.09, 0.2)
    speed = hover * math.exp(0.07 * rng.normal()) if rng.random() > 0.15 else full * rng.uniform(0.3, 0.5)
    spread = rng.uniform(0.003, 0.03)
    shafts = np.clip(speed / 60 * np.exp(spread * rng.normal(size=motors)), idle / 60, full / 60)

    isolated = rng.random() < 0.5
    natural, damping = rng.uniform(8, 30), rng.uniform(0.04, 0.2)
    exposure = math.exp(rng.uniform(math.log(3e-4), math.log(5e-3)))

    def seen(frequency: float, driven: float) -> np.ndarray:
        passed = abs(transmissibility(frequency, natural, damping)) if isolated else 1.0
        direction = np.abs(rng.normal(size=3)) * [1, 1, 0.6]
        return driven * passed * abs(np.sinc(frequency * exposure)) * direction / np.linalg.norm(direction)

    # driven so that once per turn reaches the picture with 0.05 to 1 px whatever the isolator
    level = _lognormal(rng, 0.25, 0.7) / (abs(transmissibility(speed / 60, natural, damping)) if isolated else 1.0)
    unbalance = 0.15 if rng.random() < 0.2 else 1.0
    sources = []
    for shaft in shafts:
        faulty = 3.0 if rng.random() < 0.2 else 1.0
        strength = {1: unbalance * faulty * _lognormal(rng, 1.0, 0.6), blades: _lognormal(rng, 0.35, 0.8)}
        strength[2] = strength.get(2, 0.0) + _lognormal(rng, 0.12, 0.8)
        strength[2 * blades] = strength.get(2 * blades, 0.0) + _lognormal(rng, 0.06, 0.9)
        strength[poles // 2] = strength.get(poles // 2, 0.0) + _lognormal(rng, 0.04, 1.0)
        strength[3] = strength.get(3, 0.0) + _lognormal(rng, 0.03, 0.8)
        sources += [Source(k * shaft, k, "shaft", seen(k * shaft, level * a)) for k, a in sorted(strength.items())]
    mount_hz = rng.uniform(25, 90)
    if rng.random() < 0.6:
        sources.append(Source(mount_hz, None, "mount", _lognormal(rng, 0.2, 0.7) * rng.dirichlet([1, 1, 1])))
    if isolated and rng.random() < 0.5:
        sources.append(Source(natural, None, "isolator", _lognormal(rng, 0.2, 0.7) * rng.dirichlet([1, 1, 1])))
    if rng.random() < 0.4:
        slow = math.exp(rng.uniform(math.log(4), math.log(18)))
        sources.append(Source(slow, None, "slow", _lognormal(rng, 0.5, 0.7) * rng.dirichlet([1, 1, 1])))
    if rng.random() < 0.35:
        part = math.exp(rng.uniform(math.log(40), math.log(300)))
        sources.append(Source(part, None, "unknown part", _lognormal(rng, 0.12, 0.7) * rng.dirichlet([1, 1, 1])))

    rate = float(rng.choice([24, 25, 30, 50, 60]))
    readout = rng.uniform(0.4, 0.95) / rate
    duration = rng.uniform(2.5, 8.0)
    tones = _measured(rng, sources, rate, readout, duration)
    airframe = Airframe(
        motors=motors, blades=blades, kv_rpm_per_volt=no_load / (4.2 * cells), volts=4.2 * cells,
        magnet_poles=poles if rng.random() < 0.6 else None, idle_rpm=idle if rng.random() < 0.5 else None,
        hover_rpm=hover * (1 + 0.04 * float(np.clip(rng.normal(), -2, 2))) if rng.random() < 0.5 else None,
        full_rpm=full * (1 + rng.uniform(0, 0.03)) if rng.random() < 0.5 else None,
        mount=Mount(
            resonance_hz=mount_hz * (1 + 0.03 * rng.normal()) if rng.random() < 0.5 else None,
            # what a sag tells is lower than what rubber does in vibration
            isolator_hz=natural / rng.uniform(1.0, 1.2) if isolated and rng.random() < 0.6 else None,
        ),
    )
    return Case(airframe, tuple(sources), tones, rate, readout, duration, (idle, full))


def _measured(rng, sources, rate, readout, duration) -> tuple:
    """The table of tones: rows (axis, frequency, ci, amplitude, wander, true order, what)."""
    resolution, least = 1 / duration, rng.uniform(0.03, 0.09)
    highest = min(1000.0, 0.4 * BANDS / readout)
    rows = []
    for axis in range(3):
        wander = rng.uniform(0.001, 0.006)
        found: list[list[Source]] = []
        for one in sorted(sources, key=lambda s: s.frequency_hz):
            alias = abs(one.frequency_hz - rate * round(one.frequency_hz / rate))
            if alias < 3.0 or not 4.0 <= one.frequency_hz <= highest or one.amplitude_px[axis] < 0.3 * least:
                continue
            width = resolution + (wander * one.frequency_hz if one.order else 0.0)
            if found and one.frequency_hz - found[-1][-1].frequency_hz < width:
                found[-1].append(one)
            else:
                found.append([one])
        kept = []
        for group in found:
            power = np.array([s.amplitude_px[axis] ** 2 for s in group])
            amplitude = math.sqrt(power.sum())
            # a tone that wanders spreads over several lines and is found later
            turning = group[0].order is not None
            f = np.array([s.frequency_hz for s in group])
            mean = float((power * f).sum() / power.sum())
            spread = math.sqrt(float((power * (f - mean) ** 2).sum() / power.sum()) + (turning * wander * mean) ** 2)
            if amplitude < least * (1.0 + min(1.0, spread / resolution)):
                continue
            main = group[int(np.argmax(power))]
            independent = max(1.0, 2 * spread * duration)
            ci = max(0.01, 1.96 * spread / math.sqrt(independent) + 0.05 * resolution * least / amplitude)
            error = 1.3 * ci / 1.96 * rng.normal()
            kept.append((records.AXES[axis], mean + error, ci, amplitude * (1 + 0.05 * rng.normal()),
                         spread if spread > 0.5 * resolution else 0.0, main.order, main.what))
        if kept and rng.random() < 0.1:
            strong = max(kept, key=lambda row: row[3])
            trace = strong[1] + rate / 2 * rng.choice([-1, 1])
            kept.append((strong[0], trace, 0.05, 0.2 * strong[3], 0.0, None, "coding"))
        rows += sorted((row for row in kept if row[1] > 4), key=lambda row: -row[3])[:12]
    return tuple(rows)


# --- records of a case -----------------------------------------------------------------------------------------------


def _density(case: Case) -> pd.DataFrame:
    frequency = np.arange(0.5, min(1000.0, 0.4 * BANDS / case.readout_s), 0.5)
    alias = np.abs(frequency - case.frame_rate_hz * np.round(frequency / case.frame_rate_hz))
    return pd.DataFrame({"axis": "yaw", "frequency_hz": frequency, "level_px2_per_hz": 0.0, "floor_px2_per_hz": 0.0,
                         "observable": alias >= 3.0})


def record_of(case: Case, shutter: str = "known") -> TakeRecord:
    """The take as later commands find it; `shutter` "unknown" forgets the readout, "global" folds every frequency."""
    base = make_record(rows=0, frame_rate_hz=case.frame_rate_hz, duration_s=case.duration_s, width_px=1920)
    if shutter == "known":
        rows = [("a.mp4", axis, f, ci, a, 0.05 * a, np.nan, f * case.readout_s) for axis, f, ci, a, *_ in case.tones]
        return dataclasses.replace(
            base, tones=pd.DataFrame(rows, columns=list(records.TONE_COLUMNS)), density=_density(case),
            extra={"readout_s": case.readout_s, "wander_hz": [t[4] for t in case.tones]})
    rate, folded, rng = case.frame_rate_hz, [], np.random.default_rng(len(case.tones))
    for axis, f, _, a, *_ in case.tones:
        # what the folded search reads off a clip has errors: a share of the resolution, some hundredths of a cycle
        alias = (f + 0.05 / case.duration_s * rng.normal()) % rate
        cycles = f * case.readout_s + 0.02 * rng.normal()
        if alias > rate / 2:
            alias, cycles = rate - alias, -cycles
        if shutter == "global":
            steps = np.arange(0, 12) * rate
            frequency = sorted(x for x in [*(steps + alias), *(steps[1:] - alias)] if x <= 500)
            readout = [0.0] * len(frequency)
        else:
            frequency, readout = folded_candidates(alias, cycles, 1 / rate)
        folded.append({"axis": axis, "alias_hz": alias, "cycles_per_frame": cycles, "amplitude_px": a,
                       "candidates_hz": list(frequency), "readout_s": list(readout)})
    # the folded search finds the four strongest of an axis
    kept = [one for axis in records.AXES for one in sorted((o for o in folded if o["axis"] == axis),
                                                          key=lambda o: -o["amplitude_px"])[:4]]
    return dataclasses.replace(base, tones=pd.DataFrame(columns=list(records.TONE_COLUMNS)),
                               extra={"readout_s": 0.0 if shutter == "global" else None, "candidates": kept})


# --- takes from row signals ------------------------------------------------------------------------------------------


def record_from_signals(signals: RowSignals, readout_s: float, width_px: int = 1280) -> TakeRecord:
    """The record of band signals whose readout is known: tones, spectrum and tracks as measured."""
    clock = exposure_clock(signals, readout_s)
    optics = measure.Optics(readout_s, "given", None, None, 760.0)
    vibration = measure.analyse(signals, optics, width_px)
    highest = min(measure.HIGHEST_HZ, highest_frequency_hz(clock, len(signals.height)))
    least = LEAST_TONE_PX1920 * width_px / 1920
    tracks = [t for axis in range(3) for t in track_tones(signals, clock, axis, highest, least_px=least)]
    rows = [("a.mp4", records.AXES[t.axis], t.frequency_hz, t.frequency_ci_hz, t.amplitude_px, t.amplitude_ci_px,
             np.nan, t.frequency_hz * readout_s) for t in vibration.tones]
    span = float(signals.next_time_s[-1] - signals.time_s[0])
    base = make_record(rows=0, frame_rate_hz=clock.frame_rate_hz, duration_s=span, width_px=width_px)
    return dataclasses.replace(
        base, tones=pd.DataFrame(rows, columns=list(records.TONE_COLUMNS)), density=measure.density_table(vibration),
        extra={"readout_s": readout_s, "wander_hz": [t.wander_hz for t in vibration.tones],
               "tracks": tracks_to_extra(tracks)})


def over_axes(parts: list[RowSignals]) -> RowSignals:
    """Band signals of three axes from signals that hold one each."""
    fast = np.stack([part.fast_px[..., axis] for axis, part in enumerate(parts)], -1)
    return dataclasses.replace(parts[0], fast_px=fast)


def flown_case(rng: np.random.Generator) -> tuple[Case, TakeRecord]:
    """A drawn airframe whose sources the simulator turns into row angles, measured as a clip's are."""
    while True:
        case = draw_case(rng)
        # 720 lines are enough, and the mode is a common one: what is tested is the way from rows to a name
        rate, readout = (60.0, 0.014) if rng.random() < 0.5 else (30.0, 0.024)
        flight = {
            "seed": int(rng.integers(1 << 30)),
            "camera": {"width_px": 1280, "height_px": 720, "frame_rate": rate, "readout_ms": 1e3 * readout,
                       "exposure_ms": 0.0},
            "flight": {"duration_s": 5.0},
            "tone": [{"axis": axis, "frequency_hz": s.frequency_hz, "amplitude_px": float(s.amplitude_px[i]),
                      "wander_pct": 0.2 if s.order else 0.0}
                     for s in case.sources for i, axis in enumerate(records.AXES)
                     if s.amplitude_px[i] > 0.003 and s.frequency_hz < 700],
        }
        made = flight_from_dict(flight)
        pts, _, angle = row_signals(made, BANDS * 2)
        scale = np.array([made.camera.focal_px, made.camera.focal_px, 640.0])
        signals = over_axes([from_angles(pts, angle[..., axis] * scale[axis], 2, noise_px=0.04, axis=axis,
                                         seed=int(rng.integers(1 << 30))) for axis in range(3)])
        record = record_from_signals(signals, readout)
        turning = np.array([s.frequency_hz for s in case.sources if s.order])
        if any(np.abs(f / turning - 1).min() < SAME for f in record.tones.frequency_hz):
            return dataclasses.replace(case, frame_rate_hz=rate, readout_s=readout, duration_s=5.0), record


def throttle(low_hz: float, high_hz: float, start_s: float, stop_s: float):
    """Turns of a shaft over time that runs at one speed, then another, with a straight change between."""
    def turns(t: np.ndarray) -> np.ndarray:
        run = np.clip(t, start_s, stop_s) - start_s
        ramp = run ** 2 / 2 / (stop_s - start_s) + np.maximum(t - stop_s, 0)
        return low_hz * t + (high_hz - low_hz) * ramp

    return turns


def throttled_case(rng: np.random.Generator) -> tuple[Airframe, dict[str, float], TakeRecord]:
    """A take with a throttle change: a shaft's once per turn and blade pass move, a resonance stays.

    Returns
    -------
    airframe : Airframe
        Without a hover speed: the movement has to tell.
    truth : dict
        `blades`, `low_hz`, `high_hz` of the shaft and `resonance_hz`, which is not in the file.
    record : TakeRecord
    """
    blades = int(rng.integers(2, 4))
    low = rng.uniform(85, 125)
    high, resonance = low * rng.uniform(1.2, 1.4), rng.uniform(34, 45)
    start = rng.uniform(1.0, 2.0)
    turns = throttle(low, high, start, start + rng.uniform(1.5, 2.5))

    def motion(t: np.ndarray) -> np.ndarray:
        shaft = 2 * np.pi * turns(t)
        return 0.5 * np.cos(shaft + 0.4) + 0.25 * np.cos(blades * shaft) + 0.4 * np.cos(2 * np.pi * resonance * t)

    rate, readout = (60.0, 0.014) if rng.random() < 0.5 else (50.0, 0.016)
    times = frame_times(rate, 6.0)
    moving = signals_of(motion, times, readout, noise_px=0.05, seed=int(rng.integers(1 << 30)))
    airframe = Airframe(motors=4, blades=blades, kv_rpm_per_volt=1.5 * 60 * high / 16.8, volts=16.8)
    truth = {"blades": blades, "low_hz": low, "high_hz": high, "resonance_hz": resonance}
    return airframe, truth, record_from_signals(moving, readout)


# --- scoring ---------------------------------------------------------------------------------------------------------


def _truth_of(case: Case, frequency_hz: float, flown: bool = False) -> tuple[int | None, str] | None:
    """Order and kind of the measured tone nearest to a frequency; of a flown case, of the strongest source near it."""
    if flown:
        close = [s for s in case.sources if abs(s.frequency_hz / frequency_hz - 1) < SAME]
        best = max(close, key=lambda s: float(np.sum(s.amplitude_px ** 2)), default=None)
        return None if best is None else (best.order, best.what)
    near = [t for t in case.tones if abs(t[1] / frequency_hz - 1) < SAME]
    if not near:
        return None
    best = min(near, key=lambda t: abs(t[1] - frequency_hz))
    return best[5], best[6]


def score_throttled(number: int, rng: np.random.Generator) -> list[dict]:
    """Rows of a take with a throttle change: the moving tones and the one that stays."""
    airframe, truth, record = throttled_case(rng)
    traced = trace_take(record, airframe)
    middle = 0.5 * (truth["low_hz"] + truth["high_hz"])
    rows = []
    for what, f, order in (("shaft", middle, 1), ("shaft", truth["blades"] * middle, truth["blades"]),
                           ("resonance", truth["resonance_hz"], None)):
        near = [t for t in traced.tones if abs(t.frequency_hz / f - 1) < (0.13 if order else SAME)]
        tone = max(near, key=lambda t: t.amplitude_px, default=None)
        explained = tone is not None and tone.candidates and tone.confidence != "unexplained"
        first = tone.candidates[0] if explained else None
        rows.append({
            "shutter": "throttle", "airframe": number, "blades": truth["blades"], "motors": 4, "hover_known": False,
            "rank": len(rows), "frequency_hz": f, "truth": what, "true_order": np.nan if order is None else order,
            "first": "not found" if tone is None else "unexplained" if first is None else first.cause,
            "first_order": np.nan if first is None or first.order is None else first.order,
            "probability": np.nan if first is None else first.probability,
            "confidence": "not found" if tone is None else tone.confidence,
            "throttle": "" if tone is None else str(tone.throttle),
            "outside_reach": claims_out_of_reach(traced, airframe) if not rows else 0,
        })
    return rows


def claims_out_of_reach(traced: TakeTrace, airframe: Airframe) -> int:
    """Candidates whose shaft speed the airframe cannot have: there must be none."""
    reach = airframe.reach
    return sum(1 for tone in traced.tones for c in tone.candidates if c.order is not None
               and not reach.lowest_rpm <= c.shaft_rpm <= reach.highest_rpm)


def score(number: int, case: Case, shutter: str = "known", record: TakeRecord | None = None) -> list[dict]:
    """One row a traced tone; of the case's own record unless another is given."""
    traced = trace_take(record or record_of(case, shutter), case.airframe)
    outside = claims_out_of_reach(traced, case.airframe)
    rows = []
    for rank, tone in enumerate(traced.tones):
        first = tone.candidates[0] if tone.candidates else None
        unexplained = tone.confidence == "unexplained"
        f = tone.frequency_hz
        if not math.isfinite(f):
            f = first.frequency_hz if first else math.nan
        truth = _truth_of(case, f, record is not None) if math.isfinite(f) else None
        order = None if first is None or unexplained else first.order
        rows.append({
            "shutter": shutter, "airframe": number, "blades": case.airframe.blades, "motors": case.airframe.motors,
            "hover_known": case.airframe.hover_rpm is not None, "rank": rank, "frequency_hz": f,
            "truth": "" if truth is None else truth[1],
            "true_order": np.nan if truth is None or truth[0] is None else truth[0],
            "first": "unexplained" if unexplained else first.cause, "first_order": np.nan if order is None else order,
            "probability": np.nan if first is None else first.probability, "confidence": tone.confidence,
            "outside_reach": outside if rank == 0 else 0,
        })
    return rows


def right(rows: pd.DataFrame) -> pd.Series:
    """Whether each first choice has the true order, or turns when nothing does, or the other way round."""
    neither = rows.true_order.isna() & rows.first_order.isna() & (rows.truth != "")
    return (rows.true_order == rows.first_order) | neither


def strongest_turning(table: pd.DataFrame) -> pd.DataFrame:
    """Of each airframe its strongest tone of a shaft."""
    turning = table[table.true_order.notna()]
    return turning.sort_values("rank").groupby("airframe").head(1)


def run(count: int, shutter: str = "known", seed: int = 3) -> pd.DataFrame:
    """Scored tones of `count` seeded airframes."""
    rng = np.random.default_rng(seed)
    return pd.DataFrame([row for number in range(count) for row in score(number, draw_case(rng), shutter)])


def run_flown(count: int, seed: int = 6) -> pd.DataFrame:
    """Scored tones of airframes measured from row signals."""
    rng, rows = np.random.default_rng(seed), []
    for number in range(count):
        case, record = flown_case(rng)
        rows += [row | {"shutter": "rows"} for row in score(number, case, record=record)]
    return pd.DataFrame(rows)


def run_throttled(count: int, seed: int = 7) -> pd.DataFrame:
    """Scored tones of takes with a throttle change."""
    rng = np.random.default_rng(seed)
    return pd.DataFrame([row for number in range(count) for row in score_throttled(number, rng)])


def _share(part: pd.Series) -> str:
    return f"{int(part.sum())} of {len(part)} ({100 * part.mean():.1f} %)"


def summary(table: pd.DataFrame) -> str:
    """The table of `trace.md`."""
    lines = ["| what | right |", "|---|---|"]
    known = table[table.shutter == "known"]
    first = strongest_turning(known)
    # an airframe whose shaft tones were all lost among the others counts as wrong
    hits = right(first).set_axis(first.airframe).reindex(known.airframe.unique(), fill_value=False)
    lines.append(f"| airframes whose strongest shaft tone has the right order first | {_share(hits)} |")
    for blades in (2, 3, 4):
        part = first[first.blades == blades]
        lines.append(f"| the same, {blades} blades | {_share(right(part))} |")
    for flag, words in ((True, "hover speed in the file"), (False, "hover speed not in the file")):
        lines.append(f"| the same, {words} | {_share(right(first[first.hover_known == flag]))} |")
    turning = known[known.true_order.notna()]
    lines.append(f"| airframes with the right order first for every shaft tone | "
                 f"{_share(right(turning).groupby(turning.airframe).all())} |")
    lines.append(f"| all tones of shafts: right order first | {_share(right(turning))} |")
    for what in ("mount", "isolator", "slow", "unknown part", "coding"):
        part = known[known.truth == what]
        lines.append(f"| {what}: not called an order of a shaft | {_share(part.first_order.isna())} |")
    for word in ("named", "likely", "one of"):
        part = known[known.confidence == word]
        if len(part):
            stated = f"stated {100 * part.probability.mean():.0f} % on average"
            lines.append(f'| first choice right where called "{word}" ({stated}) | {_share(right(part))} |')
    for shutter in ("unknown", "global"):
        part = table[table.shutter == shutter]
        words = {"unknown": "readout unknown", "global": "global shutter"}[shutter]
        if len(part):
            lines.append(f"| {words}: right frequency and order first, strongest tone | "
                         f"{_share(right(part[part['rank'] == 0]))} |")
            sure = part[part.confidence == "likely"]
            lines.append(f'| {words}: first choice right where called "likely" | {_share(right(sure))} |')
    flown = table[table.shutter == "rows"]
    if len(flown):
        lines.append(f"| from row signals: right order first, strongest tone of a shaft | "
                     f"{_share(right(strongest_turning(flown)))} |")
        lines.append(f"| from row signals: all tones of shafts | {_share(right(flown[flown.true_order.notna()]))} |")
    moved = table[table.shutter == "throttle"]
    if len(moved):
        turning, staying = moved[moved.true_order.notna()], moved[moved.true_order.isna()]
        lines.append(f"| throttle change: tones of the shaft, right order first and seen to follow | "
                     f"{_share(right(turning) & (turning.throttle == 'follows'))} |")
        lines.append(f"| throttle change: resonance not called an order, and seen to stay | "
                     f"{_share(staying.first_order.isna() & (staying.throttle == 'stays'))} |")
    lines.append(f"| causes claimed out of the reachable range | {int(table.outside_reach.sum())} |")
    return "\n".join(lines)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--count", type=int, default=0, help="airframes; default 400, and 150 of each folded kind")
    args = parser.parse_args()
    table = pd.concat([
        run(args.count or 400), run(args.count or 150, "unknown", 4), run(args.count or 150, "global", 5),
        run_flown(args.count or 16), run_throttled(args.count or 16),
    ])
    text = summary(table)
    print(text)
    if not args.count:
        table.round(4).to_csv(HERE / "trace.csv", index=False)
        (HERE / "trace.md").write_text(
            "# Tracing campaign, latest result\n\nMade by `python -m tests.bench.trace`: simulated airframes of 2 to 4 "
            "blades and 1 to 8 motors, in flight and on the ground; a row of trace.csv is a traced tone.\n\n"
            f"{text}\n", encoding="utf-8")


if __name__ == "__main__":
    main()
