"""Faults of the picture that are not motion: repeated and dropped frames, uneven timestamps, frozen blocks.

Thresholds are common practice: a repeated frame changes far less than its neighbours, a dropped one leaves a gap in the
timestamps, or one step twice as long as those around it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import percentile_filter

REPEAT_SHARE = 0.12       # change of a repeated frame over the usual change around it, at most
LEAST_CHANGE_LEVEL = 0.15  # grey levels: below this local change a still picture and a repeated one look alike
GAP_INTERVALS = 1.5
UNEVEN_SHARE = 0.02
NEIGHBOURS = 25


@dataclass(frozen=True)
class Cadence:
    """Timing faults of a clip.

    Attributes
    ----------
    repeated : ndarray of bool, shape (pairs,)
        The second frame of the pair shows the first one again.
    dropped : ndarray of bool, shape (pairs,)
        At least one frame is missing between the two.
    uneven : float
        Standard deviation of the frame intervals over their median, gaps left out.
    """

    repeated: np.ndarray
    dropped: np.ndarray
    uneven: float


def find_cadence_faults(time_s: np.ndarray, next_time_s: np.ndarray, change_level: np.ndarray, step_px: np.ndarray) -> Cadence:
    """Repeated frames, dropped frames and uneven timestamps.

    Parameters
    ----------
    time_s, next_time_s : ndarray, shape (pairs,)
    change_level : ndarray, shape (pairs,)
        Mean absolute difference of the two frames, grey levels.
    step_px : ndarray, shape (pairs, 2)
        Whole-picture motion (right, down) from frame to frame.
    """
    interval = next_time_s - time_s
    typical = np.median(interval)
    # mirrored at the ends: a repeat as the very last pair must not be its own neighbourhood
    # a high rank, not the median: in a converted frame rate most pairs may be repeats. The lower of what goes before and
    # what comes after: a camera that comes to rest does not repeat itself
    size = min(NEIGHBOURS, len(change_level)) // 2 + 1
    before, after = (percentile_filter(change_level, 80, size, mode="mirror", origin=origin)
                     for origin in ((size - 1) // 2, -((size - 1) // 2)))
    local = np.minimum(before, after)
    repeated = (local > LEAST_CHANGE_LEVEL) & (change_level < REPEAT_SHARE * local)
    gap = interval > GAP_INTERVALS * typical
    dropped = gap | _long_steps(step_px / interval[:, None] * typical, repeated)
    even = interval[~gap]
    uneven = float(np.std(even) / typical) if len(even) > 1 else 0.0
    return Cadence(repeated, dropped, uneven)


def _long_steps(step: np.ndarray, repeated: np.ndarray) -> np.ndarray:
    """Single steps twice as long as both their neighbours, in a picture that otherwise moves evenly."""
    out = np.zeros(len(step), bool)
    for n in range(2, len(step) - 2):
        around = step[[n - 2, n - 1, n + 1, n + 2]]
        if repeated[n - 2:n + 3].any() or not np.isfinite(around).all() or not np.isfinite(step[n]).all():
            continue
        mean = around.mean(0)
        length = np.hypot(*mean)
        even = np.hypot(*(around - mean).T).max() < 0.2 * length
        out[n] = length > 1.0 and even and np.hypot(*(step[n] - 2 * mean)) < 0.3 * length
    return out


def stalled_pairs(cadence: Cadence) -> np.ndarray:
    """A repeat, and the step that follows it and makes up for it."""
    out = cadence.repeated.copy()
    out[1:] |= cadence.repeated[:-1]
    return out


def disturbed_pairs(cadence: Cadence) -> np.ndarray:
    """Pairs whose interval on the exposure clock is not what the timestamps say."""
    return stalled_pairs(cadence) | cadence.dropped
