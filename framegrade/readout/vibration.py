"""Readout time from the vibration in flight clips.

Without the readout time a tone is known by its alias a (its frequency up to a multiple of the frame rate F) and by its
cycles c over the frame's height. Its frequency is `a + k F` for some whole k, and `c = R (a + k F)`: every tone allows
a comb of readouts R. The tones of a clip share one R.

What can choose among the teeth: tones of *unlike* frequency, such as rotors at slightly different speeds, or one rotor
whose speed changes. Then the slope `dc / da` is R itself. The harmonics of one steady shaft cannot: raise its frequency
by F, and each harmonic m rises by m F, so that every alias, and every ratio of cycles, stays the same. Such clips leave
rivals, and these are reported.

Sources
-------
Vaughan (1988), Astronomical aliasing is the same problem: Deeming (1975), Astrophys. Space Sci. 36 (spectral window).
Rife, Boorstyn (1974), IEEE Trans. Inf. Theory 20(5): bounds of a tone's frequency, here in two directions.
MacKay (2003), "Information theory, inference, and learning algorithms", ch. 22 and 28: a mixture with a broad
component sets outliers aside; rival answers are weighed by their posterior mass.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import logsumexp

from framegrade.readout.estimate import NORMAL_95, CannotTell, Readout
from framegrade.rows import RowSignals, band_mean, cut
from framegrade.spectrum.response import BLIND_GAIN, difference_gain, exposure_clock
from framegrade.spectrum.tones import axis_data

#: Longer clips are taken in stretches of about this length, seconds: lines 1 / length apart are fine enough.
STRETCH_S = 8.0
#: Highest frequency believed in. Too low a limit would not only miss fast vibration: a rival readout with lower
#: frequencies would then seem to be the only answer.
HIGHEST_HZ = 1500.0
#: Shortest and longest rolling readout believed in, shares of the frame interval.
READOUT_SHARES = (0.03, 1.0)
#: Aliases slower than this are sway and scenery.
LOWEST_ALIAS_HZ = 4.0
#: A line must stand this far (power) above the noise beside it, and be this large (peak, px per 1920 of width).
LEAST_POWER_RATIO, LEAST_LINE_PX1920 = 30.0, 0.02
#: Lines weaker than this share of the axis' strongest may be anything.
LEAST_SHARE = 0.15
#: A line leans when it has more than this many cycles; the range of aliases its noise is read over.
_LEANING_CYCLES, _NEAR_HZ, _FAR_HZ = 0.7, 1.5, 10.0
#: A weaker line at a stronger one's mirror image, or half a frame rate beside either, is a trace of it.
TRACE_SHARE = 0.35
MOST_LINES, MOST_WEIGHED = 40, 120
#: Lines closer than this belong to one vibration.
_LINK_HZ, _LINK_CYCLES = 1.5, 0.05
#: Share of lines that are no vibration at all (coding, moving scenery), and the range of cycles they spread over.
STRAY_SHARE, _STRAY_CYCLES = 0.1, 24.0
#: Cycles are known no better than this, and than this share: bands have a centre of gravity of their own.
_LEAST_SIGMA, _SHARE_SIGMA = 0.003, 0.002
_CYCLES_STEP, _MOST_CYCLES_A_BAND = 0.04, 0.4
#: Neighbouring lines of a Hann window share this much of their information.
_WINDOW_SHARE = 1.5
#: Prior probability of a global shutter.
_GLOBAL_PRIOR = 0.1
#: One answer must hold this much of the posterior; others above this much are rivals.
CERTAIN, RIVAL = 0.99, 0.01
MOST_NAMED = 12
#: Systematic part of the interval (95 %): of the readout, of the frame interval, and of the cycles.
SYSTEMATIC_SHARE, SYSTEMATIC_FRAME, SYSTEMATIC_CYCLES = 0.005, 0.001, 0.008
WIDEST_SHARE, WIDEST_FRAME = 0.05, 0.02
_STEP = 4e-4  # relative step of the search over the readout

_INSTEAD = ("fly a clip in which the throttle rises and falls slowly, give several flights of this mode together, "
            "or film a swing clip (see --method swing)")


@dataclass(frozen=True)
class Line:
    """One line of a clip's spectrum, as the frames sample it.

    Attributes
    ----------
    axis : int
    alias_hz : float
        0 to half the frame rate.
    cycles, cycles_sigma : float
        Cycles over the frame's height, with the sign that belongs to `alias_hz`, and their standard deviation.
    amplitude_px : float
        Peak at the picture centre, native pixels.
    frame_rate_hz : float
    """

    axis: int
    alias_hz: float
    cycles: float
    cycles_sigma: float
    amplitude_px: float
    frame_rate_hz: float


@dataclass(frozen=True)
class Rival:
    """One readout that the lines allow, with its share of the posterior probability."""

    readout_s: float
    sigma_s: float
    share: float


def spectral_lines(signals: RowSignals, px_per_1920: float) -> tuple[Line, ...]:
    """Strong lines of a clip, known by alias and cycles.

    A vibration whose frequency wanders is a bundle of lines, and for each of them `c = R f` holds as for a steady one.

    Parameters
    ----------
    signals : RowSignals
    px_per_1920 : float
        Native pixels per pixel of a 1920-wide picture.
    """
    span = signals.next_time_s[-1] - signals.time_s[0]
    edges = np.linspace(0, signals.pairs, max(1, int(round(span / STRETCH_S))) + 1).astype(int)
    parts = [cut(signals, first, last) for first, last in zip(edges[:-1], edges[1:])]
    return tuple(line for part in parts for line in _lines_of_stretch(part, px_per_1920))


def _lines_of_stretch(part: RowSignals, px_per_1920: float) -> list[Line]:
    """Lines of all axes, without what one axis' vibration leaks into another (lens and field of view are not known)."""
    lines = [line for axis in range(3) for line in _lines_of_axis(part, axis, px_per_1920)]
    width = 1.5 / float(part.next_time_s[-1] - part.time_s[0])
    return [line for line in lines if not any(
        other.axis != line.axis and abs(other.alias_hz - line.alias_hz) < width
        and line.amplitude_px < TRACE_SHARE * other.amplitude_px for other in lines)]


