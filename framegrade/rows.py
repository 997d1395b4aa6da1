"""Cells -> per-band signals (yaw, pitch, roll) on the exposure clock.

A rolling shutter exposes each band of rows at its own moment, so a band is a sample of the camera's rotation. Each
band's cells are fitted with the picture motion of a small rotation; what the scene's depth adds changes slowly and is
taken off every cell over time first, never across the rows of one frame.

Sources
-------
Longuet-Higgins, Prazdny (1980), "The interpretation of a moving retinal image", Proc. R. Soc. Lond. B 208: the picture
motion of a rotating pinhole camera.
Cleveland, Devlin (1988), "Locally weighted regression": the local polynomial that follows the slow part.
Beaton, Tukey (1974), "The fitting of power series": the biweight that sets moving objects aside.
"""

from __future__ import annotations

from collections.abc import Iterable
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import convolve1d

from framegrade.motion import Grid, PairMotion

#: Half-width of the local polynomial, seconds: passes what is slower than about 2 Hz, so removing it leaves 3 Hz and up.
SLOW_HALF_WIDTH_S = 0.4
#: The same for what is slower than about 0.4 Hz: the scene's own steady flow, set apart before sway is fitted.
DRIFT_HALF_WIDTH_S = 2.2
#: Field of view assumed for the *shape* of the rotation field when none is given (a common wide lens).
ASSUMED_HFOV_DEG = 70.0
BIWEIGHT_LIMIT = 4.685  # 95 % efficiency under normal errors (Huber, Ronchetti, Robust Statistics)
#: Pairs per block: long enough for the temporal filter, short enough that memory does not grow with the clip.
BLOCK_PAIRS = 480
MIN_CELLS_PER_BAND = 4
LEAST_LASTING_CELLS = 24
#: A band known no better than this (standard deviation, native pixels) counts as not measured.
WORST_BAND_PX = 0.5


def focal_length_px(width_px: int, hfov_deg: float) -> float:
    """Focal length in pixels, `(W / 2) / tan(HFOV / 2)`."""
    return width_px / 2 / np.tan(np.radians(hfov_deg) / 2)


@dataclass(frozen=True)
class RowSignals:
    """Band signals of a clip: what each pair of frames says about the camera's rotation, band by band.

    Attributes
    ----------
    time_s, next_time_s : ndarray, shape (pairs,)
        Presentation times of both frames of each pair.
    height : ndarray, shape (bands,)
        Band centres as a share of the picture height.
    band_share : float
        Height of one band over the picture height.
    rise : ndarray, shape (pairs, bands)
        How far the content of a band moved down to the next frame, as a share of the picture height.
    fast_px : ndarray, shape (pairs, bands, 3)
        Yaw, pitch, roll from frame to frame with everything slower than about 2 Hz removed; native pixels at the
        picture centre (roll: at the middle of the left and right edge). NaN where a band was not measured.
    variance_px2 : ndarray, shape (pairs, bands, 3)
        Variance of `fast_px` from the fit; inf where not measured.
    whole_px : ndarray, shape (pairs, 3)
        Whole-picture motion from frame to frame, slow part included, same units.
    whole_variance_px2 : ndarray, shape (pairs, 3)
    measured : ndarray, shape (pairs,)
        Share of the picture's cells that took part, 0 to 1.
    frozen : ndarray, shape (pairs,)
        Share of cells that did not change although the picture moved, 0 to 1.
    change_level, sharpness : ndarray, shape (pairs,)
        See `PairMotion`.
    """

    time_s: np.ndarray
    next_time_s: np.ndarray
    height: np.ndarray
    band_share: float
    rise: np.ndarray
    fast_px: np.ndarray
    variance_px2: np.ndarray
    whole_px: np.ndarray
    whole_variance_px2: np.ndarray
    measured: np.ndarray
    frozen: np.ndarray
    change_level: np.ndarray
    sharpness: np.ndarray

    @property
    def pairs(self) -> int:
        return len(self.time_s)


