"""Readout time from the bands that a flickering lamp leaves in the picture.

Lamps on alternating current flicker at twice the mains frequency (100 or 120 Hz: common practice). With rows exposed
one after the other, the brightness of row i of frame n follows the lamp at `t = pts_n + ((i + 1/2) / H - 1/2) R`: R f
cycles stand over the height of the picture, and they move from frame to frame by the lamp's alias. The alias pins the
lamp's true frequency on the camera's own clock, the cycles then give R.

Sources
-------
Rife, Boorstyn (1974), IEEE Trans. Inf. Theory 20(5): a tone is found at the peak of the periodogram, refined by least
squares. Newey, West (1987), Econometrica 55(3): standard errors that hold for errors correlated over time.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from framegrade.readout.estimate import CannotTell, Readout

#: The picture is reduced to at most this many rows.
MOST_ROWS = 270
SHORTEST_S = 1.0
#: The lamp is looked for this far around the frequency given (relative): mains frequency and camera clock both stray.
FREQUENCY_TOLERANCE = 0.005
#: A slow change of the light, or of the exposure, is a polynomial of this degree a row.
_TREND_DEGREE = 2
#: The lamp's harmonics that are fitted, its fundamental being the first.
HARMONICS = 2
#: Bands must stand out of what is seen at neighbouring frequencies by this factor of power.
LEAST_POWER_RATIO = 12.0
#: Weaker bands (peak, share of the brightness) are not trusted.
LEAST_DEPTH = 0.001
#: Rows darker than this grey level hold no light to flicker.
DARKEST_GREY = 20.0
_TURNS = 12
#: Reach of correlated errors: over time, and over the height.
_LAG_S, _LAG_HEIGHT = 0.15, 0.1
#: 95 % point of Student's distribution for the ten or so independent parts that the rows make.
STUDENT_95 = 2.23
#: Systematic part of the interval (95 %): of the readout, and of the frame interval; from tests/bench/readout.
SYSTEMATIC_SHARE, SYSTEMATIC_FRAME = 0.002, 0.0005
WIDEST_SHARE, WIDEST_FRAME = 0.03, 0.02

_INSTEAD = ("film an evenly lit, plain, light wall under one such lamp for 4 s, camera held still, "
            "with an exposure time well under half a flicker period")


@dataclass(frozen=True)
class RowBrightness:
    """Mean brightness of the rows of every frame.

    Attributes
    ----------
    time_s : ndarray, shape (frames,)
    moment : ndarray, shape (rows,)
        When a row is exposed, from -1/2 (top edge of the picture) to 1/2 (bottom edge) of the readout time.
    grey : ndarray, shape (frames, rows)
        Mean luma, 0 to 255.
    """

    time_s: np.ndarray
    moment: np.ndarray
    grey: np.ndarray


def row_brightness(frames: Iterable[tuple[float, np.ndarray]], luma_scale: float = 1.0) -> RowBrightness:
    """Mean brightness of (groups of) rows.

    Parameters
    ----------
    frames : iterable of (time_s, luma)
        Presentation time and luma plane, shape (height, width).
    luma_scale : float
        What brings the luma plane to 0..255.

    Raises
    ------
    ValueError
        If there is no frame.
    """
    times, rows, moment = [], [], None
    for time_s, luma in frames:
        group = -(-luma.shape[0] // MOST_ROWS)
        count = luma.shape[0] // group
        if moment is None:
            moment = (np.arange(count) + 0.5) * group / luma.shape[0] - 0.5
        times.append(time_s)
        rows.append(luma[:count * group].mean(1, dtype=float).reshape(count, group).mean(1) * luma_scale)
    if moment is None:
        raise ValueError("no frame to measure")
    return RowBrightness(np.array(times), moment, np.array(rows))


def measure_flicker(brightness: RowBrightness, flicker_hz: float) -> Readout:
    """Readout time of the mode a flicker clip was shot in.

    Parameters
    ----------
    brightness : RowBrightness
    flicker_hz : float
        Flicker frequency of the lamp, known to half a per cent.

    Returns
    -------
    Readout

    Raises
    ------
    CannotTell
        When the clip is too short, too dark, or shows no moving bands of this frequency.
    """
    time = brightness.time_s - brightness.time_s.mean()
    if len(time) < 8 or np.ptp(time) < SHORTEST_S:
        raise CannotTell(f"only {np.ptp(time):.2g} s long: at least {SHORTEST_S:g} s are needed", _INSTEAD)
    interval = float(np.median(np.diff(time)))
    typical = brightness.grey.mean(0)
    lit = typical > DARKEST_GREY
    if lit.sum() < 0.5 * len(lit):
        raise CannotTell("most of the picture is dark", _INSTEAD)
    moment = brightness.moment[lit]
    trend = np.linalg.qr(np.polynomial.legendre.legvander(2 * time / np.ptp(time), _TREND_DEGREE))[0]
    ratio = _without(brightness.grey[:, lit] / typical[lit], trend)
    frequency, cycles = _search(ratio, time, moment, flicker_hz, interval)
    fit = _refine(ratio, time, moment, trend, frequency, cycles, interval)
    if fit.depth < LEAST_DEPTH:
        raise CannotTell(f"no bands of a {flicker_hz:g} Hz flicker can be seen", _advice(flicker_hz))
    if abs(fit.frequency_hz / flicker_hz - 1) > 1.2 * FREQUENCY_TOLERANCE:
        raise CannotTell(f"the bands seen do not move as a {flicker_hz:g} Hz flicker makes them", _advice(flicker_hz))
    readout = fit.cycles / fit.frequency_hz
    sigma = fit.cycles_sigma / fit.frequency_hz
    ci = float(
        np.sqrt((STUDENT_95 * sigma) ** 2 + (SYSTEMATIC_SHARE * readout) ** 2 + (SYSTEMATIC_FRAME * interval) ** 2)
    )
    if ci > max(WIDEST_SHARE * abs(readout), WIDEST_FRAME * interval):
        raise CannotTell(
            f"the bands are too faint or too disturbed to count (the estimate is good to {ci * 1e3:.2g} ms only)",
            _INSTEAD,
        )
    if readout < -ci:
        raise CannotTell(
            f"the bands run against the rows' order: the flicker is not {flicker_hz:g} Hz, or the camera writes its "
            "picture turned over, which this measurement does not cover",
            _advice(flicker_hz),
        )
    if readout > 1.01 * interval + ci:
        raise CannotTell(
            f"the bands are those of a readout longer than the {interval * 1e3:.3g} ms from frame to frame: "
            f"the flicker is not {flicker_hz:g} Hz",
            _advice(flicker_hz),
        )
    basis = f"{fit.cycles:.3g} bands of {100 * fit.depth:.2g} % a frame height, lamp at {fit.frequency_hz:.2f} Hz"
    return Readout(float(readout), ci, "flicker", interval, basis)


def _advice(flicker_hz: float) -> str:
    if flicker_hz in (50.0, 60.0):
        return f"lamps flicker at twice the mains frequency: try --flicker-hz {2 * flicker_hz:g}"
    return _INSTEAD


def _without(series: np.ndarray, trend: np.ndarray) -> np.ndarray:
    """Take the trend's columns (orthonormal) off a series along its first axis."""
    return series - trend @ (trend.T @ series)


