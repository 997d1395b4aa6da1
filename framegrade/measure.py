"""One clip, from file to record: runs the rooms of the assembly line in order.

footage -> motion -> rows -> spectrum, path, picture -> grading -> TakeRecord
"""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path

import cv2
import numpy as np
import pandas as pd
from threadpoolctl import threadpool_limits

from framegrade import grading, screen
from framegrade.camera import Camera
from framegrade.coding import CodingRhythm, find_coding_rhythm
from framegrade.footage import ClipInfo, FootageError, ReadFaults, probe, read_frames, timecode
from framegrade.memory import keep_large_blocks, release_free_memory
from framegrade.motion import make_grid, measure_motion
from framegrade.path import Path as PicturePath
from framegrade.path import SHAKE_ABOVE_HZ, crop_needed_pct, split_path
from framegrade.picture import Cadence, disturbed_pairs, find_cadence_faults, stalled_pairs
from framegrade.records import AXES, MOTION_COLUMNS, RANGE_COLUMNS, SPECTRUM_COLUMNS, TONE_COLUMNS, WINDOW_COLUMNS, TakeRecord
from framegrade.rows import (
    ASSUMED_HFOV_DEG, RowSignals, band_mean, band_signals, cut, focal_length_px, remove_slow, slow_half_width,
)
from framegrade.spectrum.bands import band_power, third_octave_bands
from framegrade.spectrum.folded import FoldedTone, find_folded_tones, fold
from framegrade.spectrum.levels import FittedTone, Levels, add_tones, bridged, measure_levels
from framegrade.spectrum.response import Clock, blind_half_width_hz, exposure_clock, highest_frequency_hz
from framegrade.spectrum.tones import LEAST_TONE_PX1920, Periodogram, Tone, axis_data, find_tones
from framegrade.spectrum.tracks import Track, track_tones, tracks_to_extra

SHORTEST_CLIP_S = 1.0
WINDOW_S = 0.5
CADENCE_SPAN_S = 1.0
HIGHEST_HZ = 1000.0
#: Tones are fitted in stretches of about this length: long enough to part close tones, short enough for a drift.
STRETCH_S = 8.0
#: A frame with less of its picture measured than this says nothing about the path.
LEAST_FRAME_SHARE = 0.03
LOW_BITS_PER_PIXEL = 0.03
LEAST_BAND_SEEN = 0.25


@dataclass(frozen=True)
class MeasureSettings:
    """What a measurement needs besides the clip. Figures given here go before those of the camera file.

    Attributes
    ----------
    camera : Camera or None
        Modes with readout, field of view and exposure.
    readout_s, hfov_deg, exposure_s : float or None
    limits : grading.Limits
    threads : int
        Decoder threads, 0 for as many as there are cores.
    """

    camera: Camera | None = None
    readout_s: float | None = None
    hfov_deg: float | None = None
    exposure_s: float | None = None
    limits: grading.Limits | None = None
    threads: int = 0


@dataclass(frozen=True)
class Optics:
    """What is known of the mode a clip was shot in; None where unknown."""

    readout_s: float | None
    readout_source: str
    hfov_deg: float | None
    exposure_s: float | None
    focal_px: float


def resolve_optics(info: ClipInfo, settings: MeasureSettings) -> Optics:
    """Figures of a clip's mode: given directly, else from the camera file.

    Raises
    ------
    FootageError
        If the readout is longer than the frame interval or the exposure is.
    """
    mode = settings.camera.mode_for(info) if settings.camera is not None else None

    def pick(name: str):
        given = getattr(settings, name)
        return given if given is not None else getattr(mode, name, None)

    readout, hfov, exposure = pick("readout_s"), pick("hfov_deg"), pick("exposure_s")
    interval = 1.0 / info.frame_rate_hz if info.frame_rate_hz else np.inf
    for name, value in (("readout", readout), ("exposure", exposure)):
        if value is not None and value > 1.01 * interval:
            raise FootageError(info.path, f"a {name} of {value * 1e3:.4g} ms does not fit in the frame interval of "
                                          f"{interval * 1e3:.4g} ms ({info.mode})")
    source = "none" if readout is None else "given"
    if settings.readout_s is None and mode is not None and getattr(mode, "readout_ci_ms", None) is not None:
        source = "measured"
    return Optics(readout, source, hfov, exposure, focal_length_px(info.width_px, hfov or ASSUMED_HFOV_DEG))