def _lines_of_axis(part: RowSignals, axis: int, px_per_1920: float) -> list[Line]:
    clock = exposure_clock(part, 0.0)
    data = axis_data(part, axis, clock)
    if data is None:
        return []
    rate = clock.frame_rate_hz
    # nearer to half the frame rate a line runs into its own mirror image
    alias = np.arange(LOWEST_ALIAS_HZ, rate / 2 - 2 / data.duration_s, 1 / data.duration_s)
    gain = difference_gain(alias, clock)
    window = np.hanning(part.pairs + 2)[1:-1]
    frames = np.exp(-2j * np.pi * np.outer(alias, clock.frame_s)) * window
    total = np.maximum(window @ data.weight, 1e-9)
    level = 2 * (frames @ (data.weight * data.values)) / total  # (aliases, bands): complex amplitude of every band
    lasting = total > 0.3 * total.max()
    # half-way between where a band's content is and where it is found in the next frame
    height = (part.height - 0.5 + 0.5 * np.nan_to_num(band_mean(part.rise.T)))[lasting]
    level = level[:, lasting] / np.maximum(gain, BLIND_GAIN)[:, None]
    level = np.where(gain[:, None] > BLIND_GAIN, level, 0.0)
    reach = _MOST_CYCLES_A_BAND / part.band_share
    cycles = np.arange(-reach, reach, _CYCLES_STEP)
    power = np.abs(level @ np.exp(-2j * np.pi * np.outer(height, cycles)) / len(height)) ** 2
    best = np.argmax(power, axis=1)
    ground = _ground(power, best, alias, cycles)
    peak = power[np.arange(len(alias)), best]
    least = max((LEAST_LINE_PX1920 * px_per_1920) ** 2, LEAST_SHARE ** 2 * float(peak.max()))
    strong = (peak > LEAST_POWER_RATIO * ground) & (peak > least)
    spread = float(np.sum((height - height.mean()) ** 2)) / len(height)
    lines: list[Line] = []
    for i in sorted(np.flatnonzero(strong), key=lambda i: -peak[i])[:MOST_LINES]:
        size = float(np.sqrt(peak[i]))
        if any(_is_trace(alias[i], line.alias_hz, rate, 1.5 / data.duration_s)
               and size < TRACE_SHARE * line.amplitude_px for line in lines):
            continue
        found = _climb(level[i], height, float(cycles[best[i]]))
        # bound of a tone's phase slope over the bands: noise power over signal power and squared lever
        sigma = np.sqrt(_WINDOW_SHARE * ground[i] / peak[i] / 2 / spread) / (2 * np.pi)
        lines.append(Line(axis, float(alias[i]), found, float(sigma), size, rate))
    return lines


