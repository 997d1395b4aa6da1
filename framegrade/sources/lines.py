"""The lines of a take: its tones over all axes, with what is known of their frequency.

Without a readout time a tone has candidate frequencies, each with the readout it would need; of a global shutter it has
candidates too. A line holds them all.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from framegrade.measure import STRETCH_S
from framegrade.records import AXES, TakeRecord
from framegrade.sources.throttle import Followed, follow_throttle
from framegrade.spectrum.response import SLOWEST_ALIAS_HZ
from framegrade.spectrum.tones import LOWEST_TONE_HZ
from framegrade.spectrum.tracks import Track, tracks_from_extra

#: No frequency of a turning part is better known than this share: its speed wanders, and two axes weigh it differently.
LEAST_SPREAD = 0.0007
#: Tones of takes longer than a stretch are joined when closer than this (see `measure.join_tones`).
JOINED_HZ, JOINED_SHARE = 1.0, 0.015
#: Standard deviation of a folded tone's alias, hertz times seconds: a fraction of its resolution.
FOLDED_SHARE = 0.1
#: Two axes show one tone when its cycles per frame agree this well.
SAME_CYCLES = 0.1
#: Beyond this a folded tone's order is not looked for.
HIGHEST_FOLDED_HZ = 600.0


@dataclass(frozen=True)
class Line:
    """One vibration of a take.

    Attributes
    ----------
    frequency_hz : tuple of float
        The frequency, or its candidates.
    readout_s : tuple of float
        Of each candidate the readout time it would need; empty when the frequency is known, or the shutter global.
    sigma_hz : float
        Standard deviation of each that a shaft's speed is known to: measuring error, wander, and a least share.
    axes : tuple of str
        Where it was seen, strongest first.
    amplitude_px : float
        Peak, root of the summed squares over the axes.
    cycles_per_frame : float
        NaN if not stated; of a tone with candidates signed, belonging to `alias_hz`.
    alias_hz : float
        Of a tone with candidates, its frequency as the frames sample it; else NaN.
    wander_hz : float
        Spread of its frequency over the take.
    low_hz, high_hz : float
        Swept range; both the frequency when steady, NaN with candidates.
    ci_hz : float
        Measured 95 % half-width; NaN with candidates.
    throttle : str or None
        "follows", "stays" or "drifts" while the throttle changed; None when that says nothing.
    passed_hz : float or None
        A resonance it passes through.
    """

    frequency_hz: tuple[float, ...]
    sigma_hz: float
    axes: tuple[str, ...]
    amplitude_px: float
    readout_s: tuple[float, ...] = ()
    cycles_per_frame: float = math.nan
    alias_hz: float = math.nan
    wander_hz: float = 0.0
    low_hz: float = math.nan
    high_hz: float = math.nan
    ci_hz: float = math.nan
    throttle: str | None = None
    passed_hz: float | None = None

    @property
    def known(self) -> bool:
        """Whether the line has one frequency."""
        return len(self.frequency_hz) == 1 and not self.readout_s


@dataclass(frozen=True)
class View:
    """How a take sees frequencies.

    Attributes
    ----------
    sees : callable
        Frequencies in hertz (ndarray) to shares from 0 (a line there cannot be seen) to 1.
    duration_s : float
    shutter : {"known", "unknown", "global"}
        Whether the readout is known, not known, or 0 (a global shutter).
    interval_s : float
        From frame to frame.
    """

    sees: Callable[[np.ndarray], np.ndarray]
    duration_s: float
    shutter: str
    interval_s: float

    def resolution_hz(self, frequency_hz: float) -> float:
        """Lines closer than this run together."""
        stretches = max(1, round(self.duration_s / STRETCH_S))
        fine = stretches / self.duration_s
        return fine if stretches == 1 else max(fine, JOINED_HZ, JOINED_SHARE * frequency_hz)


def view_of(record: TakeRecord) -> View:
    """How a take sees frequencies: from its spectrum where it has one, else from its frame rate.

    Parameters
    ----------
    record : TakeRecord

    Returns
    -------
    View
    """
    take, density = record.take, record.density
    rate, duration = float(take["frame_rate_hz"]), float(take["duration_s"])
    readout = record.extra.get("readout_s")
    shutter = "unknown" if readout is None else "global" if readout == 0 else "known"
    if shutter != "known" or not len(density):
        return View(_alias_rule(rate, HIGHEST_FOLDED_HZ), duration, shutter, 1 / rate)
    frequency = np.sort(density["frequency_hz"].unique())
    any_axis = density.assign(observable=density["observable"].astype(bool)).groupby("frequency_hz")["observable"].max()
    seen = any_axis.reindex(frequency).to_numpy(float)

    def sees(f: np.ndarray) -> np.ndarray:
        return np.where(f >= LOWEST_TONE_HZ, np.interp(f, frequency, seen, left=0.0, right=0.0), 0.0)

    return View(sees, duration, shutter, 1 / rate)


def _alias_rule(rate_hz: float, highest_hz: float) -> Callable[[np.ndarray], np.ndarray]:
    def sees(f: np.ndarray) -> np.ndarray:
        alias = np.abs(f - rate_hz * np.round(f / rate_hz))
        return ((alias >= SLOWEST_ALIAS_HZ) & (f >= LOWEST_TONE_HZ) & (f <= highest_hz)).astype(float)

    return sees


def lines_of(record: TakeRecord, view: View) -> tuple[tuple[Line, ...], tuple[Followed, ...]]:
    """The lines of a take, strongest first, and its tracks against the throttle.

    Parameters
    ----------
    record : TakeRecord
    view : View
        From `view_of`.

    Returns
    -------
    lines : tuple of Line
    followed : tuple of Followed
        Empty unless the throttle changed.
    """
    if view.shutter != "known":
        return _ranked(_folded_lines(record, view)), ()
    followed = follow_throttle(_tracks(record))
    singles = _steady_lines(record, followed, view) + _moving_lines(followed)
    return _ranked(_over_axes(singles)), followed


def _ranked(lines: list[Line]) -> tuple[Line, ...]:
    return tuple(sorted(lines, key=lambda line: -line.amplitude_px))


def _tracks(record: TakeRecord) -> tuple[Track, ...]:
    return tracks_from_extra(record.extra.get("tracks") or ())


def _steady_lines(record: TakeRecord, followed: tuple[Followed, ...], view: View) -> list[Line]:
    tones = record.tones
    wander = record.extra.get("wander_hz") or []
    wander = wander if len(wander) == len(tones) else [0.0] * len(tones)
    moving = [f for f in followed if f.throttle != "stays"]
    staying = [f for f in followed if f.throttle == "stays"]
    lines = []
    for tone, spread in zip(tones.to_dict("records"), wander):
        f = float(tone["frequency_hz"])
        if not math.isfinite(f):
            continue
        stays = any(abs(s.frequency_hz / f - 1) < 0.02 for s in staying)
        # a gliding order leaves lines all over its way: the track tells it better
        if not stays and any(0.98 * m.low_hz <= f <= 1.02 * m.high_hz for m in moving):
            continue
        ci = float(tone["frequency_ci_hz"])
        measured = ci / 1.96 if math.isfinite(ci) else 0.5 / view.duration_s
        sigma = math.hypot(measured, 0.5 * spread, LEAST_SPREAD * f)
        lines.append(Line(
            (f,), sigma, (tone["axis"],), float(tone["amplitude_px"]), cycles_per_frame=float(tone["cycles_per_frame"]),
            wander_hz=float(spread), low_hz=f, high_hz=f, ci_hz=ci, throttle="stays" if stays else None))
    return lines


def _moving_lines(followed: tuple[Followed, ...]) -> list[Line]:
    return [Line(
        (f.frequency_hz,), f.sigma_hz, (AXES[f.track.axis],), float(np.nanmedian(f.track.amplitude_px)),
        low_hz=min(f.low_hz, f.frequency_hz), high_hz=max(f.high_hz, f.frequency_hz), ci_hz=1.96 * f.sigma_hz,
        throttle=f.throttle, passed_hz=f.passed_hz) for f in followed if f.throttle != "stays"]


def _over_axes(lines: list[Line]) -> list[Line]:
    """One line for what several axes show at one frequency."""
    joined: list[Line] = []
    for line in sorted(lines, key=lambda one: -one.amplitude_px):
        for at, other in enumerate(joined):
            apart = abs(line.frequency_hz[0] - other.frequency_hz[0])
            same = apart < 2.5 * math.hypot(line.sigma_hz, other.sigma_hz)
            if same and line.throttle == other.throttle and not set(line.axes) & set(other.axes):
                joined[at] = _joined(other, line)
                break
        else:
            joined.append(line)
    return joined


def _joined(a: Line, b: Line) -> Line:
    wa, wb = 1 / a.sigma_hz ** 2, 1 / b.sigma_hz ** 2
    f = (wa * a.frequency_hz[0] + wb * b.frequency_hz[0]) / (wa + wb)
    sigma = max((wa + wb) ** -0.5, LEAST_SPREAD * f)
    return Line(
        (f,), sigma, a.axes + b.axes, math.hypot(a.amplitude_px, b.amplitude_px), cycles_per_frame=a.cycles_per_frame,
        wander_hz=max(a.wander_hz, b.wander_hz), low_hz=min(a.low_hz, b.low_hz), high_hz=max(a.high_hz, b.high_hz),
        ci_hz=min(a.ci_hz, b.ci_hz), throttle=a.throttle, passed_hz=a.passed_hz or b.passed_hz)


def _folded_lines(record: TakeRecord, view: View) -> list[Line]:
    lines = []
    for one in record.extra.get("candidates") or ():
        pairs = [(f, r) for f, r in zip(one["candidates_hz"], one["readout_s"])
                 if f <= HIGHEST_FOLDED_HZ and f >= LOWEST_TONE_HZ]
        if not pairs:
            continue
        frequency, readout = zip(*pairs)
        sigma = math.hypot(FOLDED_SHARE / view.duration_s, LEAST_SPREAD * float(np.median(frequency)))
        lines.append(Line(frequency, sigma, (one["axis"],), float(one["amplitude_px"]),
                          readout if view.shutter == "unknown" else (), float(one["cycles_per_frame"]),
                          float(one["alias_hz"])))
    return _folded_over_axes(lines, view)


def _folded_over_axes(lines: list[Line], view: View) -> list[Line]:
    """One line for what several axes show with the same alias and cycles per frame; the strongest stands for it."""
    apart_hz = 2.5 * math.sqrt(2) * FOLDED_SHARE / view.duration_s
    joined: list[Line] = []
    for line in sorted(lines, key=lambda one: -one.amplitude_px):
        for at, other in enumerate(joined):
            same = abs(line.alias_hz - other.alias_hz) < apart_hz
            same = same and abs(line.cycles_per_frame - other.cycles_per_frame) < SAME_CYCLES
            if same and not set(line.axes) & set(other.axes):
                joined[at] = replace(other, axes=other.axes + line.axes,
                                     amplitude_px=math.hypot(other.amplitude_px, line.amplitude_px))
                break
        else:
            joined.append(line)
    return joined
