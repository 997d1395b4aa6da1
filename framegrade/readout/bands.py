"""Frame pairs -> the camera's rotation as each band of rows shows it, nothing filtered out.

The grading line takes everything slow off before it fits a band (`framegrade.rows`). A swing is slow, so here the whole
rotation is kept.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from scipy.optimize import minimize_scalar

from framegrade.motion import Grid, PairMotion
from framegrade.rows import BIWEIGHT_LIMIT, MIN_CELLS_PER_BAND

#: Pairs fitted at a time, so that memory does not grow with the clip.
_BLOCK = 120
_ROBUST_TURNS = 4
#: Pairs, those that move most, from which the shape of the rotation field is found, and the fields of view tried.
_SHAPE_PAIRS = 60
_HFOV_RANGE_DEG = (10.0, 140.0)
_RAYLEIGH_MEDIAN = 1.1774  # median length of a pair of unit normal errors, sqrt(2 ln 2)


@dataclass(frozen=True)
class BandMotion:
    """Rotation from frame to frame, band by band, slow part included.

    Attributes
    ----------
    time_s, next_time_s : ndarray, shape (pairs,)
        Presentation times of both frames of each pair.
    height : ndarray, shape (bands,)
        Band centres as a share of the picture height, 0 at the top edge, 1 at the bottom edge.
    rise : ndarray, shape (pairs, bands)
        How far the content of a band moved down to the next frame, as a share of the picture height.
    motion_px : ndarray, shape (pairs, bands, 3)
        Yaw, pitch, roll; native pixels at the picture centre (roll: at the middle of the left and right edge).
    known : ndarray, shape (pairs, bands), bool
        The band was measured.
    height_px : int
        Rows of the picture.
    """

    time_s: np.ndarray
    next_time_s: np.ndarray
    height: np.ndarray
    rise: np.ndarray
    motion_px: np.ndarray
    known: np.ndarray
    height_px: int

    @property
    def pairs(self) -> int:
        return len(self.time_s)

    @property
    def interval_s(self) -> float:
        """Typical time from frame to frame."""
        return float(np.median(self.next_time_s - self.time_s))


def rotation_field(x_px: np.ndarray, y_px: np.ndarray, focal_px: float, width_px: int) -> np.ndarray:
    """Picture motion of points for one pixel of yaw, pitch and roll.

    The field of `framegrade.rows.rotation_basis`, at any points.

    Parameters
    ----------
    x_px, y_px : ndarray, any common shape
        Points from the picture centre, native pixels.
    focal_px : float
    width_px : int

    Returns
    -------
    ndarray, shape (..., 2, 3)

    Notes
    -----
    Longuet-Higgins, Prazdny (1980), rotational terms.
    """
    fx, fy, edge = x_px / focal_px, y_px / focal_px, width_px / 2
    field = np.empty(np.shape(x_px) + (2, 3))
    field[..., 0, 0], field[..., 1, 0] = 1 + fx ** 2, fx * fy
    field[..., 0, 1], field[..., 1, 1] = fx * fy, 1 + fy ** 2
    field[..., 0, 2], field[..., 1, 2] = -y_px / edge, x_px / edge
    return field


def band_motion(pairs: Iterable[PairMotion], grid: Grid, focal_px: float) -> BandMotion:
    """Fit the camera's rotation to every band of every pair.

    Parameters
    ----------
    pairs : iterable of PairMotion
    grid : Grid
    focal_px : float
        Focal length for the shape of the rotation field, native pixels.

    Returns
    -------
    BandMotion

    Raises
    ------
    ValueError
        If there is no pair.
    """
    pairs = list(pairs)
    if not pairs:
        raise ValueError("no pair of frames to measure")
    parts = [_fit_block(pairs[i:i + _BLOCK], grid, focal_px)[:3] for i in range(0, len(pairs), _BLOCK)]
    motion, known, rise = (np.concatenate(part) for part in zip(*parts))
    return BandMotion(
        np.array([p.time_s for p in pairs]), np.array([p.next_time_s for p in pairs]), grid.height, rise, motion, known,
        grid.height_px,
    )


def rotation_shape_px(pairs: Iterable[PairMotion], grid: Grid) -> float:
    """Focal length at which the picture motion looks most like a rotation.

    Only the *shape* of the field counts (how much more the sides move than the centre); a lens that distorts gives the
    focal length that imitates it best. With hardly any motion the result says nothing, and does no harm.

    Parameters
    ----------
    pairs : iterable of PairMotion
    grid : Grid

    Returns
    -------
    float
        Native pixels.
    """
    pairs = list(pairs)
    moved = [np.median(np.hypot(*p.flow_px[p.information[..., 0] > 0].T)) if (p.information[..., 0] > 0).any() else 0.0
             for p in pairs]
    fastest = [pairs[i] for i in np.sort(np.argsort(moved)[-_SHAPE_PAIRS:])]

    def misfit(half_tangent: float) -> float:
        *_, rest, used = _fit_block(fastest, grid, grid.width_px / 2 / half_tangent)
        length = np.hypot(rest[..., 0], rest[..., 1])[used]
        return float(np.log(np.median(length) + 1e-9)) if length.size else 0.0

    low, high = (np.tan(np.radians(h) / 2) for h in _HFOV_RANGE_DEG)
    found = minimize_scalar(misfit, bounds=(low, high), method="bounded", options={"xatol": 2e-3})
    return float(grid.width_px / 2 / found.x)


def _fit_block(pairs: list[PairMotion], grid: Grid, focal_px: float):
    """Rotation, whether it is known, and rise of each band; residual flow and use of each cell."""
    flow = np.stack([p.flow_px for p in pairs]).astype(float)
    information = np.stack([p.information for p in pairs]).astype(float)
    information[np.stack([p.frozen for p in pairs])] = 0
    used = information[..., 0] > 0
    full = np.stack([information[..., 0], information[..., 1], information[..., 1], information[..., 2]], -1)
    full = full.reshape(flow.shape[:-1] + (2, 2))
    x, y = np.meshgrid(grid.x_px, grid.y_px)
    # At the middle of a point's way the first-order field is right to second order: swings move it by many pixels.
    half = np.where(used[..., None], flow / 2, 0)
    field = rotation_field(x + half[..., 0], y + half[..., 1], focal_px, grid.width_px)
    weight = used.astype(float)
    for _ in range(_ROBUST_TURNS):
        load = np.einsum("nbcij,nbcjk->nbcik", full * weight[..., None, None], field)
        normal = np.einsum("nbcik,nbcil->nbkl", load, field, optimize=True)
        right = np.einsum("nbcik,nbci->nbk", load, flow, optimize=True)
        ridge = 1e-9 * np.trace(normal, axis1=-2, axis2=-1) + 1e-12
        fit = np.linalg.solve(normal + ridge[..., None, None] * np.eye(3), right[..., None])[..., 0]
        rest = flow - np.einsum("nbk,nbcik->nbci", fit, field)
        distance = np.sqrt(np.maximum(np.einsum("nbci,nbcij,nbcj->nbc", rest, full, rest), 0))
        # one scale a pair: the cells' own error estimate is relative, moving objects are local
        scale = np.array([np.median(d[u]) if u.any() else 1.0 for d, u in zip(distance, used)]) / _RAYLEIGH_MEDIAN
        ratio = distance / np.maximum(scale, 1e-3)[:, None, None] / BIWEIGHT_LIMIT
        weight = np.where(used, np.clip(1 - ratio ** 2, 0, None) ** 2, 0)
    known = (weight > 0.1).sum(-1) >= MIN_CELLS_PER_BAND
    rise = np.einsum("nbk,bk->nb", fit, rotation_field(0 * grid.y_px, grid.y_px, focal_px, grid.width_px)[:, 1])
    return (
        np.where(known[..., None], fit, 0.0),
        known,
        np.where(known, rise / grid.height_px, 0.0),
        rest,
        used & known[..., None],
    )