@dataclass(frozen=True)
class Vibration:
    """The spectrum of a take and everything read off it."""

    clock: Clock | None
    levels: tuple[Levels | None, ...]
    tones: tuple[Tone, ...]
    folded: tuple[FoldedTone, ...]
    tracks: tuple[Track, ...] = ()


def measure_clip(path: Path, settings: MeasureSettings | None = None,
                 progress: Callable[[float], None] | None = None) -> TakeRecord:
    """Measure and grade one clip.

    Parameters
    ----------
    path : Path
        The clip.
    settings : MeasureSettings, optional
    progress : callable, optional
        Called with the share done, 0 to 1.

    Raises
    ------
    FootageError
        If the clip cannot be read, or is too short or too small to measure; one sentence.
    """
    settings = settings or MeasureSettings()
    # pairs of frames are measured side by side; splitting each small operation as well would only cost
    cv2.setNumThreads(1)
    keep_large_blocks()
    limits = settings.limits or grading.load_limits(None)
    info = probe(path)
    optics = resolve_optics(info, settings)
    faults = ReadFaults()
    workers = settings.threads or os.cpu_count() or 1
    # one thread a library call: what runs side by side here are pairs of frames, and axes
    with threadpool_limits(1):
        signals, sizes = _read_signals(info, optics, workers, faults, progress)
        release_free_memory()
        return assemble(info, optics, limits, signals, faults, find_coding_rhythm(sizes, info.frame_rate_hz), workers)


def _read_signals(info, optics, threads, faults, progress) -> tuple[RowSignals, np.ndarray]:
    """Band signals of a clip, and the coded size of its frames in bytes (NaN where unknown)."""
    try:
        grid = make_grid(info.width_px, info.height_px)
    except ValueError as error:
        raise FootageError(info.path, str(error)) from None
    damaged: list[bool] = []
    sizes: list[float] = []
    expected = info.frame_count or 0

    def frames() -> Iterator[tuple[float, np.ndarray]]:
        for frame in read_frames(info.path, threads=threads, faults=faults):
            damaged.append(frame.damaged)
            sizes.append(np.nan if frame.size_bytes is None else frame.size_bytes)
            if progress is not None and expected and frame.index % 10 == 0:
                progress(min(0.95, 0.95 * frame.index / expected))
            yield frame.time_s, frame.luma

    def intact() -> Iterator:
        for first, pair in enumerate(measure_motion(frames(), grid, info.luma_scale, threads)):
            if damaged[first] or damaged[first + 1]:
                pair = replace(pair, information=np.zeros_like(pair.information))
            yield pair

    pairs = intact()
    try:
        signals = band_signals(pairs, grid, optics.focal_px)
    except ValueError:
        raise FootageError(info.path, f"holds {len(damaged)} frame{'s' * (len(damaged) != 1)}: motion needs at least two") from None
    span = float(signals.next_time_s[-1] - signals.time_s[0]) + float(np.median(signals.next_time_s - signals.time_s))
    if span < SHORTEST_CLIP_S - 1e-6:
        raise FootageError(info.path, f"lasts {span:.2f} s: at least {SHORTEST_CLIP_S:g} s is needed to part vibration from motion")
    return signals, np.array(sizes)


def assemble(info: ClipInfo, optics: Optics, limits: grading.Limits, signals: RowSignals, faults: ReadFaults,
             rhythm: CodingRhythm | None = None, workers: int = 1) -> TakeRecord:
    """Record of a clip from its band signals: everything after the pictures have been read."""
    cadence = find_cadence_faults(signals.time_s, signals.next_time_s, signals.change_level, signals.whole_px[:, :2])
    signals = _without(signals, disturbed_pairs(cadence))
    steps = frame_steps(signals)
    # a repeated frame is a fault of cadence, judged as such: the path goes on at the speed around it
    steps[stalled_pairs(cadence)] = np.nan
    path = split_path(np.append(signals.time_s, signals.next_time_s[-1]), steps)
    vibration = analyse(signals, optics, info.width_px, rhythm, workers)
    residual = in_frame_residual(signals)
    jello = _jello(info, optics, vibration, residual, signals)
    windows = _windows(info, optics, limits, signals, path, cadence, vibration, jello)
    return _record(info, optics, limits, signals, path, cadence, vibration, jello, residual, windows, faults)


def _without(signals: RowSignals, disturbed: np.ndarray) -> RowSignals:
    fast, variance = signals.fast_px.copy(), signals.variance_px2.copy()
    fast[disturbed], variance[disturbed] = np.nan, np.inf
    return replace(signals, fast_px=fast, variance_px2=variance)


