"""Tones followed over time, so that what turns with the throttle can be told from what swings at its own frequency.

Half-second windows of the band signals are matched with sinusoids that may glide (a time axis warped by a constant
relative rate makes a gliding order of a shaft a steady line), and the strongest path through all windows is found by
dynamic programming. It is fitted and taken off, and the next is searched in what is left: the side lobes that the
burst-wise sampling of the rows puts around a strong tone go with it.

Sources
-------
Fyfe, Munck (1997), "Analysis of computed order tracking", Mech. Syst. Signal Process. 11(2): lines of a shaft on an
axis that turns with it.
Forney (1973), "The Viterbi algorithm", Proc. IEEE 61(3): the best path, window by window.
Barrett, Holdsworth (1993), "Frequency tracking using hidden Markov models with amplitude and phase information", IEEE
Trans. Signal Process. 41(10): a frequency line as such a path.
Mallat, Zhang (1993), "Matching pursuits with time-frequency dictionaries", IEEE Trans. Signal Process. 41(12): fit the
strongest, subtract, go on.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from framegrade.records import AXES
from framegrade.rows import RowSignals
from framegrade.spectrum.response import Clock, difference_gain, filter_gain, observable
from framegrade.spectrum.tones import CODING_TRACE, axis_data, detection_ratio

WINDOW_S = 0.5
#: Slower than this half a second holds too few cycles; faster, a shaft's glide within a window blurs the line.
LOWEST_HZ, HIGHEST_HZ = 12.0, 600.0
#: Relative frequency step of the search, and the relative glides tried, per second.
STEP = 0.0025
GLIDES_PER_S = np.linspace(-0.4, 0.4, 9)
#: A path that departs from its own glide by this share of its frequency from window to window pays one e-fold of
#: evidence; and so does one that moves by the other: where nothing is seen any glide fits, and no path may stroll.
WORTH_OF_BEND, WORTH_OF_MOVE = 0.02, 0.05
#: A step from window to window lies between what both windows' glides make, within this: error of a window's frequency,
#: error of a glide per second, and the longest gap that is bridged.
GLIDE_SLACK_HZ, BEND_SLACK, LONGEST_GAP_S = 0.8, 0.03, 2.0
#: Of a frequency and its aliases only the strongest is looked at; others must come within this share of its power.
ALIAS_MARGIN = 0.97
#: Beside a tone, this near (relative), what is weaker than this share of it is taken for its skirt.
SKIRT_WIDTH, SKIRT_SHARE = 0.1, 0.12
MOST_TRACKS = 4
#: A track must be seen in this many windows, and in this share of all.
LEAST_WINDOWS, LEAST_SHARE = 4, 0.3
#: Windows at most: those of a very long take are spread over it, further apart.
MOST_WINDOWS = 480


@dataclass(frozen=True)
class Track:
    """One tone over time.

    Attributes
    ----------
    axis : int
        0 yaw, 1 pitch, 2 roll.
    time_s : ndarray, shape (windows,)
        Mid-times of the windows, on the take's clock.
    frequency_hz, amplitude_px : ndarray, shape (windows,)
        Frequency and peak amplitude (picture centre; roll: mid-edge; native pixels); NaN where the tone was not seen.
    """

    axis: int
    time_s: np.ndarray
    frequency_hz: np.ndarray
    amplitude_px: np.ndarray


def tracks_to_extra(tracks: Iterable[Track]) -> list[dict[str, Any]]:
    """Tracks in a form that JSON holds, for `TakeRecord.extra["tracks"]`; what was not seen is None.

    Parameters
    ----------
    tracks : iterable of Track

    Returns
    -------
    list of dict
        Keys `axis` (name), `time_s`, `frequency_hz`, `amplitude_px` (lists of equal length).
    """
    def listed(values: np.ndarray, digits: int) -> list[float | None]:
        return [round(float(v), digits) if np.isfinite(v) else None for v in values]

    return [{"axis": AXES[t.axis], "time_s": listed(t.time_s, 3), "frequency_hz": listed(t.frequency_hz, 3),
             "amplitude_px": listed(t.amplitude_px, 4)} for t in tracks]


def tracks_from_extra(rows: Iterable[Mapping[str, Any]]) -> tuple[Track, ...]:
    """Undo `tracks_to_extra`.

    Parameters
    ----------
    rows : iterable of mapping

    Returns
    -------
    tuple of Track

    Raises
    ------
    ValueError, KeyError, TypeError
        If the rows do not have that form.
    """
    return tuple(Track(AXES.index(row["axis"]), *(np.array(row[name], float) for name in
                                                  ("time_s", "frequency_hz", "amplitude_px"))) for row in rows)


def track_tones(signals: RowSignals, clock: Clock, axis: int, highest_hz: float, *, least_px: float = 0.0,
                most: int = MOST_TRACKS) -> tuple[Track, ...]:
    """Follow the tones of one axis over time, strongest first.

    Parameters
    ----------
    signals : RowSignals
        P pairs of B bands.
    clock : Clock
        From `exposure_clock` with a known readout.
    axis : int
        0 yaw, 1 pitch, 2 roll.
    highest_hz : float
        End of the search; `HIGHEST_HZ` at most.
    least_px : float
        A window that shows less (peak, native pixels) does not count as seen.
    most : int
        Tracks at most.

    Returns
    -------
    tuple of Track
        Those seen in enough windows. Steady tones are among them; a tone that glides faster than 40 % a second is lost.
    """
    data = axis_data(signals, axis, clock)
    top = min(HIGHEST_HZ, highest_hz)
    if data is None or top <= 1.2 * LOWEST_HZ:
        return ()
    windows = _windows(len(data.values), clock.interval_s)
    if len(windows.start) < LEAST_WINDOWS:
        return ()
    grid = np.exp(np.arange(np.log(LOWEST_HZ), np.log(top), STEP))
    search = _Search(clock, grid, windows)
    values, found = data.values, []
    # lines about two resolution cells apart are independent, and so are glides a few steps apart
    threshold = detection_ratio(len(GLIDES_PER_S) / 3 * (grid[-1] - grid[0]) * WINDOW_S, noise_cells=50.0)
    for _ in range(most):
        evidence = search.evidence(values, data.weight)
        ratio = _without_traces(evidence, found, grid, clock)
        glide = GLIDES_PER_S[evidence.glide]
        path = best_path(np.log1p(ratio), glide, windows.hop_s)
        fits = [search.fit(w, float(grid[j]), float(glide[w, j]), values, data.weight) for w, j in enumerate(path)]
        frequency = np.array([one.frequency_hz for one in fits])
        seen = (ratio[np.arange(len(path)), path] > threshold) & observable(frequency, clock)
        seen &= np.array([one.amplitude_px for one in fits]) >= least_px
        seen = _longest_run(seen, frequency, np.array([one.glide_per_s for one in fits]), windows.hop_s)
        if seen.sum() < max(LEAST_WINDOWS, LEAST_SHARE * len(path)):
            break
        found.append(_track(axis, fits, seen, windows, clock))
        values = values - search.sum_of(fits, seen, data.values.shape) * (data.weight > 0)
    return tuple(found)


# --- windows and matched filters -------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Windows:
    start: np.ndarray  # (windows,), first pair
    length: int
    hop_s: float


@dataclass(frozen=True)
class _Fit:
    """One window's sinusoid `Re(coefficient exp(2 pi i frequency (u + glide u^2 / 2)))`, u from the window's middle."""

    frequency_hz: float
    glide_per_s: float
    amplitude_px: float
    part: np.ndarray  # (length, bands): what it makes in the data


@dataclass(frozen=True)
class _Evidence:
    ratio: np.ndarray  # (windows, frequencies): power over noise at the best glide
    glide: np.ndarray  # (windows, frequencies): index of that glide
    amplitude_px: np.ndarray  # (windows, frequencies)


def _windows(pairs: int, interval_s: float) -> _Windows:
    length = min(pairs, max(8, round(WINDOW_S / interval_s)))
    count = min(MOST_WINDOWS, 1 + max(0, pairs - length) * 2 // length)
    start = np.unique(np.round(np.linspace(0, pairs - length, count)).astype(int))
    hop = float(np.mean(np.diff(start))) if len(start) > 1 else length
    return _Windows(start, length, hop * interval_s)


class _Search:
    """Matched filters of gliding sinusoids for every window of a clock."""

    def __init__(self, clock: Clock, grid: np.ndarray, windows: _Windows) -> None:
        self.clock, self.grid, self.windows = clock, grid, windows
        self.taper = np.hanning(windows.length + 2)[1:-1]
        self.bands = np.exp(-2j * np.pi * np.outer(grid, clock.delay_s)).astype(np.complex64)
        self.gain = np.maximum(difference_gain(grid, clock), 1e-3)
        self.aliases = _alias_indices(grid, clock.frame_rate_hz)
        self.kernels: dict[tuple[float, ...], list[np.ndarray]] = {}

    def _kernel(self, w: int) -> list[np.ndarray]:
        """Of every glide, shape (frequencies, length); even timestamps share one set."""
        u = self._time(w, self.clock.frame_s)
        key = tuple(np.round(u / (0.01 * self.clock.interval_s)))
        if key not in self.kernels:
            if len(self.kernels) > 3:
                self.kernels.clear()  # a variable frame rate: nothing to share
            self.kernels[key] = [
                (np.exp(-2j * np.pi * np.outer(self.grid, u + g * u ** 2 / 2)) * self.taper).astype(np.complex64)
                for g in GLIDES_PER_S
            ]
        return self.kernels[key]

    def _strongest_alias(self, power: np.ndarray) -> np.ndarray:
        """Largest power at any alias of each frequency, within a resolution cell; shape (frequencies,)."""
        return np.append(power, 0.0)[self.aliases].max(axis=0)  # index -1: beyond the search

    def _slice(self, w: int) -> slice:
        return slice(self.windows.start[w], self.windows.start[w] + self.windows.length)

    def _time(self, w: int, time_s: np.ndarray) -> np.ndarray:
        """Times of a window's pairs from its middle."""
        part = self._slice(w)
        frame = self.clock.frame_s[part]
        return time_s[part] - 0.5 * (frame[0] + frame[-1])

    def evidence(self, values: np.ndarray, weight: np.ndarray) -> _Evidence:
        """How strongly each window holds each frequency."""
        shape = (len(self.windows.start), len(self.grid))
        ratio, glide, amplitude = np.zeros(shape), np.zeros(shape, int), np.zeros(shape)
        for w in range(shape[0]):
            part = self._slice(w)
            load = (values[part] * weight[part]).astype(np.complex64)
            power = np.stack([np.abs(((kernel @ load) * self.bands).sum(1)) ** 2 for kernel in self._kernel(w)])
            norm = max(float(((weight[part] * self.taper[:, None]) ** 2).sum()), 1e-12)
            power /= norm
            glide[w] = np.argmax(power, axis=0)
            best = power[glide[w], np.arange(shape[1])]
            # ordinates of noise are exponential: their mean is the median over ln 2 (Scargle 1982)
            ratio[w] = best / max(float(np.median(power)) / np.log(2), 1e-30)
            # rows tell aliases apart, but not by much when the readout is short: the weaker ones wait for their turn
            ratio[w, best < ALIAS_MARGIN * self._strongest_alias(best)] = 0.0
            samples = float((weight[part] * self.taper[:, None]).sum()) ** 2 / norm
            amplitude[w] = 2 * np.sqrt(best / max(samples, 1.0)) / self.gain
        # in a blind interval there is nothing but noise over nearly nothing
        blind = ~observable(self.grid, self.clock)
        ratio[:, blind] = np.minimum(ratio[:, blind], 1.0)
        return _Evidence(ratio, glide, amplitude)

    def fit(self, w: int, frequency_hz: float, glide: float, values: np.ndarray, weight: np.ndarray) -> _Fit:
        """Least squares of one gliding sinusoid in a window, its frequency and glide refined by Gauss-Newton steps."""
        part = self._slice(w)
        root = np.sqrt(weight[part]) * self.taper[:, None]
        target = (values[part] * root).ravel()
        start, end = self._time(w, self.clock.start_s), self._time(w, self.clock.end_s)
        limit = np.array([0.5 / WINDOW_S, 0.5 * (GLIDES_PER_S[1] - GLIDES_PER_S[0])])

        def wave(f: float, g: float) -> np.ndarray:
            turn = 2j * np.pi * f
            return np.exp(turn * (end + g * end ** 2 / 2)) - np.exp(turn * (start + g * start ** 2 / 2))

        def solve(f: float, g: float) -> tuple[complex, np.ndarray]:
            shape = wave(f, g)
            design = np.stack([(shape.real * root).ravel(), (-shape.imag * root).ravel()], 1)
            a = np.linalg.lstsq(design, target, rcond=None)[0]
            return complex(a[0], a[1]), design

        f, g = frequency_hz, glide
        for _ in range(3):
            c, design = solve(f, g)
            df, dg = 0.02 / WINDOW_S, 0.01
            slopes = [np.real(c * (wave(f + df, g) - wave(f - df, g)) / (2 * df)),
                      np.real(c * (wave(f, g + dg) - wave(f, g - dg)) / (2 * dg))]
            full = np.concatenate([design, np.stack([(s * root).ravel() for s in slopes], 1)], 1)
            step = np.linalg.lstsq(full, target - design @ np.array([c.real, c.imag]), rcond=1e-8)[0][2:]
            f, g = np.array([f, g]) + np.clip(step, -limit, limit)
            f = float(np.clip(f, frequency_hz - 1 / WINDOW_S, frequency_hz + 1 / WINDOW_S))
            g = float(np.clip(g, glide - 2 * limit[1], glide + 2 * limit[1]))
        c, _ = solve(f, g)
        lost = float(filter_gain(np.array([f]), self.clock)[0]) * abs(np.sinc(f * self.clock.band_s))
        return _Fit(f, g, abs(c) / max(lost, 1e-3), np.real(c * wave(f, g)))

    def sum_of(self, fits: list[_Fit], seen: np.ndarray, shape: tuple[int, int]) -> np.ndarray:
        """The fitted windows cross-faded into one series, shape (pairs, bands); zero where a track was not seen."""
        total, cover = np.zeros(shape), np.zeros(shape[0])
        for w, one in enumerate(fits):
            part = self._slice(w)
            cover[part] += self.taper
            if seen[w]:
                total[part] += self.taper[:, None] * one.part
        return total / np.maximum(cover, 1e-3)[:, None]


