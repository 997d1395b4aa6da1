"""Pictures of a world through a rolling shutter: each row has its own instant, attitude and position.

For a fixed row a pixel's ray is linear in the column, so the point where it meets a plane is a ratio of two linear
functions of the column. Those few coefficients a row are computed in double precision; only the ratio itself is
evaluated for every pixel.
"""

from __future__ import annotations

import functools
import itertools
import math
from dataclasses import dataclass

import cv2
import numpy as np
from scipy.interpolate import CubicSpline

from .clock import row_heights, row_times
from .motion import (
    camera_angles, compose_rotation, exposure_offsets, generator, heading, motion_of, position,
)
from .recipe import Flight
from .scene import Patch, Plane, World
from .surface import LEVELS_PER_OCTAVE, Surface

# Texels are 0.63 to 0.75 of a pixel's footprint: with the levels' own blur that leaves little above the pixel rate.
_TEXELS_PER_FOOTPRINT = 0.75
_STRIP_ROWS = 32
_FADE_LEVELS = 0.5
_SPLINE_POINTS_PER_CYCLE = 48


@dataclass(frozen=True)
class Rays:
    """Rays of some picture rows at one instant each: `direction = start + u x across + v x below` in the world.

    `u` is the column from the picture centre and `v` a vertical offset from the row centre, both in pixels.
    All arrays have the shape (rows, 3).
    """

    origin: np.ndarray
    start: np.ndarray
    across: np.ndarray
    below: np.ndarray
    time_s: np.ndarray

    def of_rows(self, first: int, last: int) -> Rays:
        """Rows first to last - 1."""
        part = slice(first, last)
        return Rays(self.origin[part], self.start[part], self.across[part], self.below[part], self.time_s[part])


