"""Tones without a known readout time: what can be said, and what cannot.

One tone alone cannot tell readout from frequency: f and f + k x frame rate fit with different readout times. What the
clip does hold is the alias of the frequency, how many cycles fit in a frame's height, and the amplitude (the gain of the
frame difference depends on the alias only). The candidates follow; a single figure in hertz does not.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from framegrade.rows import RowSignals, remove_slow
from framegrade.spectrum.response import BLIND_GAIN, Clock, filter_gain
from framegrade.spectrum.tones import AMPLITUDE_SYSTEMATIC, LEAST_TONE_PX1920, Tone, axis_data, detection_ratio

MAX_FOLDED = 4
CYCLE_STEP = 0.05
#: Readout times believed in: at least this share of the frame interval.
LEAST_READOUT_SHARE = 0.1


@dataclass(frozen=True)
class FoldedTone:
    """A tone known by its alias only.

    Attributes
    ----------
    axis : int
    alias_hz : float
        Frequency as the frames sample it, 0 to the frame rate.
    cycles_per_frame : float
        Signed cycles over the frame's height; the sign belongs to `alias_hz`.
    amplitude_px, amplitude_ci_px : float
        Peak at the picture centre (roll: mid-edge), native pixels, with its 95 % half-width.
    candidates_hz : tuple of float
        Frequencies it may have, each with the readout time that would make it so.
    candidate_readout_s : tuple of float
    """

    axis: int
    alias_hz: float
    cycles_per_frame: float
    amplitude_px: float
    amplitude_ci_px: float
    candidates_hz: tuple[float, ...]
    candidate_readout_s: tuple[float, ...]


def candidates(alias_hz: float, cycles: float, interval_s: float) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Frequencies `|alias + k / T|` and readout times `cycles / f` that fit in a frame interval; lowest first."""
    found = []
    for k in range(-60, 61):
        f = alias_hz + k / interval_s
        if f == 0:
            continue
        readout = cycles / f
        if LEAST_READOUT_SHARE * interval_s <= readout <= interval_s:
            found.append((abs(f), readout))
    found.sort()
    return tuple(f for f, _ in found), tuple(r for _, r in found)


def fold(tone: Tone, interval_s: float, highest_hz: float = 500.0) -> FoldedTone:
    """A global shutter's tone: only its alias is seen, so every `|alias + k / T|` up to `highest_hz` is a candidate."""
    rate = 1 / interval_s
    steps = np.arange(0, int(highest_hz / rate) + 1) * rate
    found = sorted({float(f) for f in np.concatenate([steps + tone.frequency_hz, steps[1:] - tone.frequency_hz]) if f <= highest_hz})
    return FoldedTone(tone.axis, tone.frequency_hz, 0.0, tone.amplitude_px, tone.amplitude_ci_px, tuple(found),
                      (0.0,) * len(found))


def find_folded_tones(signals: RowSignals, axis: int, clock: Clock, px_per_1920: float) -> list[FoldedTone]:
    """Strongest tones of one axis in the plane of alias frequency and cycles per frame height.

    `clock` is the exposure clock of a readout of 0: frame times only.
    """
    data = axis_data(signals, axis, clock)
    if data is None:
        return []
    rate, span = clock.frame_rate_hz, data.duration_s
    alias = np.arange(0.0, rate, 1 / (4 * span))
    height = signals.height - 0.5
    reach = 0.4 / signals.band_share
    cycles = np.arange(-reach, reach + CYCLE_STEP / 2, CYCLE_STEP)
    frames = np.exp(-2j * np.pi * np.outer(alias, clock.frame_s - clock.frame_s[0]))
    bands = np.exp(-2j * np.pi * np.outer(height, cycles))
    gain = 2 * np.abs(np.sin(np.pi * alias / rate)) * filter_gain(alias, clock)
    seen = gain > BLIND_GAIN
    norm = max(float((data.weight ** 2).sum()), 1e-12)
    samples = float(data.weight.sum() ** 2 / norm)
    threshold = detection_ratio(span * rate * 2 * reach)
    residual, out = data.values.copy(), []
    for _ in range(MAX_FOLDED):
        power = np.abs(frames @ (residual * data.weight) @ bands) ** 2 / norm
        noise = np.median(power[seen]) / np.log(2)
        peak = np.where(seen[:, None], power, 0)
        i, j = np.unravel_index(np.argmax(peak), peak.shape)
        amplitude = 2 * np.sqrt(power[i, j] / max(samples, 1)) / gain[i]
        if power[i, j] < threshold * noise or amplitude < LEAST_TONE_PX1920 * px_per_1920:
            break
        a, c = _polish(alias[i], cycles[j], residual, data, height, clock, 1 / (4 * span))
        wave = np.exp(2j * np.pi * ((clock.frame_s - clock.frame_s[0])[:, None] * a + height * c))
        # what the data went through, the fitted wave goes through; its gain mid-record is divided out again below
        wave = remove_slow(wave, None, clock.half_width) / float(filter_gain(np.array([a]), clock)[0])
        fit = _fit(wave, residual, data.weight)
        residual = residual - np.where(data.weight > 0, fit[0] * wave.real - fit[1] * wave.imag, 0)
        g = 2 * abs(np.sin(np.pi * a / rate)) * float(filter_gain(np.array([a]), clock)[0]) * abs(np.sinc(c * signals.band_share))
        size = float(np.hypot(*fit) / g)
        spread = 1.96 * np.sqrt(2 * noise / max(samples, 1)) / g
        if a > rate / 2:  # the same line read from its mirror image
            a, c = rate - a, -c
        frequencies, readouts = candidates(a, c, clock.interval_s)
        out.append(FoldedTone(axis, float(a), float(c), size, float(np.hypot(spread, AMPLITUDE_SYSTEMATIC * size)),
                              frequencies, readouts))
    return out


def _fit(wave: np.ndarray, values: np.ndarray, weight: np.ndarray) -> np.ndarray:
    design = np.stack([wave.real.ravel(), -wave.imag.ravel()], 1) * np.sqrt(weight).ravel()[:, None]
    return np.linalg.lstsq(design, (values * np.sqrt(weight)).ravel(), rcond=None)[0]


def _polish(a, c, residual, data, height, clock, step_hz):
    """Climb to the maximum between grid points: a parabola through three points, each way, a few times."""
    t = clock.frame_s - clock.frame_s[0]
    weighted = residual * data.weight

    def power(alias: float, cycle: float) -> float:
        return abs(np.exp(-2j * np.pi * alias * t) @ weighted @ np.exp(-2j * np.pi * cycle * height)) ** 2

    da, dc = step_hz, CYCLE_STEP
    for _ in range(4):
        a += _vertex(power(a - da, c), power(a, c), power(a + da, c)) * da
        c += _vertex(power(a, c - dc), power(a, c), power(a, c + dc)) * dc
        da, dc = da / 2, dc / 2
    return a, c


def _vertex(low: float, middle: float, high: float) -> float:
    curve = low - 2 * middle + high
    return 0.0 if curve >= 0 else float(np.clip(0.5 * (low - high) / curve, -1, 1))
