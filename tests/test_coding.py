"""The encoder's rhythm, found in the coded sizes of frames as a real encoder writes them."""

from __future__ import annotations

import numpy as np

from framegrade.coding import find_coding_rhythm
from framegrade.footage import read_frames
from tests.media import moving_texture, write_clip


def _sizes(path) -> np.ndarray:
    return np.array([np.nan if f.size_bytes is None else f.size_bytes for f in read_frames(path)])


def test_key_frames_every_twelve_are_a_rhythm_of_a_twelfth_of_the_frame_rate(tmp_path):
    # x264 itself: a key frame every 12 of 60 frames/s repeats at 5 Hz and its multiples
    options = {"g": "12", "keyint_min": "12", "sc_threshold": "0", "bf": "0"}
    clip = write_clip(tmp_path / "keys.mp4", moving_texture(120, 320, 180), rate=60, options=options)
    rhythm = find_coding_rhythm(_sizes(clip), 60.0)
    for multiple in (5, 10, 15, 20, 25, 30):
        assert np.min(np.abs(rhythm.alias_hz - multiple)) < 0.5
    # a vibration is judged by its alias: 125 Hz and 115 Hz are sampled as 5 Hz
    assert rhythm.near(np.array([5.0, 125.0, 115.0]), 60.0, 0.5).all()
    assert not rhythm.near(np.array([7.4, 127.4, 112.6]), 60.0, 0.5).any()


def test_sizes_without_a_pattern_have_none():
    sizes = np.random.default_rng(4).lognormal(8, 0.3, 240)
    assert len(find_coding_rhythm(sizes, 60.0).alias_hz) == 0


def test_unknown_sizes_have_none():
    assert len(find_coding_rhythm(np.full(100, np.nan), 60.0).alias_hz) == 0
    assert not find_coding_rhythm(np.full(100, np.nan), 60.0).near(np.array([5.0]), 60.0, 1.0).any()