@dataclass(frozen=True)
class Ratio:
    """Coordinates on a plane as ratios: `(x0 + x1 u) / (d0 + d1 u)` and `(y0 + y1 u) / (d0 + d1 u)`, (rows,) each."""

    x0: np.ndarray
    x1: np.ndarray
    y0: np.ndarray
    y1: np.ndarray
    d0: np.ndarray
    d1: np.ndarray

    def of_rows(self, first: int, last: int) -> Ratio:
        """Rows first to last - 1."""
        part = slice(first, last)
        return Ratio(self.x0[part], self.x1[part], self.y0[part], self.y1[part], self.d0[part], self.d1[part])

    def at(self, u: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """x and y in metres and the denominator, (rows,) each, at column `u`."""
        den = self.d0 + self.d1 * u
        with np.errstate(divide="ignore", invalid="ignore"):
            return (self.x0 + self.x1 * u) / den, (self.y0 + self.y1 * u) / den, den


def frame_rays(flight: Flight, exposed_s: float) -> list[Rays]:
    """Rays of all rows of one frame, for each instant of the exposure.

    The motion is evaluated on a grid fine enough for its highest frequency and interpolated with a cubic spline
    (relative error under 1e-6), which is much cheaper than evaluating it for every row.

    Parameters
    ----------
    flight : Flight
    exposed_s : float
        Mid-exposure instant of the picture's middle.

    Returns
    -------
    list of Rays, one for each exposure sample
    """
    camera = flight.camera
    height = camera.height_px
    rows_s = row_times(np.array([exposed_s]), row_heights(height), camera.readout_s)[0]
    offsets = exposure_offsets(camera.exposure_s, camera.samples)
    first, last = rows_s[0] + offsets[0] - 1e-6, rows_s[-1] + offsets[-1] + 1e-6
    points = max(65, math.ceil((last - first) * motion_of(flight).highest_hz * _SPLINE_POINTS_PER_CYCLE))
    grid = np.linspace(first, last, points)
    state = np.column_stack([camera_angles(flight, grid), heading(flight, grid), position(flight, grid)])
    spline = CubicSpline(grid, state)
    focal = camera.focal_px
    line = (np.arange(height) - (height - 1) / 2) / focal
    result = []
    for offset in offsets:
        values = spline(rows_s + offset)
        rotation = compose_rotation(flight, values[:, :3], values[:, 3])
        # Rows of a world-to-camera matrix are the camera's axes in the world.
        result.append(Rays(
            origin=values[:, 4:], start=rotation[:, 2] + line[:, None] * rotation[:, 1],
            across=rotation[:, 0] / focal, below=rotation[:, 1] / focal, time_s=rows_s + offset,
        ))
    return result


def _ratio(
    rays: Rays, origin: np.ndarray, right: np.ndarray, down: np.ndarray, below_px: float | np.ndarray = 0.0
) -> Ratio:
    """Where rays, moved down by `below_px` (a number or (rows,)), meet a plane; `origin` is (3,) or (rows, 3)."""
    normal = np.cross(right, down)
    relative = rays.origin - origin
    start = rays.start + np.reshape(below_px, (-1, 1)) * rays.below
    distance = -(relative @ normal)
    d0, d1 = start @ normal, rays.across @ normal
    # A denominator that is positive in front of the camera, whichever side of the plane is seen.
    sign = np.where(distance < 0, -1.0, 1.0)
    distance, d0, d1 = distance * sign, d0 * sign, d1 * sign
    x, y = relative @ right, relative @ down
    return Ratio(
        x * d0 + distance * (start @ right), x * d1 + distance * (rays.across @ right),
        y * d0 + distance * (start @ down), y * d1 + distance * (rays.across @ down), d0, d1,
    )


@dataclass(frozen=True)
class Run:
    """Rows first to last - 1, drawn alike: from `level`, mixed by `weight` (rows,) with the next coarser one."""

    first: int
    last: int
    level: int
    weight: np.ndarray
    plain: bool


@dataclass(frozen=True)
class Plan:
    """How a frame samples its plane: the runs, and how far each row's samples are spread vertically, (rows,) px."""

    runs: list[Run]
    spread_px: np.ndarray


@functools.lru_cache(maxsize=8)
def sub_rows(samples: int) -> np.ndarray:
    """Vertical places within a pixel, one for each exposure sample, from -1/2 to 1/2.

    The exposure samples double as supersampling of the row. Their order is the permutation whose places correlate
    least with time, so that the blur of vertical motion is as wide downwards as upwards; the position of the
    picture does not depend on it.

    Parameters
    ----------
    samples : int
        4 to 7.

    Returns
    -------
    ndarray, shape (samples,)
    """
    place = (np.arange(samples) + 0.5) / samples - 0.5
    orders = np.array(list(itertools.permutations(range(samples))))
    lean = np.abs(place[orders] @ exposure_offsets(2.0, samples))
    return place[orders[np.argmin(np.round(lean, 9))]]


def plan_frame(rays: Rays, plane: Plane, width_px: int) -> Plan:
    """Choose for each row the resolution level and the vertical spread that keep it free of aliasing.

    A pixel on ground far away covers a patch much taller than wide. Spreading its samples by the share `s` of the
    pixel covers `0.75 s` of that height, so the texture itself need only be as coarse as the rest.

    Parameters
    ----------
    rays : Rays
        All rows at mid-exposure.
    plane : Plane
    width_px : int

    Returns
    -------
    Plan
    """
    here = _ratio(rays, plane.origin, plane.right, plane.down)
    under = _ratio(rays, plane.origin, plane.right, plane.down, 1.0)
    rows = here.d0.size
    wide, tall, seen = np.zeros((rows, 3)), np.zeros((rows, 3)), np.zeros((rows, 3), dtype=bool)
    for column, u in enumerate((-width_px / 2, 0.0, width_px / 2)):
        x, y, den = here.at(u)
        x_right, y_right, _ = here.at(u + 1)
        x_under, y_under, den_under = under.at(u)
        seen[:, column] = np.minimum(den, den_under) > 1e-6
        wide[:, column] = np.hypot(x_right - x, y_right - y)
        tall[:, column] = np.hypot(x_under - x, y_under - y)
    # A row that meets the horizon somewhere has no finite footprint there, and shows the plane's mean grey.
    whole = seen.all(axis=1)
    spread = np.zeros(rows)
    footprint = np.full(rows, math.inf)
    width_m, height_m = wide[whole].max(axis=1), tall[whole].max(axis=1)
    spread[whole] = np.clip((1 - width_m / height_m) / 0.75, 0, 1)
    footprint[whole] = np.maximum(width_m, height_m * (1 - 0.75 * spread[whole]))
    exact = LEVELS_PER_OCTAVE * np.log2(np.maximum(_TEXELS_PER_FOOTPRINT * footprint / plane.surface.texel_m, 1e-9))
    coarsest = len(plane.surface.levels) - 1
    plain = exact >= coarsest
    exact = np.clip(exact, 0, coarsest)
    level = np.floor(exact).astype(int)
    fade = np.clip((exact - level - (1 - _FADE_LEVELS)) / _FADE_LEVELS, 0, 1)
    fade = fade * fade * (3 - 2 * fade)
    key = np.stack([level, fade > 0, plain], axis=1).astype(int)
    starts = np.flatnonzero(np.any(np.diff(key, axis=0) != 0, axis=1)) + 1
    runs = []
    for first, last in zip([0, *starts.tolist()], [*starts.tolist(), rows]):
        for cut in range(first, last, _STRIP_ROWS):
            end = min(cut + _STRIP_ROWS, last)
            runs.append(Run(cut, end, int(level[cut]), fade[cut:end].astype(np.float32), bool(plain[cut])))
    return Plan(runs, spread)


def _texture(
    surface: Surface, level: int, ratio: Ratio, inverse: np.ndarray, columns: np.ndarray
) -> np.ndarray:
    """Sample one level of a surface at the ratio's coordinates; `inverse` is 1 / denominator for every pixel."""
    picture = surface.levels[level]
    maps = []
    for c0, c1, size, metres in ((ratio.x0, ratio.x1, picture.shape[1], surface.width_m),
                                 (ratio.y0, ratio.y1, picture.shape[0], surface.height_m)):
        # Texel centres are at whole numbers; whole tiles are taken off before the loss of precision to float32.
        low = np.inf
        for u in (columns[0], columns[-1]):
            den = np.maximum(ratio.d0 + ratio.d1 * u, 1e-9)
            low = min(low, float(((c0 + c1 * u) / den).min()))
        scale = size / metres
        shift = math.floor(low / metres) * size + 0.5
        a = (c0 * scale - shift * ratio.d0).astype(np.float32)[:, None]
        b = (c1 * scale - shift * ratio.d1).astype(np.float32)[:, None]
        where = b * columns
        where += a
        where *= inverse
        maps.append(where)
    return cv2.remap(picture, maps[0], maps[1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_WRAP)


def _draw_plane(target: np.ndarray, rays: Rays, plane: Plane, plan: Plan, place: float, flight: Flight) -> None:
    """Add one instant of the plane (and the sky above it) to `target` (rows, columns)."""
    width = target.shape[1]
    columns = (np.arange(width, dtype=np.float32) - np.float32((width - 1) / 2))[None, :]
    whole = _ratio(rays, plane.origin, plane.right, plane.down, plan.spread_px * place)
    for run in plan.runs:
        ratio = whole.of_rows(run.first, run.last)
        out = target[run.first : run.last]
        den = ratio.d1.astype(np.float32)[:, None] * columns
        den += ratio.d0.astype(np.float32)[:, None]
        if run.plain:
            out += _far_grey(den, plane, flight)
            continue
        inverse = np.divide(np.float32(1), den, out=den)
        grey = _texture(plane.surface, run.level, ratio, inverse, columns[0])
        if run.weight.max() > 0:
            coarse = _texture(plane.surface, run.level + 1, ratio, inverse, columns[0])
            coarse -= grey
            coarse *= run.weight[:, None]
            grey += coarse
        out += grey


def _far_grey(den: np.ndarray, plane: Plane, flight: Flight) -> np.ndarray | np.float32:
    """Ground too far to show any texture, and the sky above its horizon; `den` is the sine below the horizon."""
    ground = np.float32(plane.surface.mean_grey)
    if not plane.horizon:
        return ground
    share = np.clip(den * np.float32(flight.camera.focal_px) + np.float32(0.5), 0, 1)
    sky = np.float32(flight.scene.sky_grey) + np.float32(flight.scene.sky_fall) * np.minimum(den, 0)
    return share * ground + (1 - share) * np.clip(sky, 0, 255)


def _patch_box(patch: Patch, rays: Rays, width: int, height: int, focal: float) -> tuple[int, int, int, int] | None:
    """Rows and columns that a patch may touch (first row, last row, first column, last column), or None."""
    rows_px, columns_px = [], []
    for row in (0, height // 2, height - 1):
        centre = patch.centre_at(rays.time_s)[row]
        axes = np.stack([rays.across[row] * focal, rays.below[row] * focal,
                         np.cross(rays.across[row], rays.below[row]) * focal**2])
        for x in (-patch.half_width_m, patch.half_width_m):
            for y in (-patch.half_height_m, patch.half_height_m):
                right, down, ahead = axes @ (centre + x * patch.right + y * patch.down - rays.origin[row])
                if ahead < 0.05:
                    return (0, height, 0, width)
                columns_px.append(right / ahead * focal + (width - 1) / 2)
                rows_px.append(down / ahead * focal + (height - 1) / 2)
    box = (math.floor(min(rows_px)) - 2, math.ceil(max(rows_px)) + 3,
           math.floor(min(columns_px)) - 2, math.ceil(max(columns_px)) + 3)
    top, bottom, left, right_edge = max(box[0], 0), min(box[1], height), max(box[2], 0), min(box[3], width)
    return (top, bottom, left, right_edge) if top < bottom and left < right_edge else None


def _draw_patch(target: np.ndarray, rays: Rays, patch: Patch, focal: float) -> None:
    """Lay one instant of a patch over `target` (rows, columns) with soft edges one pixel wide."""
    height, width = target.shape
    box = _patch_box(patch, rays, width, height, focal)
    if box is None:
        return
    top, bottom, left, right = box
    part = rays.of_rows(top, bottom)
    ratio = _ratio(part, patch.centre_at(rays.time_s)[top:bottom], patch.right, patch.down)
    columns = np.arange(left, right, dtype=np.float32) - np.float32((width - 1) / 2)
    # Coordinates are relative to the patch's own centre, so single precision serves.
    x0, x1, y0, y1, d0, d1 = (
        part.astype(np.float32)[:, None] for part in (ratio.x0, ratio.x1, ratio.y0, ratio.y1, ratio.d0, ratio.d1)
    )
    den = d0 + d1 * columns
    front = den > np.float32(1e-5)
    inverse = 1 / np.where(front, den, np.float32(1))
    x, y = (x0 + x1 * columns) * inverse, (y0 + y1 * columns) * inverse
    distance = float(np.linalg.norm(patch.centre_at(rays.time_s)[height // 2] - rays.origin[height // 2]))
    steps_x = np.abs(np.diff(x, axis=1)).max(axis=1, initial=0.0), np.abs(np.diff(x, axis=0)).max(axis=1, initial=0.0)
    steps_y = np.abs(np.diff(y, axis=1)).max(axis=1, initial=0.0), np.abs(np.diff(y, axis=0)).max(axis=1, initial=0.0)
    least = 0.2 * distance / focal
    pixel_x = max(least, *(float(np.median(step)) if step.size else 0.0 for step in steps_x))
    pixel_y = max(least, *(float(np.median(step)) if step.size else 0.0 for step in steps_y))
    cover = np.clip((np.float32(patch.half_width_m) - np.abs(x)) / np.float32(pixel_x) + np.float32(0.5), 0, 1)
    cover *= np.clip((np.float32(patch.half_height_m) - np.abs(y)) / np.float32(pixel_y) + np.float32(0.5), 0, 1)
    cover *= front
    if not cover.any():
        return
    surface = patch.surface
    exact = LEVELS_PER_OCTAVE * math.log2(_TEXELS_PER_FOOTPRINT * max(pixel_x, pixel_y) / surface.texel_m)
    exact = min(max(exact, 0.0), len(surface.levels) - 1.0)
    level = min(int(exact), len(surface.levels) - 2)
    grey = None
    for index, weight in ((level, 1 - (exact - level)), (level + 1, exact - level)):
        if weight > 0:
            picture = surface.levels[index]
            rows, cols = picture.shape
            # The patch's own centre is the tile's centre; beyond the edge the cover is zero.
            map_x = (x * np.float32(cols / surface.width_m) + np.float32(cols / 2 - 0.5))
            map_y = (y * np.float32(rows / surface.height_m) + np.float32(rows / 2 - 0.5))
            part_grey = cv2.remap(picture, map_x, map_y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
            grey = part_grey * np.float32(weight) if grey is None else grey + part_grey * np.float32(weight)
    view = target[top:bottom, left:right]
    view += cover * (grey - view)


def exposed_picture(flight: Flight, world: World, exposed_s: float) -> np.ndarray:
    """One noiseless picture.

    Parameters
    ----------
    flight : Flight
    world : World
        From `build_world(flight)`.
    exposed_s : float
        Mid-exposure instant of the picture's middle.

    Returns
    -------
    ndarray, float32, shape (height_px, width_px)
        Grey 0 to 255.
    """
    camera = flight.camera
    rays = frame_rays(flight, exposed_s)
    plan = plan_frame(rays[len(rays) // 2], world.plane, camera.width_px)
    total = np.zeros((camera.height_px, camera.width_px), dtype=np.float32)
    for instant, place in zip(rays, sub_rows(camera.samples)):
        if not world.patches:
            _draw_plane(total, instant, world.plane, plan, float(place), flight)
            continue
        single = np.zeros_like(total)
        _draw_plane(single, instant, world.plane, plan, float(place), flight)
        for patch in world.patches:
            _draw_patch(single, instant, patch, camera.focal_px)
        total += single
    total *= np.float32(1 / len(rays))
    if flight.lamp is not None:
        total *= lamp_factor(flight, exposed_s).astype(np.float32)[:, None]
    return total


def lamp_factor(flight: Flight, exposed_s: float) -> np.ndarray:
    """Brightness of each row under the flickering lamp, averaged over the row's exposure.

    Parameters
    ----------
    flight : Flight
        With a lamp.
    exposed_s : float

    Returns
    -------
    ndarray, shape (height_px,)
    """
    camera, lamp = flight.camera, flight.lamp
    time_s = row_times(np.array([exposed_s]), row_heights(camera.height_px), camera.readout_s)[0]
    # The mean of a cosine over an exposure is the cosine at its middle times sinc(f x exposure), sign included.
    factor = np.sinc(lamp.flicker_hz * camera.exposure_s)
    angle = 2 * np.pi * lamp.flicker_hz * time_s + math.radians(lamp.phase_deg)
    return 1 + lamp.depth * factor * np.cos(angle)


def noise_pool(flight: Flight) -> np.ndarray:
    """Unit gaussian noise that frames draw rows from, shape (pool,); about four million values."""
    return generator(flight, "noise").standard_normal(1 << 22, dtype=np.float32)


def add_noise(flight: Flight, grey: np.ndarray, frame: int, pool: np.ndarray) -> np.ndarray:
    """Sensor noise of one frame.

    Each row takes a stretch of the pool from a random start: independent from row to row and frame to frame for
    all that an estimator can tell, at a fraction of the cost of fresh numbers.

    Parameters
    ----------
    flight : Flight
    grey : ndarray, shape (rows, columns)
    frame : int
    pool : ndarray
        From `noise_pool`.

    Returns
    -------
    ndarray, float32, shape (rows, columns)
    """
    noise = flight.noise
    if noise.read_grey == 0 and noise.shot_grey == 0:
        return grey
    rows, columns = grey.shape
    starts = generator(flight, "noise", 1 + frame).integers(0, pool.size - columns, rows)
    values = np.lib.stride_tricks.sliding_window_view(pool, columns)[starts]
    spread = np.maximum(grey, 0) * np.float32(noise.shot_grey**2 / 100)
    spread += np.float32(noise.read_grey**2)
    np.sqrt(spread, out=spread)
    spread *= values
    spread += grey
    return spread
