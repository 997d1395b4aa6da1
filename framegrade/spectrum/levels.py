"""Broadband levels: how much vibration there is at every frequency, over the take and window by window.

Short windows of the band signals are transformed over time, band by band. Every frequency f that a frame rate folds
onto the same alias then shows as its own wave across the bands, `exp(2 pi i f R v)`: in each alias bin the covariance of
the bands is a sum of a few such waves and noise, and their powers are variance components.

Sources
-------
Davis and others (2014), "The Visual Microphone", section on rolling-shutter cameras: rows as samples.
Brooks, Humphreys (2006), "A deconvolution approach for the mapping of acoustic sources", J. Sound Vib. 294: powers from
the beams of an array by non-negative least squares (the start value).
Zhou, Hu, Zhou, Lange (2019), "MM algorithms for variance components models", J. Comput. Graph. Stat. 28(2), eq. 9: the
multiplicative update that climbs the likelihood.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from framegrade.rows import RowSignals
from framegrade.spectrum.response import Clock, difference_gain, observable
from framegrade.spectrum.tones import Line

WINDOW_S = 1.0
HOP_S = 0.5
MM_TURNS = 30
MIN_BANDS = 4
BRIDGE_HZ = 10.0


@dataclass(frozen=True)
class Levels:
    """Vibration power of one axis over frequency and time.

    Attributes
    ----------
    frequency_hz : ndarray, shape (K,)
        Evenly spaced cell centres.
    density : ndarray, shape (K,)
        Power of the motion per hertz over the take, native pixels squared (one-sided).
    floor : ndarray, shape (K,)
        Density that the measuring noise alone would show.
    observable : ndarray of bool, shape (K,)
        False inside blind intervals.
    window_s : ndarray, shape (windows,)
        Mid-times of the windows.
    local : ndarray, shape (windows, K)
        Density window by window (posterior mean given the take's density).
    """

    frequency_hz: np.ndarray
    density: np.ndarray
    floor: np.ndarray
    observable: np.ndarray
    window_s: np.ndarray
    local: np.ndarray


@dataclass(frozen=True)
class FittedTone:
    """Lines of a fitted tone and the stretch of time they hold for, seconds."""

    lines: tuple[Line, ...]
    start_s: float
    stop_s: float


def add_tones(levels: Levels, tones: list[FittedTone], duration_s: float) -> Levels:
    """Put the power of fitted tones, which were taken off the signals before, back where it belongs.

    A tone's power is exact where the windowed spectrum would smear it, above all beside a blind interval.
    """
    step = levels.frequency_hz[1] - levels.frequency_hz[0]
    density, local, seen = levels.density.copy(), levels.local.copy(), levels.observable.copy()
    half = WINDOW_S / 2
    offsets = np.linspace(-half, half, 65)
    taper = np.hanning(len(offsets)) ** 2
    for tone in tones:
        frequency = np.array([line.frequency_hz for line in tone.lines])
        coefficient = np.array([line.coefficient for line in tone.lines])
        cell = np.clip(np.round(frequency / step).astype(int) - 1, 0, len(density) - 1)
        share = np.abs(coefficient) ** 2 / np.sum(np.abs(coefficient) ** 2)
        total = 0.5 * np.mean(_envelope(frequency, coefficient, np.linspace(tone.start_s, tone.stop_s, 401)) ** 2)
        density[cell] = np.nan_to_num(density[cell])
        np.add.at(density, cell, share * total * (tone.stop_s - tone.start_s) / duration_s / step)
        seen[cell] = True
        local[:, cell] = np.nan_to_num(local[:, cell])
        for w, middle in enumerate(levels.window_s):
            if tone.start_s <= middle < tone.stop_s:
                power = 0.5 * np.average(_envelope(frequency, coefficient, middle + offsets) ** 2, weights=taper)
                np.add.at(local[w], cell, share * power / step)
    return Levels(levels.frequency_hz, density, levels.floor, seen, levels.window_s, local)


def bridged(levels: Levels, density: np.ndarray | None = None) -> np.ndarray:
    """Density with its blind intervals bridged by the running median of what was seen around them (never by a tone)."""
    density = levels.density if density is None else density
    known = levels.observable & np.isfinite(density)
    out = np.where(known, density, 0.0)
    if not known.any():
        return out
    step = levels.frequency_hz[1] - levels.frequency_hz[0]
    reach = max(2, int(BRIDGE_HZ / step))
    padded = np.pad(np.where(known, density, np.nan), reach, constant_values=np.nan)
    for k in np.flatnonzero(~known):
        around = padded[k:k + 2 * reach + 1]
        out[k] = np.nanmedian(around) if np.isfinite(around).any() else 0.0
    return out


def _envelope(frequency: np.ndarray, coefficient: np.ndarray, time_s: np.ndarray) -> np.ndarray:
    middle = frequency.mean()
    return np.abs(np.exp(2j * np.pi * (np.outer(time_s, frequency - middle))) @ coefficient)


def _filled(values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Keep the bands that exist in nearly every pair, fill their gaps from neighbouring bands; (values, kept)."""
    have = np.isfinite(values)
    kept = have.mean(0) > 0.8
    out = values[:, kept].copy()
    index = np.arange(out.shape[1])
    for n in np.flatnonzero(~np.isfinite(out).all(1)):
        ok = np.isfinite(out[n])
        out[n] = np.interp(index, index[ok], out[n, ok]) if ok.any() else 0.0
    return out, kept


def _windows(pairs: int, length: int, hop: int) -> np.ndarray:
    if pairs <= length:
        return np.array([0])
    count = 1 + int(np.ceil((pairs - length) / hop))
    return np.round(np.linspace(0, pairs - length, count)).astype(int)


def measure_levels(signals: RowSignals, axis: int, clock: Clock, highest_hz: float) -> Levels | None:
    """Density of one axis up to `highest_hz`; None where too few bands or pairs exist.

    Parameters
    ----------
    signals : RowSignals
    axis : int
        0 yaw, 1 pitch, 2 roll.
    clock : Clock
        From `exposure_clock`.
    highest_hz : float

    Notes
    -----
    The model of an alias bin at `a` hertz: covariance C = sum_k S_k g_k^2 w_k w_k^H + noise, over all integers k with
    |a + k fps| up to `highest_hz`, w_k the wave across the bands and g_k the gain of the frame difference.
    """
    values, kept = _filled(signals.fast_px[..., axis])
    if kept.sum() < MIN_BANDS or len(values) < 8:
        return None
    rate = clock.frame_rate_hz
    length = min(len(values), max(8, round(WINDOW_S * rate)))
    starts = _windows(len(values), length, max(1, round(HOP_S * rate)))
    taper = np.hanning(length + 2)[1:-1]
    spectra, alias = _transform(values, clock, starts, length, taper)

    relative = signals.variance_px2[:, kept, axis]
    with np.errstate(all="ignore"):
        relative = np.nanmedian(np.where(np.isfinite(relative), relative, np.nan), 0)
    relative = relative / np.median(relative)
    relative = np.clip(np.nan_to_num(relative, nan=1.0), 0.2, 5.0)

    orders = np.arange(-int(np.ceil(highest_hz / rate)) - 1, int(np.ceil(highest_hz / rate)) + 1)
    signed = alias[:, None] + orders[None, :] * rate                      # (bins, orders)
    inside = (np.abs(signed) <= highest_hz) & (np.abs(signed) > 0.5 * rate / length)
    waves = np.exp(2j * np.pi * signed[..., None] * clock.delay_s[kept])   # (bins, orders, bands)
    gain = difference_gain(np.abs(signed), clock)
    scale = (taper ** 2).sum() * rate                                      # two-sided density -> power of a bin
    seen = observable(np.abs(signed), clock) & inside

    power, noise, posterior = _variance_components(spectra, waves, inside, relative)
    with np.errstate(divide="ignore", invalid="ignore"):
        density = np.where(seen, 2 * power / (gain ** 2 * scale), np.nan)
        local = np.where(seen, 2 * posterior / (gain ** 2 * scale), np.nan)
        floor = np.where(seen, 2 * noise[:, None] / ((1 / relative).sum() * gain ** 2 * scale), np.nan)
    middle = clock.frame_s[np.minimum(starts + length // 2, len(values) - 1)]
    return _unfold(signed, inside, density, floor, local, middle, rate / length, highest_hz)


def _transform(values, clock, starts, length, taper):
    """Windowed transforms at the alias bins (0, fps); shapes (windows, bins, bands) and (bins,)."""
    rate = clock.frame_rate_hz
    alias = np.arange(1, length) * rate / length
    out = np.empty((len(starts), len(alias), values.shape[1]), complex)
    for i, start in enumerate(starts):
        part = slice(start, start + length)
        t = clock.frame_s[part] - clock.frame_s[start]
        kernel = np.exp(-2j * np.pi * np.outer(alias, t)) * taper
        out[i] = kernel @ values[part]
    return out, alias


def _variance_components(spectra, waves, inside, relative):
    """Powers of the waves and of the noise in every alias bin, by maximum likelihood.

    Returns
    -------
    power : ndarray, shape (bins, orders)
    noise : ndarray, shape (bins,)
        Noise power of a band of relative variance 1.
    posterior : ndarray, shape (windows, bins, orders)
        Expected power of each wave in each window.
    """
    root = 1 / np.sqrt(relative)
    y = np.moveaxis(spectra, 0, 1) * root                  # (bins, windows, bands)
    a = waves * root * inside[..., None]                   # (bins, orders, bands)
    across, back = np.swapaxes(a, 1, 2), a.conj()
    count = len(relative)
    sample = np.swapaxes(y, 1, 2) @ y.conj() / y.shape[1]
    own = (np.abs(a) ** 2).sum(-1)
    beam = ((back @ sample) * a).sum(-1).real
    total = np.einsum("jbb->j", sample).real / count
    power = np.where(inside, np.maximum(beam / np.maximum(own, 1e-12) ** 2, 1e-12), 0.0) * 0.5
    noise = 0.1 * total + 1e-18
    eye = np.eye(count)

    def inverse_model() -> np.ndarray:
        return np.linalg.inv((across * power[:, None, :]) @ back + noise[:, None, None] * eye)

    for _ in range(MM_TURNS):
        inverse = inverse_model()
        left = back @ inverse                              # w^H R^-1 of every wave
        fit = ((left @ sample) * left.conj()).sum(-1).real
        expected = (left * a).sum(-1).real
        spread = ((inverse @ sample) * np.swapaxes(inverse, 1, 2)).sum((1, 2)).real
        power = power * np.sqrt(np.maximum(fit, 0) / np.maximum(expected, 1e-30))
        noise = noise * np.sqrt(spread / np.einsum("jbb->j", inverse).real)
    left = back @ inverse_model()
    mean = power[:, None] * (y @ np.swapaxes(left, 1, 2))
    spare = power - power ** 2 * (left * a).sum(-1).real
    posterior = np.abs(mean) ** 2 + spare[:, None]
    return power, noise, np.moveaxis(posterior, 1, 0)


def _unfold(signed, inside, density, floor, local, middle, step, highest_hz) -> Levels:
    """Lay the bins out along physical frequency; positive and negative aliases of a real signal are averaged."""
    cells = int(highest_hz / step)
    frequency = np.arange(1, cells + 1) * step
    index = np.round(np.abs(signed) / step).astype(int) - 1
    ok = inside & (index >= 0) & (index < cells) & np.isfinite(density)
    count = np.zeros(cells)
    np.add.at(count, index[ok], 1)
    total, below = np.zeros(cells), np.zeros(cells)
    np.add.at(total, index[ok], density[ok])
    np.add.at(below, index[ok], floor[ok])
    windows = np.zeros((len(local), cells))
    for i in range(len(local)):
        np.add.at(windows[i], index[ok], local[i][ok])
    seen = count > 0
    with np.errstate(invalid="ignore", divide="ignore"):
        return Levels(frequency, total / count, below / count, seen, middle, windows / count)
