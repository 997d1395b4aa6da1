"""What stands in front of the camera: planes, upright panels and moving cars, as flat textured patches."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from .motion import generator, position, rotations
from .recipe import Flight
from .surface import Surface, car_surface, pattern_surface, photo_surface

_LARGEST_TILE = 4096


@dataclass(frozen=True)
class Plane:
    """An endless textured plane.

    Attributes
    ----------
    origin, right, down : ndarray, shape (3,)
        A point of it and its two unit axes in the world frame.
    surface : Surface
    horizon : bool
        True when the plane ends in a horizon with sky above.
    """

    origin: np.ndarray
    right: np.ndarray
    down: np.ndarray
    surface: Surface
    horizon: bool


@dataclass(frozen=True)
class Patch:
    """A textured rectangle that may slide along a line and come in again at its start.

    Attributes
    ----------
    centre : ndarray, shape (3,)
        Centre at time 0, world frame.
    right, down : ndarray, shape (3,)
        Unit axes.
    half_width_m, half_height_m : float
    surface : Surface
    velocity_mps : ndarray, shape (3,)
    span_m : float
        Length of the way, centred on `way_centre`; infinite for a patch that stands.
    way_centre : ndarray, shape (3,)
    """

    centre: np.ndarray
    right: np.ndarray
    down: np.ndarray
    half_width_m: float
    half_height_m: float
    surface: Surface
    velocity_mps: np.ndarray
    span_m: float
    way_centre: np.ndarray

    def centre_at(self, time_s: np.ndarray) -> np.ndarray:
        """Centre at `time_s` (T,), shape (T, 3)."""
        speed = float(np.linalg.norm(self.velocity_mps))
        if speed == 0:
            return np.broadcast_to(self.centre, (time_s.size, 3))
        ahead = self.velocity_mps / speed
        start = float(ahead @ (self.centre - self.way_centre))
        # The patch jumps back as a whole: one instant decides for all rows of a frame.
        run = start + speed * time_s
        turns = np.floor((np.mean(run) + self.span_m / 2) / self.span_m)
        return self.centre + (run - start - turns * self.span_m)[:, None] * ahead


@dataclass(frozen=True)
class World:
    """Everything a camera can see: the plane, then patches from far to near."""

    plane: Plane
    patches: tuple[Patch, ...]


def _nearest_footprint_m(flight: Flight) -> float:
    """Smallest distance on the plane that one pixel covers at the start."""
    camera = flight.camera
    if flight.scene.kind == "backdrop":
        return flight.scene.distance_m / camera.focal_px
    lowest = min(flight.flight.height_m, flight.flight.height_m + flight.flight.climb_mps * flight.flight.duration_s)
    half_view = math.atan(camera.height_px / 2 / camera.focal_px)
    angle = min(math.radians(flight.flight.tilt_deg) + half_view, math.pi / 2)
    off_axis = angle - math.radians(flight.flight.tilt_deg)
    if angle <= 0.02:
        return lowest / 0.02 / camera.focal_px
    return lowest / math.sin(angle) * math.cos(off_axis) / camera.focal_px


def _plane_surface(flight: Flight) -> Surface:
    scene, texel = flight.scene, 0.65 * _nearest_footprint_m(flight)
    if scene.tile_m is None:
        wanted = 4.2 * flight.camera.width_px
        size = min(_LARGEST_TILE, 2 ** math.floor(math.log2(max(wanted, 512))))
        tile = size * texel
    else:
        tile = scene.tile_m
        size = min(_LARGEST_TILE, max(128, 2 ** math.ceil(math.log2(tile / texel))))
    if scene.pattern == "photo":
        return photo_surface(str(Path(flight.folder) / scene.photo), size, tile, scene.brightness, scene.contrast)
    return pattern_surface(
        scene.pattern, size, tile, scene.brightness, scene.contrast, scene.detail, (flight.seed, 8, 0)
    )


def _plane(flight: Flight) -> Plane:
    surface = _plane_surface(flight)
    if flight.scene.kind == "ground":
        # Right x (away) is up; the texture's rows run towards the camera, so that the normal points down.
        return Plane(np.zeros(3), np.array([1.0, 0, 0]), np.array([0, 0, -1.0]), surface, True)
    start = position(flight, np.zeros(1))[0]
    # Square to the aim without vibration: the backdrop must not depend on a tone's phase.
    aim = rotations(_still(flight), np.zeros(1))[0]
    return Plane(start + flight.scene.distance_m * aim[2], aim[0], aim[1], surface, False)


def _still(flight: Flight) -> Flight:
    return dataclasses.replace(flight, pan=(), sway=(), tone=(), motors=(), broadband=())


def _panels(flight: Flight) -> list[Patch]:
    patches = []
    for index, panel in enumerate(flight.panel):
        facing = math.radians(panel.facing_deg)
        tile = max(panel.width_m, panel.height_m)
        distance = max(math.hypot(panel.right_m, panel.forward_m), 2.0)
        texel = 0.5 * distance / flight.camera.focal_px
        size = min(2048, max(128, 2 ** math.ceil(math.log2(tile / texel))))
        surface = pattern_surface(
            panel.pattern, size, tile, panel.brightness, panel.contrast, 1.0, (flight.seed, 8, 1 + index)
        )
        centre = np.array([panel.right_m, -(panel.bottom_m + panel.height_m / 2), panel.forward_m])
        right = np.array([math.cos(facing), 0.0, math.sin(facing)])
        patches.append(Patch(centre, right, np.array([0, 1.0, 0]), panel.width_m / 2, panel.height_m / 2, surface,
                             np.zeros(3), math.inf, centre))
    start = position(flight, np.zeros(1))[0]
    return sorted(patches, key=lambda patch: -float(np.linalg.norm(patch.centre - start)))


def _cars(flight: Flight) -> list[Patch]:
    patches = []
    for index, cars in enumerate(flight.cars):
        rng = generator(flight, "scene", 1000 + index)
        way_centre = np.array([cars.right_m, 0.0, cars.forward_m])
        for car in range(cars.count):
            along = cars.direction == "along" or (cars.direction == "both" and car % 2 == 1)
            way = 1.0 if rng.random() < 0.5 else -1.0
            ahead = np.array([0, 0, way]) if along else np.array([way, 0, 0])
            speed = cars.speed_mps * (1 + cars.spread_pct / 100 * rng.uniform(-1, 1))
            offset = np.array([
                rng.uniform(-0.5, 0.5) * cars.span_right_m, 0.0, rng.uniform(-0.5, 0.5) * cars.span_forward_m
            ])
            # The second axis completes a frame whose normal points down, as for the ground itself.
            side = np.cross(np.array([0, 1.0, 0]), ahead)
            patches.append(Patch(
                way_centre + offset, ahead, side, cars.length_m / 2, cars.width_m / 2,
                car_surface(cars.length_m, cars.width_m, int(rng.integers(12))), speed * ahead,
                cars.span_forward_m if along else cars.span_right_m, way_centre,
            ))
    return patches


def build_world(flight: Flight) -> World:
    """Set the scene of a flight.

    Parameters
    ----------
    flight : Flight

    Returns
    -------
    World

    Raises
    ------
    FlightError
        When a picture for the surface cannot be read.
    """
    return World(_plane(flight), tuple(_cars(flight) + _panels(flight)))