def _ground(power: np.ndarray, best: np.ndarray, alias: np.ndarray, cycles: np.ndarray) -> np.ndarray:
    """Noise power beside each line: the mean of an exponential distribution from its median.

    Noise is the same for c and -c, a vibration is not: the noise of a line is read at the opposite cycles, near its
    alias. A line that hardly leans has no opposite; there it is read at the same cycles, over a wider range.
    """
    out = np.empty(len(alias))
    for i, j in enumerate(best):
        leaning = abs(cycles[j]) > _LEANING_CYCLES
        column = int(np.argmin(np.abs(cycles + cycles[j]))) if leaning else j
        beside = power[np.abs(alias - alias[i]) <= (_NEAR_HZ if leaning else _FAR_HZ), column]
        out[i] = np.median(beside) / np.log(2)
    return out


def _climb(level: np.ndarray, height: np.ndarray, cycles: float) -> float:
    """Top of the power between grid points: parabolas of shrinking step."""
    step = _CYCLES_STEP
    for _ in range(8):
        low, middle, high = (
            abs(level @ np.exp(-2j * np.pi * height * c)) ** 2 for c in (cycles - step, cycles, cycles + step)
        )
        curve = low - 2 * middle + high
        cycles += step * (
            float(np.clip(0.5 * (low - high) / curve, -1, 1)) if curve < 0 else float(np.sign(high - low))
        )
        step /= 2
    return cycles


def _is_trace(alias: float, strong: float, rate: float, width: float) -> bool:
    """True at the strong line's mirror image, or half a frame rate beside it (encoders alternate frames)."""
    half = rate / 2
    return abs(alias + strong - half) < width or abs(abs(alias - strong) - half) < width


def _bundles(lines: Sequence[Line]) -> list[list[Line]]:
    """Lines that belong to one vibration: each near another in alias and cycles, whatever the axis and stretch."""
    left, out = list(lines), []
    while left:
        bundle, queue = [], [left.pop(0)]
        while queue:
            line = queue.pop()
            bundle.append(line)
            near = [
                other
                for other in left
                if abs(other.alias_hz - line.alias_hz) <= _LINK_HZ
                and abs(other.cycles - line.cycles)
                <= _LINK_CYCLES + 2 * np.hypot(other.cycles_sigma, line.cycles_sigma)
            ]
            queue += near
            left = [other for other in left if other not in near]
        out.append(bundle)
    return out


def weigh_readouts(lines: Sequence[Line], interval_s: float) -> list[Rival]:
    """Readouts the tones allow, most probable first; 0 stands for a global shutter.

    Parameters
    ----------
    lines : sequence of Line
        Of one mode; several clips may be put together.
    interval_s : float
        Frame interval.

    Returns
    -------
    list of Rival
        Those that hold more than `RIVAL` of the posterior.
    """
    low, high = (np.log(share * interval_s) for share in READOUT_SHARES)
    grid = np.exp(np.arange(low, high + _STEP, _STEP))
    logs = np.zeros(len(grid))
    still = 0.0
    stray = np.log(STRAY_SHARE / _STRAY_CYCLES)
    lines = sorted(lines, key=lambda one: -one.amplitude_px)[:MOST_WEIGHED]
    for bundle in _bundles(lines):
        rate = bundle[0].frame_rate_hz
        orders = np.arange(-np.floor(HIGHEST_HZ / rate), np.floor(HIGHEST_HZ / rate) + 1)
        together = np.zeros((len(grid), len(orders)))
        for line in bundle:
            sigma = np.sqrt(line.cycles_sigma ** 2 + _LEAST_SIGMA ** 2 + (_SHARE_SIGMA * line.cycles) ** 2)
            scale = np.log1p(-STRAY_SHARE) - np.log(sigma * np.sqrt(2 * np.pi))
            expected = grid[:, None] * (line.alias_hz + orders * rate)
            together += np.logaddexp(scale - 0.5 * ((line.cycles - expected) / sigma) ** 2, stray)
            still += float(np.logaddexp(scale - 0.5 * (line.cycles / sigma) ** 2, stray))
        # One prior for the whole bundle. Frequencies are spread evenly over octaves: if evenly over hertz, a low
        # readout would be favoured for nothing but the narrow span of cycles it makes of them.
        frequency = np.abs(bundle[0].alias_hz + orders * rate)
        prior = -np.log(np.maximum(frequency, LOWEST_ALIAS_HZ))
        logs += logsumexp(together + prior - logsumexp(prior), axis=1)
    prior = np.log((1 - _GLOBAL_PRIOR) / len(grid))
    total = logsumexp(np.append(logs + prior, still + np.log(_GLOBAL_PRIOR)))
    mass = np.exp(logs + prior - total)
    rivals = [r for r in _peaks(grid, mass) if r.share > RIVAL]
    global_share = float(np.exp(still + np.log(_GLOBAL_PRIOR) - total))
    if global_share > RIVAL and lines:
        floor = [np.hypot(p.cycles_sigma, _LEAST_SIGMA) / max(p.alias_hz, 1e-3) for p in lines]
        rivals.append(Rival(0.0, float(1 / np.sqrt(np.sum(1 / np.square(floor)))), global_share))
    return sorted(rivals, key=lambda r: -r.share)


