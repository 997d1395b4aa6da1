"""Frame pairs -> displacement per cell, with the information each cell carries.

The picture is divided into horizontal *bands* (each exposed at its own moment by a rolling shutter) and *columns*.
A coarse projective warp takes out most of the motion between two frames; then one Lucas-Kanade normal-equation solve
per cell measures what is left, to a few hundredths of a pixel.

Sources
-------
Lucas, Kanade (1981), "An iterative image registration technique": the normal equations.
Farid, Simoncelli (2004), "Differentiation of discrete multidimensional signals", IEEE Trans. Image Proc. 13(4):
the matched pair of 5-tap smoothing and derivative filters (table I).
Robinson, Milanfar (2004), "Fundamental performance limits in image registration": noise in the gradients biases such
estimates towards zero; here the expected noise power is taken off the normal matrix, and both frames share the gradient.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import cv2
import numpy as np

#: Farid & Simoncelli 2004, table I, 5 taps, first order: smoothing and derivative.
SMOOTH_TAPS = np.array([0.037659, 0.249153, 0.426375, 0.249153, 0.037659], np.float32)
DERIVE_TAPS = np.array([0.109604, 0.276691, 0.0, -0.276691, -0.109604], np.float32)

#: The picture is measured on a copy about this wide: sub-pixel accuracy does not gain from more, time does.
WORKING_WIDTH_PX = 1100
COARSE_POINTS = 100
MIN_POINTS = 12
#: A residual above this many working pixels is outside the range where one linear solve holds.
LINEAR_RANGE_PX = 1.0
#: Bands the picture is cut into; 30 bands resolve 15 cycles per frame height.
BANDS = 30
COLUMNS = 16
#: Cells of a small picture are made larger than these counts say: fewer pixels than this hold no figure.
MIN_BAND_ROWS = 10
MIN_COLUMN_WIDTH = 22
#: Mean absolute difference (grey levels of 255) below which two frames or cells are the same picture again.
SAME_PICTURE_LEVEL = 0.02


@dataclass(frozen=True)
class Grid:
    """How the recorded picture is divided into cells.

    Attributes
    ----------
    width_px, height_px : int
        The recorded picture.
    decimation : int
        Recorded pixels per working pixel.
    bands, columns : int
        Number of cells down and across.
    x_px : ndarray, shape (columns,)
        Cell centres from the picture centre, native pixels, right positive.
    y_px : ndarray, shape (bands,)
        Cell centres from the picture centre, native pixels, down positive.
    height : ndarray, shape (bands,)
        Cell centres as a share of the picture height, 0 at the first row, 1 at the last.
    band_share : float
        Height of a band as a share of the picture height.
    """

    width_px: int
    height_px: int
    decimation: int
    bands: int
    columns: int
    band_rows: int
    column_width: int
    top: int
    left: int

    @property
    def x_px(self) -> np.ndarray:
        centre = self.left + (np.arange(self.columns) + 0.5) * self.column_width
        return centre * self.decimation - self.width_px / 2

    @property
    def y_px(self) -> np.ndarray:
        centre = self.top + (np.arange(self.bands) + 0.5) * self.band_rows
        return centre * self.decimation - self.height_px / 2

    @property
    def height(self) -> np.ndarray:
        return self.y_px / self.height_px + 0.5

    @property
    def band_share(self) -> float:
        return self.band_rows * self.decimation / self.height_px


@dataclass(frozen=True)
class PairMotion:
    """What one pair of neighbouring frames shows, frame n to frame n + 1.

    Attributes
    ----------
    time_s, next_time_s : float
        Presentation times of the two frames.
    flow_px : ndarray, shape (bands, columns, 2), float32
        Displacement (right, down) of the picture content of each cell, native pixels.
    information : ndarray, shape (bands, columns, 3), float32
        Inverse covariance (xx, xy, yy) of each displacement, per native pixel squared, from the picture's gradients and
        the residual of the fit. 0 where the cell says nothing.
    frozen : ndarray, shape (bands, columns), bool
        The cell is the same picture again although its surroundings moved: a skipped block of the encoder.
    change_level : float
        Mean absolute difference of the two frames, grey levels of 255.
    sharpness : float
        Gradient power over contrast of frame n, per working pixel squared.
    """

    time_s: float
    next_time_s: float
    flow_px: np.ndarray
    information: np.ndarray
    frozen: np.ndarray
    change_level: float
    sharpness: float


def make_grid(width_px: int, height_px: int, bands: int = BANDS, columns: int = COLUMNS) -> Grid:
    """Divide a picture of `width_px` x `height_px` into whole cells, leaving an even margin.

    Raises
    ------
    ValueError
        If the picture is too small to hold three bands.
    """
    decimation = max(1, -(-width_px // WORKING_WIDTH_PX))
    width, height = width_px // decimation, height_px // decimation
    margin = 2  # the derivative filter's reach
    band_rows = max(MIN_BAND_ROWS, (height - 2 * margin) // bands)
    column_width = max(MIN_COLUMN_WIDTH, (width - 2 * margin) // columns)
    fit_bands, fit_columns = (height - 2 * margin) // band_rows, (width - 2 * margin) // column_width
    if fit_bands < 3 or fit_columns < 3:
        raise ValueError(f"a picture of {width_px} x {height_px} is too small to measure")
    top = (height - fit_bands * band_rows) // 2
    left = (width - fit_columns * column_width) // 2
    return Grid(width_px, height_px, decimation, fit_bands, fit_columns, band_rows, column_width, top, left)


@dataclass(frozen=True)
class _Picture:
    """One frame, ready to be compared: working copy (float32), coarse copy (uint8), its size per working pixel."""

    time_s: float
    work: np.ndarray
    coarse: np.ndarray
    coarse_step: float


def _prepare(time_s: float, luma: np.ndarray, luma_scale: float, grid: Grid) -> _Picture:
    step = grid.decimation
    height, width = grid.height_px // step * step, grid.width_px // step * step
    work = luma[:height, :width].astype(np.float32)
    if step == 2:
        work = cv2.pyrDown(work, dstsize=(width // 2, height // 2))
    elif step > 1:
        work = cv2.resize(work, (width // step, height // step), interpolation=cv2.INTER_AREA)
    if luma_scale != 1.0:
        work *= luma_scale
    coarse_step = 2.0 if work.shape[1] >= 480 else 1.0
    coarse = work
    if coarse_step > 1:
        coarse = cv2.resize(work, None, fx=0.5, fy=0.5, interpolation=cv2.INTER_AREA)
    return _Picture(time_s, work, cv2.convertScaleAbs(coarse), coarse_step)


def coarse_warp(first: np.ndarray, second: np.ndarray, step: float) -> np.ndarray:
    """Projective warp that takes most of the motion out between two coarse pictures.

    Parameters
    ----------
    first, second : ndarray, shape (H, W), uint8
        The two pictures.
    step : float
        Working pixels per pixel of these pictures.

    Returns
    -------
    ndarray, shape (3, 3)
        Maps working-pixel coordinates of the first picture to the second. The identity where nothing could be tracked.
    """
    # where to look is found on a copy half the size: four times faster, and only a choice of places
    half = cv2.pyrDown(first)
    points = cv2.goodFeaturesToTrack(half, COARSE_POINTS, 0.005, max(3, half.shape[1] // 32), blockSize=3)
    if points is None or len(points) < MIN_POINTS:
        return np.eye(3)
    points *= 2
    moved, found, _ = cv2.calcOpticalFlowPyrLK(first, second, points, None, winSize=(13, 13), maxLevel=3)
    good = found.ravel() == 1
    if good.sum() < MIN_POINTS:
        return np.eye(3)
    # pixel centres: coarse pixel i covers working pixels from i * step on
    start = (points[good].reshape(-1, 2) + 0.5) * step - 0.5
    end = (moved[good].reshape(-1, 2) + 0.5) * step - 0.5
    warp, inlier = cv2.findHomography(start, end, cv2.RANSAC, 2.0 * step, maxIters=200, confidence=0.99)
    if warp is None or inlier.sum() < MIN_POINTS:
        shift = np.median(end - start, axis=0)
        return np.array([[1.0, 0, shift[0]], [0, 1.0, shift[1]], [0, 0, 1.0]])
    corners = np.array([[0, 0], [first.shape[1] * step, 0], [0, first.shape[0] * step]], np.float64)
    reach = np.abs(_apply_warp(warp, corners) - corners).max()
    if not np.isfinite(reach) or reach > first.shape[1] * step:
        return np.eye(3)
    return warp


def _apply_warp(warp: np.ndarray, points: np.ndarray) -> np.ndarray:
    mapped = points @ warp[:, :2].T + warp[:, 2]
    return mapped[..., :2] / mapped[..., 2:]


def _cell_means(picture: np.ndarray, grid: Grid) -> np.ndarray:
    rows, columns = grid.bands * grid.band_rows, grid.columns * grid.column_width
    part = picture[grid.top:grid.top + rows, grid.left:grid.left + columns]
    return cv2.resize(part, (grid.columns, grid.bands), interpolation=cv2.INTER_AREA)


@dataclass(frozen=True)
class _Solve:
    shift: np.ndarray        # (bands, columns, 2) working pixels
    information: np.ndarray  # (bands, columns, 3) per working pixel squared
    gradient_power: float


def _solve_cells(first: np.ndarray, warped: np.ndarray, grid: Grid) -> _Solve:
    """One Lucas-Kanade solve a cell: the shift r with warped(x + r) = first(x)."""
    mean = cv2.addWeighted(first, 0.5, warped, 0.5, 0.0)
    gx = cv2.sepFilter2D(mean, cv2.CV_32F, -DERIVE_TAPS, SMOOTH_TAPS)
    gy = cv2.sepFilter2D(mean, cv2.CV_32F, SMOOTH_TAPS, -DERIVE_TAPS)
    change = cv2.sepFilter2D(cv2.subtract(warped, first), cv2.CV_32F, SMOOTH_TAPS, SMOOTH_TAPS)
    xx, xy, yy = (_cell_means(p, grid) for p in (gx * gx, gx * gy, gy * gy))
    bx, by = -_cell_means(gx * change, grid), -_cell_means(gy * change, grid)
    cc = _cell_means(change * change, grid)

    count = grid.band_rows * grid.column_width
    rx, ry, residual = _solve_normal(xx, xy, yy, bx, by, cc)
    # the gradients' own noise, known from the residual, comes off the normal matrix
    noise = np.minimum(residual * _GRADIENT_NOISE_SHARE, 0.15 * (xx + yy))
    rx, ry, _ = _solve_normal(xx - noise, xy, yy - noise, bx, by, cc)
    xx, yy = xx - noise, yy - noise
    # the smoothed residual has fewer independent samples than pixels
    information = np.stack([xx, xy, yy], -1) * (count * _INDEPENDENT_SHARE / residual)[..., None]
    half_trace, half_gap = 0.5 * (xx + yy), np.sqrt(0.25 * (xx - yy) ** 2 + xy ** 2)
    smallest = (half_trace - half_gap) * count * _INDEPENDENT_SHARE / residual
    usable = smallest > MIN_CELL_INFORMATION
    information[~usable] = 0
    shift = np.stack([rx, ry], -1)
    shift[~usable] = 0
    return _Solve(shift, information, float(half_trace.mean()))


def _solve_normal(xx, xy, yy, bx, by, cc):
    """Solution of the 2 x 2 normal equations of every cell, and the mean square they leave of `cc`."""
    det = np.maximum(xx * yy - xy * xy, 1e-12)
    rx, ry = (yy * bx - xy * by) / det, (xx * by - xy * bx) / det
    return rx, ry, np.maximum(cc - rx * bx - ry * by, LEAST_RESIDUAL)


#: Mean square residual (grey levels squared) that rounding to whole grey levels leaves even of a still picture.
LEAST_RESIDUAL = 0.01
#: Noise power of the shared gradient over that of the smoothed difference, for white pixel noise: the difference of two
#: frames carries twice the noise, their mean half of it; the taps pass the sums of their squares.
_GRADIENT_NOISE_SHARE = 0.25 * float(np.sum(DERIVE_TAPS ** 2) / np.sum(SMOOTH_TAPS ** 2))
#: The smoothing taps leave about this share of the pixels independent (equivalent area of their autocorrelation).
_INDEPENDENT_SHARE = 0.1
#: Least information (1 / px^2, along the worst direction) for a cell to count: an uncertainty of 0.08 working px.
MIN_CELL_INFORMATION = 1 / 0.08 ** 2


def _warp_field(warp: np.ndarray, shift: np.ndarray, shape: tuple[int, int], grid: Grid) -> np.ndarray:
    """Dense map (H, W, 2) of `warp` plus a smooth interpolation of the cells' remaining shift."""
    height, width = shape
    x, y = np.meshgrid(np.arange(width, dtype=np.float32), np.arange(height, dtype=np.float32))
    w = warp.astype(np.float32)
    scale = 1.0 / (w[2, 0] * x + w[2, 1] * y + w[2, 2])
    mx = (w[0, 0] * x + w[0, 1] * y + w[0, 2]) * scale
    my = (w[1, 0] * x + w[1, 1] * y + w[1, 2]) * scale
    column = ((x[0] - grid.left + 0.5) / grid.column_width - 0.5).astype(np.float32)
    row = ((y[:, 0] - grid.top + 0.5) / grid.band_rows - 0.5).astype(np.float32)
    cx, cy = np.broadcast_to(column, shape).copy(), np.broadcast_to(row[:, None], shape).copy()
    field = cv2.remap(shift.astype(np.float32), cx, cy, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    return np.stack([mx, my], -1) + field


def _smooth_shift(shift: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Per-band median of the cells' shifts, filled across bands that have none; shape (bands, columns, 2)."""
    valid = weight > 0
    bands = np.arange(len(shift))
    out = np.empty_like(shift)
    for axis in range(2):
        values = np.where(valid, shift[..., axis], np.nan)
        have = valid.sum(1) >= 3
        if not have.any():
            return np.zeros_like(shift)
        line = np.interp(bands, bands[have], np.nanmedian(values[have], axis=1))
        # a cell keeps its own value (parallax) where it is near its band's: far-off cells are mismatches
        own = np.where(valid & (np.abs(values - line[:, None]) < 1.5), values, line[:, None])
        out[..., axis] = cv2.blur(own.astype(np.float32), (3, 1), borderType=cv2.BORDER_REPLICATE)
    return out


def measure_pair(first: _Picture, second: _Picture, grid: Grid) -> PairMotion:
    """Displacement of every cell from one prepared frame to the next."""
    shape = first.work.shape
    difference = cv2.absdiff(first.coarse, second.coarse)
    change_level = float(difference.mean())
    if change_level < SAME_PICTURE_LEVEL:
        warp = np.eye(3)
    else:
        warp = coarse_warp(first.coarse, second.coarse, first.coarse_step)

    corners = np.array([[0, 0], [shape[1] - 1, 0], [0, shape[0] - 1], [shape[1] - 1, shape[0] - 1]], np.float64)
    reach = np.abs(_apply_warp(warp, corners) - corners).max()
    inside = None
    if reach < 1e-6:
        warped = second.work
    else:
        flags = cv2.INTER_LINEAR | cv2.WARP_INVERSE_MAP
        warped = cv2.warpPerspective(second.work, warp, shape[::-1], flags=flags, borderMode=cv2.BORDER_REPLICATE)
        inside = _inside_mask(warp, shape, grid)
    solve = _solve_cells(first.work, warped, grid)
    shift, information = solve.shift, solve.information
    centre = _cell_centres(grid)
    target = centre + shift
    for _ in range(2):
        used = information[..., 0] > 0
        if not used.any() or np.percentile(np.abs(shift[used]), 90) < LINEAR_RANGE_PX:
            break
        field = _warp_field(warp, _smooth_shift(shift, information[..., 0]), shape, grid)
        warped = cv2.remap(second.work, field[..., 0], field[..., 1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
        base = _sample_field(field, grid)
        solve = _solve_cells(first.work, warped, grid)
        information = solve.information
        target = None
        flow = base + solve.shift - centre
        shift = solve.shift
    if target is not None:
        flow = _apply_warp(warp, (centre + shift).reshape(-1, 2)).reshape(centre.shape) - centre
    if inside is not None:
        information = information * inside[..., None]

    step = grid.decimation
    frozen = _frozen_cells(difference, flow, first.coarse_step, grid)
    return PairMotion(
        first.time_s, second.time_s, (flow * step).astype(np.float32), information / step ** 2, frozen,
        change_level, solve.gradient_power / max(float(first.coarse.std()) ** 2, 1.0),
    )


def _cell_centres(grid: Grid) -> np.ndarray:
    x = grid.left + (np.arange(grid.columns) + 0.5) * grid.column_width - 0.5
    y = grid.top + (np.arange(grid.bands) + 0.5) * grid.band_rows - 0.5
    return np.stack(np.meshgrid(x, y), -1)


def _sample_field(field: np.ndarray, grid: Grid) -> np.ndarray:
    return np.stack([_cell_means(np.ascontiguousarray(field[..., axis]), grid) for axis in range(2)], -1).astype(float)


def _inside_mask(warp: np.ndarray, shape: tuple[int, int], grid: Grid) -> np.ndarray:
    """1 where the whole cell, warped, still lies inside the second picture; shape (bands, columns)."""
    centre = _cell_centres(grid)
    ok = np.ones(centre.shape[:2], bool)
    for dx in (-0.5, 0.5):
        for dy in (-0.5, 0.5):
            corner = centre + np.array([dx * grid.column_width, dy * grid.band_rows])
            at = _apply_warp(warp, corner.reshape(-1, 2)).reshape(centre.shape)
            ok &= (at[..., 0] > 2) & (at[..., 0] < shape[1] - 3) & (at[..., 1] > 2) & (at[..., 1] < shape[0] - 3)
    return ok.astype(np.float32)


def _frozen_cells(difference: np.ndarray, flow: np.ndarray, coarse_step: float, grid: Grid) -> np.ndarray:
    """Cells whose pixels did not change at all while the picture moved by more than a tenth of a pixel."""
    height, width = int(grid.height_px // grid.decimation / coarse_step), int(grid.width_px // grid.decimation / coarse_step)
    cells = cv2.resize(difference[:height, :width].astype(np.float32), (grid.columns, grid.bands), interpolation=cv2.INTER_AREA)
    moving = np.hypot(*np.median(flow.reshape(-1, 2), axis=0)) > 0.1
    return (cells < SAME_PICTURE_LEVEL) & moving


def measure_motion(frames: Iterable[tuple[float, np.ndarray]], grid: Grid, luma_scale: float = 1.0,
                   workers: int = 1) -> Iterator[PairMotion]:
    """Displacements of every pair of neighbouring frames, one pair at a time, in order.

    Parameters
    ----------
    frames : iterable of (time_s, luma)
        Presentation time and luma plane, shape (height, width), uint8 or uint16.
    grid : Grid
        From `make_grid`.
    luma_scale : float
        What brings the luma plane to 0..255 (1 for 8 bits, 1/4 for 10).
    workers : int
        Threads that measure pairs side by side (the arithmetic runs outside the interpreter's lock). The result does
        not depend on it.

    Yields
    ------
    PairMotion
        One fewer than there are frames.
    """
    previous = None
    pending: deque = deque()
    with ThreadPoolExecutor(max(1, workers)) as pool:
        for time_s, luma in frames:
            current = _prepare(time_s, luma, luma_scale, grid)
            if previous is not None:
                pending.append(pool.submit(measure_pair, previous, current, grid))
            previous = current
            # a short queue keeps memory flat however long the clip
            while len(pending) > 2 * workers:
                yield pending.popleft().result()
        while pending:
            yield pending.popleft().result()
