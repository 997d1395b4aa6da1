"""One clip through each way of measuring: reads what is needed and calls the estimator."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from framegrade.footage import ClipInfo, FootageError, probe, read_frames
from framegrade.motion import Grid, PairMotion, make_grid, measure_motion
from framegrade.picture import disturbed_pairs, find_cadence_faults
from framegrade.readout.bands import BandMotion, band_motion, rotation_shape_px
from framegrade.readout.estimate import CannotTell, Readout
from framegrade.readout.field_of_view import FieldOfView, measure_turn
from framegrade.readout.flicker import measure_flicker, row_brightness
from framegrade.readout.swing import measure_swing
from framegrade.readout.vibration import Line, measure_vibration, spectral_lines
from framegrade.rows import ASSUMED_HFOV_DEG, band_signals, focal_length_px
from framegrade.screen import REFERENCE_WIDTH_PX

#: No more of a clip than this is read: a swing or a lamp tells no more after it.
LONGEST_S = 20.0
#: Vibration gains from every change of speed.
LONGEST_FLIGHT_S = 60.0


@dataclass(frozen=True)
class Motion:
    """Motion of a clip's pairs, as measured by the grading line."""

    info: ClipInfo
    grid: Grid
    pairs: tuple[PairMotion, ...]

    @property
    def interval_s(self) -> float:
        """Typical time from frame to frame."""
        return float(np.median([p.next_time_s - p.time_s for p in self.pairs]))


def read_motion(path: Path, threads: int = 0, longest_s: float = LONGEST_FLIGHT_S) -> Motion:
    """Measure the motion of a clip's frame pairs.

    Parameters
    ----------
    path : Path
    threads : int
        Threads that decode and measure, 0 for as many as there are cores.
    longest_s : float
        What comes later is not read.

    Raises
    ------
    FootageError
        When the clip cannot be read, or is too small or too short to show motion.
    """
    info = probe(path)
    try:
        grid = make_grid(info.width_px, info.height_px)
    except ValueError as error:
        raise FootageError(path, str(error)) from None
    damaged: list[bool] = []

    def frames() -> Iterator[tuple[float, np.ndarray]]:
        for frame in read_frames(path, threads=threads, stop_s=longest_s):
            damaged.append(frame.damaged)
            yield frame.time_s, frame.luma

    pairs = []
    for first, pair in enumerate(measure_motion(frames(), grid, info.luma_scale, threads or 2)):
        if damaged[first] or damaged[first + 1]:
            pair = replace(pair, information=np.zeros_like(pair.information))
        pairs.append(pair)
    if not pairs:
        raise FootageError(path, f"holds {len(damaged)} frame{'s' * (len(damaged) != 1)}: motion needs at least two")
    return Motion(info, grid, tuple(pairs))


def _disturbed(motion: Motion, whole_px: np.ndarray) -> np.ndarray:
    """Pairs beside a repeated or missing frame: their time is not what the timestamps say."""
    pairs = motion.pairs
    cadence = find_cadence_faults(np.array([p.time_s for p in pairs]), np.array([p.next_time_s for p in pairs]),
                                  np.array([p.change_level for p in pairs]), whole_px)
    return disturbed_pairs(cadence)


def swing_motion(motion: Motion) -> BandMotion:
    """Rotation band by band of the first seconds of a clip, pairs beside cadence faults left out."""
    used = tuple(p for p in motion.pairs if p.next_time_s - motion.pairs[0].time_s <= LONGEST_S)
    part = replace(motion, pairs=used)
    bands = band_motion(used, motion.grid, rotation_shape_px(used, motion.grid))
    count = np.maximum(bands.known.sum(1), 1)[:, None]
    whole = (bands.motion_px[..., :2] * bands.known[..., None]).sum(1) / count
    return replace(bands, known=bands.known & ~_disturbed(part, whole)[:, None])


def swing_readout(motion: Motion) -> Readout:
    """Readout time from a swing clip.

    Raises
    ------
    CannotTell
    """
    return measure_swing(swing_motion(motion))


def vibration_lines(motion: Motion) -> tuple[Line, ...]:
    """Spectral lines of a flight clip."""
    signals = band_signals(motion.pairs, motion.grid, focal_length_px(motion.info.width_px, ASSUMED_HFOV_DEG))
    bad = _disturbed(motion, signals.whole_px[:, :2])
    fast, variance = signals.fast_px.copy(), signals.variance_px2.copy()
    fast[bad], variance[bad] = np.nan, np.inf
    return spectral_lines(
        replace(signals, fast_px=fast, variance_px2=variance), motion.info.width_px / REFERENCE_WIDTH_PX
    )


def vibration_readout(lines: tuple[Line, ...], interval_s: float) -> Readout:
    """Readout time from the lines of one or several flight clips of a mode.

    Raises
    ------
    CannotTell
    """
    return measure_vibration(lines, interval_s)


def flicker_readout(path: Path, flicker_hz: float, threads: int = 0) -> Readout:
    """Readout time from a flicker clip.

    Raises
    ------
    FootageError
        When the clip cannot be read.
    CannotTell
    """
    info = probe(path)
    frames = ((f.time_s, f.luma) for f in read_frames(path, threads=threads, stop_s=LONGEST_S) if not f.damaged)
    try:
        brightness = row_brightness(frames, info.luma_scale)
    except ValueError:
        raise FootageError(path, "holds no intact frame") from None
    return measure_flicker(brightness, flicker_hz)


def turn_field_of_view(path: Path, threads: int = 0) -> FieldOfView:
    """Field of view from a clip of a full turn in place.

    Raises
    ------
    FootageError
        When the clip cannot be read.
    CannotTell
    """
    info = probe(path)
    return measure_turn(((f.time_s, f.luma) for f in read_frames(path, threads=threads)), info.luma_scale)


def automatic_readout(motion: Motion) -> tuple[Readout, tuple[Line, ...]]:
    """Readout time from the motion of a clip, whatever it shows: a swing, else vibration.

    Returns
    -------
    Readout
    tuple of Line
        The clip's lines, when they were needed.

    Raises
    ------
    CannotTell
        When neither way tells; the sentence gives both causes.
    """
    try:
        return swing_readout(motion), ()
    except CannotTell as error:
        swing = error
    lines = vibration_lines(motion)
    try:
        return vibration_readout(lines, motion.interval_s), lines
    except CannotTell as error:
        raise Undecided(f"as a swing clip, {swing.cause}; as a flight, {error.cause}", swing.instead, lines) from None


class Undecided(CannotTell):
    """A clip that alone cannot tell; `lines` may still tell together with those of other clips of its mode."""

    def __init__(self, cause: str, instead: str, lines: tuple[Line, ...]) -> None:
        super().__init__(cause, instead)
        self.lines = lines