def _alias_indices(grid: np.ndarray, rate_hz: float) -> np.ndarray:
    """Where every frequency's aliases lie on the grid, shape (aliases, frequencies); -1 for beyond it."""
    steps = rate_hz * np.arange(1, int(2 * grid[-1] / rate_hz) + 2)
    found = []
    for off in (-1.0, -0.5, 0.0, 0.5, 1.0):
        shifted = [grid + off + step for step in steps] + [grid + off - step for step in steps]
        mirrored = [step - grid + off for step in steps]
        for f in shifted + mirrored:
            inside = (f >= grid[0]) & (f <= grid[-1])
            if inside.any():
                index = np.round(np.log(np.maximum(f, grid[0]) / grid[0]) / STEP).astype(int)
                found.append(np.where(inside & (np.abs(f - grid) > 3.0), np.minimum(index, len(grid) - 1), -1))
    return np.array(found) if found else np.full((1, len(grid)), -1)


def _without_traces(evidence: _Evidence, found: list[Track], grid: np.ndarray, clock: Clock) -> np.ndarray:
    """Evidence without what earlier tracks leave behind: themselves, their aliases, the encoder's half-rate lobes."""
    ratio, half_rate = evidence.ratio.copy(), 0.5 * clock.frame_rate_hz
    for track in found:
        for w in np.flatnonzero(np.isfinite(track.frequency_hz)):
            f = track.frequency_hz[w]
            width = 2.0 / WINDOW_S / half_rate  # half the main lobe of a Hann window
            steps, image = (grid - f) / half_rate, (grid + f) / half_rate
            near = (np.abs(steps - np.round(steps)) < width) | (np.abs(image - np.round(image)) < width)
            mask = near & (evidence.amplitude_px[w] < CODING_TRACE * track.amplitude_px[w])
            # what wobbles within a window leaves a skirt
            skirt = np.abs(grid - f) < SKIRT_WIDTH * f
            mask |= skirt & (evidence.amplitude_px[w] < SKIRT_SHARE * track.amplitude_px[w])
            ratio[w, mask] = np.minimum(ratio[w, mask], 1.0)
    return ratio