def frame_steps(signals: RowSignals) -> np.ndarray:
    """Whole-picture motion from frame to frame, shape (pairs, 3): the slow part from all cells, the fast part as the
    plain mean over the bands (Legendre term 0), so that jello does not leak into it through unevenly textured bands."""
    whole = np.where(signals.measured[:, None] >= LEAST_FRAME_SHARE, signals.whole_px, np.nan)
    valid = np.isfinite(whole)
    half = slow_half_width(float(np.median(signals.next_time_s - signals.time_s)))
    slow = whole - np.where(valid, remove_slow(whole, valid, half), 0)
    share = np.isfinite(signals.fast_px).mean(1)
    return np.where(share > 0.6, slow + band_mean(signals.fast_px), whole)


def in_frame_residual(signals: RowSignals) -> np.ndarray:
    """Band signals less the whole picture's: what rows do against each other, frame to frame; (pairs, bands, 3)."""
    return signals.fast_px - band_mean(signals.fast_px)[:, None, :]


def analyse(signals: RowSignals, optics: Optics, width_px: int, rhythm: CodingRhythm | None = None,
            workers: int = 1) -> Vibration:
    """Tones and levels of all axes; `workers` threads share the work and do not change the result."""
    per_1920 = width_px / screen.REFERENCE_WIDTH_PX
    if optics.readout_s is None:
        clock = exposure_clock(signals, 0.0)
        folded = [t for axis in range(3) for t in find_folded_tones(signals, axis, clock, per_1920)]
        return Vibration(None, (None, None, None), (), tuple(sorted(folded, key=lambda t: -t.amplitude_px)))
    clock = exposure_clock(signals, optics.readout_s)
    highest = min(HIGHEST_HZ, highest_frequency_hz(clock, len(signals.height)))
    found: list[list[list[Tone]]] = [[], [], []]
    fitted: list[list[FittedTone]] = [[], [], []]
    rest = signals.fast_px.copy()
    # the axes are independent, and the arithmetic runs outside the interpreter's lock
    with ThreadPoolExecutor(max(1, workers)) as pool:
        pending: deque = deque()

        def collect() -> None:
            stretch, work = pending.popleft()
            start, stop = float(signals.time_s[stretch.first]), float(signals.next_time_s[stretch.last - 1])
            for axis, done in enumerate(work):
                tones, rest[stretch.first:stretch.last, :, axis] = done.result()
                found[axis].append(tones)
                fitted[axis] += [FittedTone(tone.lines, start, stop) for tone in tones]

        for stretch in _stretches(signals, optics.readout_s, highest):
            work = [pool.submit(_tones_of_stretch, signals, axis, stretch, per_1920, rhythm) for axis in range(3)]
            pending.append((stretch, work))
            if len(pending) > 1:  # a stretch's search arrays take tens of megabytes: two at a time
                collect()
        while pending:
            collect()
        plain = replace(signals, fast_px=rest)
        levels = list(pool.map(lambda axis: measure_levels(plain, axis, clock, highest), range(3)))
    span = float(signals.next_time_s[-1] - signals.time_s[0])
    levels = [add_tones(level, fitted[axis], span) if level is not None else None for axis, level in enumerate(levels)]
    least = LEAST_TONE_PX1920 * per_1920
    tones = [tone for parts in found for tone in join_tones(sum(parts, []), len(parts), least)]
    tones = tuple(sorted(tones, key=lambda t: -t.amplitude_px))
    if optics.readout_s == 0:
        return Vibration(clock, tuple(levels), (), tuple(fold(tone, clock.interval_s) for tone in tones))
    # following tones over time costs as much as finding them: only where one moves
    moving = any(tone.wander_hz > 0 for tone in tones)
    axes = sorted({tone.axis for tone in tones}) if moving else []
    tracks = tuple(track for axis in axes for track in track_tones(signals, clock, axis, highest, least_px=least))
    return Vibration(clock, tuple(levels), tones, (), tracks)


@dataclass(frozen=True)
class _Stretch:
    """Pairs `first` to `last` of a take, in which tones are taken for steady or nearly so, with their search kernel."""

    first: int
    last: int
    clock: Clock
    periodogram: Periodogram