def band_mean(values: np.ndarray) -> np.ndarray:
    """Mean over the bands (axis 1) of what is not NaN; NaN where a pair has no band at all."""
    have = np.isfinite(values)
    count = have.sum(1)
    return np.where(count > 0, np.where(have, values, 0).sum(1) / np.maximum(count, 1), np.nan)


def slow_half_width(interval_s: float, half_width_s: float = SLOW_HALF_WIDTH_S) -> int:
    """Half-width of a slow filter in frames, at least two."""
    return max(2, round(half_width_s / interval_s))


def remove_slow(values: np.ndarray, valid: np.ndarray | None, half_width: int) -> np.ndarray:
    """Take `slow_part` off a series: a high-pass that copes with gaps and ends. Meaningless where `valid` is false."""
    return values - slow_part(values, valid, half_width)


def slow_part(values: np.ndarray, valid: np.ndarray | None, half_width: int) -> np.ndarray:
    """Local quadratic in time of a series: a low-pass that copes with gaps and ends.

    Parameters
    ----------
    values : ndarray, shape (N, ...)
        Series along the first axis; real or complex.
    valid : ndarray of bool, same shape or broadcastable, or None
        Samples that exist. None: all.
    half_width : int
        Half-width of the Hann-weighted window, samples.

    Returns
    -------
    ndarray
        The local quadratic, bridging gaps shorter than the window.
    """
    taps = np.arange(-half_width, half_width + 1)
    window = np.cos(np.pi * taps / (2 * (half_width + 1))) ** 2
    u = taps / half_width
    ones = np.ones((len(values),) + (1,) * (values.ndim - 1)) if valid is None else valid.astype(float)

    def local_sum(series: np.ndarray, power: int) -> np.ndarray:
        # convolve1d flips its weights; what is beyond the ends counts as missing
        weights = (window * u ** power)[::-1]
        if np.iscomplexobj(series):
            return local_sum(series.real, power) + 1j * local_sum(series.imag, power)
        return convolve1d(series, weights, axis=0, mode="constant", cval=0.0)

    s0, s1, s2, s3, s4 = (local_sum(ones, p) for p in range(5))
    filled = values if valid is None else np.where(valid, values, 0)
    t0, t1, t2 = (local_sum(filled, p) for p in range(3))
    # value at u = 0 of the weighted least-squares quadratic (Cramer's rule on the 3 x 3 normal equations)
    det = s0 * (s2 * s4 - s3 * s3) - s1 * (s1 * s4 - s2 * s3) + s2 * (s1 * s3 - s2 * s2)
    top = t0 * (s2 * s4 - s3 * s3) - s1 * (t1 * s4 - t2 * s3) + s2 * (t1 * s3 - t2 * s2)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(det > 1e-9 * np.maximum(s0, 1e-12) ** 3, top / det, t0 / np.maximum(s0, 1e-12))


def rotation_basis(grid: Grid, focal_px: float) -> np.ndarray:
    """Picture motion of each cell for one pixel of yaw, pitch and roll.

    Returns
    -------
    ndarray, shape (bands, columns, 2, 3)
        Right and down displacement per pixel of yaw (at the centre), pitch (at the centre) and roll (at mid-edge).

    Notes
    -----
    Longuet-Higgins and Prazdny 1980, rotational terms: a yaw that moves the centre by 1 moves x by 1 + (x/F)^2 and y by
    x y / F^2; pitch likewise with x and y exchanged; roll turns the picture about its centre.
    """
    x, y = np.meshgrid(grid.x_px, grid.y_px)
    fx, fy, edge = x / focal_px, y / focal_px, grid.width_px / 2
    basis = np.empty(x.shape + (2, 3))
    basis[..., 0, 0], basis[..., 1, 0] = 1 + fx ** 2, fx * fy
    basis[..., 0, 1], basis[..., 1, 1] = fx * fy, 1 + fy ** 2
    basis[..., 0, 2], basis[..., 1, 2] = -y / edge, x / edge
    return basis