def _longest_run(seen: np.ndarray, frequency_hz: np.ndarray, glide_per_s: np.ndarray, hop_s: float) -> np.ndarray:
    """The longest run of seen windows that glide into each other; single windows that do not fit are passed over.

    A path may hop between two steady lines, whose frequencies then change though neither glides.

    Parameters
    ----------
    seen : ndarray of bool, shape (windows,)
    frequency_hz, glide_per_s : ndarray, shape (windows,)
        As fitted in each window.
    hop_s : float

    Returns
    -------
    ndarray of bool, shape (windows,)
    """
    index = np.flatnonzero(seen)
    length, before = np.ones(len(index), int), np.full(len(index), -1)
    for j in range(len(index)):
        for i in range(j - 1, -1, -1):
            passed_s = (index[j] - index[i]) * hop_s
            if passed_s > max(LONGEST_GAP_S, 1.5 * hop_s):
                break
            a, b = index[i], index[j]
            ends = np.sort([glide_per_s[a], glide_per_s[b]]) * passed_s
            slack = GLIDE_SLACK_HZ / frequency_hz[b] + BEND_SLACK * passed_s
            if ends[0] - slack < np.log(frequency_hz[b] / frequency_hz[a]) < ends[1] + slack and length[i] >= length[j]:
                length[j], before[j] = length[i] + 1, i
    out = np.zeros(len(seen), bool)
    at = int(np.argmax(length)) if len(index) else -1
    while at >= 0:
        out[index[at]] = True
        at = before[at]
    return out


