"""Row signals made without pictures: what an ideal measurement of a vibration would hold, plus white noise.

A motion is a function of time in pixels at the picture centre. A cell of band v of frame n is exposed around
`pts_n + (v - 1/2) R` and averaged over the rows of its band; the signal is the difference to the same band of the
next frame, as the design note's measuring model states. Nothing here uses the spectrum's own response model; only the
high-pass, which is part of the data's definition, is the product's `remove_slow`.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from framegrade.rows import RowSignals, remove_slow, slow_half_width

Motion = Callable[[np.ndarray], np.ndarray]

BANDS = 30
#: Rows averaged within a band: Gauss-Legendre nodes, exact for far faster motion than the rows resolve.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(3)


def frame_times(frame_rate_hz: float, duration_s: float) -> np.ndarray:
    """Timestamps of an even clip."""
    return np.arange(round(frame_rate_hz * duration_s)) / frame_rate_hz


def tone(frequency_hz: float, amplitude_px: float, phase_rad: float = 0.3) -> Motion:
    """A steady vibration of one peak amplitude."""
    return lambda t: amplitude_px * np.cos(2 * np.pi * frequency_hz * t + phase_rad)


def tones(*parts: tuple[float, float, float]) -> Motion:
    """Several steady vibrations, each (frequency_hz, amplitude_px, phase_rad)."""
    return lambda t: sum(tone(*part)(t) for part in parts)


def wandering_tone(frequency_hz: float, amplitude_px: float, wander_pct: float, period_s: float = 2.3,
                   phase_rad: float = 0.3) -> Motion:
    """A vibration whose frequency swings about its mean; `wander_pct` is the rms of the relative swing."""
    swing = np.sqrt(2) * wander_pct / 100 * frequency_hz

    def motion(t: np.ndarray) -> np.ndarray:
        phase = 2 * np.pi * frequency_hz * t + swing * period_s * np.sin(2 * np.pi * t / period_s + phase_rad)
        return amplitude_px * np.cos(phase + phase_rad)

    return motion


def broadband(low_hz: float, high_hz: float, rms_px: float, seed: int = 1, lines_per_hz: float = 4.3) -> Motion:
    """Gaussian vibration, flat from `low_hz` to `high_hz`: many sinusoids of random phase and Rayleigh amplitude."""
    rng = np.random.default_rng(seed)
    count = int((high_hz - low_hz) * lines_per_hz)
    frequency = low_hz + (np.arange(count) + rng.uniform(size=count)) * (high_hz - low_hz) / count
    size = rng.normal(size=count) + 1j * rng.normal(size=count)
    size *= rms_px / np.sqrt(np.sum(np.abs(size) ** 2) / 2)  # the sum's own rms is `rms_px`

    def motion(t: np.ndarray) -> np.ndarray:
        flat = np.ravel(t)
        out = np.zeros(flat.shape, complex)
        for some in np.array_split(np.arange(count), max(1, count // 64)):
            out += np.exp(2j * np.pi * np.outer(flat, frequency[some])) @ size[some]
        return out.real.reshape(np.shape(t))

    return motion


def still(t: np.ndarray) -> np.ndarray:
    """No motion."""
    return np.zeros(np.shape(t))


def row_signals(
    motion: Motion, times_s: np.ndarray, readout_s: float, *, noise_px: float = 0.0, seed: int = 0, bands: int = BANDS,
    axis: int = 0, rise: np.ndarray | float = 0.0,
) -> RowSignals:
    """Band signals of a camera that moves about one axis.

    Parameters
    ----------
    motion : callable
        Time in seconds to pixels at the picture centre.
    times_s : ndarray, shape (N,)
        Timestamps of the frames.
    readout_s : float
    noise_px : float
        Standard deviation of the white noise of each band of each pair.
    axis : int
        0 yaw, 1 pitch, 2 roll; the two others hold noise only.
    rise : float or ndarray, shape (N - 1, bands)
        How far the content climbs down from frame to frame, share of the picture height: it is found at a later row.
    """
    height = (np.arange(bands) + 0.5) / bands
    rise = np.broadcast_to(np.asarray(rise, float), (len(times_s) - 1, bands))
    start = times_s[:-1, None] + (height - 0.5) * readout_s
    end = times_s[1:, None] + (height + rise - 0.5) * readout_s
    within = _NODES / 2 / bands * readout_s
    seen = sum(w / 2 * (motion(end + d) - motion(start + d)) for w, d in zip(_WEIGHTS, within))
    return from_differences(seen, times_s, height, noise_px=noise_px, seed=seed, axis=axis, rise=rise)


def from_differences(seen_px: np.ndarray, times_s: np.ndarray, height: np.ndarray, *, noise_px: float, seed: int = 0,
                     axis: int = 0, rise: np.ndarray | None = None) -> RowSignals:
    """Band signals from the differences of neighbouring frames, shape (pairs, bands), pixels."""
    pairs, bands = seen_px.shape
    rng = np.random.default_rng(seed)
    raw = noise_px * rng.normal(size=(pairs, bands, 3))
    raw[..., axis] += seen_px
    half = slow_half_width(float(np.median(np.diff(times_s))))
    full = np.full(pairs, 1.0)
    variance = np.full(raw.shape, max(noise_px, 1e-4) ** 2)
    return RowSignals(
        time_s=times_s[:-1], next_time_s=times_s[1:], height=height, band_share=1 / bands,
        rise=np.zeros((pairs, bands)) if rise is None else np.array(rise), fast_px=remove_slow(raw, None, half),
        variance_px2=variance, whole_px=raw.mean(1), whole_variance_px2=variance.mean(1) / bands, measured=full,
        frozen=0 * full, change_level=3 * full, sharpness=full,
    )


def from_angles(pts_s: np.ndarray, angle_px: np.ndarray, rows_per_band: int, *, noise_px: float, seed: int = 0,
                axis: int = 0) -> RowSignals:
    """Band signals from one axis' row angles in pixels, shape (frames, bands * rows_per_band), e.g. the simulator's."""
    frames, rows = angle_px.shape
    bands = rows // rows_per_band
    mean = angle_px.reshape(frames, bands, rows_per_band).mean(2)
    height = (np.arange(bands) + 0.5) / bands
    return from_differences(np.diff(mean, axis=0), pts_s, height, noise_px=noise_px, seed=seed, axis=axis)