def _peaks(grid: np.ndarray, mass: np.ndarray) -> list[Rival]:
    """Islands of posterior mass, parted where it falls below a thousandth of the highest."""
    inside = mass > 1e-3 * mass.max()
    edges = np.flatnonzero(np.diff(np.concatenate([[False], inside, [False]]).astype(int)))
    out = []
    for first, last in zip(edges[::2], edges[1::2]):
        m, r = mass[first:last], grid[first:last]
        mean = float((m * r).sum() / m.sum())
        out.append(
            Rival(
                mean, float(np.sqrt((m * (r - mean) ** 2).sum() / m.sum() + (_STEP * mean) ** 2 / 12)), float(m.sum())
            )
        )
    return out


def _cycles_fault(lines: Sequence[Line], readout_s: float) -> float:
    """What a systematic fault of all cycles alike makes of the readout, seconds: much for lines that hardly lean."""
    if readout_s == 0:
        return SYSTEMATIC_CYCLES / max(line.alias_hz for line in lines)
    return SYSTEMATIC_CYCLES / float(np.sqrt(np.mean([line.cycles ** 2 for line in lines]))) * readout_s


def measure_vibration(lines: Sequence[Line], interval_s: float) -> Readout:
    """Readout time from the tones of one or several clips of a mode.

    Parameters
    ----------
    lines : sequence of Line
    interval_s : float
        Frame interval.

    Returns
    -------
    Readout

    Raises
    ------
    CannotTell
        When there are too few tones, or rivals remain; the sentence names them.
    """
    if len(lines) < 2:
        raise CannotTell("hardly any vibration tone stands out, so nothing tells the readout time", _INSTEAD)
    rivals = weigh_readouts(lines, interval_s)
    if not rivals or sum(r.share for r in rivals) < 0.5 or len(rivals) > 30:
        raise CannotTell("its vibration tones fit no readout time better than others", _INSTEAD)
    best = rivals[0]
    if best.share < CERTAIN:
        named = sorted(r.readout_s for r in rivals[:MOST_NAMED])
        shown = ", ".join("0 (global shutter)" if r == 0 else f"{r * 1e3:.2f}" for r in named) + " ms"
        more = f" and {len(rivals) - MOST_NAMED} more" if len(rivals) > MOST_NAMED else ""
        raise CannotTell(f"its vibration tones fit several readout times: {shown}{more}", _INSTEAD)
    ci = float(np.sqrt((NORMAL_95 * best.sigma_s) ** 2 + (SYSTEMATIC_SHARE * best.readout_s) ** 2
                       + (SYSTEMATIC_FRAME * interval_s) ** 2 + _cycles_fault(lines, best.readout_s) ** 2))
    if ci > max(WIDEST_SHARE * best.readout_s, WIDEST_FRAME * interval_s):
        raise CannotTell(f"its vibration tones are too weak or too slow (the estimate is good to {ci * 1e3:.2g} ms only)",
                         _INSTEAD)
    if best.readout_s:
        frequencies = sorted({round(abs(p.cycles) / best.readout_s) for p in lines})
        basis = f"{len(lines)} lines from {frequencies[0]} to {frequencies[-1]} Hz"
    else:
        basis = f"{len(lines)} lines in step over the whole height"
    return Readout(best.readout_s, ci, "vibration", interval_s, basis)