def _stretches(signals: RowSignals, readout_s: float, highest_hz: float) -> Iterator[_Stretch]:
    count = max(1, int(round((signals.next_time_s[-1] - signals.time_s[0]) / STRETCH_S)))
    edges = np.linspace(0, signals.pairs, count + 1).astype(int)
    for first, last in zip(edges[:-1], edges[1:]):
        clock = exposure_clock(cut(signals, first, last), readout_s)
        duration = float(signals.next_time_s[last - 1] - signals.time_s[first])
        yield _Stretch(first, last, clock, Periodogram(clock, duration, highest_hz))


def _tones_of_stretch(signals: RowSignals, axis: int, stretch: _Stretch, per_1920: float,
                      rhythm: CodingRhythm | None) -> tuple[list[Tone], np.ndarray]:
    """Tones of one axis in one stretch, and the signal without them and without sway."""
    part = cut(signals, stretch.first, stretch.last)
    data = axis_data(part, axis, stretch.clock)
    if data is None:
        return [], part.fast_px[..., axis]
    tones, residual = find_tones(data, axis, stretch.periodogram, per_1920, rhythm)
    return tones, np.where(data.weight > 0, residual, part.fast_px[..., axis])


def join_tones(found: list[Tone], stretches: int, least_px: float) -> list[Tone]:
    """One tone for each vibration found in several stretches of a take; amplitudes are root mean square over all.

    Neighbours within 1.5 % or 1 Hz are one vibration whose frequency wanders.
    """
    if stretches == 1:
        return found
    groups: list[list[Tone]] = []
    for tone in sorted(found, key=lambda t: t.frequency_hz):
        if groups and tone.frequency_hz - groups[-1][-1].frequency_hz < max(1.0, 0.015 * tone.frequency_hz):
            groups[-1].append(tone)
        else:
            groups.append([tone])
    out = []
    for group in groups:
        power = np.array([t.amplitude_px ** 2 for t in group])
        frequency = np.array([t.frequency_hz for t in group])
        mean = float(np.sum(power * frequency) / power.sum())
        spread = np.sqrt(np.sum(power * ((frequency - mean) ** 2 + np.array([t.wander_hz for t in group]) ** 2)) / power.sum())
        ci = np.hypot(1.96 * spread / np.sqrt(len(group)), np.sqrt(np.mean([t.frequency_ci_hz ** 2 for t in group]) / len(group)))
        amplitude = np.sqrt(power.sum() / stretches)
        amplitude_ci = amplitude * float(np.mean([t.amplitude_ci_px / t.amplitude_px for t in group]))
        if amplitude >= least_px:
            out.append(Tone(group[0].axis, mean, float(ci), float(amplitude), amplitude_ci, float(spread), group[0].lines))
    return out


# --- jello -----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Jello:
    """In-frame displacement of a take, pixels rms over the picture (all axes), native.

    `floor_px` is what measuring noise alone would show; `window_px` follows the windows' mid-times `window_s`.
    """

    px: float
    floor_px: float
    window_s: np.ndarray
    window_px: np.ndarray


def _jello(info, optics, vibration, residual, signals) -> Jello:
    weights = screen.axis_weights(info.width_px, info.height_px)
    # a global shutter (readout 0) has no jello by construction: there the model-free figure shows what the floor is
    if optics.readout_s and any(level is not None for level in vibration.levels):
        return _jello_from_levels(optics.readout_s, vibration.levels, weights, signals)
    return _jello_model_free(residual, signals, weights, optics.readout_s)


def _jello_from_levels(readout_s, levels, weights, signals) -> Jello:
    known = [level for level in levels if level is not None]
    times = known[0].window_s
    total, floor, local = 0.0, 0.0, np.zeros(len(times))
    for axis, level in enumerate(levels):
        if level is None:
            continue
        f = level.frequency_hz
        share = screen.jello_share(f, readout_s) * (f >= SHAKE_ABOVE_HZ) * (f[1] - f[0]) * weights[axis]
        power = float(np.sum(bridged(level) * share))
        seen = float(np.nansum(level.density * share))
        total += power
        floor += float(np.nansum(level.floor * share))
        local += np.nansum(level.local * share, axis=1) * (power / seen if seen > 0 else 1.0)
    return Jello(np.sqrt(total), np.sqrt(floor), times, np.sqrt(local))


