"""Field of view from a clip of a full turn in place.

Points are followed from key frame to key frame around the whole turn, until the first view comes back. For a focal
length F (in pixels) the points are directions, and each link between key frames is a rotation; only the right F makes
the chain of rotations close after exactly one turn. A level camera reads: the horizontal displacement at the picture
centre sums to `2 pi F`. The chain holds for a tilted, shaky turn as well.

Sources
-------
Stein (1995), "Accurate internal camera calibration using rotation, with analysis of sources of error", ICCV: the focal
length from the closure of a full turn.
Kabsch (1976), Acta Cryst. A32: the rotation between two sets of directions.
Lucas, Kanade (1981), and Shi, Tomasi (1994), "Good features to track": the points.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import cv2
import numpy as np
from scipy.spatial.transform import Rotation

from framegrade.readout.estimate import CannotTell

WORKING_WIDTH_PX = 960
THUMB_WIDTH_PX = 160
MOST_POINTS, LEAST_POINTS = 300, 20
#: A new key frame begins when the picture has moved by this share of its width, or this share of the points is lost.
KEY_SHIFT, KEY_LOSS = 0.15, 0.5
#: Points within this share of the width from the centre count: a lens distorts least there.
CENTRAL_SHARE = 0.3
#: The first view can only be back after the picture has moved by this many widths.
LEAST_WIDTHS = 1.2
#: Correlation with the first view at which it may be back, and below which it is gone again.
BACK, GONE = 0.6, 0.45
#: Inliers, and share of the points, that the first and the last view must have in common.
CLOSING_POINTS, CLOSING_SHARE = 25, 0.4
#: The chain may fail to close by this much about the other two axes, degrees.
WORST_GAP_DEG = 2.5
#: Systematic part of the interval (95 %), of the focal length; from tests/bench/readout.
SYSTEMATIC_SHARE = 0.005
#: The field's shape must not favour a focal length this far (factor) from the result.
_SHAPE_FACTORS = np.array([0.5, 0.6, 0.72, 0.85, 1.0, 1.18, 1.4, 1.65, 2.0])

_INSTEAD = ("turn the camera once around on the spot, a little more than 360 degrees in 10 to 20 s, "
            "lens over the turning axis, scenery with texture 20 m away or more")


@dataclass(frozen=True)
class FieldOfView:
    """A measured field of view.

    Attributes
    ----------
    focal_px : float
        Focal length, native pixels.
    hfov_deg, hfov_ci_deg : float
        Horizontal field of view `2 atan(W / 2 F)`, and its 95 % half-width.
    turn_s : float
        How long the turn took.
    gap_deg : float
        How far the chain of rotations fails to close about the axes across the turn.
    """

    focal_px: float
    hfov_deg: float
    hfov_ci_deg: float
    turn_s: float
    gap_deg: float


@dataclass(frozen=True)
class _Link:
    """The same points in two frames; native pixels from the picture centre, shape (points, 2)."""

    first: np.ndarray
    second: np.ndarray


@dataclass(frozen=True)
class _Turn:
    links: tuple[_Link, ...]
    closing: _Link
    turn_s: float


def measure_turn(frames: Iterable[tuple[float, np.ndarray]], luma_scale: float = 1.0) -> FieldOfView:
    """Field of view of the mode a full turn was filmed in.

    Parameters
    ----------
    frames : iterable of (time_s, luma)
        Presentation time and luma plane, shape (height, width), from before or at the start of the turn.
    luma_scale : float
        What brings the luma plane to 0..255.

    Returns
    -------
    FieldOfView

    Raises
    ------
    CannotTell
        When the turn is not closed, cannot be followed, or does not look like a turn in place.
    """
    follower = _Follower(luma_scale)
    for time_s, luma in frames:
        if not follower.add(time_s, luma):
            break
    turn = follower.finish()
    focal, gap = _close(turn, follower.width_px)
    if np.degrees(gap) > WORST_GAP_DEG:
        raise CannotTell(f"the turn does not close: {np.degrees(gap):.2g} degrees are missing across it", _INSTEAD)
    _refuse_other_shape(turn, focal)
    hfov = 2 * np.arctan(follower.width_px / 2 / focal)
    share = float(np.hypot(1.96 * gap / (2 * np.pi), SYSTEMATIC_SHARE))
    # d(hfov) = -sin(hfov) dF / F
    return FieldOfView(focal, float(np.degrees(hfov)), float(np.degrees(np.sin(hfov)) * share), turn.turn_s,
                       float(np.degrees(gap)))


# --- following the points ---------------------------------------------------------------------------------------------


@dataclass
class _Match:
    """The frame most like the first view so far."""

    score: float
    link: _Link
    links: int
    work: np.ndarray
    shift_px: np.ndarray
    time_s: float


class _Follower:
    """Takes frames one by one; keeps the links between key frames, and the frame that shows the first view again."""

    def __init__(self, luma_scale: float) -> None:
        self.luma_scale = luma_scale
        self.links: list[_Link] = []
        self.match: _Match | None = None
        self.first: np.ndarray | None = None
        self.moved_px = 0.0          # by earlier key frames, working pixels
        self.farthest_px = 0.0
        self.width_px = 0
        self.start_s = 0.0
        self.lost_s: float | None = None

    def add(self, time_s: float, luma: np.ndarray) -> bool:
        """Follow the points into the next frame; False when no more frames are needed."""
        work, thumb = self._prepare(luma)
        if self.first is None:
            self.first, self.first_thumb, self.start_s = work, thumb, time_s
            self._begin_key(work)
            return True
        if not self._follow(work):
            self.lost_s = time_s
            return False
        shift = float(np.median((self.points - self.key_points)[:, 0, 0]))
        self.farthest_px = max(self.farthest_px, abs(self.moved_px + shift))
        gone_far = abs(self.moved_px + shift) > LEAST_WIDTHS * work.shape[1]
        if gone_far and not self._look_back(work, thumb, time_s):
            return False
        self.previous = work
        if abs(shift) > KEY_SHIFT * work.shape[1] or len(self.points) < KEY_LOSS * self.begun:
            self.links.append(self._link())
            self.moved_px += shift
            self._begin_key(work)
        return True

    def finish(self) -> _Turn:
        """The closed turn.

        Raises
        ------
        CannotTell
        """
        if self.first is None:
            raise CannotTell("holds no frame", _INSTEAD)
        if self.match is None:
            if self.lost_s is not None:
                raise CannotTell(
                    f"the picture cannot be followed at {self.lost_s:.1f} s (too little texture, or too fast)", _INSTEAD
                )
            widths = self.farthest_px / self.first.shape[1]
            raise CannotTell(f"its first view does not come back (the picture moved by {widths:.1f} of its widths): "
                             "the turn is not closed", _INSTEAD)
        closing = self._closing_link()
        return _Turn((*self.links[:self.match.links], self.match.link), closing, self.match.time_s - self.start_s)

    def _prepare(self, luma: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        grey = (
            cv2.convertScaleAbs(luma, alpha=self.luma_scale) if luma.dtype != np.uint8 or self.luma_scale != 1 else luma
        )
        self.width_px, self.height_px = luma.shape[1], luma.shape[0]
        self.scale = min(1.0, WORKING_WIDTH_PX / self.width_px)
        small = THUMB_WIDTH_PX / self.width_px
        work = (
            cv2.resize(grey, None, fx=self.scale, fy=self.scale, interpolation=cv2.INTER_AREA)
            if self.scale < 1
            else grey.copy()
        )
        return work, cv2.resize(work, None, fx=small / self.scale, fy=small / self.scale, interpolation=cv2.INTER_AREA)

    def _begin_key(self, work: np.ndarray) -> None:
        mask = np.zeros_like(work)
        reach = int((CENTRAL_SHARE + KEY_SHIFT) * work.shape[1])
        middle = work.shape[1] // 2
        mask[:, max(0, middle - reach):middle + reach] = 255
        points = cv2.goodFeaturesToTrack(work, MOST_POINTS, 0.01, max(4, work.shape[1] // 60), mask=mask, blockSize=5)
        self.key = self.previous = work
        self.key_points = self.points = np.zeros((0, 1, 2), np.float32) if points is None else points
        self.begun = len(self.points)

    def _follow(self, work: np.ndarray) -> bool:
        """Track from the last frame, then again from the key frame, so that nothing drifts within a link."""
        if self.begun < LEAST_POINTS:
            return False
        near, found, _ = cv2.calcOpticalFlowPyrLK(self.previous, work, self.points, None, winSize=(21, 21), maxLevel=4)
        good = found.ravel() == 1
        if good.sum() >= LEAST_POINTS:
            at, found, _ = cv2.calcOpticalFlowPyrLK(
                self.key, work, self.key_points[good], near[good].copy(), winSize=(21, 21), maxLevel=1,
                flags=cv2.OPTFLOW_USE_INITIAL_FLOW,
            )
            kept = (found.ravel() == 1) & (np.abs(at - near[good]).max((1, 2)) < 2.0)
            index = np.flatnonzero(good)[kept]
            if len(index) >= LEAST_POINTS:
                self.key_points, self.points = self.key_points[index], at[kept]
                return True
        return False

    def _native(self, points: np.ndarray) -> np.ndarray:
        centre = np.array([self.width_px, self.height_px]) / 2
        return (points.reshape(-1, 2).astype(float) + 0.5) / self.scale - centre

    def _link(self) -> _Link:
        return _inliers(self._native(self.key_points), self._native(self.points), 1.5 / self.scale)

    def _look_back(self, work: np.ndarray, thumb: np.ndarray, time_s: float) -> bool:
        """Compare with the first view; False when it was back and is gone again."""
        height, width = thumb.shape
        top, left = height // 6, width // 4
        patch = self.first_thumb[top:height - top, left:width - left]
        scores = cv2.matchTemplate(thumb, patch, cv2.TM_CCOEFF_NORMED)
        _, score, _, at = cv2.minMaxLoc(scores)
        if self.match is not None and score < GONE:
            return False
        if score > max(BACK, self.match.score if self.match else 0.0):
            step = work.shape[1] / width
            shift = np.array([at[0] - left, at[1] - top]) * step
            self.match = _Match(score, self._link(), len(self.links), work, shift, time_s)
        return True

    def _closing_link(self) -> _Link:
        """Points of the first frame found in the frame that shows its view again.

        Raises
        ------
        CannotTell
        """
        points = cv2.goodFeaturesToTrack(
            self.first, 2 * MOST_POINTS, 0.01, max(4, self.first.shape[1] // 80), blockSize=5
        )
        if points is not None:
            guess = points + self.match.shift_px.astype(np.float32)
            at, found, _ = cv2.calcOpticalFlowPyrLK(
                self.first,
                self.match.work,
                points,
                guess,
                winSize=(31, 31),
                maxLevel=3,
                flags=cv2.OPTFLOW_USE_INITIAL_FLOW,
            )
            good = found.ravel() == 1
            if good.sum() >= CLOSING_POINTS:
                link = _inliers(self._native(points[good]), self._native(at[good]), 2.0 / self.scale)
                if len(link.first) >= max(CLOSING_POINTS, CLOSING_SHARE * good.sum()):
                    return link
        raise CannotTell("its first view does not come back clearly enough: the turn is not closed", _INSTEAD)


def _inliers(first: np.ndarray, second: np.ndarray, tolerance_px: float) -> _Link:
    """The points that follow one projective map, as a rotation makes it."""
    if len(first) < 8:
        return _Link(first, second)
    warp, inlier = cv2.findHomography(first, second, cv2.RANSAC, tolerance_px, maxIters=500, confidence=0.995)
    keep = np.ones(len(first), bool) if warp is None else inlier.ravel().astype(bool)
    return _Link(first[keep], second[keep])


# --- closing the turn --------------------------------------------------------------------------------------------


def _directions(points_px: np.ndarray, focal_px: float) -> np.ndarray:
    rays = np.column_stack([points_px / focal_px, np.ones(len(points_px))])
    return rays / np.linalg.norm(rays, axis=1, keepdims=True)


def _rotation(link: _Link, focal_px: float, width_px: int | None = None) -> tuple[Rotation, float]:
    """Rotation that takes the first directions to the second, and the rms it leaves (radians).

    With `width_px`, only points whose way lies around the picture centre count, when there are enough of them.
    """
    first, second = link.first, link.second
    if width_px is not None:
        central = np.abs(first[:, 0] + second[:, 0]) / 2 < CENTRAL_SHARE * width_px
        if central.sum() >= LEAST_POINTS:
            first, second = first[central], second[central]
    found, rest = Rotation.align_vectors(_directions(second, focal_px), _directions(first, focal_px))
    return found, float(rest / np.sqrt(max(len(first), 1)))


def _close(turn: _Turn, width_px: int) -> tuple[float, float]:
    """Focal length at which the chain closes after one turn, and what stays open across it (radians)."""
    moved = sum(float(np.median((link.second - link.first)[:, 0])) for link in turn.links)
    focal = abs(moved) / (2 * np.pi)
    gap = np.inf
    for _ in range(40):
        steps = [_rotation(link, focal, width_px)[0] for link in turn.links]
        axis = np.sum([s.as_rotvec() for s in steps], axis=0)
        axis /= np.linalg.norm(axis)
        chain = Rotation.identity()
        for step in steps:
            chain = step * chain
        open_by = (chain * _rotation(turn.closing, focal)[0].inv()).as_rotvec()
        along = float(open_by @ axis)
        gap = float(np.linalg.norm(open_by - along * axis))
        # too short a focal length turns too far: the whole angle goes as 1 / F
        change = 1 + np.clip(along / (2 * np.pi), -0.3, 0.3)
        focal *= change
        if abs(change - 1) < 1e-7:
            break
    return float(focal), gap


def _refuse_other_shape(turn: _Turn, focal_px: float) -> None:
    """The links' own shape (a rotation moves the sides more than the centre) must not speak for another focal length.

    Raises
    ------
    CannotTell
    """
    rest = [sum(_rotation(link, focal_px * factor)[1] * factor for link in turn.links) for factor in _SHAPE_FACTORS]
    best = int(np.argmin(rest))
    middle = len(_SHAPE_FACTORS) // 2
    if abs(best - middle) > 1 and rest[best] < 0.7 * rest[middle]:
        raise CannotTell(
            "the picture does not move as one turn in place would move it: it turned more or less than once, "
            "or the camera travelled",
            _INSTEAD,
        )