def _weighted_fit(values: np.ndarray, information: np.ndarray, weight: np.ndarray, basis: np.ndarray, over: str):
    """Least squares for (yaw, pitch, roll) with 2 x 2 information a cell; `over` is 'c' (a band) or 'bc' (a frame)."""
    full = np.empty(information.shape[:-1] + (2, 2), information.dtype)
    full[..., 0, 0], full[..., 1, 1] = information[..., 0], information[..., 2]
    full[..., 0, 1] = full[..., 1, 0] = information[..., 1]
    full *= weight[..., None, None]
    out = "nb" if over == "c" else "n"
    load = np.einsum("nbcij,bcjk->nbcik", full, basis)
    normal = np.einsum(f"nbcik,bcil->{out}kl", load, basis, optimize=True)
    right = np.einsum(f"nbcik,nbci->{out}k", load, values, optimize=True)
    return normal.astype(float), right.astype(float)


def _solve(normal: np.ndarray, right: np.ndarray, ridge: float = 1e-9):
    scale = np.trace(normal, axis1=-2, axis2=-1)[..., None, None]
    safe = normal + np.eye(3) * (ridge * scale + 1e-12)
    inverse = np.linalg.inv(safe)
    return np.einsum("...kl,...l->...k", inverse, right), np.einsum("...kk->...k", inverse)


def _biweight(distance: np.ndarray) -> np.ndarray:
    return np.clip(1 - (distance / BIWEIGHT_LIMIT) ** 2, 0, None) ** 2


def _distance(residual: np.ndarray, information: np.ndarray) -> np.ndarray:
    """Mahalanobis length of each cell's residual, per degree of freedom."""
    rx, ry = residual[..., 0], residual[..., 1]
    squared = information[..., 0] * rx * rx + 2 * information[..., 1] * rx * ry + information[..., 2] * ry * ry
    return np.sqrt(np.maximum(squared, 0) / 2)


def _robust_bands(values: np.ndarray, information: np.ndarray, basis: np.ndarray, over: str):
    """Biweight fit of the rotation to each band (or frame); returns fit, variance and cell weights."""
    used = information[..., 0] > 0
    weight = used.astype(np.float32)
    spread = "nbk,bcik->nbci" if over == "c" else "nk,bcik->nbci"
    scale = np.ones(len(values))
    for turn in range(5):
        normal, right = _weighted_fit(values, information, weight, basis, over)
        fit, inverse = _solve(normal, right)
        distance = _distance(values - np.einsum(spread, fit, basis), information)
        if not used.any() or turn == 4:
            break
        # one scale a pair, floored: the cells' own error estimate is relative, moving objects are local
        masked = np.where(used, distance, np.nan).reshape(len(values), -1)
        masked[~used.any(axis=(1, 2))] = 1.0
        scale = np.maximum(np.nanmedian(masked, axis=1) / 0.8326, 1e-3)  # median of a 2-d.o.f. Rayleigh, over sqrt 2
        relative = distance / scale[:, None, None]
        # two turns of least absolute values first: plain least squares is drawn to objects at the picture's edge
        trial = 1 / np.maximum(relative, 0.3) if turn < 2 else _biweight(relative / (1.5 if turn == 2 else 1.0))
        weight = np.where(used, trial, 0).astype(np.float32)
    return fit, inverse * (scale ** 2).reshape((-1,) + (1,) * (inverse.ndim - 1)), weight


#: Information (xx, xy, yy) of cells that all count the same.
_ALIKE = np.array([1, 0, 1], np.float32)


