"""The encoder's own rhythm: the periods in which it changes the quality of its frames.

Key frames, and the groups of frames predicted between them, displace the picture a little in a fixed pattern (a few
hundredths of a pixel at low bit rates). The coded size of the frames shows the same pattern, so it tells which weak tones
not to believe.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

#: A line of the rhythm stands this far above the median of the sizes' periodogram, and holds this share of its power.
RHYTHM_RATIO = 12.0
RHYTHM_SHARE = 0.01


@dataclass(frozen=True)
class CodingRhythm:
    """Periods in which an encoder changes the quality of its frames (key frames, groups of predicted frames).

    Attributes
    ----------
    alias_hz : ndarray
        Frequencies, 0 to half the frame rate, at which the coded size of frames repeats.
    """

    alias_hz: np.ndarray

    def near(self, frequency_hz: np.ndarray, frame_rate_hz: float, width_hz: float) -> np.ndarray:
        """True where a frequency, as the frames sample it, lies within `width_hz` of the rhythm."""
        f = np.asarray(frequency_hz, float)
        alias = np.abs(f - frame_rate_hz * np.round(f / frame_rate_hz))
        if not len(self.alias_hz):
            return np.zeros(f.shape, bool)
        return np.min(np.abs(alias[..., None] - self.alias_hz), axis=-1) < width_hz


def find_coding_rhythm(size_bytes: np.ndarray, frame_rate_hz: float) -> CodingRhythm:
    """Frequencies of the regular pattern in the coded sizes of frames, by their periodogram.

    Parameters
    ----------
    size_bytes : ndarray, shape (frames,)
        Coded size of each frame in order of presentation; NaN where unknown.
    """
    known = np.isfinite(size_bytes) & (size_bytes > 0)
    if known.sum() < 16 or known.mean() < 0.9:
        return CodingRhythm(np.zeros(0))
    level = np.log(np.where(known, size_bytes, np.median(size_bytes[known])))
    window = np.hanning(len(level))
    power = np.abs(np.fft.rfft((level - level.mean()) * window)) ** 2
    frequency = np.fft.rfftfreq(len(level), 1 / frame_rate_hz)
    # a slow change of content is no rhythm; a rhythm stands far above what its neighbours scatter
    middle = np.median(power[2:])
    peak = (power > RHYTHM_RATIO * middle) & (power > RHYTHM_SHARE * power[2:].sum()) & (frequency > 1.0)
    return CodingRhythm(frequency[peak])