def _jello_model_free(residual, signals, weights, readout_s: float | None = None) -> Jello:
    """Without a readout: frame-difference residual over sqrt 2 (two frames' displacements, unrelated), noise taken off."""
    variance = signals.variance_px2
    typical = np.nanmedian(np.where(np.isfinite(variance), variance, np.nan), axis=(0, 1)) if np.isfinite(variance).any() else 1.0
    trust = np.where(np.isfinite(residual), 1 / (np.where(np.isfinite(variance), variance, 1.0) + typical), np.nan)
    share = trust / band_mean(trust)[:, None, :]
    square = band_mean(share * residual ** 2) @ weights / 2
    noise = band_mean(np.where(np.isfinite(variance), share * variance, np.nan)) @ weights / 2
    times = 0.5 * (signals.time_s + signals.next_time_s)
    ok = np.isfinite(square) & np.isfinite(noise)
    if not ok.any():
        return Jello(np.nan, np.nan, times, np.full(len(times), np.nan))
    if readout_s == 0:
        # rows exposed together cannot be displaced: all that is left is the floor itself
        noise = square
    floor = float(np.sqrt(np.mean(noise[ok])))
    mean = float(np.sqrt(max(np.mean(square[ok]) - np.mean(noise[ok]), 0.0)))
    return Jello(mean, floor, times, np.sqrt(np.maximum(square - noise, 0)))


# --- windows ---------------------------------------------------------------------------------------------------------


def _rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values))) if len(values) and np.isfinite(values).all() else np.nan


def _figures(info, optics, path, cadence, vibration, jello_px, frames: slice, pairs: slice) -> dict[str, float]:
    """Component figures over some frames; the share of faulty frames over some pairs."""
    weights = screen.axis_weights(info.width_px, info.height_px)
    figures = {
        "sway": float(screen.to_px1920(_rms(path.sway_px[frames] ** 2 @ weights), info.width_px)),
        "shake": float(screen.to_px1920(_rms(path.shake_px[frames] ** 2 @ weights), info.width_px)),
        "jello": float(screen.to_px1920(jello_px, info.width_px)),
        "smear": np.nan,
        "cadence": 100.0 * float(np.mean((cadence.repeated | cadence.dropped)[pairs])) if cadence.repeated[pairs].size else np.nan,
    }
    if optics.exposure_s is not None:
        steady = _rms(path.speed_px_per_s[frames] ** 2 @ weights) * optics.exposure_s
        shaken = _vibration_smear(optics.exposure_s, vibration.levels, weights)
        figures["smear"] = float(screen.to_px1920(np.hypot(steady, shaken), info.width_px))
    return figures


def _vibration_smear(exposure_s, levels, weights) -> float:
    total = 0.0
    for axis, level in enumerate(levels):
        if level is None:
            continue
        f = level.frequency_hz
        # beyond the exposure's first zero the physical amplitude cannot be told from what was seen
        gain = np.maximum(screen.exposure_gain(f, exposure_s), 0.2)
        power = np.nan_to_num(level.density) * (f[1] - f[0]) / gain ** 2 * (f >= SHAKE_ABOVE_HZ)
        total += weights[axis] * screen.vibration_smear_px(f, power, exposure_s) ** 2
    return float(np.sqrt(total))


def _windows(info, optics, limits, signals, path: PicturePath, cadence: Cadence, vibration, jello: Jello) -> pd.DataFrame:
    time = path.time_s
    end = float(time[-1] + np.median(np.diff(time)))
    count = max(1, int(round(end / WINDOW_S)))
    edges = np.linspace(0.0, end, count + 1)
    crop = crop_needed_pct(path.sway_px + path.shake_px, info.width_px, info.height_px)
    ok = np.isfinite(jello.window_px)
    rows = []
    for start, stop in zip(edges[:-1], edges[1:]):
        frames = slice(*np.searchsorted(time, [start - 1e-9, stop - 1e-9]))
        pairs = slice(frames.start, min(frames.stop, signals.pairs))
        inside = ok & (jello.window_s >= start) & (jello.window_s < stop)
        if inside.any():
            local = float(np.sqrt(np.mean(jello.window_px[inside] ** 2)))
        else:
            local = float(np.interp((start + stop) / 2, jello.window_s[ok], jello.window_px[ok])) if ok.any() else np.nan
        measured = 100 * float(np.mean(signals.measured[pairs])) if signals.measured[pairs].size else np.nan
        # one repeat is a large share of half a second: the share is taken over a longer span
        around = slice(*np.searchsorted(signals.time_s, [start - CADENCE_SPAN_S, stop + CADENCE_SPAN_S]))
        figures = _figures(info, optics, path, cadence, vibration, local, frames, around)
        judged = measured >= limits.least_measured_pct
        verdict = grading.judge(figures, limits) if judged else grading.Verdict(np.nan, None, np.nan)
        reason = grading.phrase(verdict.component, verdict.figure) if verdict.component else \
            f"only {measured:.3g} % of the picture measured"
        usable = bool(verdict.score >= limits.usable_score)
        rows.append((start, stop, verdict.score, verdict.component, reason, usable, figures["sway"], figures["shake"],
                     figures["jello"], figures["smear"], float(np.max(crop[frames])) if crop[frames].size else np.nan, measured))
    return pd.DataFrame(rows, columns=list(WINDOW_COLUMNS))