def fit_block(pairs: list[PairMotion], grid: Grid, focal_px: float) -> RowSignals:
    """Band signals of a run of pairs.

    Parameters
    ----------
    pairs : list of PairMotion
        Neighbouring pairs, in order.
    grid : Grid
    focal_px : float
        Focal length for the shape of the rotation field, native pixels.
    """
    time = np.array([p.time_s for p in pairs])
    later = np.array([p.next_time_s for p in pairs])
    flow = np.stack([p.flow_px for p in pairs]).astype(np.float32)
    information = np.stack([p.information for p in pairs]).astype(np.float32)
    frozen = np.stack([p.frozen for p in pairs])
    information[frozen] = 0
    basis = rotation_basis(grid, focal_px).astype(np.float32)

    interval = float(np.median(later - time))
    valid = np.broadcast_to((information[..., 0] > 0)[..., None], flow.shape)
    # near and far ground flow at their own steady speeds: taken off cell by cell, they cannot pull the fit of the sway
    steady = slow_part(flow, valid, slow_half_width(interval, DRIFT_HALF_WIDTH_S)).astype(np.float32)
    # every cell counts alike here (scenery at other distances, not measuring noise, is what parts them), and a cell
    # counts always or never: one that drops out whenever the picture swings would tie its steady flow to the swing
    lasting = (information[..., :1] > 0).mean(0) > 0.5
    if lasting.sum() >= LEAST_LASTING_CELLS:
        lasting = np.broadcast_to(lasting, information[..., :1].shape)
    else:  # hardly a cell lasts (cuts, blur): better all that there are
        lasting = information[..., :1] > 0
    drift, _, _ = _robust_bands(steady, lasting * _ALIKE, basis, "bc")
    sway, whole_variance, _ = _robust_bands(flow - steady, (information[..., :1] > 0) * _ALIKE, basis, "bc")
    whole = drift + sway
    fast = remove_slow(flow, valid, slow_half_width(interval)).astype(np.float32)
    signal, variance, weight = _robust_bands(fast, information, basis, "c")

    enough = ((weight > 0.1).sum(-1) >= MIN_CELLS_PER_BAND) & (variance > 0).all(-1)
    known = enough[..., None] & (variance < WORST_BAND_PX ** 2)
    signal, variance = np.where(known, signal, np.nan), np.where(known, variance, np.inf)
    part = (weight > 0.1) & known.any(-1)[..., None]
    rise = np.einsum("nk,bck->nb", whole, basis[:, :, 1, :]) / grid.columns / grid.height_px
    return RowSignals(
        time, later, grid.height, grid.band_share, rise, signal, variance, whole, whole_variance, part.mean((1, 2)),
        frozen.mean((1, 2)), np.array([p.change_level for p in pairs]), np.array([p.sharpness for p in pairs]),
    )


_SERIES = ("time_s", "next_time_s", "rise", "fast_px", "variance_px2", "whole_px", "whole_variance_px2", "measured",
           "frozen", "change_level", "sharpness")


def cut(signals: RowSignals, start: int, stop: int) -> RowSignals:
    """Pairs `start` to `stop` of the signals."""
    return replace(signals, **{name: getattr(signals, name)[start:stop] for name in _SERIES})


def join(parts: list[RowSignals]) -> RowSignals:
    """Put consecutive parts end to end."""
    return replace(parts[0], **{name: np.concatenate([getattr(p, name) for p in parts]) for name in _SERIES})


def band_signals(pairs: Iterable[PairMotion], grid: Grid, focal_px: float, block: int = BLOCK_PAIRS) -> RowSignals:
    """Band signals of a whole clip, block by block so that memory stays small.

    Blocks overlap by the reach of the slow filter, so that their seams do not show.

    Parameters
    ----------
    pairs : iterable of PairMotion
    grid : Grid
    focal_px : float
        Focal length for the shape of the rotation field, native pixels.
    block : int
        Pairs per block.

    Raises
    ------
    ValueError
        If there is no pair.
    """
    parts: list[tuple[Future, int, int]] = []
    held: list[PairMotion] = []
    lead = 0  # pairs at the front of `held` that an earlier block has delivered already
    reach = 0
    # a block is fitted in the background while the next one's frames are being read
    with ThreadPoolExecutor(1) as fitter:
        for pair in pairs:
            held.append(pair)
            if not reach:
                reach = slow_half_width(max(pair.next_time_s - pair.time_s, 1e-4), DRIFT_HALF_WIDTH_S)
            if len(held) >= block + 2 * reach:
                parts.append((fitter.submit(fit_block, held, grid, focal_px), lead, len(held) - reach))
                held = held[len(held) - 2 * reach:]
                lead = reach
        if len(held) > lead:
            parts.append((fitter.submit(fit_block, held, grid, focal_px), lead, len(held)))
        if not parts:
            raise ValueError("no pair of frames to measure")
        return join([cut(done.result(), start, stop) for done, start, stop in parts])
