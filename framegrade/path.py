"""Whole-picture motion -> travel, sway and shake, and the crop needed to steady the take.

The frame-to-frame motion is summed to a path and split by frequency: below 0.5 Hz is travel (intended), 0.5 to 3 Hz is
sway, above 3 Hz is shake, as a viewer of the frames sees it.

The split is by zero-phase Butterworth sections over the whole record (Gustafsson 1996, "Determining the initial states
in forward-backward filtering", IEEE Trans. Signal Process. 44(4)). A steady pan is travel whatever its speed, so the
straight line through the path is taken off before the filters: their ends would turn part of it into sway.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.signal import butter, sosfiltfilt

TRAVEL_BELOW_HZ = 0.5
SHAKE_ABOVE_HZ = 3.0
FILTER_ORDER = 4  # forward and backward: effectively 8


@dataclass(frozen=True)
class Path:
    """Where the picture went, frame by frame, split by speed.

    Attributes
    ----------
    time_s : ndarray, shape (frames,)
    travel_px, sway_px, shake_px : ndarray, shape (frames, 3)
        Yaw, pitch, roll parts, native pixels (roll at mid-edge). NaN for an axis that was never measured.
    speed_px_per_s : ndarray, shape (frames, 3)
        Speed of the whole picture.
    """

    time_s: np.ndarray
    travel_px: np.ndarray
    sway_px: np.ndarray
    shake_px: np.ndarray
    speed_px_per_s: np.ndarray


def _low_pass(series: np.ndarray, cut_hz: float, rate_hz: float) -> np.ndarray:
    if cut_hz >= 0.45 * rate_hz:
        return series.copy()
    sections = butter(FILTER_ORDER, cut_hz, fs=rate_hz, output="sos")
    # odd extension by two periods of the cut-off, as far as the record allows
    pad = min(len(series) - 1, int(2 * rate_hz / cut_hz))
    return sosfiltfilt(sections, series, axis=0, padlen=pad)


def split_path(time_s: np.ndarray, step_px: np.ndarray) -> Path:
    """Split frame-to-frame motion into travel, sway and shake.

    Parameters
    ----------
    time_s : ndarray, shape (frames,)
        Presentation times.
    step_px : ndarray, shape (frames - 1, 3)
        Motion from each frame to the next; NaN where it could not be measured (bridged by neighbours).
    """
    steps = np.array(step_px, float)
    index = np.arange(len(steps))
    interval = np.diff(time_s)
    speed = steps / interval[:, None]
    for axis in range(3):
        good = np.isfinite(speed[:, axis])
        speed[:, axis] = np.interp(index, index[good], speed[good, axis]) if good.any() else np.nan
    position = np.vstack([np.zeros(3), np.cumsum(speed * interval[:, None], axis=0)])
    # even samples for the filters; a variable frame rate is resampled, its own times are put back after
    rate = 1 / np.median(interval)
    even = np.arange(time_s[0], time_s[-1] + 0.5 / rate, 1 / rate)
    regular = np.stack([np.interp(even, time_s, position[:, axis]) for axis in range(3)], 1)
    centred = np.arange(len(regular)) - (len(regular) - 1) / 2
    pan = regular.mean(0) + np.outer(centred, centred @ regular / (centred @ centred))
    slow = pan + _low_pass(regular - pan, TRAVEL_BELOW_HZ, rate)
    middle = pan + _low_pass(regular - pan, SHAKE_ABOVE_HZ, rate)

    def back(series: np.ndarray) -> np.ndarray:
        return np.stack([np.interp(time_s, even, series[:, axis]) for axis in range(3)], 1)

    travel, below = back(slow), back(middle)
    frame_speed = np.vstack([speed[:1], 0.5 * (speed[1:] + speed[:-1]), speed[-1:]])
    return Path(time_s, travel, below - travel, position - below, frame_speed)


def crop_needed_pct(deviation_px: np.ndarray, width_px: int, height_px: int) -> np.ndarray:
    """Share of the picture's width and height that steadying each frame costs, percent.

    Parameters
    ----------
    deviation_px : ndarray, shape (frames, 3)
        Sway plus shake: yaw, pitch and roll (at mid-edge), native pixels.

    Returns
    -------
    ndarray, shape (frames,)
        A frame shifted by (dx, dy) and turned by a must be enlarged until the shifted, turned picture still covers the
        window: margin per side over the half size, the larger of width and height.
    """
    angle = np.abs(deviation_px[:, 2]) / (width_px / 2)
    across = np.abs(deviation_px[:, 0]) + angle * height_px / 2
    down = np.abs(deviation_px[:, 1]) + angle * width_px / 2
    return 100 * np.maximum(across / (width_px / 2), down / (height_px / 2))