# --- tables ----------------------------------------------------------------------------------------------------------


def _mdeg(px: float, axis: int, info: ClipInfo, optics: Optics) -> float:
    if axis == 2:
        return screen.roll_px_to_mdeg(px, info.width_px)
    return screen.px_to_mdeg(px, optics.focal_px) if optics.hfov_deg is not None else np.nan


def tone_table(clip: str, info: ClipInfo, optics: Optics, vibration: Vibration) -> pd.DataFrame:
    """Rows of tones.csv, strongest first."""
    rows = []
    # without the field of view the rotation field's shape is assumed: its error joins the interval
    shape = 0.0 if optics.hfov_deg is not None else 0.06
    for tone in vibration.tones:
        ci = np.hypot(tone.amplitude_ci_px, shape * tone.amplitude_px)
        rows.append((clip, AXES[tone.axis], tone.frequency_hz, tone.frequency_ci_hz, tone.amplitude_px, ci,
                     _mdeg(tone.amplitude_px, tone.axis, info, optics), tone.frequency_hz * optics.readout_s))
    for tone in vibration.folded:
        ci = np.hypot(tone.amplitude_ci_px, shape * tone.amplitude_px)
        rows.append((clip, AXES[tone.axis], np.nan, np.nan, tone.amplitude_px, ci,
                     _mdeg(tone.amplitude_px, tone.axis, info, optics), abs(tone.cycles_per_frame)))
    return pd.DataFrame(rows, columns=list(TONE_COLUMNS))


def spectrum_table(clip: str, info: ClipInfo, optics: Optics, vibration: Vibration) -> pd.DataFrame:
    """Rows of spectrum.csv: one-third-octave levels; a level below the floor is empty, the floor is its limit.

    Blind parts of a band are taken to hold what lies around them (tones apart); a band seen to less than a quarter has no
    level.
    """
    rows = []
    for axis, level in enumerate(vibration.levels):
        if level is None:
            continue
        step = level.frequency_hz[1] - level.frequency_hz[0]
        whole, bridged_floor, everywhere = bridged(level), bridged(level, level.floor), np.ones(len(level.density), bool)
        for band in third_octave_bands(level.frequency_hz[-1] + step / 2):
            _, seen = band_power(level.frequency_hz, level.density, level.observable, band)
            power, _ = band_power(level.frequency_hz, whole, everywhere, band)
            floor, _ = band_power(level.frequency_hz, bridged_floor, everywhere, band)
            level_px = np.sqrt(power) if seen >= LEAST_BAND_SEEN and power > floor else np.nan
            mdeg = _mdeg(level_px, axis, info, optics) if np.isfinite(level_px) else np.nan
            rows.append((clip, AXES[axis], band.nominal_hz, band.low_hz, band.high_hz, level_px, mdeg,
                         np.sqrt(floor) if np.isfinite(floor) else np.nan, 100 * seen))
    return pd.DataFrame(rows, columns=list(SPECTRUM_COLUMNS))


def density_table(vibration: Vibration) -> pd.DataFrame:
    """The fine spectrum behind spectrum.csv, for plots and for forecasts."""
    parts = [pd.DataFrame({
        "axis": AXES[axis], "frequency_hz": level.frequency_hz, "level_px2_per_hz": level.density,
        "floor_px2_per_hz": level.floor, "observable": level.observable,
    }) for axis, level in enumerate(vibration.levels) if level is not None]
    columns = ["axis", "frequency_hz", "level_px2_per_hz", "floor_px2_per_hz", "observable"]
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=columns)


def vibration_mdeg(info: ClipInfo, optics: Optics, vibration: Vibration) -> float:
    """Camera rotation faster than 3 Hz, all axes, millidegrees rms; NaN without a field of view and readout."""
    if optics.hfov_deg is None or all(level is None for level in vibration.levels):
        return np.nan
    total = 0.0
    for axis, level in enumerate(vibration.levels):
        if level is None:
            continue
        f = level.frequency_hz
        power = np.sum(bridged(level) * (f >= SHAKE_ABOVE_HZ)) * (f[1] - f[0])
        total += _mdeg(np.sqrt(power), axis, info, optics) ** 2
    return float(np.sqrt(total))


