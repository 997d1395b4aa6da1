"""Procedural surfaces and their resolution levels.

A surface is a periodic tile of grey. Each level is filtered in the Fourier domain to well under its own texel rate, so
that a picture sampled at about one and a half texels a pixel moves by small fractions of a pixel without aliasing.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
import scipy.fft

from .recipe import FlightError

#: Levels an octave of texel size.
LEVELS_PER_OCTAVE = 2
#: Gaussian blur of every level in texels: 0.5 of the contrast is left at a quarter of the texel rate, 0.06 at half.
_BLUR_TEXELS = 0.75


@dataclass(frozen=True)
class Surface:
    """A tile of grey at falling resolution.

    Attributes
    ----------
    width_m, height_m : float
        Size of the tile, after which it repeats.
    levels : tuple of ndarray, float32
        Grey, each `2^(1/2)` times coarser than the one before; axis 0 is the tile's height.
    mean_grey : float
    """

    width_m: float
    height_m: float
    levels: tuple[np.ndarray, ...]
    mean_grey: float

    @property
    def texel_m(self) -> float:
        """Texel size of the finest level."""
        return self.width_m / self.levels[0].shape[1]


def surface_from_grey(grey: np.ndarray, width_m: float, height_m: float) -> Surface:
    """Build the levels of a tile.

    Parameters
    ----------
    grey : ndarray, shape (rows, columns)
        Grey 0 to 255, periodic.
    width_m, height_m : float
        Size of the tile.

    Returns
    -------
    Surface
    """
    rows, columns = grey.shape
    spectrum = scipy.fft.rfft2(grey.astype(np.float32))
    levels = []
    for level in range(64):
        shrink = 2 ** (-level / LEVELS_PER_OCTAVE)
        new_rows, new_columns = (max(2 * round(size * shrink / 2), 2) for size in (rows, columns))
        if min(new_rows, new_columns) < 8:
            break
        half, low = new_rows // 2, spectrum[:, : new_columns // 2 + 1]
        part = np.concatenate([low[:half], low[rows - half :]])
        vertical = scipy.fft.fftfreq(new_rows)[:, None]
        horizontal = scipy.fft.rfftfreq(new_columns)[None, :]
        blur = np.exp(-0.5 * (2 * np.pi * _BLUR_TEXELS) ** 2 * (vertical**2 + horizontal**2)).astype(np.float32)
        small = scipy.fft.irfft2(part * blur, s=(new_rows, new_columns))
        small *= new_rows * new_columns / (rows * columns)
        levels.append(np.ascontiguousarray(np.clip(small, 0, 255), dtype=np.float32))
    return Surface(width_m, height_m, tuple(levels), float(grey.mean()))


def _noise(size: int, rng: np.random.Generator, slope: float, low: float = 0.0, high: float = math.inf) -> np.ndarray:
    """Periodic gaussian noise of unit sd whose amplitude falls as `f^-slope` between two frequencies (cycles/tile)."""
    white = scipy.fft.rfft2(rng.standard_normal((size, size), dtype=np.float32))
    frequency = np.hypot(scipy.fft.fftfreq(size)[:, None], scipy.fft.rfftfreq(size)[None, :]).astype(np.float32) * size
    frequency[0, 0] = 1.0
    gain = frequency ** np.float32(-slope)
    gain[(frequency < low) | (frequency > high)] = 0
    gain[0, 0] = 0
    field = scipy.fft.irfft2(white * gain, s=(size, size))
    return (field / field.std()).astype(np.float32)


def _soil(size: int, tile_m: float, detail: float, rng: np.random.Generator) -> np.ndarray:
    """Bare ground: broad patches, clods and grit, about equal contrast in every octave as in natural scenes."""
    broad = _noise(size, rng, 1.0, high=tile_m / 0.6)
    fine = _noise(size, rng, 0.9, low=tile_m / 0.6)
    return broad + detail * 0.9 * fine * (1 + 0.35 * np.tanh(broad))


def _grass(size: int, tile_m: float, detail: float, rng: np.random.Generator) -> np.ndarray:
    """Meadow: tufts whose contrast itself is patchy."""
    broad = _noise(size, rng, 1.1, high=tile_m / 0.5)
    tufts = _noise(size, rng, 0.4, low=tile_m / 0.5)
    return 0.7 * broad + detail * tufts * np.exp(0.45 * np.clip(broad, -2, 2))


def _rows(size: int, tile_m: float, detail: float, rng: np.random.Generator) -> np.ndarray:
    """Tree rows seen from above: lit crowns with a shadow beside them, on grass."""
    lanes, trees = max(1, round(tile_m / 4.5)), max(1, round(tile_m / 3.0))
    lane_px, tree_px = size / lanes, size / trees
    crown = np.zeros((size, size), dtype=np.float32)
    for lane in range(lanes):
        for tree in range(trees):
            across = (lane + 0.5 + rng.uniform(-0.05, 0.05)) * lane_px
            along = (tree + 0.5 + rng.uniform(-0.12, 0.12)) * tree_px
            radius = rng.uniform(0.9, 1.35) / tile_m * size
            columns = np.arange(math.floor(across - radius), math.ceil(across + radius) + 1)
            lines = np.arange(math.floor(along - radius), math.ceil(along + radius) + 1)
            inside = 1 - ((columns[None, :] - across) ** 2 + (lines[:, None] - along) ** 2) / radius**2
            place = np.ix_(lines % size, columns % size)
            crown[place] = np.maximum(crown[place], np.sqrt(np.clip(inside, 0, 1)))
    leaves = _noise(size, rng, 0.5, low=tile_m / 0.8)
    ground = _grass(size, tile_m, detail, rng)
    edge = np.clip((crown + detail * 0.15 * leaves - 0.3) / 0.15, 0, 1)
    cast = round(0.8 / tile_m * size)
    shadow = np.roll(edge, (cast // 2, cast), axis=(0, 1))
    field = 0.55 * ground + 0.6 - 1.5 * shadow
    return field * (1 - edge) + edge * (-0.9 + 1.6 * crown + detail * 0.75 * leaves)


def _paving(size: int, tile_m: float, detail: float, rng: np.random.Generator) -> np.ndarray:
    """Slabs in courses, each with its own grey, dark joints and a rough face."""
    courses, slabs = max(2, 2 * round(tile_m / 1.0)), max(2, round(tile_m / 0.9))
    line = np.arange(size) / size * courses
    course = line.astype(int)
    grey = rng.normal(0, 1, (courses, slabs)).astype(np.float32)
    place = (np.arange(size)[None, :] / size * slabs + 0.5 * (course[:, None] % 2)) % slabs
    field = grey[course[:, None], place.astype(int)]
    gap_m = np.minimum(
        np.abs(line - np.round(line))[:, None] * tile_m / courses, np.abs(place - np.round(place)) * tile_m / slabs
    )
    joint = np.clip(1 - gap_m / 0.03, 0, 1).astype(np.float32)
    return field - 2.2 * joint + detail * 0.8 * _noise(size, rng, 0.8)


_PATTERN = {"soil": _soil, "grass": _grass, "rows": _rows, "paving": _paving}


@functools.lru_cache(maxsize=3)
def pattern_surface(
    pattern: str, size: int, tile_m: float, brightness: float, contrast: float, detail: float, seed: tuple[int, ...]
) -> Surface:
    """A procedural surface.

    Parameters
    ----------
    pattern : {"soil", "grass", "rows", "paving"}
    size : int
        Texels a side of the finest level.
    tile_m : float
        Size of the square tile.
    brightness, contrast : float
        Mean and sd of the grey.
    detail : float
        Share of fine structure.
    seed : tuple of int

    Returns
    -------
    Surface
    """
    field = _PATTERN[pattern](size, tile_m, detail, np.random.default_rng(list(seed)))
    field = (field - field.mean()) / max(float(field.std()), 1e-6)
    return surface_from_grey(np.clip(brightness + contrast * field, 2, 253), tile_m, tile_m)


@functools.lru_cache(maxsize=2)
def photo_surface(path: str, size: int, tile_m: float, brightness: float, contrast: float) -> Surface:
    """A surface from a picture file, mirrored at its edges so that it repeats without a seam.

    Parameters
    ----------
    path : str
        Any still picture that OpenCV reads.
    size, tile_m, brightness, contrast
        As for `pattern_surface`.

    Returns
    -------
    Surface

    Raises
    ------
    FlightError
        When the file is missing or is no picture.
    """
    picture = cv2.imread(path, cv2.IMREAD_GRAYSCALE) if Path(path).is_file() else None
    if picture is None:
        raise FlightError(f"{path}: cannot be read as a picture for the surface.")
    half = cv2.resize(picture, (size // 2, size // 2), interpolation=cv2.INTER_AREA).astype(np.float32)
    half = (half - half.mean()) / max(float(half.std()), 1e-6)
    tile = np.block([[half, half[:, ::-1]], [half[::-1], half[::-1, ::-1]]])
    return surface_from_grey(np.clip(brightness + contrast * tile, 2, 253), tile_m, tile_m)


@functools.lru_cache(maxsize=32)
def car_surface(length_m: float, width_m: float, variant: int) -> Surface:
    """A car seen from above: body, roof, glass and some dirt, in a grey of its own.

    Parameters
    ----------
    length_m, width_m : float
        Size, also of the tile.
    variant : int
        Chooses grey and proportions.

    Returns
    -------
    Surface
    """
    rng = np.random.default_rng([977, variant])
    columns, rows = 256, max(16, 2 * round(128 * width_m / length_m))
    along = (np.arange(columns) + 0.5)[None, :] / columns
    across = np.abs((np.arange(rows) + 0.5)[:, None] / rows - 0.5)
    body = rng.choice([45.0, 90.0, 160.0, 215.0])
    grey = np.full((rows, columns), body)
    front, back = rng.uniform(0.22, 0.32), rng.uniform(0.78, 0.9)
    grey[(along > front) & (along < back) & (across < 0.42)] = 30.0
    grey[(along > front + 0.1) & (along < back - 0.07) & (across < 0.38)] = 0.85 * body + 20
    grey[(along < 0.03) & (across > 0.25)] = 240.0
    rough = cv2.GaussianBlur(rng.normal(0, 1, (rows, columns)), (0, 0), 2.5, borderType=cv2.BORDER_REFLECT)
    return surface_from_grey(np.clip(grey + 12 * rough / rough.std(), 2, 253), length_m, width_m)
