"""Repeated and dropped frames and uneven timestamps, on series built so that every fault is known.

There is no outside source for the thresholds (common practice, from memory); what is checked is that planted faults are
found, each and no other, over many kinds of clip.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from framegrade.picture import disturbed_pairs, find_cadence_faults

RATE_HZ = 30.0


@dataclass(frozen=True)
class Clip:
    """Timestamps and per-pair figures of a made-up clip that pans at a steady speed and shakes a little."""

    time_s: np.ndarray
    next_time_s: np.ndarray
    change_level: np.ndarray
    step_px: np.ndarray

    def faults(self):
        return find_cadence_faults(self.time_s, self.next_time_s, self.change_level, self.step_px)


def make_clip(count=300, speed_px_per_s=(60.0, 20.0), shake_px=0.1, noise_level=0.6, grey_per_px=1.5, drop=(),
              repeat=(), restamp=False, jitter_s=0.0, seed=3):
    """Frames of a camera whose picture moves; `drop` and `repeat` are numbers of frames of the flawless clip.

    A dropped frame is left out (with `restamp`, its gap in the timestamps too); a repeated one shows that before it.
    """
    rng = np.random.default_rng(seed)
    shown = np.arange(count) / RATE_HZ
    shake = shake_px * rng.normal(size=(count, 2))
    kept = np.setdiff1d(np.arange(count), drop)
    picture = kept.copy()
    for frame in repeat:
        picture[kept == frame] = picture[np.flatnonzero(kept == frame) - 1]
    position = shown[:, None] * np.array(speed_px_per_s) + shake
    step = np.diff(position[picture], axis=0)
    same = np.diff(picture) == 0
    change = grey_per_px * np.hypot(*step.T) + noise_level * (1 + 0.05 * rng.normal(size=len(step)))
    change[same] = 0.01 * noise_level
    stamps = np.arange(len(kept)) / RATE_HZ if restamp else shown[kept]
    stamps = stamps + jitter_s * rng.normal(size=len(stamps))
    return Clip(stamps[:-1], stamps[1:], change, step)


def test_a_flawless_clip_has_no_faults():
    for seed in range(20):
        faults = make_clip(seed=seed).faults()
        assert not faults.repeated.any() and not faults.dropped.any()
        assert faults.uneven == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("noise_level", [0.2, 0.6, 3.0])
def test_repeated_frames(noise_level):
    frames = [7, 40, 41, 120, 298]
    faults = make_clip(repeat=frames, noise_level=noise_level).faults()
    # pair n is frame n to frame n + 1: frame 7 repeats frame 6 in pair 6
    assert np.flatnonzero(faults.repeated).tolist() == [frame - 1 for frame in frames]
    assert not faults.dropped.any()


def test_every_fifth_frame_repeated():
    """24 pictures a second stored as 30: a regular pull-down."""
    frames = np.arange(4, 300, 5)
    faults = make_clip(repeat=frames).faults()
    assert np.flatnonzero(faults.repeated).tolist() == (frames - 1).tolist()


def test_dropped_frames_leave_gaps():
    faults = make_clip(drop=[50, 120, 121, 122, 200]).faults()
    # after frame 50 is gone, pair 49 spans the gap; later numbers move up by the frames already dropped
    assert np.flatnonzero(faults.dropped).tolist() == [49, 118, 195]
    assert not faults.repeated.any()
    assert faults.uneven == pytest.approx(0.0, abs=1e-9)  # a gap is a gap, not unevenness


def test_dropped_frames_behind_rewritten_timestamps():
    """No gap is left, but one step is twice as long as its steady neighbours."""
    faults = make_clip(drop=[50, 120], restamp=True, shake_px=0.02).faults()
    assert np.flatnonzero(faults.dropped).tolist() == [49, 118]


def test_a_strong_shake_is_no_dropped_frame():
    for seed in range(20):
        assert not make_clip(shake_px=3.0, restamp=True, seed=seed).faults().dropped.any()


def test_uneven_timestamps_against_numpy():
    clip = make_clip(jitter_s=0.002, seed=9)
    interval = clip.next_time_s - clip.time_s
    faults = clip.faults()
    assert faults.uneven == pytest.approx(np.std(interval) / np.median(interval), rel=1e-9)  # numpy.std: no gap here
    assert faults.uneven == pytest.approx(np.sqrt(2) * 0.002 * RATE_HZ, rel=0.15)
    assert not faults.dropped.any() and not faults.repeated.any()


def test_a_variable_frame_rate_is_not_dropped_frames():
    """A steady pan recorded with intervals that alternate by a quarter: speeds, not steps, are alike."""
    interval = np.tile([0.9, 1.15, 1.0, 0.95], 75) / RATE_HZ
    stamps = np.concatenate([[0.0], np.cumsum(interval)])
    step = interval[:, None] * np.array([90.0, 0.0])
    clip = Clip(stamps[:-1], stamps[1:], 1.5 * step[:, 0] + 0.5, step)
    faults = clip.faults()
    assert not faults.dropped.any() and not faults.repeated.any()
    assert faults.uneven == pytest.approx(np.std(interval) / np.median(interval), rel=1e-9)


# --- the still picture -----------------------------------------------------------------------------------------------


def still_clip(levels):
    stamps = np.arange(len(levels) + 1) / RATE_HZ
    return Clip(stamps[:-1], stamps[1:], np.asarray(levels, float), np.zeros((len(levels), 2)))


@pytest.mark.parametrize("level", [0.0, 0.01, 0.1])
def test_a_still_picture_is_not_a_row_of_repeated_frames(level):
    rng = np.random.default_rng(0)
    faults = still_clip(level * rng.uniform(0, 1.5, 200)).faults()
    assert not faults.repeated.any() and not faults.dropped.any()


def test_a_still_but_noisy_picture_shows_its_repeats():
    levels = np.full(200, 1.2)
    levels[[30, 31, 99]] = 0.0
    assert np.flatnonzero(still_clip(levels).faults().repeated).tolist() == [30, 31, 99]


def test_a_camera_that_comes_to_rest_does_not_repeat():
    """The change falls from motion to noise over a second: each pair is like its neighbours."""
    levels = np.concatenate([np.full(60, 6.0), np.geomspace(6.0, 0.9, 30), np.full(60, 0.9)])
    assert not still_clip(levels).faults().repeated.any()


def test_a_camera_that_stops_at_once_does_not_repeat():
    levels = np.concatenate([np.full(60, 8.0), np.full(60, 0.7)])
    assert not still_clip(levels).faults().repeated.any()


# --- short and broken series -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("pairs", [1, 2, 3, 5])
def test_very_short_clips(pairs):
    clip = make_clip(count=pairs + 1)
    faults = clip.faults()
    assert len(faults.repeated) == len(faults.dropped) == pairs
    assert not faults.repeated.any() and not faults.dropped.any()


def test_steps_that_were_not_measured():
    clip = make_clip(drop=[50], restamp=True, shake_px=0.02)
    step = clip.step_px.copy()
    step[100:110] = np.nan
    faults = Clip(clip.time_s, clip.next_time_s, clip.change_level, step).faults()
    assert np.flatnonzero(faults.dropped).tolist() == [49]


def test_disturbed_pairs():
    """A repeat disturbs its own pair and the next, whose step spans two intervals; a gap only its own."""
    faults = make_clip(repeat=[60], drop=[150]).faults()
    assert np.flatnonzero(disturbed_pairs(faults)).tolist() == [59, 60, 149]
    at_end = make_clip(count=50, repeat=[49]).faults()
    assert np.flatnonzero(disturbed_pairs(at_end)).tolist() == [48]


@pytest.mark.parametrize("held", [2, 3])
def test_every_picture_stored_twice_or_more(held):
    """30 (or 20) pictures a second in a file of 60."""
    frames = [n for n in range(1, 300) if n % held]
    faults = make_clip(repeat=frames).faults()
    assert faults.repeated.mean() == pytest.approx(1 - 1 / held, abs=0.02)
