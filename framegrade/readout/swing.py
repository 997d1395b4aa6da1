"""Readout time from a clip in which the camera is swung by hand before a still scene.

One camera path serves all rows, each at its own moment: band v of frame n sees the path at `t = pts_n + (v - 1/2) R`.
Only the true R makes one smooth path fit all bands. What a frame shows is taken as its level, lean and curvature over
the height (Legendre terms 0, 1, 2): motion slower than about 15 Hz has no more. The path is a cubic spline whose bend
is penalised; how much, and how large the errors of the three terms are, the clip tells itself (restricted maximum
likelihood). Errors belong to frames, so those of neighbouring differences are opposed.

Sources
-------
Baker, Bennett, Kang, Szeliski (2010), "Removing rolling shutter wobble", CVPR: one path for all rows, and the readout
time found from the motion itself.
Eilers, Marx (1996), "Flexible smoothing with B-splines and penalties", Statistical Science 11(2).
Patterson, Thompson (1971), "Recovery of inter-block information when block sizes are unequal", Biometrika 58(3): REML.
Dempster, Laird, Rubin (1977), "Maximum likelihood from incomplete data via the EM algorithm": the errors' covariance.
Newey, West (1987), Econometrica 55(3): standard errors that hold for errors correlated over time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_factor, cho_solve, solve_triangular

from framegrade.readout.bands import BandMotion
from framegrade.readout.estimate import NORMAL_95, CannotTell, Readout

TERMS = 3
SHORTEST_S = 1.5
#: Longer clips are fitted in stretches of at most so many pairs and seconds, with one readout for all.
STRETCH_S, STRETCH_PAIRS = 5.0, 320
#: A band counts when it was measured in this share of the pairs, a pair when it has this share of those bands.
LASTING_SHARE, LEAST_BANDS = 0.6, 0.6
#: Bands must reach over this much of the picture's height, or there is no lever.
LEAST_HEIGHT = 0.5
#: Correlation of the errors of neighbouring differences: they share a frame, with opposite signs (-0.5 if all of a
#: difference's error were its frames' own; rendered clips show -0.35 to -0.5).
SHARED_FRAME = 0.45
#: The path is a sum of sinusoids of a period this much longer than the stretch, so that it need not end as it began,
#: up to a frequency in hertz and a share of the frame rate.
_PERIOD, HIGHEST_HZ, _HIGHEST_SHARE = 1.3, 16.0, 0.45
#: Edges, in hertz, of the bands in which the path's power is taken as even.
_POWER_EDGES_HZ = np.array([0.0, 0.4, 0.8, 1.3, 1.8, 2.4, 3.2, 4.2, 5.6, 7.5, 10.0, 13.0, np.inf])
#: A band this many robust standard deviations off a polynomial of this degree over the height is a mismatch.
STRAY_LIMIT, _COURSE_DEGREE = 6.0, 4
_SERIES_TERMS = 4  # of a phase that is at most about a tenth
_TURNS, _SETTLED = 25, 8
#: Errors (px) and squared path coefficients (px^2) that the search begins with.
_FIRST_ERROR_PX, _FIRST_POWER_PX2 = 0.1, 10.0
#: Path coefficients are never held smaller than this (px^2): far below what can be measured.
LEAST_POWER_PX2 = 1e-8
#: Readouts the search begins with, in frame intervals: beyond 1 none can be, below 0 rows would run backwards.
_SEARCH = np.linspace(-1.05, 1.05, 22)
#: Frames over which the score's correlation is summed (Newey, West).
_LAG_S = 0.15
#: What coding makes the picture lag, at one edge of it against the middle (standard deviation): this share of the
#: errors that the lean shows on the axis that moves most, and this much at least, native pixels. From rendered clips
#: of 0.06 to 0.3 bits per pixel, against the same clips before coding.
LAG_SHARE, LEAST_LAG_PX = 0.5, 0.012
#: Systematic part of the interval (95 %): of the readout, and of the frame interval; from tests/bench/readout.
SYSTEMATIC_SHARE, SYSTEMATIC_FRAME = 0.003, 0.001
#: An interval wider than this share of the readout and than this share of the frame interval says too little.
WIDEST_SHARE, WIDEST_FRAME = 0.05, 0.03
#: Less motion than this from frame to frame (rms, native pixels) is no swing.
LEAST_SWING_PX = 0.2
#: Steady flow that differs over the height by more than this share of the swing is scenery passing by.
PASSING_SHARE = 0.2
#: Parts of a clip contradict each other when they differ by this many standard deviations of their difference.
_CONTRADICTION = 4.5

_INSTEAD = ("swing the camera left and right by hand, 3 to 5 degrees, about twice a second, for 5 s, "
            "before a still, richly textured scene 10 m away or more")


@dataclass(frozen=True)
class _Stretch:
    """Some consecutive pairs, reduced to what the fit needs.

    `observed` (pairs, terms, axes) are the Legendre terms; `projection` (pairs, terms, bands) makes them of the
    bands; `nuisance` (pairs, terms, columns) per axis holds what is allowed for besides the path.
    """

    start_s: np.ndarray
    end_s: np.ndarray
    height: np.ndarray
    rise: np.ndarray
    projection: np.ndarray
    observed: np.ndarray
    nuisance: tuple[np.ndarray, ...]
    frequency_hz: np.ndarray  # of the path's sinusoids
    power_band: np.ndarray    # index of the power band of each path coefficient
    chol: np.ndarray   # (pairs, pairs): Cholesky factor of the errors' correlation over time

    @property
    def pairs(self) -> int:
        return len(self.start_s)


def measure_swing(motion: BandMotion) -> Readout:
    """Readout time of the mode a swing clip was shot in.

    Parameters
    ----------
    motion : BandMotion
        From `framegrade.readout.bands.band_motion`.

    Returns
    -------
    Readout

    Raises
    ------
    CannotTell
        When the clip is too short, shows too little texture or motion, or a scene that is not still.
    """
    stretches = _stretches(motion)
    interval = motion.interval_s
    _refuse_no_swing(stretches)
    fit = _fit(stretches, interval)
    readout, sigma = fit.readout_s, fit.sigma_s
    ci = float(
        np.sqrt((NORMAL_95 * sigma) ** 2 + (SYSTEMATIC_SHARE * readout) ** 2 + (SYSTEMATIC_FRAME * interval) ** 2)
    )
    swing = _swing_px(stretches)
    if ci > max(WIDEST_SHARE * abs(readout), WIDEST_FRAME * interval):
        raise CannotTell(
            f"the camera moves too little or too unlike a swing to show the readout time (the estimate is good "
            f"to {ci * 1e3:.2g} ms only)",
            _INSTEAD,
        )
    if fit.contradiction > _CONTRADICTION:
        raise CannotTell(
            f"parts of the clip contradict each other about the readout time "
            f"({fit.contradiction:.2g} standard deviations apart): something in the scene moves or is near",
            _INSTEAD,
        )
    if readout < -ci:
        raise CannotTell("the rows run from bottom to top: the camera writes its picture turned over, "
                         "which this measurement does not cover", "switch the camera's picture flip off")
    if readout > 1.01 * interval + ci:
        raise CannotTell(
            f"the readout time comes out longer than the {interval * 1e3:.3g} ms from frame to frame", _INSTEAD
        )
    return Readout(float(readout), ci, "swing", interval, f"{swing:.3g} px from frame to frame, rms")


# --- preparation -----------------------------------------------------------------------------------------------------


def _stretches(motion: BandMotion) -> list[_Stretch]:
    """Cut the clip into stretches and each frame pair into Legendre terms over the height.

    Raises
    ------
    CannotTell
        When too little of the clip, or of the picture, was measured.
    """
    lasting = motion.known.mean(0) > LASTING_SHARE
    reach = motion.height[lasting]
    spacing = float(np.diff(motion.height[:2])[0])
    if lasting.sum() < 2 * TERMS or np.ptp(reach) + spacing < LEAST_HEIGHT:
        raise CannotTell(
            f"only {100 * lasting.mean():.0f} % of the picture's height has texture that can be followed", _INSTEAD
        )
    use = motion.known[:, lasting].mean(1) >= LEAST_BANDS
    span = use.sum() * motion.interval_s
    if span < SHORTEST_S:
        raise CannotTell(f"only {span:.2g} s can be measured: at least {SHORTEST_S:g} s are needed", _INSTEAD)
    count = max(1, int(np.ceil(max(span / STRETCH_S, use.sum() / STRETCH_PAIRS))))
    parts = np.array_split(np.flatnonzero(use), count)
    return [_stretch(motion, part, np.flatnonzero(lasting)) for part in parts]


def _stray_bands(motion: BandMotion) -> np.ndarray:
    """Bands that stand off the smooth course over the height of their own pair: mismatches; shape (pairs, bands)."""
    scaled = 2 * motion.height - 1
    shape = np.polynomial.legendre.legvander(scaled, _COURSE_DEGREE)
    use = motion.known.copy()
    stray = np.zeros_like(use)
    for _ in range(3):
        normal = np.einsum("nb,bi,bj->nij", use.astype(float), shape, shape) + 1e-6 * np.eye(shape.shape[1])
        right = np.einsum("bi,nb,nbk->nik", shape, use.astype(float), motion.motion_px)
        rest = motion.motion_px - np.einsum("bi,nik->nbk", shape, np.linalg.solve(normal, right))
        scale = (
            np.array([np.median(np.abs(rest[use][:, axis])) for axis in range(3)]) / 0.6745 if use.any() else np.ones(3)
        )
        stray = (np.abs(rest) > STRAY_LIMIT * np.maximum(scale, 1e-3)).any(-1)
        use = motion.known & ~stray
    return stray


def _stretch(motion: BandMotion, index: np.ndarray, bands: np.ndarray) -> _Stretch:
    height = motion.height[bands]
    known = (motion.known & ~_stray_bands(motion))[np.ix_(index, bands)].astype(float)
    values, rise = motion.motion_px[np.ix_(index, bands)], motion.rise[np.ix_(index, bands)]
    pairs, interval = len(index), motion.interval_s
    scaled = 2 * (height - height.min()) / np.ptp(height) - 1
    shape = np.polynomial.legendre.legvander(scaled, TERMS - 1)
    normal = np.einsum("nb,bi,bj->nij", known, shape, shape) + 1e-9 * np.eye(TERMS)
    project = np.einsum("nij,bj,nb->nib", np.linalg.inv(normal), shape, known)
    observed = np.einsum("nib,nbk->nik", project, values)

    start, end = motion.time_s[index], motion.next_time_s[index]
    highest = min(HIGHEST_HZ, _HIGHEST_SHARE / interval)
    spacing = 1 / (_PERIOD * (end[-1] - start[0]))
    frequency = np.arange(spacing, highest, spacing)
    band = np.searchsorted(_POWER_EDGES_HZ, frequency, side="right") - 1
    correlation = np.eye(pairs) - SHARED_FRAME * (np.eye(pairs, k=1) + np.eye(pairs, k=-1))
    return _Stretch(start, end, height, rise, project, observed, _nuisance(observed), frequency,
                    np.concatenate([band, band]), np.linalg.cholesky(correlation))


def _nuisance(observed: np.ndarray) -> tuple[np.ndarray, ...]:
    """What else may be in the terms of each axis: a constant each, and a share of its own level in lean and curvature.

    The constants are steady flow. The shares are what a wrong field of view, lens distortion or near scenery make of
    the swing: they go with its speed, while the readout time goes with its acceleration.
    """
    pairs, axes = observed.shape[0], observed.shape[2]
    level = observed[:, 0] - observed[:, 0].mean(0)
    out = []
    for axis in range(axes):
        columns = np.zeros((pairs, TERMS, 2 * TERMS - 1))
        for term in range(TERMS):
            columns[:, term, term] = 1.0
            if term > 0:  # the share in the level is the path itself
                columns[:, term, TERMS - 1 + term] = level[:, axis]
        out.append(columns)
    return tuple(out)


def _swing_px(stretches: list[_Stretch]) -> float:
    level = np.concatenate([s.observed[:, 0, :2] for s in stretches])
    return float(np.sqrt(level.var(0).sum()))


def _refuse_no_swing(stretches: list[_Stretch]) -> None:
    steady = np.concatenate([s.observed for s in stretches]).mean(0)
    passing = float(np.sqrt((steady[1:, :2] ** 2).sum()))
    swing = _swing_px(stretches)
    if swing < LEAST_SWING_PX:
        raise CannotTell(f"the camera hardly moves ({swing:.2g} px from frame to frame)", _INSTEAD)
    if passing > PASSING_SHARE * swing:
        raise CannotTell(f"the scene flows past steadily ({passing:.2g} px a frame more at one height than at another, "
                         f"beside a swing of {swing:.2g} px): the camera travels", _INSTEAD)


# --- fit -------------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Fit:
    readout_s: float
    sigma_s: float
    contradiction: float


def _path_design(stretch: _Stretch, readout_s: float) -> np.ndarray:
    """Terms seen of each path coefficient (cosines, then sines) for a readout; shape (pairs, terms, coefficients)."""
    turn = 2j * np.pi * stretch.frequency_hz
    delay = np.exp(np.outer((stretch.height - 0.5) * readout_s, turn))
    # exp(turn x rise x readout) by its power series: the rise is the only part that does not factor into frame and band
    shape, parts = stretch.projection, []
    for order in range(_SERIES_TERMS):
        if order:
            shape = shape * (stretch.rise * readout_s / order)[:, None, :]
        part = (shape.reshape(-1, len(stretch.height)) @ delay).reshape(stretch.pairs, TERMS, -1)
        parts.append(part * turn ** order)
    first, last = (np.exp(np.outer(t - stretch.start_s[0], turn))[:, None, :] for t in (stretch.start_s, stretch.end_s))
    seen = last * sum(parts) - first * parts[0]
    return np.concatenate([seen.real, seen.imag], 2)


def _over_time(stretch: _Stretch, values: np.ndarray) -> np.ndarray:
    """Take the correlation of the errors over time off an array (pairs, ...)."""
    flat = solve_triangular(stretch.chol, values.reshape(stretch.pairs, -1), lower=True, check_finite=False)
    return flat.reshape(values.shape)


def _over_terms(values: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Take the covariance of the terms off an array (pairs, terms, columns); shape (pairs x terms, columns)."""
    root = np.linalg.inv(np.linalg.cholesky(covariance))
    return np.einsum("ij,njm->nim", root, values).reshape(-1, values.shape[2])


