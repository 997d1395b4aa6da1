"""Rendered flights and what is true of them, computed from the simulator's own row poses (no estimator code)."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
from scipy.signal import butter, sosfiltfilt

from framegrade.measure import MeasureSettings, measure_clip
from framegrade.records import TakeRecord
from framegrade.simulate import Flight, Truth, flight_from_dict, pose, render

HFOV_DEG = 80.0
EXPOSURE_MS = 1.0


def flight(width_px: int, height_px: int, rate: float, readout_ms: float, *, seed: int, duration_s: float = 4.0, tones=(),
           motors=(), broadband=(), still: bool = False, cars: int = 0, bits_per_pixel: float = 0.3, tilt_deg: float = 35.0,
           sway: bool = True) -> dict:
    """Recipe of a forward flight over textured ground with a little sway; `still` hovers without any motion."""
    recipe = {
        "seed": seed,
        "camera": {"width_px": width_px, "height_px": height_px, "frame_rate": rate, "readout_ms": readout_ms,
                   "exposure_ms": EXPOSURE_MS, "hfov_deg": HFOV_DEG},
        "flight": {"duration_s": duration_s, "height_m": 9.0, "tilt_deg": tilt_deg, "speed_mps": 0.0 if still else 4.0},
        "encode": {"codec": "h264", "bits_per_pixel": bits_per_pixel},
        "tone": list(tones), "motors": list(motors), "broadband": list(broadband),
    }
    if not still and sway:
        recipe["sway"] = [{"axis": "yaw", "frequency_hz": 0.8, "amplitude_deg": 0.4},
                          {"axis": "pitch", "frequency_hz": 1.7, "amplitude_deg": 0.2},
                          {"axis": "roll", "frequency_hz": 1.2, "amplitude_deg": 0.15}]
    if cars:
        recipe["cars"] = [{"count": cars, "direction": "both"}]
    return recipe


@dataclass(frozen=True, eq=False)
class Rendered:
    """A recipe's truth as rendered."""

    flight: Flight
    truth: Truth


def measure(recipe: dict, clip: Path, **settings) -> tuple[TakeRecord, Rendered]:
    """Render a recipe to `clip` and measure it with the camera's own figures; returns the record and the truth."""
    made = flight_from_dict(recipe)
    truth = render(made, clip)
    camera = recipe["camera"]
    known = {"readout_s": camera["readout_ms"] / 1e3, "hfov_deg": camera["hfov_deg"], "exposure_s": camera["exposure_ms"] / 1e3}
    return measure_clip(clip, MeasureSettings(**(known | settings))), Rendered(made, truth)


def pixel_scale(truth: Truth) -> np.ndarray:
    """Native pixels per radian of yaw, pitch (at the centre) and roll (at mid-edge)."""
    return np.array([truth.focal_px, truth.focal_px, truth.facts["camera"]["width_px"] / 2])


def below(series: np.ndarray, cut_hz: float, rate_hz: float) -> np.ndarray:
    """What is slower than `cut_hz`, along the first axis (zero-phase Butterworth)."""
    sections = butter(4, cut_hz, fs=rate_hz, output="sos")
    return sosfiltfilt(sections, series, axis=0, padlen=min(len(series) - 1, int(2 * rate_hz / cut_hz)))


def true_figures(rendered: Rendered) -> dict[str, float]:
    """Sway, shake and jello (px of a 1920-wide picture, rms) and vibration (mdeg rms above 3 Hz) of a truth.

    Sway and shake are parts of the rows' mean over each frame. Jello is what rows do against that mean, less the lean that
    motion slower than 3 Hz gives them. All axes join as mean squares over the picture; roll by (W^2 + H^2) / 12.
    """
    truth = rendered.truth
    camera = truth.facts["camera"]
    width, height, readout = camera["width_px"], camera["height_px"], camera["readout_ms"] * 1e-3
    weight = np.array([1, 1, (width ** 2 + height ** 2) / 12 / (width / 2) ** 2])
    px = truth.seen_rad * pixel_scale(truth)
    interval = float(np.median(np.diff(truth.pts_s)))
    frame = px.mean(1)
    travel, slow = below(frame, 0.5, 1 / interval), below(frame, 3.0, 1 / interval)
    lean = np.gradient(slow, interval, axis=0)[:, None] * ((truth.heights - 0.5) * readout)[None, :, None]
    rows = px - frame[:, None] - lean
    rows = rows - rows.mean(1, keepdims=True)

    def rms(part: np.ndarray) -> float:
        return float(np.sqrt(np.mean(part ** 2 @ weight)) * 1920 / width)

    time, dense = dense_motion(rendered)
    fast = dense - below(dense, 3.0, 1 / (time[1] - time[0]))
    mdeg = np.degrees(fast / pixel_scale(truth)) * 1e3
    return {"sway": rms(slow - travel), "shake": rms(frame - slow), "jello": rms(rows),
            "vibration_mdeg": float(np.sqrt((mdeg.std(0) ** 2).sum()))}


@lru_cache(maxsize=8)
def dense_motion(rendered: Rendered, step_s: float = 1e-3) -> tuple[np.ndarray, np.ndarray]:
    """True camera rotation at even times, averaged over the exposure; times and (T, 3) native pixels."""
    truth = rendered.truth
    exposure = truth.facts["camera"]["exposure_ms"] * 1e-3
    time = np.arange(truth.pts_s[0], truth.pts_s[-1], step_s)
    offsets = (np.arange(4) + 0.5) / 4 * exposure - exposure / 2
    angles = np.mean([pose(rendered.flight, time + offset) for offset in offsets], axis=0)
    return time, angles * pixel_scale(truth)