def _motion_table(signals, path, cadence, residual, weights) -> pd.DataFrame:
    count = len(path.time_s)
    table = pd.DataFrame(index=range(count))
    table["frame"], table["time_s"] = np.arange(count), path.time_s
    table["interval_s"] = np.append(np.diff(path.time_s), np.nan)
    for name, part in (("sway", path.sway_px), ("shake", path.shake_px), ("travel", path.travel_px)):
        for axis, label in enumerate(AXES):
            table[f"{name}_{label}_px"] = part[:, axis]
    jello = np.sqrt(band_mean(residual ** 2) @ weights / 2)
    table["jello_px"] = np.append(jello, np.nan)
    table["measured_pct"] = np.append(100 * signals.measured, np.nan)
    table["frozen_pct"] = np.append(100 * signals.frozen, np.nan)
    table["sharpness"] = np.append(signals.sharpness, np.nan)
    table["repeated"] = np.append([0], cadence.repeated.astype(int))
    return table[list(MOTION_COLUMNS)]


def _record(info, optics, limits, signals, path, cadence, vibration, jello, residual, windows, faults) -> TakeRecord:
    clip = info.path.name
    weights = screen.axis_weights(info.width_px, info.height_px)
    duration = float(path.time_s[-1] + np.median(np.diff(path.time_s)))
    measured = 100 * float(np.mean(signals.measured))
    deviation = path.sway_px + path.shake_px
    crop = float(np.percentile(crop_needed_pct(deviation, info.width_px, info.height_px), 98))
    below_floor = np.isfinite(jello.px) and jello.px < jello.floor_px
    jello_px = jello.floor_px if below_floor else jello.px
    figures = _figures(info, optics, path, cadence, vibration, jello_px, slice(None), slice(None))
    ranges = grading.usable_ranges(windows["start_s"].to_numpy(), windows["end_s"].to_numpy(), windows["score"].to_numpy(float), limits)
    grade, score, reason = grading.grade_take(figures, crop, measured, ranges, duration, limits)
    if below_floor:
        reason = reason.replace("jello of ", "jello of at most ")
    judged = grade is not None
    tones, spectrum = tone_table(clip, info, optics, vibration), spectrum_table(clip, info, optics, vibration)
    strongest = vibration.tones[0] if vibration.tones else vibration.folded[0] if vibration.folded else None
    notes = list(faults.sentences()) + _notes(info, optics, signals, cadence, vibration, jello, below_floor)
    if faults.truncated or faults.lost_frames:
        reason += f" (only {faults.frames} of {faults.promised_frames or info.frame_count} frames could be read)"
    take = {
        "clip": clip, "status": "graded", "grade": grade, "score": score, "reason": reason, "duration_s": duration,
        "width_px": info.width_px, "height_px": info.height_px, "frame_rate_hz": info.frame_rate_hz, "mode": info.mode,
        "codec": info.codec, "bit_rate_mbps": info.bit_rate_mbps, "bits_per_pixel": info.bits_per_pixel,
        "readout_ms": np.nan if optics.readout_s is None else optics.readout_s * 1e3, "readout_source": optics.readout_source,
        "hfov_deg": np.nan if optics.hfov_deg is None else optics.hfov_deg,
        "sway_px1920": figures["sway"], "shake_px1920": figures["shake"], "jello_px1920": figures["jello"],
        "smear_px1920": figures["smear"], "crop_needed_pct": crop, "vibration_mdeg": vibration_mdeg(info, optics, vibration),
        "strongest_hz": strongest.frequency_hz if isinstance(strongest, Tone) else np.nan,
        "strongest_px": strongest.amplitude_px if strongest else np.nan,
        "usable_s": sum(r.out_s - r.in_s for r in ranges), "longest_usable_s": max((r.out_s - r.in_s for r in ranges), default=0.0),
        "measured_pct": measured,
    }
    if not judged:
        for name in ("sway_px1920", "shake_px1920", "jello_px1920", "smear_px1920", "crop_needed_pct", "vibration_mdeg",
                     "usable_s", "longest_usable_s"):
            take[name] = np.nan
    range_rows = [(clip, r.in_s, r.out_s, timecode(r.in_s, info.frame_rate_hz, info.start_timecode),
                   timecode(r.out_s, info.frame_rate_hz, info.start_timecode), r.score) for r in ranges]
    return TakeRecord(
        take, tones, spectrum, pd.DataFrame(range_rows, columns=list(RANGE_COLUMNS)),
        _motion_table(signals, path, cadence, residual, weights), windows, density_table(vibration),
        residual[..., 0], signals.time_s, tuple(notes), _extra(info, optics, limits, signals, cadence, vibration, jello),
    )


