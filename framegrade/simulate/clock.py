"""When each picture of a clip is exposed and what its timestamp says, cadence faults included."""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from .motion import generator
from .recipe import Cadence, Flight


@dataclass(frozen=True)
class Schedule:
    """The frames of a clip in stored order.

    Attributes
    ----------
    time_base : Fraction
        Seconds a tick.
    pts_ticks : ndarray of int, shape (N,)
        Timestamps as stored.
    exposed_s : ndarray, shape (N,)
        Instant at which the middle row was truly exposed; differs from the timestamp only under a cadence fault.
    repeated : ndarray of bool, shape (N,)
        True where the picture of the frame before is stored again.
    dropped : int
        Frames that were recorded and left out.
    """

    time_base: Fraction
    pts_ticks: np.ndarray
    exposed_s: np.ndarray
    repeated: np.ndarray
    dropped: int

    @property
    def pts_s(self) -> np.ndarray:
        """Timestamps in seconds, shape (N,)."""
        return np.array([float(int(tick) * self.time_base) for tick in self.pts_ticks])


def _chosen(fault: Cadence, count: int, rng: np.random.Generator) -> np.ndarray:
    """Frames hit by a fault; never the first, which nothing could stand in for."""
    hit = rng.random(count) < fault.rate_pct / 100
    hit[[frame for frame in fault.frames if frame < count]] = True
    hit[0] = False
    return hit


def schedule(flight: Flight) -> Schedule:
    """Lay out the frames of a flight.

    Parameters
    ----------
    flight : Flight

    Returns
    -------
    Schedule
    """
    rate = flight.camera.frame_rate
    # Fine ticks that still hold the nominal frame interval exactly, as recorders choose them.
    fine = math.ceil((90000 if flight.cadence else 10000) / rate.numerator)
    time_base = Fraction(1, rate.numerator * fine)
    step = rate.denominator * fine
    count = max(1, round(flight.flight.duration_s * rate))
    ticks = np.arange(count) * step
    for index, fault in enumerate(flight.cadence):
        if fault.fault == "variable":
            pattern = np.array([max(1, round(step * share)) for share in fault.intervals])
            repeats = math.ceil(count * step / pattern.sum()) + 1
            starts = np.concatenate([[0], np.cumsum(np.tile(pattern, repeats))])
            ticks = starts[starts < count * step]
    exposed = ticks.copy()
    repeated = np.zeros(ticks.size, dtype=bool)
    keep = np.ones(ticks.size, dtype=bool)
    for index, fault in enumerate(flight.cadence):
        rng = generator(flight, "cadence", index)
        if fault.fault == "drop":
            keep &= ~_chosen(fault, ticks.size, rng)
        elif fault.fault == "repeat":
            repeated |= _chosen(fault, ticks.size, rng)
        elif fault.fault == "jitter":
            error = rng.normal(0.0, fault.jitter_ms * 1e-3 / float(time_base), ticks.size)
            ticks = ticks + np.round(error).astype(np.int64)
    ticks, exposed, repeated = ticks[keep], exposed[keep], repeated[keep]
    for frame in np.flatnonzero(repeated):
        exposed[frame] = exposed[frame - 1]
    if any(fault.fault == "restamp" for fault in flight.cadence):
        ticks = np.arange(ticks.size) * step
    # A container needs rising timestamps from zero, however much they jitter.
    ticks = np.maximum.accumulate(ticks - np.arange(ticks.size)) + np.arange(ticks.size)
    origin = int(ticks[0])
    scale = float(time_base)
    return Schedule(time_base, ticks - origin, (exposed - origin) * scale, repeated, int((~keep).sum()))


def row_heights(rows: int) -> np.ndarray:
    """Centres of `rows` equal bands as heights from 0 (top) to 1 (bottom), shape (rows,)."""
    return (np.arange(rows) + 0.5) / rows


def row_times(exposed_s: np.ndarray, heights: np.ndarray, readout_s: float) -> np.ndarray:
    """Mid-exposure instants `t = pts + (v - 1/2) R`.

    Parameters
    ----------
    exposed_s : ndarray, shape (N,)
    heights : ndarray, shape (B,)
    readout_s : float

    Returns
    -------
    ndarray, shape (N, B)
    """
    return exposed_s[:, None] + (heights[None, :] - 0.5) * readout_s
