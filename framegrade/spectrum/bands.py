"""One-third-octave bands, base ten.

Source: IEC 61260-1:2014, clause 5 (exact mid-band frequencies `G^(x/3) f_r` with `G = 10^(3/10)`, band edges a sixth of an
octave either side) and its annex E (nominal mid-band frequencies; the series is also ISO 266).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

#: Mantissas of the nominal mid-bands, ten to the decade, for n = 0..9 in 10^(n/10).
NOMINAL_MANTISSA = (1.0, 1.25, 1.6, 2.0, 2.5, 3.15, 4.0, 5.0, 6.3, 8.0)
FIRST_BAND = 5  # 3.15 Hz


@dataclass(frozen=True)
class Band:
    """One band: nominal name, exact mid frequency and edges, in hertz."""

    nominal_hz: float
    mid_hz: float
    low_hz: float
    high_hz: float


def third_octave_bands(highest_hz: float, first: int = FIRST_BAND) -> tuple[Band, ...]:
    """Bands from index `first` (mid frequency `10^(first/10)` Hz) up to those whose upper edge is at most `highest_hz`."""
    bands, n = [], first
    while 10 ** ((n + 0.5) / 10) <= highest_hz:
        decade, place = divmod(n, 10)
        nominal = NOMINAL_MANTISSA[place] * 10.0 ** decade
        bands.append(Band(float(f"{nominal:.6g}"), 10 ** (n / 10), 10 ** ((n - 0.5) / 10), 10 ** ((n + 0.5) / 10)))
        n += 1
    return tuple(bands)


def band_power(frequency_hz: np.ndarray, density: np.ndarray, usable: np.ndarray, band: Band) -> tuple[float, float]:
    """Power of a density in one band and the share of the band that was seen.

    Parameters
    ----------
    frequency_hz : ndarray, shape (K,)
        Evenly spaced centres of the density's cells.
    density : ndarray, shape (K,)
        Power per hertz.
    usable : ndarray of bool, shape (K,)
        False inside blind intervals.
    band : Band

    Returns
    -------
    power : float
        Integral over the seen part of the band; NaN if nothing was seen.
    observable : float
        Seen share of the band's width, 0 to 1.
    """
    step = frequency_hz[1] - frequency_hz[0]
    overlap = np.minimum(frequency_hz + step / 2, band.high_hz) - np.maximum(frequency_hz - step / 2, band.low_hz)
    overlap = np.clip(overlap, 0, None)
    seen = overlap * usable
    observable = seen.sum() / (band.high_hz - band.low_hz)
    return (float(np.nansum(seen * np.where(usable, density, 0))) if observable > 0 else np.nan), float(observable)
