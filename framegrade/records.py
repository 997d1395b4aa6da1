"""What measuring one clip yields: the typed record that files, plots and later comparisons read.

Tables are pandas frames whose columns carry their unit in the name. A figure that was not measured is NaN
(None for text) and becomes an empty cell; it is never 0.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

AXES = ("yaw", "pitch", "roll")

#: Columns of the promised tables, in the promised order.
TAKE_COLUMNS = (
    "clip", "status", "grade", "score", "reason", "duration_s", "width_px", "height_px", "frame_rate_hz",
    "mode", "codec", "bit_rate_mbps", "bits_per_pixel", "readout_ms", "readout_source", "hfov_deg", "sway_px1920",
    "shake_px1920", "jello_px1920", "smear_px1920", "crop_needed_pct", "vibration_mdeg", "strongest_hz", "strongest_px",
    "usable_s", "longest_usable_s", "measured_pct",
)
TONE_COLUMNS = (
    "clip", "axis", "frequency_hz", "frequency_ci_hz", "amplitude_px", "amplitude_ci_px", "amplitude_mdeg",
    "cycles_per_frame",
)
SPECTRUM_COLUMNS = (
    "clip", "axis", "band_hz", "low_hz", "high_hz", "level_px", "level_mdeg", "floor_px", "observable_pct",
)
RANGE_COLUMNS = ("clip", "in_s", "out_s", "in_timecode", "out_timecode", "score")

#: Columns of clips/NAME/motion.csv (a row a frame) and clips/NAME/windows.csv (a row a scoring window).
MOTION_COLUMNS = (
    "frame", "time_s", "interval_s",
    "sway_yaw_px", "sway_pitch_px", "sway_roll_px", "shake_yaw_px", "shake_pitch_px", "shake_roll_px",
    "travel_yaw_px", "travel_pitch_px", "travel_roll_px",
    "jello_px", "measured_pct", "frozen_pct", "sharpness", "repeated",
)
WINDOW_COLUMNS = (
    "start_s", "end_s", "score", "component", "reason", "usable", "sway_px1920", "shake_px1920", "jello_px1920",
    "smear_px1920", "crop_needed_pct", "measured_pct",
)


@dataclass(frozen=True)
class TakeRecord:
    """One clip, measured and graded.

    Attributes
    ----------
    take : dict
        One row of `takes.csv`, keyed by `TAKE_COLUMNS`.
    tones, spectrum, ranges, motion, windows : pandas.DataFrame
        Rows for this clip with the columns named above.
    density : pandas.DataFrame
        The fine spectrum behind `spectrum`: `axis, frequency_hz, level_px2_per_hz, floor_px2_per_hz, observable`
        (native pixels squared per hertz; `observable` is False inside blind intervals).
    wobble_px : ndarray, shape (frames - 1, bands)
        In-frame displacement left after whole-picture motion is removed, from one frame to the next, native
        pixels, horizontal direction; NaN where a band was not measured. Plot material.
    wobble_time_s : ndarray, shape (frames - 1,)
        Start time of each of those frame pairs.
    notes : tuple of str
        Sentences a user must read: cadence faults, distrusted figures, what could not be decoded.
    extra : dict
        Further figures that later commands use (JSON-serialisable), e.g. candidate frequencies without a readout.
    """

    take: dict[str, Any]
    tones: pd.DataFrame
    spectrum: pd.DataFrame
    ranges: pd.DataFrame
    motion: pd.DataFrame
    windows: pd.DataFrame
    density: pd.DataFrame
    wobble_px: np.ndarray
    wobble_time_s: np.ndarray
    notes: tuple[str, ...] = ()
    extra: dict[str, Any] = field(default_factory=dict)