@dataclass(frozen=True)
class _Solved:
    criterion: float        # -2 log of the likelihood of the data, up to a constant
    solution: np.ndarray
    factor: tuple
    design: np.ndarray      # (pairs x terms, columns), whitened
    rest: np.ndarray        # (pairs x terms,), whitened residual
    penalty: np.ndarray     # (columns,)


class _Axis:
    """One axis of one stretch at one readout: design and data, freed of their correlation over time."""

    def __init__(self, stretch: _Stretch, axis: int, path: np.ndarray) -> None:
        self.stretch, self.paths = stretch, path.shape[2]
        self.design = np.concatenate([path, _over_time(stretch, stretch.nuisance[axis])], 2)
        self.data = _over_time(stretch, stretch.observed[:, :, axis:axis + 1])

    def solve(self, model: _Model) -> _Solved:
        """Least squares for path and nuisance, the path's power and the errors' covariance given."""
        design = _over_terms(self.design, model.errors)
        data = _over_terms(self.data, model.errors)[:, 0]
        penalty = np.zeros(design.shape[1])
        penalty[:self.paths] = 1 / model.power[self.stretch.power_band]
        gram = design.T @ design
        # the tiny ridge keeps nuisance columns that a motionless axis leaves empty from being singular
        factor = cho_factor(gram + np.diag(penalty + 1e-12 * np.trace(gram)), check_finite=False)
        solution = cho_solve(factor, design.T @ data, check_finite=False)
        rest = data - design @ solution
        objective = float(rest @ rest + solution @ (penalty * solution))
        return _Solved(objective + 2 * float(np.log(np.diag(factor[0])).sum()), solution, factor, design, rest, penalty)

    def moments(self, solved: _Solved) -> tuple[np.ndarray, np.ndarray]:
        """Expected sums of squares given the data (EM): of the terms' errors (terms, terms), of every coefficient."""
        rest = self.data[..., 0] - self.design @ solved.solution
        inverse = cho_solve(solved.factor, np.eye(len(solved.solution)), check_finite=False)
        spread = np.einsum("nim,njm->ij", self.design @ inverse, self.design, optimize=True)
        power = solved.solution[:self.paths] ** 2 + np.diag(inverse)[:self.paths]
        return rest.T @ rest + spread, power