def _search(
    ratio: np.ndarray, time: np.ndarray, moment: np.ndarray, flicker_hz: float, interval: float
) -> tuple[float, float]:
    """Frequency and cycles over the height at the peak of the periodogram near the lamp's frequency.

    Raises
    ------
    CannotTell
        When nothing stands out there.
    """
    span, rate = float(np.ptp(time)), 1 / interval
    alias = abs(flicker_hz - rate * round(flicker_hz / rate))
    reach = FREQUENCY_TOLERANCE * flicker_hz
    step = 1 / (8 * span)
    most = 1.05 * flicker_hz * interval + 1
    cycles = np.arange(-most, most, 0.05)
    near = flicker_hz + np.arange(-reach, reach + step / 2, step)
    power = _power(ratio, time, moment, near, cycles)
    peak = float(power.max())
    # neighbours: what else moves through the picture at about this speed
    beside = flicker_hz + np.concatenate(
        [-reach - 2 / span - np.arange(0, 4, 4 * step), reach + 2 / span + np.arange(0, 4, 4 * step)]
    )
    folded = np.abs(beside - rate * np.round(beside / rate))
    mirrored = np.abs(folded - alias) < reach + 2 / span  # the same line read from its mirror image
    beside = beside[~mirrored] if (~mirrored).sum() > 8 else beside
    ground = float(np.median(_power(ratio, time, moment, beside, cycles).max(1)))
    if peak < LEAST_POWER_RATIO * ground:
        if alias < 1.5 / span + reach:
            raise CannotTell(
                f"at {rate:.4g} frames/s the bands of a {flicker_hz:g} Hz flicker (nearly) stand still and cannot be "
                "told from the scene",
                "film longer, or measure this mode with --method swing",
            )
        raise CannotTell(f"no bands of a {flicker_hz:g} Hz flicker can be seen", _advice(flicker_hz))
    i, j = np.unravel_index(int(np.argmax(power)), power.shape)
    return float(near[i]), float(cycles[j])


def _power(ratio, time, moment, frequency, cycles) -> np.ndarray:
    """Squared length of the projection on each (frequency, cycles) wave; shape (frequencies, cycles)."""
    frames = np.exp(-2j * np.pi * np.outer(frequency, time))
    rows = np.exp(-2j * np.pi * np.outer(moment, cycles))
    return np.abs(frames @ ratio @ rows) ** 2