def best_path(worth: np.ndarray, glide_per_s: np.ndarray, hop_s: float, step: float = STEP) -> np.ndarray:
    """The path of frequencies, a window after another, with the most worth.

    Parameters
    ----------
    worth : ndarray, shape (windows, frequencies)
        Of each frequency in each window; frequencies rise by the same ratio from one to the next.
    glide_per_s : ndarray, shape (windows, frequencies)
        Relative rate at which a path should leave and reach a frequency.
    hop_s : float
        From window to window.
    step : float
        Natural logarithm of that ratio.

    Returns
    -------
    ndarray of int, shape (windows,)

    Notes
    -----
    Forney 1973: the best path to each state of a window from the best paths to the window before. A move costs its
    departure from the mean of both glides in units of `WORTH_OF_BEND`, and its length in units of `WORTH_OF_MOVE`.
    """
    count, width = worth.shape
    reach = int(np.ceil(hop_s * np.abs(GLIDES_PER_S).max() / step)) + 2
    moves = np.arange(-reach, reach + 1)  # from frequency j - move to frequency j
    best, came = worth[0].copy(), np.zeros((count, width), int)
    source = np.arange(width)[None, :] - moves[:, None]
    outside = (source < 0) | (source >= width)
    source = np.clip(source, 0, width - 1)
    for w in range(1, count):
        glide = 0.5 * hop_s * (glide_per_s[w - 1][source] + glide_per_s[w][None, :])
        cost = np.abs(moves[:, None] * step - glide) / WORTH_OF_BEND + np.abs(moves[:, None]) * step / WORTH_OF_MOVE
        total = np.where(outside, -np.inf, best[source] - cost)
        choice = np.argmax(total, axis=0)
        came[w] = source[choice, np.arange(width)]
        best = total[choice, np.arange(width)] + worth[w]
    path = np.empty(count, int)
    path[-1] = int(np.argmax(best))
    for w in range(count - 1, 0, -1):
        path[w - 1] = came[w, path[w]]
    return path


def _track(axis: int, fits: list[_Fit], seen: np.ndarray, windows: _Windows, clock: Clock) -> Track:
    first, last = windows.start, windows.start + windows.length - 1
    time = 0.5 * (clock.frame_s[first] + clock.frame_s[last])
    frequency = np.where(seen, [f.frequency_hz for f in fits], np.nan)
    amplitude = np.where(seen, [f.amplitude_px for f in fits], np.nan)
    return Track(axis, time, frequency, amplitude)