@dataclass(frozen=True)
class _Model:
    """What one axis is made of: covariance of the terms' errors, mean square path coefficient of each band; px^2."""

    errors: np.ndarray
    power: np.ndarray


def _fit(stretches: list[_Stretch], interval_s: float) -> _Fit:
    axes = range(stretches[0].observed.shape[2])
    # The search begins with errors taken as small: with large ones a wrong readout would explain them, and stay.
    models = [
        _Model(_FIRST_ERROR_PX**2 * np.eye(TERMS), np.full(len(_POWER_EDGES_HZ) - 1, _FIRST_POWER_PX2)) for _ in axes
    ]

    def parts(readout: float) -> list[list[_Axis]]:
        paths = [_over_time(s, _path_design(s, readout)) for s in stretches]
        return [[_Axis(s, axis, path) for s, path in zip(stretches, paths)] for axis in axes]

    def criterion(readout: float) -> float:
        return sum(part.solve(models[axis]).criterion for axis, made in zip(axes, parts(readout)) for part in made)

    readout = float(min(_SEARCH * interval_s, key=criterion))
    for turn in range(_TURNS):
        move = _downhill(criterion, readout, (0.05 if turn < 2 else 0.01) * interval_s)
        readout = float(np.clip(readout + move, -1.1 * interval_s, 1.1 * interval_s))
        if turn > _SETTLED and abs(move) < 2e-4 * interval_s:
            break
        if turn > 0:
            models = [_learn(made, model) for made, model in zip(parts(readout), models)]
    return _spread(stretches, parts(readout), models, readout, interval_s)


