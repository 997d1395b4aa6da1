"""Narrow-band vibrations: found one by one, fitted together, each with its 95 % interval.

Rows sample the motion in bursts, which puts side lobes at multiples of the frame rate around every tone. So tones are
not read off a periodogram: the strongest is fitted with its full difference response, all are refitted together, and
the search goes on in what is left, until nothing stands above the false-alarm limit.

A tone that wanders (a propeller's speed never stands still) is a bundle of neighbouring lines, 1 / duration apart: a
complex envelope of limited bandwidth. Its amplitude is the root of the bundle's summed power, times sqrt 2.

Sources
-------
Scargle (1982), Astrophys. J. 263: exponential distribution of periodogram ordinates of noise, false-alarm probability.
Rife, Boorstyn (1974), IEEE Trans. Inf. Theory 20(5): Cramer-Rao bounds of frequency and amplitude, here taken from the
Gauss-Newton Jacobian of the fit and the noise around the tone.
Pati, Rezaiifar, Krishnaprasad (1993), "Orthogonal matching pursuit": refit all after each.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.fft import fft, next_fast_len
from scipy.ndimage import median_filter

from framegrade.coding import CodingRhythm
from framegrade.rows import RowSignals
from framegrade.spectrum.response import Clock, difference_gain, difference_response, observable

FALSE_ALARM = 0.01
#: Nothing weaker than this is called a tone, whatever its significance (px per 1920 of width, peak): coding and
#: resampling leave periodic traces of this size.
LEAST_TONE_PX1920 = 0.03
#: At a frequency of the encoder's own rhythm nothing weaker than this is believed (px per 1920 of width, peak).
CODED_TONE_PX1920 = 0.12
MAX_TONES = 12
LOWEST_TONE_HZ = 4.0
#: Sway that the temporal high-pass leaves is fitted by lines from here to here before any tone is sought.
SLOW_LINES_HZ = (1.2, 3.3)
#: Systematic parts of an amplitude's interval (95 %), from the campaign in tests/bench: relative, and in native pixels
#: (coding swallows a little of the smallest motion).
AMPLITUDE_SYSTEMATIC = 0.04
AMPLITUDE_SYSTEMATIC_PX = 0.008
#: The Cramer-Rao bound assumes white noise; errors of the flow follow the motion itself. The campaign's scatter is this
#: many times the bound.
BOUND_FACTOR = 2.0
#: Ordinates this far above the noise beside a line are more than chance among the cells its wander may reach.
CROWD_RATIO = 8.0
#: Lines tried one by one before a neighbourhood is taken for a wandering tone.
SEPARATE_LINES = 3
#: What is left at a tone's own aliases, or half a frame rate away (encoders alternate the quality of frames), and no
#: stronger than this share of it is a trace of that tone: two tones there by chance are far rarer.
CODING_TRACE = 0.30
OVERSAMPLING = 4
MAX_WANDER = 0.05   # a bundle reaches this far either side of its strongest line (relative): wandering propellers
#: A hump of summed power must stand this far above the density on both of its sides to be a wandering tone.
HUMP_RATIO = 10.0
WANDER_SHARE = 0.05  # residual lines above this share of the tone's amplitude belong to its bundle


@dataclass(frozen=True)
class Line:
    """One fitted sinusoid: coefficient of exp(2 pi i f t), native pixels, so that x = Re(coefficient exp(...))."""

    frequency_hz: float
    coefficient: complex


@dataclass(frozen=True)
class Tone:
    """One narrow-band vibration of one axis.

    Attributes
    ----------
    axis : int
        0 yaw, 1 pitch, 2 roll.
    frequency_hz, frequency_ci_hz : float
        Power-weighted mean frequency, and its 95 % half-width.
    amplitude_px, amplitude_ci_px : float
        Peak amplitude at the picture centre (roll: mid-edge), native pixels, and its 95 % half-width.
    wander_hz : float
        Spread (rms) of the frequency over the record; 0 for a steady tone.
    lines : tuple of Line
    """

    axis: int
    frequency_hz: float
    frequency_ci_hz: float
    amplitude_px: float
    amplitude_ci_px: float
    wander_hz: float
    lines: tuple[Line, ...]


@dataclass(frozen=True)
class _Data:
    """One axis of band signals with weights; invalid samples carry weight 0."""

    values: np.ndarray  # (pairs, bands)
    weight: np.ndarray  # (pairs, bands), mean 1 over what is valid
    clock: Clock
    duration_s: float


def axis_data(signals: RowSignals, axis: int, clock: Clock) -> _Data | None:
    """Values and weights of one axis, or None where fewer than half the samples exist."""
    values, variance = signals.fast_px[..., axis], signals.variance_px2[..., axis]
    valid = np.isfinite(values) & np.isfinite(variance)
    if valid.sum() < 0.1 * valid.size or len(values) < 8:
        return None
    typical = np.median(variance[valid])
    weight = np.where(valid, 1.0 / (np.where(valid, variance, 1.0) + typical), 0.0)
    scale = 4.0 * max(np.median(np.abs(values[valid])) / 0.6745, 1e-4)
    # a sample far outside the record's own spread is a mismatch, not a vibration
    weight = weight * (np.abs(np.nan_to_num(values)) < 3 * scale)
    if not weight.any():
        return None
    weight = weight / weight[weight > 0].mean()
    span = float(signals.next_time_s[-1] - signals.time_s[0])
    return _Data(np.where(valid, values, 0.0), weight, clock, span)


def _humps(power: np.ndarray, gain: np.ndarray, seen: np.ndarray, frequency_hz: np.ndarray) -> np.ndarray:
    """True where a wandering tone's width holds far more than its sides: of the motion's own power, seen parts only."""
    out = np.zeros(len(power), bool)
    if seen.sum() > 32:
        out[seen] = _hump_ratio(power[seen] / gain[seen] ** 2, frequency_hz[seen]) > HUMP_RATIO
    return out


def detection_ratio(independent: float, alarm: float = FALSE_ALARM, noise_cells: float = 16.0) -> float:
    """Ordinate over estimated noise that noise alone exceeds with probability `alarm` anywhere in the search.

    Parameters
    ----------
    independent : float
        Independent frequencies searched.
    alarm : float
        False-alarm probability of the whole search.
    noise_cells : float
        Equivalent number of independent ordinates behind the noise estimate (a median has half the efficiency of a
        mean); for very many this is Scargle's `ln(independent / alarm)`.

    Notes
    -----
    The ratio of two such chi-square averages has an F(2, 2 m) distribution: `m ((N / alarm)^(1/m) - 1)`.
    """
    return noise_cells * ((independent / alarm) ** (1 / noise_cells) - 1)


class Periodogram:
    """Matched filter of the exposure clock at every search frequency; one serves all residuals of a stretch.

    Attributes
    ----------
    frequency_hz : ndarray, shape (frequencies,)
        The search grid, `OVERSAMPLING` points per resolution cell.
    """

    def __init__(self, clock: Clock, duration_s: float, highest_hz: float) -> None:
        # all frequencies of the grid are multiples of one step, so evenly spaced frames need one fast transform a band
        self._points = next_fast_len(int(np.ceil(OVERSAMPLING * duration_s / clock.interval_s)))
        step = 1 / (self._points * clock.interval_s)
        index = np.arange(int(np.ceil(LOWEST_TONE_HZ / step)), int(highest_hz / step) + 1)
        self.frequency_hz = index * step
        self._fold = index % self._points
        self._kernel = None
        if np.ptp(np.diff(clock.start_s[:, 0])) > 0.02 * clock.interval_s:
            self._kernel = self._uneven_kernel(clock)
        self._bands = np.exp(-2j * np.pi * np.outer(self.frequency_hz, clock.delay_s)).astype(np.complex64)

    def _uneven_kernel(self, clock: Clock) -> np.ndarray:
        """For uneven frames: a pair's gain sin(pi f T) differs, even in sign, from its neighbour's."""
        time, spacing = clock.frame_s - clock.frame_s[0], (clock.end_s - clock.start_s).mean(1)
        kernel = np.empty((len(self.frequency_hz), len(time)), np.complex64)
        for part in np.array_split(np.arange(len(kernel)), max(1, len(kernel) // 1024)):
            f = self.frequency_hz[part]
            gain = np.sin(np.pi * np.outer(f, spacing))
            gain /= np.sqrt(np.mean(gain ** 2, axis=1, keepdims=True) + 1e-6)
            kernel[part] = np.exp(-2j * np.pi * np.outer(f, time)) * gain
        return kernel

    def power(self, values: np.ndarray, weight: np.ndarray) -> np.ndarray:
        """Explained sum of squares per unit weight, `|sum w y h*|^2 / sum w^2`; shape (frequencies,)."""
        weighted = (values * weight).astype(np.float32)
        if self._kernel is None:
            folded = fft(weighted, self._points, axis=0)[self._fold]
        else:
            folded = self._kernel @ weighted.astype(np.complex64)
        return np.abs((folded * self._bands).sum(1)) ** 2 / max(float((weight ** 2).sum()), 1e-12)


def _side_noise(power: np.ndarray, frequency_hz: np.ndarray, near_hz: np.ndarray | float, width_hz: float) -> np.ndarray:
    """Noise ordinate beside every frequency: the higher of two running medians, left and right, over ln 2.

    Ordinates of noise are exponential (Scargle 1982), so their mean is the median over ln 2. Taking the higher side keeps
    the edge of a broad band of vibration from passing for a tone.

    Parameters
    ----------
    near_hz : float or ndarray
        How far from the frequency the sides begin.
    width_hz : float
        Width of each side.
    """
    step = frequency_hz[1] - frequency_hz[0]
    size = max(9, int(width_hz / step) | 1)
    thin = max(1, size // 64)
    spots = frequency_hz[::thin]
    running = median_filter(power[::thin], size // thin | 1, mode="nearest") / np.log(2)
    offset = near_hz + width_hz / 2
    low, high = spots[0], spots[-1]
    left = np.interp(np.clip(frequency_hz - offset, low, high), spots, running)
    right = np.interp(np.clip(frequency_hz + offset, low, high), spots, running)
    return np.maximum(left, right)


def _line_noise(power: np.ndarray, frequency_hz: np.ndarray) -> np.ndarray:
    return _side_noise(power, frequency_hz, 0.5, 8.0)


def _hump_ratio(power: np.ndarray, frequency_hz: np.ndarray) -> np.ndarray:
    """Mean power over the width a wandering tone may take, over the density on both sides of it."""
    step = frequency_hz[1] - frequency_hz[0]
    total = np.concatenate([[0.0], np.cumsum(power)])
    half = np.maximum(1, (0.02 * frequency_hz / step).astype(int))
    index = np.arange(len(power))
    low, high = np.maximum(index - half, 0), np.minimum(index + half + 1, len(power))
    mean = (total[high] - total[low]) / (high - low)
    return mean / np.maximum(_side_noise(power, frequency_hz, MAX_WANDER * frequency_hz, 20.0), 1e-30)


def _columns(frequency_hz: float, data: _Data) -> np.ndarray:
    """Real design columns (cosine, sine part) of one line, weighted, flat; shape (pairs * bands, 2)."""
    response = difference_response(frequency_hz, data.clock) * np.sqrt(data.weight)
    return np.stack([response.real.ravel(), -response.imag.ravel()], 1)


def _fit_lines(frequencies: np.ndarray, data: _Data, columns: dict[float, np.ndarray]):
    """Joint least squares of all lines; returns complex coefficients, residual (pairs, bands) and the normal inverse."""
    for f in frequencies:
        if f not in columns:
            columns[f] = _columns(f, data)
    design = np.concatenate([columns[f] for f in frequencies], 1)
    target = (data.values * np.sqrt(data.weight)).ravel()
    normal = design.T @ design
    # lines half a resolution cell apart share their power: a slight ridge keeps the shares finite
    inverse = np.linalg.inv(normal + np.eye(len(normal)) * 1e-6 * np.trace(normal) / len(normal))
    solution = inverse @ (design.T @ target)
    root = np.sqrt(np.where(data.weight > 0, data.weight, 1.0))
    fitted = (design @ solution).reshape(data.values.shape)
    residual = np.where(data.weight > 0, data.values - fitted / root, 0.0)
    return solution[0::2] + 1j * solution[1::2], residual, inverse


def _refine(frequencies: np.ndarray, free: np.ndarray, data: _Data, columns: dict[float, np.ndarray], turns: int = 4):
    """Gauss-Newton on the frequencies of the steady lines, all together (variable projection's Kaufman step)."""
    limit = 0.5 / data.duration_s
    for _ in range(turns):
        coefficients, residual, _ = _fit_lines(frequencies, data, columns)
        if not free.any():
            break
        root = np.sqrt(data.weight)
        slopes = []
        for f, c in zip(frequencies[free], coefficients[free]):
            slopes.append((_frequency_slope(f, c, data) * root).ravel())
        slopes = np.stack(slopes, 1)
        design = np.concatenate([columns[f] for f in frequencies], 1)
        full = np.concatenate([design, slopes], 1)
        step = np.linalg.lstsq(full, (residual * root).ravel(), rcond=1e-8)[0][design.shape[1]:]
        step = np.clip(step, -limit, limit)
        frequencies = frequencies.copy()
        frequencies[free] += step
        if np.abs(step).max() < 1e-4 / data.duration_s:
            break
    return frequencies


def _frequency_slope(frequency_hz: float, coefficient: complex, data: _Data) -> np.ndarray:
    """Derivative of a line's contribution with respect to its frequency, per hertz; shape (pairs, bands)."""
    step = 0.02 / data.duration_s
    middle = float(data.clock.frame_s.mean())  # phase referred to mid-record: nearly independent of the frequency
    out = 0.0
    for sign in (1, -1):
        f = frequency_hz + sign * step
        turn = np.exp(-2j * np.pi * sign * step * middle)
        out = out + sign * np.real(coefficient * turn * difference_response(f, data.clock))
    return out / (2 * step)


@dataclass
class _Bundle:
    frequencies: np.ndarray
    steady: bool


def find_tones(data: _Data, axis: int, periodogram: Periodogram, px_per_1920: float,
               rhythm: CodingRhythm | None = None) -> tuple[list[Tone], np.ndarray]:
    """Tones of one axis, strongest first.

    Parameters
    ----------
    data : from `axis_data`
    axis : int
        0 yaw, 1 pitch, 2 roll.
    periodogram : Periodogram
        For the same clock.
    px_per_1920 : float
        Native pixels per pixel of a 1920-wide picture (width / 1920).
    rhythm : CodingRhythm, optional
        Where the encoder's own rhythm leaves traces: weak tones there are not believed.

    Returns
    -------
    tones : list of Tone
    residual : ndarray, shape (pairs, bands)
        What the tones leave of the data; 0 where a sample carries no weight.
    """
    clock, grid = data.clock, periodogram.frequency_hz
    seen = observable(grid, clock)
    gain = difference_gain(grid, clock)
    independent = grid[-1] * data.duration_s
    threshold = detection_ratio(independent)
    least_px = LEAST_TONE_PX1920 * px_per_1920
    samples = float(data.weight.sum() ** 2 / max((data.weight ** 2).sum(), 1e-12))

    columns: dict[float, np.ndarray] = {}
    bundles = [_slow_bundle(data)]
    coefficients, residual, _ = _fit_lines(_all(bundles), data, columns)
    strengths = [0.0]
    blocked = ~seen
    coded = np.zeros(len(grid), bool)
    if rhythm is not None:
        coded = rhythm.near(grid, clock.frame_rate_hz, 1.0 / data.duration_s)
    while len(bundles) <= MAX_TONES:
        power = periodogram.power(residual, data.weight)
        noise = _line_noise(power, grid)
        hump = _humps(power, gain, seen, grid)
        # amplitude of a sinusoid that would explain this much (power of a line: (A g / 2)^2 x samples)
        amplitude = 2 * np.sqrt(power / max(samples, 1)) / np.maximum(gain, 1e-3)
        candidate = ~blocked & ((power > threshold * noise) | hump) & (amplitude > least_px)
        candidate &= ~(coded & (amplitude < CODED_TONE_PX1920 * px_per_1920))
        for bundle, own in zip(bundles, strengths):
            candidate &= ~_trace_mask(grid, bundle.frequencies, own, clock, amplitude, 1 / data.duration_s)
        if not candidate.any():
            break
        at = int(np.argmax(np.where(candidate, power, 0)))
        frequencies = np.append(_all(bundles), grid[at])
        moved = _refine(frequencies, np.append(_free(bundles), True), data, columns, 3)
        near = np.abs(moved[:-1] - moved[-1]) < 0.6 / data.duration_s
        if near.any() or abs(moved[-1] - grid[at]) > 1 / data.duration_s:
            # it slid onto a line that is there already, or away: a remainder, not a tone
            blocked = blocked | (np.abs(grid - grid[at]) < 1 / data.duration_s)
            continue
        _put(bundles, moved[:-1])
        new = _Bundle(moved[-1:], True)
        bundles.append(new)
        coefficients, residual, _ = _fit_lines(_all(bundles), data, columns)
        new = _widen(new, bundles, residual, power, periodogram, gain, samples, data, columns)
        bundles[-1] = new
        coefficients, residual, _ = _fit_lines(_all(bundles), data, columns)
        reach = max(1.0 / data.duration_s, float(np.ptp(new.frequencies)) / 2 + 1 / data.duration_s)
        blocked = blocked | (np.abs(grid - new.frequencies.mean()) < reach)
        strengths = [0.0] + _strengths(bundles, coefficients)[1:]
    bundles = _settle(bundles, data, columns)
    frequencies = _all(bundles)
    coefficients, residual, inverse = _fit_lines(frequencies, data, columns)
    tones = _describe(bundles, frequencies, coefficients, inverse, residual, periodogram, data, axis)
    tones = [t for t in tones if t.amplitude_px >= max(least_px, 2 * t.amplitude_ci_px) and _clear_of_blind(t, clock)]
    return sorted(tones, key=lambda t: -t.amplitude_px), residual


def _settle(bundles: list[_Bundle], data: _Data, columns: dict[float, np.ndarray]) -> list[_Bundle]:
    """Refine all frequencies together; of steady lines that end closer than the record can part, the weaker goes.

    Two such lines share one vibration's power between them, each far too large and against each other.
    """
    while True:
        frequencies = _refine(_all(bundles), _free(bundles), data, columns)
        _put(bundles, frequencies)
        strengths = _strengths(bundles, _fit_lines(frequencies, data, columns)[0])
        others = [(i, f) for i, b in enumerate(bundles) for f in b.frequencies]
        close = [i for i, b in enumerate(bundles) if b.steady
                 and any(j != i and abs(f - b.frequencies[0]) < 0.8 / data.duration_s for j, f in others)]
        if not close:
            return bundles
        weakest = min(close, key=lambda i: strengths[i])
        bundles = [b for i, b in enumerate(bundles) if i != weakest]


def _clear_of_blind(tone: Tone, clock: Clock) -> bool:
    """False for a tone whose frequency, with its wander, reaches into a blind interval: there it is leakage, mostly."""
    reach = np.array([-1.0, 0.0, 1.0]) * (tone.wander_hz + tone.frequency_ci_hz)
    return bool(observable(tone.frequency_hz + reach, clock).all())


def _slow_bundle(data: _Data) -> _Bundle:
    """Lines that follow whatever sway the high-pass let through, with its lean on the rows; never reported."""
    spacing = 0.8 / data.duration_s
    return _Bundle(np.arange(SLOW_LINES_HZ[0], SLOW_LINES_HZ[1] + spacing / 2, spacing), False)


def _all(bundles: list[_Bundle]) -> np.ndarray:
    return np.concatenate([b.frequencies for b in bundles]) if bundles else np.zeros(0)


def _free(bundles: list[_Bundle]) -> np.ndarray:
    """Which lines' frequencies may move: those of steady tones."""
    return np.array([b.steady for b in bundles for _ in b.frequencies])


def _put(bundles: list[_Bundle], frequencies: np.ndarray) -> None:
    at = 0
    for bundle in bundles:
        bundle.frequencies = frequencies[at:at + len(bundle.frequencies)]
        at += len(bundle.frequencies)


def _widen(new, bundles, residual, before, periodogram, gain, samples, data, columns) -> _Bundle:
    """Turn a line into a bundle where its neighbourhood holds a crowd of power that a few steady lines cannot explain.

    `before` is the periodogram before the line was fitted: the bundle as a whole must stand above both its sides in it,
    so that no piece of a broad band passes for a wandering tone.
    """
    grid, centre = periodogram.frequency_hz, float(new.frequencies[0])
    spacing = 1.0 / data.duration_s
    others = [b for b in bundles if b is not new]
    near = (np.abs(grid - centre) <= MAX_WANDER * centre) & observable(grid, data.clock)

    def crowd(left: np.ndarray) -> np.ndarray:
        power = periodogram.power(left, data.weight)
        around = float(np.interp(centre, grid, _side_noise(power, grid, MAX_WANDER * grid, 20.0)))
        amplitude = 2 * np.sqrt(power / max(samples, 1)) / np.maximum(gain, 1e-3)
        strong = near & (power > CROWD_RATIO * around) & (amplitude > WANDER_SHARE * strength)
        return np.where(strong, power, 0.0)

    frequencies = _all(bundles)
    coefficients, _, _ = _fit_lines(frequencies, data, columns)
    strength = abs(coefficients[-1])
    first = left = crowd(residual)
    for _ in range(SEPARATE_LINES):
        if not left.any():
            return new  # steady neighbours, if any: they are found as tones of their own
        frequencies = np.append(frequencies, grid[int(np.argmax(left))])
        free = np.append(_free(bundles), [True] * (len(frequencies) - len(_all(bundles))))
        frequencies = _refine(frequencies, free, data, columns, 2)
        left = crowd(_fit_lines(frequencies, data, columns)[1])
    if not left.any():
        return new
    occupied = set(np.round((grid[(first + left) > 0] - centre) / spacing).astype(int).tolist()) | {0}
    reach = max(2, int(0.006 * centre / spacing))
    low = high = 0
    while occupied & set(range(low - reach, low)):
        low -= 1
    while occupied & set(range(high + 1, high + reach + 1)):
        high += 1
    lines = centre + np.arange(low - 1, high + 2) * spacing
    lines = lines[observable(lines, data.clock)]  # inside a blind interval a line would be noise over nearly nothing
    taken = _all(others)
    if len(taken):
        lines = lines[np.min(np.abs(lines[:, None] - taken), axis=1) > 0.5 * spacing]
    if len(lines) <= 3:
        return new
    seen = observable(grid, data.clock)
    own, place = before[seen] / gain[seen] ** 2, grid[seen]
    inside = (place >= lines[0]) & (place <= lines[-1])
    half = (lines[-1] - lines[0]) / 2
    beside = np.interp((lines[0] + lines[-1]) / 2, place, _side_noise(own, place, half + 2 * spacing, 15.0))
    return _Bundle(lines, False) if own[inside].mean() > HUMP_RATIO * beside else new


def _strengths(bundles: list[_Bundle], coefficients: np.ndarray) -> list[float]:
    """Root of the summed power of each bundle's lines."""
    edges = np.cumsum([0] + [len(b.frequencies) for b in bundles])
    return [float(np.sqrt(np.sum(np.abs(coefficients[i:j]) ** 2))) for i, j in zip(edges[:-1], edges[1:])]


def _trace_mask(grid, frequencies, strength, clock, amplitude, resolution_hz) -> np.ndarray:
    """Where a residual of a tone's own making may stand: its aliases and the encoder's half-rate side lobes."""
    centre, half_rate = float(np.mean(frequencies)), 0.5 * clock.frame_rate_hz
    width = (float(np.ptp(frequencies)) / 2 + 2 * resolution_hz) / half_rate
    steps, image = (grid - centre) / half_rate, (grid + centre) / half_rate
    near = (np.abs(steps - np.round(steps)) < width) | (np.abs(image - np.round(image)) < width)
    return near & (amplitude < CODING_TRACE * strength)


def _describe(bundles, frequencies, coefficients, inverse, residual, periodogram, data, axis) -> list[Tone]:
    grid = periodogram.frequency_hz
    noise = _line_noise(periodogram.power(residual, data.weight), grid)
    out, at = [], len(bundles[0].frequencies)
    for bundle in bundles[1:]:
        index = np.arange(at, at + len(bundle.frequencies))
        at += len(index)
        f, c = frequencies[index], coefficients[index]
        # noise ordinates are per sum of squared weights, the normal matrix is per sum of weights
        s2 = float(np.interp(f.mean(), grid, noise)) * float((data.weight ** 2).sum() / data.weight.sum())
        variance = inverse[2 * index, 2 * index] * s2, inverse[2 * index + 1, 2 * index + 1] * s2
        if bundle.steady:
            out.append(_steady_tone(axis, f[0], c[0], variance, s2, data))
        else:
            out.append(_wandering_tone(axis, f, c, variance, data))
    return out


def _amplitude_ci(statistical: float, amplitude: float) -> float:
    return float(np.sqrt(statistical ** 2 + (AMPLITUDE_SYSTEMATIC * amplitude) ** 2 + AMPLITUDE_SYSTEMATIC_PX ** 2))


def _steady_tone(axis, f, c, variance, s2, data) -> Tone:
    amplitude = abs(c)
    slope = _frequency_slope(f, c, data) * np.sqrt(data.weight)
    curvature = float((slope ** 2).sum())
    frequency_ci = BOUND_FACTOR * 1.96 * np.sqrt(s2 / max(curvature, 1e-30))
    along = (c.real ** 2 * variance[0][0] + c.imag ** 2 * variance[1][0]) / max(amplitude ** 2, 1e-30)
    amplitude_ci = _amplitude_ci(BOUND_FACTOR * 1.96 * np.sqrt(along), amplitude)
    return Tone(axis, float(f), float(frequency_ci), float(amplitude), float(amplitude_ci), 0.0, (Line(float(f), complex(c)),))


def _wandering_tone(axis, f, c, variance, data) -> Tone:
    t = data.clock.frame_s
    envelope = np.exp(2j * np.pi * np.outer(t - t.mean(), f)) @ (c * np.exp(2j * np.pi * t.mean() * f))
    noise = float((variance[0] + variance[1]).sum())
    power = max(float(np.mean(np.abs(envelope) ** 2)) - noise, 1e-12)
    weight = np.abs(envelope) ** 2
    turning = np.gradient(np.unwrap(np.angle(envelope * np.exp(-2j * np.pi * (t - t.mean()) * f.mean()))), t) / (2 * np.pi)
    mean = float(f.mean() + np.sum(weight * turning) / weight.sum())
    spread = float(np.sqrt(np.sum(weight * (f.mean() + turning - mean) ** 2) / weight.sum()))
    amplitude = np.sqrt(power)
    amplitude_ci = _amplitude_ci(BOUND_FACTOR * 1.96 * np.sqrt(2 * noise / len(f)), amplitude)
    independent = max(1.0, data.duration_s * 2 * max(spread, 1e-3))
    frequency_ci = 1.96 * spread / np.sqrt(independent) + 0.1 / data.duration_s
    lines = tuple(Line(float(a), complex(b)) for a, b in zip(f, c))
    return Tone(axis, mean, float(frequency_ci), float(amplitude), float(amplitude_ci), spread, lines)
