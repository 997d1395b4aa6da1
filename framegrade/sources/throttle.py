"""Throttle changes: which tones move with the shaft speed, and which stay where they are.

Source
------
Siegel (1982), "Robust regression using repeated medians", Biometrika 69(1): the slope of one track against another.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import median_filter
from scipy.stats import siegelslopes

from framegrade.sources.causes import SLOW_HIGH_HZ
from framegrade.spectrum.tracks import Track

#: The throttle changes when the middle 80 % of a track's frequencies span this much (relative), and a track stays when
#: its own span less: propellers in steady flight wander by one or two percent.
LEAST_MOVE, MOST_STAY = 0.06, 0.03
#: The track that shows it is seen in this share of all windows, this strong beside the strongest: beats of two motors
#: close to each other make short and weak tracks that wander.
REFERENCE_SEEN, REFERENCE_STRENGTH = 0.6, 0.3
#: Windows two tracks must share.
LEAST_SHARED = 4
#: How close to 1 or 0 the exponent of one track against another must be.
EXPONENT_TOLERANCE = 0.25
#: An amplitude this many times the track's median marks a resonance it passes through.
PEAK_RATIO = 2.0


@dataclass(frozen=True)
class Followed:
    """A track against the throttle.

    Attributes
    ----------
    track : Track
    throttle : {"follows", "stays", "drifts"}
        In a constant ratio to the moving reference; steady while that moves; or neither.
    frequency_hz : float
        At the reference's mean speed (of one that stays or drifts, its own mean).
    sigma_hz : float
        Standard deviation of it.
    low_hz, high_hz : float
        Swept range (10 to 90 %).
    passed_hz : float or None
        Frequency at which a moving track swells: a resonance it passes through.
    """

    track: Track
    throttle: str
    frequency_hz: float
    sigma_hz: float
    low_hz: float
    high_hz: float
    passed_hz: float | None = None


def _span(frequency_hz: np.ndarray) -> tuple[float, float]:
    low, high = np.nanquantile(frequency_hz, [0.1, 0.9])
    return float(low), float(high)


def _moves(frequency_hz: np.ndarray) -> float:
    low, high = _span(frequency_hz)
    return float(np.log(high / low))


def _strength(track: Track) -> float:
    return float(np.nanmedian(track.amplitude_px)) if np.isfinite(track.amplitude_px).any() else 0.0


def moving_reference(tracks: tuple[Track, ...]) -> Track | None:
    """The track that shows the throttle best: of those that move, the one seen longest and strongest.

    Parameters
    ----------
    tracks : tuple of Track

    Returns
    -------
    Track or None
        None when nothing moves.
    """
    fast = [t for t in tracks if np.isfinite(t.frequency_hz).any() and np.nanmedian(t.frequency_hz) > SLOW_HIGH_HZ]
    strongest = max((_strength(track) for track in fast), default=0.0)
    moving = [t for t in fast if np.isfinite(t.frequency_hz).mean() >= REFERENCE_SEEN
              and np.isfinite(t.frequency_hz).sum() >= LEAST_SHARED
              and _strength(t) >= REFERENCE_STRENGTH * strongest and _moves(t.frequency_hz) >= LEAST_MOVE]
    if not moving:
        return None
    return max(moving, key=lambda t: np.isfinite(t.frequency_hz).sum() * _strength(t))


def _shared(track: Track, reference: Track) -> tuple[np.ndarray, np.ndarray]:
    """Logarithms of both frequencies where both were seen; windows of all axes of a take are the same."""
    if len(track.time_s) != len(reference.time_s):
        return np.zeros(0), np.zeros(0)
    both = np.isfinite(track.frequency_hz) & np.isfinite(reference.frequency_hz)
    return np.log(track.frequency_hz[both]), np.log(reference.frequency_hz[both])


def passed_resonance(track: Track) -> float | None:
    """Frequency at which a moving track swells and falls off again.

    Parameters
    ----------
    track : Track

    Returns
    -------
    float or None
        Hertz; None where its amplitude has no such maximum, or has it at an end of the swept range, where a resonance
        cannot be told from a source that grows with speed.
    """
    ok = np.isfinite(track.frequency_hz)
    if ok.sum() < 8:
        return None
    order = np.argsort(track.frequency_hz[ok])
    frequency = track.frequency_hz[ok][order]
    amplitude = median_filter(track.amplitude_px[ok][order], 3, mode="nearest")
    at = int(np.argmax(amplitude))
    low, high = frequency[0], frequency[-1]
    inside = low + 0.15 * (high - low) < frequency[at] < high - 0.15 * (high - low)
    slower, faster = amplitude[frequency < frequency[at]], amplitude[frequency > frequency[at]]
    if not inside or not len(slower) or not len(faster):
        return None
    stands_out = amplitude[at] >= PEAK_RATIO * max(float(np.median(slower)), float(np.median(faster)))
    return float(frequency[at]) if stands_out else None


def follow_throttle(tracks: tuple[Track, ...]) -> tuple[Followed, ...]:
    """Tell the tracks of a take apart by what they do while the throttle changes.

    Parameters
    ----------
    tracks : tuple of Track
        Of all axes.

    Returns
    -------
    tuple of Followed
        Empty when nothing moves: then there is nothing to tell by. Tracks that share too few windows with the moving
        one are left out.
    """
    reference = moving_reference(tracks)
    if reference is None:
        return ()
    mean = float(np.exp(np.nanmean(np.log(reference.frequency_hz))))
    found = []
    for track in tracks:
        own, other = _shared(track, reference)
        if len(own) < LEAST_SHARED or np.ptp(other) < LEAST_MOVE:
            continue
        exponent = 1.0 if track is reference else float(siegelslopes(own, other).slope)
        moves = _moves(track.frequency_hz)
        if abs(exponent - 1) <= EXPONENT_TOLERANCE:
            ratio = own - other
            frequency = mean * float(np.exp(np.median(ratio)))
            # median absolute deviation, and half a percent of what half-second windows blur
            spread = 1.4826 * float(np.median(np.abs(ratio - np.median(ratio)))) / np.sqrt(len(ratio))
            found.append(Followed(track, "follows", frequency, frequency * float(np.hypot(spread, 0.003)),
                                  *_span(track.frequency_hz), passed_resonance(track)))
            continue
        frequency = float(np.exp(np.nanmedian(np.log(track.frequency_hz))))
        stays = abs(exponent) <= EXPONENT_TOLERANCE and moves < MOST_STAY
        found.append(Followed(track, "stays" if stays else "drifts", frequency,
                              frequency * float(np.hypot(0.25 * moves, 0.003)), *_span(track.frequency_hz)))
    return tuple(found)
