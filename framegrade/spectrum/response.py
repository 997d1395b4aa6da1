"""The exposure clock, and what a vibration of one frequency looks like through it.

A cell at height v of frame n, found at v' in the next frame, moved by x(t') - x(t) with t = pts + (v - 1/2) R. That
difference, and the temporal high-pass the data went through, are applied to every fitted sinusoid too.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from framegrade.rows import RowSignals, remove_slow, slow_half_width

#: A difference seen with less than this gain (2 at best) is called blind: noise is amplified by its inverse.
BLIND_GAIN = 0.35
#: Vibration whose alias is slower than this cannot be told from sway and passing scenery: blind as well.
SLOWEST_ALIAS_HZ = 3.0


@dataclass(frozen=True)
class Clock:
    """When each band of each pair was exposed.

    Attributes
    ----------
    start_s, end_s : ndarray, shape (pairs, bands)
        Mid-exposure times of the band's content in the first and in the second frame.
    delay_s : ndarray, shape (bands,)
        Band's time within a frame, from the middle of the frame.
    frame_s : ndarray, shape (pairs,)
        Mid-time of each pair, without the band's own delay.
    interval_s : float
        Typical time from frame to frame.
    readout_s : float
        First to last row.
    band_s : float
        Time one band takes to be read: motion is averaged over it.
    half_width : int
        Of the high-pass, frames.
    """

    start_s: np.ndarray
    end_s: np.ndarray
    delay_s: np.ndarray
    frame_s: np.ndarray
    interval_s: float
    readout_s: float
    band_s: float
    half_width: int

    @property
    def frame_rate_hz(self) -> float:
        return 1.0 / self.interval_s


def exposure_clock(signals: RowSignals, readout_s: float) -> Clock:
    """Exposure times of every band for a readout of `readout_s` seconds (0: global shutter)."""
    delay = (signals.height - 0.5) * readout_s
    start = signals.time_s[:, None] + delay
    # a smooth rise: the row a band's content is found at in the next frame
    end = signals.next_time_s[:, None] + delay + np.nan_to_num(signals.rise) * readout_s
    interval = float(np.median(signals.next_time_s - signals.time_s))
    return Clock(start, end, delay, 0.5 * (start + end).mean(1), interval, readout_s, signals.band_share * readout_s,
                 slow_half_width(interval))


def difference_response(frequency_hz: float, clock: Clock) -> np.ndarray:
    """Response of the filtered frame-to-frame difference to `exp(2 pi i f t)`.

    Returns
    -------
    ndarray, shape (pairs, bands), complex
    """
    w = 2j * np.pi * frequency_hz
    raw = np.exp(w * clock.end_s) - np.exp(w * clock.start_s)
    return remove_slow(raw, None, clock.half_width) * np.sinc(frequency_hz * clock.band_s)


@lru_cache(maxsize=32)
def _filter_table(half_width: int, cells: int = 2048) -> np.ndarray:
    """Gain of the high-pass over one turn of the sampling circle, `cells + 1` even points from 0 to the frame rate."""
    # the impulse's own response, mid-record: away from the ends the filter is the same everywhere
    impulse = np.zeros(6 * half_width + 1)
    impulse[3 * half_width] = 1.0
    response = remove_slow(impulse, None, half_width)
    gain = np.abs(np.fft.fft(response, max(cells, len(response))))
    return np.interp(np.linspace(0, 1, cells + 1), np.linspace(0, 1, len(gain) + 1), np.append(gain, gain[0]))


def filter_gain(frequency_hz: np.ndarray, clock: Clock) -> np.ndarray:
    """Amplitude gain of the temporal high-pass, which sees a frequency by its alias; shape as `frequency_hz`."""
    table = _filter_table(clock.half_width)
    turn = np.mod(np.asarray(frequency_hz, float) * clock.interval_s, 1.0)
    return np.interp(turn, np.linspace(0, 1, len(table)), table)


def difference_gain(frequency_hz: np.ndarray, clock: Clock) -> np.ndarray:
    """Amplitude gain of a vibration: `2 |sin(pi f T)|`, the high-pass at its alias, and the average over a band."""
    return (2 * np.abs(np.sin(np.pi * frequency_hz * clock.interval_s)) * filter_gain(frequency_hz, clock)
            * np.abs(np.sinc(frequency_hz * clock.band_s)))


def observable(frequency_hz: np.ndarray, clock: Clock) -> np.ndarray:
    """True where a vibration enters with enough gain to be measured: outside the blind intervals."""
    rate = clock.frame_rate_hz
    alias = np.abs(frequency_hz - rate * np.round(np.asarray(frequency_hz) / rate))
    return (difference_gain(frequency_hz, clock) > BLIND_GAIN) & (alias >= min(SLOWEST_ALIAS_HZ, 0.2 * rate))


def blind_half_width_hz(clock: Clock) -> float:
    """How far a blind interval reaches either side of a multiple of the frame rate."""
    offset = np.linspace(0, 0.5 * clock.frame_rate_hz, 2001)
    seen = observable(clock.frame_rate_hz + offset, clock)
    return float(offset[np.argmax(seen)]) if seen.any() else float(offset[-1])


def highest_frequency_hz(clock: Clock, bands: int) -> float:
    """What the rows can resolve: 0.8 of the Nyquist frequency of the bands, or half the frame rate for a global shutter."""
    half_rate = 0.5 * clock.frame_rate_hz
    if clock.readout_s <= 0:
        return half_rate
    return max(half_rate, 0.8 * 0.5 / clock.band_s)