def _notes(info, optics, signals, cadence, vibration, jello, below_floor) -> list[str]:
    notes = []
    repeated, dropped = int(cadence.repeated.sum()), int(cadence.dropped.sum())
    if repeated:
        notes.append(f"{repeated} frame{'s' * (repeated != 1)} repeated: the picture stands still for a frame")
    if dropped:
        notes.append(f"{dropped} gap{'s' * (dropped != 1)} where frames are missing")
    if cadence.uneven > 0.02:
        notes.append(f"uneven timestamps: frame intervals vary by {100 * cadence.uneven:.2g} % (rms)")
    frozen = 100 * float(np.mean(signals.frozen))
    if frozen > 5:
        notes.append(f"{frozen:.2g} % of the picture is frozen by the encoder ({info.bits_per_pixel:.2g} bits per pixel): "
                     "small motion is hidden there")
    elif info.bits_per_pixel < LOW_BITS_PER_PIXEL:
        notes.append(f"only {info.bits_per_pixel:.2g} bits per pixel: coding may hide or add small motion")
    if optics.readout_s is None:
        notes.append("readout time unknown: jello is model-free and tones have no frequency in hertz "
                     "(give --readout-ms or a camera file)")
    elif optics.readout_s == 0:
        notes.append("global shutter: vibration shows only folded below half the frame rate, so tones have candidate "
                     "frequencies, not one, and the spectrum is the folded one")
    elif vibration.clock is not None:
        rate, slowest = vibration.clock.frame_rate_hz, blind_half_width_hz(vibration.clock)
        notes.append(f"blind within {slowest:.2g} Hz of {rate:.4g}, {2 * rate:.4g}, {3 * rate:.4g} Hz and so on (multiples of the "
                     "frame rate): a vibration there does not show between frames")
    notes += [_candidate_note(tone) for tone in vibration.folded[:2] if tone.candidates_hz]
    if optics.hfov_deg is None:
        notes.append(f"field of view unknown: angles are not stated, and amplitudes assume about {ASSUMED_HFOV_DEG:g} degrees")
    if below_floor:
        notes.append(f"jello is below the floor: at most {screen.to_px1920(jello.floor_px, info.width_px):.2g} px (1920-wide)")
    return notes


def _candidate_note(tone: FoldedTone) -> str:
    shown = ", ".join(f"{f:.1f} Hz" + (f" ({r * 1e3:.1f} ms)" if r else "")
                      for f, r in zip(tone.candidates_hz[:8], tone.candidate_readout_s[:8]))
    needed = " (with the readout each would need)" if any(tone.candidate_readout_s) else ""
    return (f"{AXES[tone.axis]} tone of {tone.amplitude_px:.2g} px, {abs(tone.cycles_per_frame):.2g} cycles per frame height; "
            f"candidate frequencies{needed}: {shown}")


def _extra(info, optics, limits, signals, cadence, vibration, jello) -> dict:
    return {
        "readout_s": optics.readout_s, "hfov_deg": optics.hfov_deg, "exposure_s": optics.exposure_s,
        "usable_score": limits.usable_score, "focal_px": optics.focal_px, "rotation_deg": info.rotation_deg, "start_timecode": info.start_timecode,
        "jello_floor_px1920": float(screen.to_px1920(jello.floor_px, info.width_px)) if np.isfinite(jello.floor_px) else None,
        "repeated_frames": int(cadence.repeated.sum()), "dropped_gaps": int(cadence.dropped.sum()),
        "uneven_share": float(cadence.uneven), "frozen_pct": 100 * float(np.mean(signals.frozen)),
        "tracks": tracks_to_extra(vibration.tracks), "wander_hz": [t.wander_hz for t in vibration.tones],
        "candidates": [{"axis": AXES[t.axis], "alias_hz": t.alias_hz, "cycles_per_frame": t.cycles_per_frame,
                        "amplitude_px": t.amplitude_px, "candidates_hz": list(t.candidates_hz),
                        "readout_s": list(t.candidate_readout_s)} for t in vibration.folded],
    }