def _downhill(criterion, readout: float, step: float) -> float:
    """Step to the vertex of the parabola through three points, no longer than twice their spacing."""
    low, middle, high = (criterion(readout + d) for d in (-step, 0.0, step))
    curve = low - 2 * middle + high
    if curve <= 0:
        return float(np.sign(low - high) * step)
    return float(np.clip(0.5 * (low - high) / curve, -2, 2) * step)


def _learn(made: list[_Axis], model: _Model) -> _Model:
    """One turn of expectation-maximisation for one axis."""
    errors, pairs = np.zeros((TERMS, TERMS)), 0
    bands = len(model.power)
    power, count = np.zeros(bands), np.zeros(bands)
    for part in made:
        moments, squares = part.moments(part.solve(model))
        errors, pairs = errors + moments, pairs + part.stretch.pairs
        power += np.bincount(part.stretch.power_band, squares, bands)
        count += np.bincount(part.stretch.power_band, minlength=bands)
    return _Model(errors / pairs, np.maximum(power / np.maximum(count, 1), LEAST_POWER_PX2))


def _spread(stretches, made, models, readout, interval_s) -> _Fit:
    """Readout and its standard deviation from what each axis says, and how far parts of the clip disagree.

    The linearised fit gives each axis' own readout. An axis carries, besides its statistical error, that of coding: the
    content of a picture sticks to where it was, by a part of a pixel, and more so where texture is faint. A lag that
    differs over the height looks like a readout time; fast motion outruns it.
    """
    step = 1e-3 * interval_s
    slopes = [
        (_over_time(s, _path_design(s, readout + step)) - _over_time(s, _path_design(s, readout - step))) / (2 * step)
        for s in stretches
    ]
    lag = max(2, round(_LAG_S / interval_s))
    speeds = np.sqrt(np.mean([s.observed[:, 0].var(0) for s in stretches], axis=0))
    lag_px = float(np.hypot(LAG_SHARE * np.sqrt(models[int(np.argmax(speeds))].errors[1, 1]), LEAST_LAG_PX))
    shifts, variances, parts = [], [], []
    for axis, axis_parts in enumerate(made):
        total, information, summed = 0.0, 0.0, 0.0
        for stretch, part, design_slope in zip(stretches, axis_parts, slopes):
            solved = part.solve(models[axis])
            slope = _over_terms((design_slope @ solved.solution[:part.paths])[:, :, None], models[axis].errors)[:, 0]
            share = cho_solve(solved.factor, solved.design.T @ slope, check_finite=False)
            own = slope - solved.design @ share  # what the path and the rest cannot imitate
            score = (own * solved.rest).reshape(-1, TERMS).sum(1)
            weight = (own ** 2).reshape(-1, TERMS).sum(1)
            total += float(score.sum())
            information += float(weight.sum())
            summed += _summed_variance(score, lag)
            for half in np.array_split(np.arange(stretch.pairs), 2):
                held = float(max(weight[half].sum(), 1e-30))
                parts.append((axis, float(score[half].sum()) / held,
                              max(1 / held, _summed_variance(score[half], lag) / held ** 2)))
        sticking = lag_px / max(speeds[axis], 1e-9) * interval_s
        shifts.append(total / max(information, 1e-30))
        variances.append(max(1 / max(information, 1e-30), summed / max(information, 1e-30) ** 2) + sticking ** 2)
    weights = 1 / np.array(variances)
    shift = float((weights * shifts).sum() / weights.sum())
    # a part is compared with the whole; it may err as its axis may, and by its own share of the noise
    apart = [abs(own - shift) / np.sqrt(variance + variances[axis] + (SYSTEMATIC_SHARE * readout) ** 2)
             for axis, own, variance in parts]
    return _Fit(readout + shift, float(1 / np.sqrt(weights.sum())), float(max(apart)))


def _summed_variance(score: np.ndarray, lag: int) -> float:
    """Variance of the sum of a correlated series (Newey, West)."""
    own = float(score @ score)
    return own + sum(2 * (1 - s / (lag + 1)) * float(score[s:] @ score[:-s]) for s in range(1, lag + 1))