@dataclass(frozen=True)
class _Fit:
    frequency_hz: float
    cycles: float
    cycles_sigma: float
    depth: float


def _refine(ratio, time, moment, trend, frequency, cycles, interval) -> _Fit:
    """Gauss-Newton on frequency and cycles, fundamental and harmonic together; then the cycles' standard deviation."""
    harmonics = _separable_harmonics(frequency, cycles, interval, float(np.ptp(time)))
    for turn in range(_TURNS):
        design, coefficients = _waves(ratio, time, moment, trend, frequency, cycles, harmonics)
        slopes = _slopes(time, moment, trend, frequency, cycles, coefficients)
        full = np.concatenate([design, slopes], 1)
        step = np.linalg.lstsq(full, ratio.ravel(), rcond=1e-10)[0][-2:]
        step = np.clip(step, [-0.2 / np.ptp(time), -0.05], [0.2 / np.ptp(time), 0.05])
        frequency, cycles = frequency + step[0], cycles + step[1]
        if abs(step[1]) < 1e-7 and turn > 2:
            break
    design, coefficients = _waves(ratio, time, moment, trend, frequency, cycles, harmonics)
    slopes = _slopes(time, moment, trend, frequency, cycles, coefficients)
    rest = (ratio.ravel() - design @ coefficients).reshape(ratio.shape)
    others = np.concatenate([design, slopes[:, :1]], 1)
    own = (slopes[:, 1] - others @ np.linalg.lstsq(others, slopes[:, 1], rcond=1e-10)[0]).reshape(ratio.shape)
    score, information = own * rest, float((own ** 2).sum())
    # Errors hang together over time (moving scenery), and over neighbouring rows (what coding makes of a texture keeps
    # step with the bands as long as the texture stays); both are counted.
    variance = (_summed_variance(score.sum(1), max(2, round(_LAG_S / interval)))
                + _summed_variance(score.sum(0), max(2, round(_LAG_HEIGHT * ratio.shape[1]))))
    return _Fit(float(frequency), float(cycles), float(np.sqrt(variance) / max(information, 1e-30)),
                float(np.hypot(*coefficients[:2])))


def _separable_harmonics(frequency: float, cycles: float, interval: float, span: float) -> int:
    """How many harmonics can be told from the fundamental: not one of the same alias and nearly the same bands."""
    count = 1
    for harmonic in range(2, HARMONICS + 1):
        for sign in (1, -1):  # a real wave is read at its own frequency and at the mirrored one
            turns = (harmonic * frequency - sign * frequency) * interval
            same_alias = abs(turns - round(turns)) * span / interval < 2.0
            if same_alias and abs((harmonic - sign) * cycles) < 1.0:
                return count
        count = harmonic
    return count


def _summed_variance(score: np.ndarray, lag: int) -> float:
    """Variance of the sum of a correlated series (Newey, West), never below that of an uncorrelated one."""
    own = float(score @ score)
    return max(own, own + sum(2 * (1 - s / (lag + 1)) * float(score[s:] @ score[:-s]) for s in range(1, lag + 1)))


def _waves(ratio, time, moment, trend, frequency, cycles, harmonics) -> tuple[np.ndarray, np.ndarray]:
    """Design (frames x rows, 2 a harmonic) with the trend taken off, and the least-squares coefficients."""
    columns = []
    for harmonic in range(1, harmonics + 1):
        wave = _wave(time, moment, harmonic * frequency, harmonic * cycles)
        columns += [_without(wave.real, trend).ravel(), _without(wave.imag, trend).ravel()]
    design = np.stack(columns, 1)
    return design, np.linalg.lstsq(design, ratio.ravel(), rcond=1e-10)[0]


def _wave(time, moment, frequency, cycles) -> np.ndarray:
    return np.exp(2j * np.pi * frequency * time)[:, None] * np.exp(2j * np.pi * cycles * moment)[None, :]


def _slopes(time, moment, trend, frequency, cycles, coefficients) -> np.ndarray:
    """Derivatives of the fitted bands with respect to frequency and cycles; shape (frames x rows, 2)."""
    by_frequency = by_cycles = 0.0
    for harmonic in range(1, len(coefficients) // 2 + 1):
        a, b = coefficients[2 * harmonic - 2:2 * harmonic]
        turned = (a - 1j * b) * _wave(time, moment, harmonic * frequency, harmonic * cycles) * 2j * np.pi * harmonic
        by_frequency = by_frequency + (turned * time[:, None]).real
        by_cycles = by_cycles + (turned * moment[None, :]).real
    return np.stack([_without(by_frequency, trend).ravel(), _without(by_cycles, trend).ravel()], 1)
