"""What a synthetic clip truly holds, kept beside it as NAME.truth.json and NAME.truth.npz."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from .clock import Schedule, row_heights, row_times, schedule
from .motion import broadband_lines, exposure_average, exposure_factor, motion_of, pose, position, seen_tones
from .recipe import Flight

_FEWEST_ROWS, _MOST_ROWS = 16, 64
_ROWS_PER_CYCLE = 8


@dataclass(frozen=True)
class Truth:
    """The true motion behind a clip.

    Attributes
    ----------
    pts_s : ndarray, shape (N,)
        Timestamps as stored in the container.
    exposed_s : ndarray, shape (N,)
        Instants at which the middle row was truly exposed.
    heights : ndarray, shape (B,)
        Heights v of the rows below, 0 top to 1 bottom.
    pose_rad : ndarray, shape (N, B, 3)
        yaw, pitch, roll at each row's mid-exposure.
    seen_rad : ndarray, shape (N, B, 3)
        The same averaged over the exposure: what the picture shows.
    position_m : ndarray, shape (N, 3)
        Right, down, forward at the middle row.
    focal_px : float
    facts : dict
        Content of the JSON file: camera, tones, broadband, sway, cadence, recipe.
    """

    pts_s: np.ndarray
    exposed_s: np.ndarray
    heights: np.ndarray
    pose_rad: np.ndarray
    seen_rad: np.ndarray
    position_m: np.ndarray
    focal_px: float
    facts: dict[str, Any]

    def save(self, clip: str | Path) -> tuple[Path, Path]:
        """Write the two files beside `clip` and return their paths."""
        clip = Path(clip)
        table, arrays = clip.with_suffix(".truth.json"), clip.with_suffix(".truth.npz")
        table.write_text(json.dumps(self.facts, indent=2) + "\n", encoding="utf-8")
        np.savez_compressed(
            arrays, pts_s=self.pts_s, exposed_s=self.exposed_s, heights=self.heights,
            pose_rad=self.pose_rad.astype(np.float32), seen_rad=self.seen_rad.astype(np.float32),
            position_m=self.position_m, focal_px=np.float64(self.focal_px),
        )
        return table, arrays


def load_truth(clip: str | Path) -> Truth:
    """Read the truth beside a clip.

    Parameters
    ----------
    clip : str or Path
        The clip, or one of its two truth files.

    Returns
    -------
    Truth

    Raises
    ------
    FileNotFoundError
        When the clip has no truth files.
    """
    clip = Path(str(clip).replace(".truth.json", ".mp4").replace(".truth.npz", ".mp4"))
    facts = json.loads(clip.with_suffix(".truth.json").read_text(encoding="utf-8"))
    with np.load(clip.with_suffix(".truth.npz")) as arrays:
        values = {name: arrays[name].astype(float) for name in arrays.files}
    return Truth(focal_px=float(values.pop("focal_px")), facts=facts, **values)


def _tone_facts(flight: Flight, times_s: np.ndarray) -> list[dict[str, Any]]:
    facts = []
    camera = flight.camera
    for tone in seen_tones(flight):
        factor = float(exposure_factor(tone.frequency_hz, camera.exposure_s))
        frequency = tone.frequency(times_s)
        envelope = tone.envelope(times_s)
        seen = tone.amplitude_rad * factor
        facts.append({
            "axis": tone.axis, "frequency_hz": tone.frequency_hz, "motor": tone.motor,
            "mean_frequency_hz": float(frequency.mean()), "frequency_sd_hz": float(frequency.std()),
            "driven_amplitude_mdeg": math.degrees(tone.driven_rad) * 1e3,
            "transmissibility": tone.amplitude_rad / tone.driven_rad if tone.driven_rad else None,
            "camera_amplitude_mdeg": math.degrees(tone.amplitude_rad) * 1e3,
            "camera_amplitude_px": camera.px_from_radians(tone.axis, tone.amplitude_rad),
            "exposure_factor": factor,
            "amplitude_mdeg": math.degrees(seen) * 1e3,
            "amplitude_px": camera.px_from_radians(tone.axis, seen),
            "rms_over_clip_px": camera.px_from_radians(tone.axis, seen)
            * math.sqrt(float((envelope**2).mean()) / 2),
            "cycles_per_frame": tone.frequency_hz * camera.readout_s,
            "phase_deg": math.degrees(tone.phase_rad),
        })
    return facts


def _broadband_facts(flight: Flight) -> list[dict[str, Any]]:
    facts = []
    camera = flight.camera
    for index, band in enumerate(flight.broadband):
        frequency, amplitude, _ = broadband_lines(flight, index)
        seen = amplitude * exposure_factor(frequency, camera.exposure_s)
        camera_rms, seen_rms = (math.sqrt(float((part**2).sum()) / 2) for part in (amplitude, seen))
        facts.append({
            "axis": band.axis, "low_hz": band.low_hz, "high_hz": band.high_hz,
            "camera_rms_mdeg": math.degrees(camera_rms) * 1e3,
            "camera_rms_px": camera.px_from_radians(band.axis, camera_rms),
            "rms_mdeg": math.degrees(seen_rms) * 1e3, "rms_px": camera.px_from_radians(band.axis, seen_rms),
            "third_octaves": [
                {"exact_hz": mid, "rms_px": camera.px_from_radians(band.axis, rms)}
                for mid, rms in third_octave_rms(frequency, seen)
            ],
        })
    return facts


def third_octave_rms(frequency_hz: np.ndarray, amplitude: np.ndarray) -> list[tuple[float, float]]:
    """Rms of sinusoids in one-third-octave bands, base ten (IEC 61260-1: mid 10^(n/10), edges x 10^(+-1/20)).

    Parameters
    ----------
    frequency_hz, amplitude : ndarray, shape (lines,)
        Sinusoids with peak amplitudes.

    Returns
    -------
    list of (exact mid-band frequency in hertz, rms in the unit of the amplitude)
        Bands that hold at least one line.
    """
    band = np.floor(10 * np.log10(frequency_hz) + 0.5).astype(int)
    return [
        (float(10 ** (n / 10)), math.sqrt(float((amplitude[band == n] ** 2).sum()) / 2)) for n in np.unique(band)
    ]


def _facts(flight: Flight, frames: Schedule) -> dict[str, Any]:
    camera = flight.camera
    times = frames.exposed_s
    dense = np.linspace(times[0], times[-1], max(2, math.ceil(100 * (times[-1] - times[0])) + 1))
    return {
        "title": flight.title,
        "seed": flight.seed,
        "camera": {
            "width_px": camera.width_px, "height_px": camera.height_px, "frame_rate": str(camera.frame_rate),
            "frame_rate_hz": float(camera.frame_rate), "readout_ms": camera.readout_ms,
            "exposure_ms": camera.exposure_ms, "hfov_deg": camera.hfov_deg, "focal_px": camera.focal_px,
        },
        "codec": flight.encode.codec,
        "frames": int(times.size),
        "signs": "yaw > 0 moves the picture right, pitch > 0 down, roll > 0 clockwise",
        "tones": _tone_facts(flight, dense),
        "broadband": _broadband_facts(flight),
        "sway": [
            {"axis": sway.axis, "frequency_hz": sway.frequency_hz, "amplitude_deg": sway.amplitude_deg,
             "amplitude_px": camera.px_from_radians(sway.axis, math.radians(sway.amplitude_deg))}
            for sway in flight.sway
        ],
        "isolator": None if flight.isolator is None else {
            "natural_frequency_hz": flight.isolator.natural_frequency_hz,
            "damping_ratio": flight.isolator.damping_ratio,
        },
        "cadence": {
            "dropped": frames.dropped, "repeated_frames": np.flatnonzero(frames.repeated).tolist(),
            "faults": [fault.fault for fault in flight.cadence],
        },
        "recipe": flight.source,
    }


def _rows_kept(flight: Flight) -> int:
    """Rows whose angles are kept: eight for a cycle of the fastest vibration, a power of two from 16 to 64."""
    cycles = motion_of(flight).highest_hz * flight.camera.readout_s
    wanted = 2 ** math.ceil(math.log2(max(_ROWS_PER_CYCLE * cycles, 1.0)))
    return min(max(_FEWEST_ROWS, wanted), _MOST_ROWS, flight.camera.height_px)


def truth_of(flight: Flight, frames: Schedule | None = None) -> Truth:
    """The truth of a flight, without rendering it.

    Parameters
    ----------
    flight : Flight
    frames : Schedule, optional
        From `schedule(flight)`, when at hand.

    Returns
    -------
    Truth
    """
    frames = frames or schedule(flight)
    camera = flight.camera
    heights = row_heights(_rows_kept(flight))
    times = row_times(frames.exposed_s, heights, camera.readout_s)
    return Truth(
        pts_s=frames.pts_s, exposed_s=frames.exposed_s, heights=heights,
        pose_rad=pose(flight, times).reshape(*times.shape, 3), seen_rad=exposure_average(flight, times),
        position_m=position(flight, frames.exposed_s), focal_px=camera.focal_px, facts=_facts(flight, frames),
    )


def row_signals(flight: Flight, bands: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Exposure-averaged camera angles at row bands, without any picture.

    For quick tests of whatever works on row signals.

    Parameters
    ----------
    flight : Flight
    bands : int
        Number of equal row bands; the signal is that of each band's middle row.

    Returns
    -------
    pts_s : ndarray, shape (N,)
        Timestamps as stored.
    heights : ndarray, shape (B,)
        Band centres, 0 top to 1 bottom.
    angle_rad : ndarray, shape (N, B, 3)
        yaw, pitch, roll.
    """
    frames = schedule(flight)
    heights = row_heights(bands)
    times = row_times(frames.exposed_s, heights, flight.camera.readout_s)
    return frames.pts_s, heights, exposure_average(flight, times)
