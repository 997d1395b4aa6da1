"""Reading clips: metadata against MediaInfo (its own parsers), pictures against what was encoded losslessly or against
OpenCV's decoding, times and timecode against what was written, and everything a card full of odd files holds."""

from __future__ import annotations

import io
import os
import socket
import subprocess
import sys
import tempfile
import threading
from fractions import Fraction
from pathlib import Path
from types import SimpleNamespace

import av
import cv2
import numpy as np
import pytest
from pymediainfo import MediaInfo

from framegrade.footage import (
    FootageError, ReadFaults, _Damage, exact_rate, find_clips, luma_plane, luma_scale, probe, rate_label, read_frames,
    timecode,
)
from media import can_encode, cut_short, moving_texture, real_clips, scribble, video_frame, write_clip

REAL = real_clips()

HEVC = {"preset": "ultrafast", "x265-params": "log-level=none"}

#: name -> (encoder, pixel format, ending, encoder options, names of the codec here and in MediaInfo)
CODECS = {
    "h264": ("libx264", "yuv420p", ".mp4", {"bf": "2", "g": "8"}, "h264", "AVC"),
    "h264-10": ("libx264", "yuv420p10le", ".mkv", {"g": "8"}, "h264", "AVC"),
    "hevc": ("libx265", "yuv420p", ".mp4", HEVC, "hevc", "HEVC"),
    "hevc-10": ("libx265", "yuv420p10le", ".mov", HEVC, "hevc", "HEVC"),
    "mjpeg": ("mjpeg", "yuvj420p", ".avi", {"q": "2"}, "mjpeg", "JPEG"),
    "prores": ("prores_ks", "yuv422p10le", ".mov", {}, "prores", "ProRes"),
    "vp9": ("libvpx-vp9", "yuv420p", ".webm", {"deadline": "realtime", "cpu-used": "8"}, "vp9", "VP9"),
    "av1": ("libsvtav1", "yuv420p", ".mp4", {"preset": "11"}, "av1", "AV1"),
}


def encoded(folder: Path, name: str, count: int = 16, width_px: int = 192, height_px: int = 112) -> Path:
    encoder, pixel_format, ending, options, _, _ = CODECS[name]
    if not can_encode(encoder):
        pytest.skip(f"the installed FFmpeg build has no encoder {encoder}")
    depth = 10 if "10" in pixel_format else 8
    frames = moving_texture(count, width_px, height_px, bit_depth=depth)
    return write_clip(folder / f"{name}{ending}", frames, codec=encoder, pixel_format=pixel_format,
                      rate=Fraction(30000, 1001), options=options)


def lumas(path: Path, **keywords) -> list[np.ndarray]:
    return [frame.luma.copy() for frame in read_frames(path, **keywords)]


def times(path: Path, **keywords) -> list[float]:
    return [frame.time_s for frame in read_frames(path, **keywords)]


def mediainfo_video(path: Path):
    return MediaInfo.parse(str(path)).video_tracks[0]


@pytest.fixture(scope="module")
def h264(tmp_path_factory) -> Path:
    """60 frames of 192x112 at 25 frames/s, a key frame every 10, two B-frames, index at the end."""
    options = {"g": "10", "bf": "2", "sc_threshold": "0", "crf": "12"}
    return write_clip(tmp_path_factory.mktemp("h264") / "clip.mp4", moving_texture(60, 192, 112), options=options)


# --- metadata --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", CODECS)
def test_metadata_of_each_codec_agrees_with_mediainfo(tmp_path, name):
    path = encoded(tmp_path, name)
    info, other = probe(path), mediainfo_video(path)
    general = MediaInfo.parse(str(path)).general_tracks[0]
    assert (info.width_px, info.height_px) == (other.width, other.height) == (192, 112)
    assert (info.codec, other.format) == CODECS[name][4:]
    assert info.frame_rate_hz == pytest.approx(float(other.frame_rate), abs=6e-4)  # it prints three decimals
    assert info.mode == "192x112@29.97"
    assert info.duration_s * 1e3 == pytest.approx(float(general.duration), abs=2)  # whole milliseconds, and so in MKV
    if other.bit_depth:  # not told for every codec
        assert info.bit_depth == other.bit_depth
    assert info.bit_depth == (10 if "10" in CODECS[name][1] else 8)
    assert info.pixel_format == CODECS[name][1]
    if info.frame_count is not None:
        assert info.frame_count == 16
    # Matroska tells no bit rate of the video alone: then it is that of the file.
    rate = general.overall_bit_rate if path.suffix in (".mkv", ".webm") else other.bit_rate
    assert info.bit_rate_mbps * 1e6 == pytest.approx(float(rate), rel=0.005)
    assert info.bits_per_pixel == pytest.approx(info.bit_rate_mbps * 1e6 / (192 * 112 * 30000 / 1001))


@pytest.mark.parametrize("name", sorted(REAL))
def test_real_recordings_agree_with_mediainfo(name):
    info, other = probe(REAL[name]), mediainfo_video(REAL[name])
    assert (info.width_px, info.height_px) == (other.width, other.height)
    assert info.frame_rate_hz == pytest.approx(float(other.frame_rate), abs=6e-4)
    assert info.frame_count == int(other.frame_count)
    assert info.duration_s * 1e3 == pytest.approx(float(other.duration), abs=1)
    assert info.bit_rate_mbps * 1e6 == pytest.approx(float(other.bit_rate), rel=1e-3)
    assert info.variable_frame_rate is False and info.rotation_deg == 0 and info.start_timecode is None
    assert info.profile == other.format_profile.split("@")[0]
    faults = ReadFaults()
    frames = [(frame.index, frame.time_s, frame.size_bytes) for frame in read_frames(REAL[name], faults=faults)]
    assert len(frames) == info.frame_count and faults.sentences() == ()
    assert [index for index, _, _ in frames] == list(range(info.frame_count))
    assert sum(size for _, _, size in frames) == int(other.stream_size)


def test_all_four_real_recordings_are_there():
    assert set(REAL) == {"bikes", "bigbuckbunny", "carphone_pristine", "carphone_distorted"}


@pytest.mark.parametrize("rotation_deg", [0, 90, 180, 270])
def test_rotation_is_reported_clockwise_and_never_applied(tmp_path, rotation_deg):
    frames = moving_texture(2, 96, 64)
    path = write_clip(tmp_path / "turned.mp4", frames, options={"qp": "0"}, rotation_deg=rotation_deg)
    info = probe(path)
    assert info.rotation_deg == rotation_deg == round(float(mediainfo_video(path).rotation or 0))
    assert (info.width_px, info.height_px) == (96, 64)
    np.testing.assert_array_equal(lumas(path), frames)


@pytest.mark.parametrize(
    "ending, rate, label", [(".mov", 25, "10:20:30:12"), (".mov", Fraction(30000, 1001), "01:00:00;02"),
                            (".mp4", Fraction(60000, 1001), "23:59:58;58")]
)
def test_start_timecode_agrees_with_mediainfo(tmp_path, ending, rate, label):
    path = write_clip(tmp_path / f"tc{ending}", moving_texture(3, 64, 48), rate=rate, timecode=label)
    tracks = MediaInfo.parse(str(path)).other_tracks
    assert probe(path).start_timecode == label == next(track.time_code_of_first_frame for track in tracks)


def test_modes_are_named_by_their_nominal_rate():
    rates = [24000 / 1001, 24, 25, 30000 / 1001, 30, 48, 50, 60000 / 1001, 59.9401, 60, 119.88, 120, 240, 12.5, 29.5]
    labels = "23.976 24 25 29.97 30 48 50 59.94 59.94 60 119.88 120 240 12.5 29.5".split()
    assert [rate_label(rate) for rate in rates] == labels
    assert rate_label(float("nan")) == "?"


# --- pictures --------------------------------------------------------------------------------------------------------

#: Lossless: encoder, options, pixel format, ending, size
LOSSLESS = [
    ("libx264", {"qp": "0"}, "yuv420p", ".mp4", (642, 362)),
    ("libx264", {"qp": "0"}, "yuv422p", ".mkv", (642, 361)),
    ("libx264", {"qp": "0"}, "yuv444p", ".mp4", (641, 361)),
    ("libx264", {"qp": "0"}, "yuvj420p", ".mov", (98, 66)),
    ("libx264", {"qp": "0"}, "yuv420p10le", ".mp4", (322, 182)),
    ("libx264", {"qp": "0"}, "yuv422p10le", ".mp4", (322, 181)),
    ("libx265", {"x265-params": "lossless=1:log-level=none"}, "yuv420p", ".mp4", (98, 66)),
    ("libx265", {"x265-params": "lossless=1:log-level=none"}, "yuv420p10le", ".mp4", (98, 66)),
    ("libx265", {"x265-params": "lossless=1:log-level=none"}, "yuv420p12le", ".mp4", (98, 66)),
    ("libvpx-vp9", {"lossless": "1", "deadline": "realtime", "cpu-used": "8"}, "yuv420p", ".webm", (98, 66)),
    ("ffv1", {}, "yuv444p", ".mkv", (641, 361)),
    ("ffv1", {}, "yuv420p", ".mkv", (641, 361)),
    ("ffv1", {}, "gray", ".mkv", (97, 65)),
    ("ffv1", {}, "gray10le", ".mkv", (97, 65)),
    ("rawvideo", {}, "nv12", ".nut", (98, 66)),
    ("rawvideo", {}, "yuv420p", ".avi", (98, 66)),
    ("rawvideo", {}, "gray16le", ".nut", (97, 65)),
]


@pytest.mark.parametrize("encoder, options, pixel_format, ending, size", LOSSLESS)
def test_luma_is_bit_exact(tmp_path, encoder, options, pixel_format, ending, size):
    if not can_encode(encoder):
        pytest.skip(f"the installed FFmpeg build has no encoder {encoder}")
    depth = next((bits for bits in (10, 12, 16) if str(bits) in pixel_format.replace("nv12", "")), 8)
    truth = moving_texture(5, *size, bit_depth=depth)
    path = write_clip(tmp_path / f"exact{ending}", truth, codec=encoder, options=options, pixel_format=pixel_format)
    info = probe(path)
    assert (info.width_px, info.height_px, info.bit_depth) == (*size, depth)
    got = [frame.luma for frame in read_frames(path)]  # views held beyond the next frame stay what they were
    assert got[0].dtype == (np.uint8 if depth == 8 else np.uint16)
    np.testing.assert_array_equal(got, truth)
    assert info.luma_scale == 2.0 ** (8 - depth)
    assert np.max(got[0]) * info.luma_scale <= 255


@pytest.mark.parametrize("pixel_format, bits", [("p010le", 10), ("p016le", 16), ("p210le", 10), ("p012le", 12)])
def test_luma_in_the_high_bits_is_scaled_right(pixel_format, bits):
    """Formats of hardware decoders; no container of FFmpeg's holds them, so the frame is made in memory."""
    truth = moving_texture(1, 66, 50, bit_depth=bits)[0]
    frame = video_frame(truth, pixel_format, shift_bits=16 - bits)
    got = luma_plane(frame) * luma_scale(pixel_format, frame.format.components[0].bits)
    np.testing.assert_array_equal(got, truth * 2.0 ** (8 - bits))


def test_pictures_without_a_luma_plane_are_converted_to_grey(tmp_path):
    grey = np.tile(np.arange(0, 255, 3, dtype=np.uint8)[:80], (48, 1))
    for pixel_format in ("rgb24", "bgra"):
        frame = av.VideoFrame.from_ndarray(np.repeat(grey[..., None], 3, axis=2), format="rgb24")
        path = write_clip(tmp_path / f"{pixel_format}.nut", [frame.reformat(format=pixel_format)] * 2,
                          codec="rawvideo", pixel_format=pixel_format)
        info = probe(path)
        got = lumas(path)[1]
        assert info.pixel_format == pixel_format and got.shape == (48, 80) and got.dtype == np.uint8
        # Grey from equal red, green and blue, in full or studio range: a straight line to a code or so.
        slope, offset = np.polyfit(grey[0].astype(float), got[0].astype(float), 1)
        assert 0.8 < slope < 1.02 and np.abs(np.polyval([slope, offset], grey[0]) - got[0]).max() <= 1.0


def test_pictures_stored_bottom_row_first_come_right_side_up(tmp_path):
    """The row order is the clock of everything measured later. FFmpeg's vertical flip only turns the line size
    negative, as its decoders do for files that store the bottom row first; an uncompressed colour AVI is one."""
    truth = moving_texture(1, 64, 48)[0]
    graph = av.filter.Graph()
    source = graph.add_buffer(width=64, height=48, format="gray", time_base=Fraction(1, 25))
    flip, sink = graph.add("vflip"), graph.add("buffersink")
    source.link_to(flip)
    flip.link_to(sink)
    graph.configure()
    graph.push(video_frame(truth, "gray"))
    flipped = graph.pull()
    assert flipped.planes[0].line_size < 0
    np.testing.assert_array_equal(luma_plane(flipped), truth[::-1])

    colour = av.VideoFrame.from_ndarray(np.repeat(truth[..., None], 3, axis=2), format="bgr24")
    path = write_clip(tmp_path / "bottom.avi", [colour, colour], codec="rawvideo", pixel_format="bgr24")
    assert np.corrcoef(lumas(path)[0].ravel(), truth.ravel())[0, 1] > 0.999


@pytest.mark.parametrize("path", [*REAL.values(), "h264", "hevc", "mjpeg", "vp9"], ids=str)
def test_luma_is_that_of_opencv(tmp_path, path):
    """OpenCV brings an FFmpeg of its own; told not to convert to colour it hands out the 8-bit luma plane."""
    path = path if isinstance(path, Path) else encoded(tmp_path, path)
    capture = cv2.VideoCapture(str(path), cv2.CAP_FFMPEG)
    capture.set(cv2.CAP_PROP_CONVERT_RGB, 0)
    for frame in read_frames(path, stop_s=1.0):
        ok, luma = capture.read()
        assert ok
        np.testing.assert_array_equal(frame.luma, luma)


@pytest.mark.parametrize("name", ["h264-10", "hevc-10", "prores"])
def test_deep_luma_agrees_with_opencv(tmp_path, name):
    """Above 8 bit OpenCV only hands out BGR. Neutral chroma makes that R = G = B, so luma follows from one channel by
    the studio range of Rec. ITU-R BT.601: Y = 16 + 219/255 R. The offset is left free: its converter rounds down."""
    path = encoded(tmp_path, name, count=6)
    info = probe(path)
    capture = cv2.VideoCapture(str(path))
    count = 0
    for frame in read_frames(path):
        ok, picture = capture.read()
        assert ok
        grey = picture[..., 1].astype(float)
        inside = (grey > 0) & (grey < 255)
        luma = (frame.luma * info.luma_scale)[inside]
        slope, offset = np.polyfit(grey[inside], luma, 1)
        assert slope == pytest.approx(219 / 255, rel=0.01) and offset == pytest.approx(17, abs=1.5)
        rest = luma - np.polyval([slope, offset], grey[inside])
        assert np.sqrt(np.mean(rest**2)) < 0.65  # rounding to 8 bit and back, and the converter's own
        count += 1
    assert count == 6 and not capture.read()[0]


def test_av1_luma_is_near_what_was_encoded(tmp_path):
    """OpenCV's build cannot decode AV1, so here the source pictures are the reference, through a lossy encoder."""
    path = encoded(tmp_path, "av1", count=8)
    for got, truth in zip(lumas(path), moving_texture(8, 192, 112), strict=True):
        assert np.corrcoef(got.ravel(), truth.ravel())[0, 1] > 0.98
        assert abs(got.mean() - truth.mean()) < 0.5


def test_luma_is_a_read_only_view(h264):
    """Writing into the decoder's reference pictures would spoil the frames after."""
    frame = next(read_frames(h264))
    assert not frame.luma.flags.owndata
    with pytest.raises(ValueError):
        frame.luma[0, 0] = 0
    with pytest.raises(ValueError):
        frame.luma.flags.writeable = True


@pytest.mark.parametrize("threads", [0, 1, 2, 5])
def test_threads_change_nothing(h264, threads):
    faults = ReadFaults()
    frames = list(read_frames(h264, threads=threads, faults=faults))
    alone = list(read_frames(h264, threads=1))
    assert [frame[:2] + frame[3:] for frame in frames] == [frame[:2] + frame[3:] for frame in alone]
    np.testing.assert_array_equal([frame.luma for frame in frames], [frame.luma for frame in alone])
    assert faults.sentences() == ()


def test_key_frames_and_coded_sizes_are_those_of_the_packets(h264):
    with av.open(str(h264)) as container:
        packets = {p.pts: p for p in container.demux(video=0) if p.size}
        ticks = container.streams.video[0].time_base
    for frame in read_frames(h264):
        packet = packets[round(frame.time_s / ticks)]
        assert (frame.size_bytes, frame.key) == (packet.size, packet.is_keyframe)
    assert [frame.index for frame in read_frames(h264) if frame.key] == [0, 10, 20, 30, 40, 50]


def test_memory_does_not_grow_with_length(tmp_path):
    """Peak memory of a process that reads a clip, by the operating system."""
    program = (
        "import resource, sys; from framegrade.footage import read_frames\n"
        "for frame in read_frames(sys.argv[1]): pass\n"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)"
    )

    def peak_bytes(count: int) -> int:
        path = write_clip(tmp_path / f"{count}.mkv", [moving_texture(1, 640, 360)[0]] * count,
                          options={"preset": "ultrafast"})
        run = subprocess.run([sys.executable, "-c", program, str(path)], capture_output=True, text=True, check=True)
        return int(run.stdout) * 1024

    # 360 frames more, of which a tenth would show.
    assert peak_bytes(400) - peak_bytes(40) < 36 * 640 * 360 * 1.5


# --- time ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "ending, time_base, ticks",
    [
        (".mp4", Fraction(1, 90000), [0, 3003, 6006, 9010, 15015, 15016, 21000, 30000]),
        (".mkv", Fraction(1, 1000), [0, 33, 67, 100, 167, 170, 230, 333]),
        (".mov", Fraction(1, 600), [0, 20, 40, 61, 100, 101, 140, 200]),
    ],
)
def test_variable_times_are_exact(tmp_path, ending, time_base, ticks):
    path = write_clip(tmp_path / f"vfr{ending}", moving_texture(8, 96, 64), rate=30, pts=ticks, time_base=time_base,
                      options={"bf": "2"})
    assert times(path) == [float(tick * time_base) for tick in ticks]  # to the last bit
    capture = cv2.VideoCapture(str(path))
    for expected in times(path):
        capture.grab()
        assert capture.get(cv2.CAP_PROP_POS_MSEC) == pytest.approx(expected * 1e3, abs=1e-3)
    if ending != ".mkv":  # which has no table of samples to tell by
        assert probe(path).variable_frame_rate is True
        assert mediainfo_video(path).frame_rate_mode == "VFR"


def test_times_count_from_the_first_frame(tmp_path):
    """A transport stream starts at an arbitrary time."""
    path = write_clip(tmp_path / "late.ts", moving_texture(5, 96, 64), pts=[1000 + n for n in range(5)],
                      time_base=Fraction(1, 25), options={"bf": "0"})
    np.testing.assert_allclose(times(path), np.arange(5) / 25, atol=1e-9)


def test_reordered_frames_in_a_container_of_decoding_times(tmp_path):
    """AVI holds decoding times only; B-frames then leave FFmpeg guessing wrong presentation times."""
    truth = moving_texture(20, 96, 64)
    path = write_clip(tmp_path / "b.avi", truth, options={"crf": "4", "bf": "3"})
    with av.open(str(path)) as container:  # the premise
        assert container.streams.video[0].codec_context.has_b_frames
        assert [frame.pts for frame in container.decode(video=0)] != sorted(range(20))
    faults = ReadFaults()
    frames = list(read_frames(path, faults=faults))
    assert len(frames) == 20
    for frame in frames:  # lossy, but nearer to its own source picture than to any other
        distances = [np.abs(frame.luma - luma.astype(float)).mean() for luma in truth]
        assert int(np.argmin(distances)) == frame.index
    assert [frame.time_s for frame in frames] == [n / 25 for n in range(20)]
    assert faults.sentences() == ()
    assert times(path, start_s=0.3, stop_s=0.5) == [n / 25 for n in range(8, 13)]


@pytest.mark.parametrize("encoder, ending", [("libx264", ".264"), ("mjpeg", ".mjpeg")])
def test_streams_without_times_are_placed_at_their_nominal_rate(tmp_path, encoder, ending):
    pixel_format = "yuvj420p" if encoder == "mjpeg" else "yuv420p"
    path = write_clip(tmp_path / f"raw{ending}", moving_texture(12, 96, 64), codec=encoder, pixel_format=pixel_format)
    faults, said = ReadFaults(), []
    got = [frame.time_s for frame in read_frames(path, faults=faults, on_fault=said.append)]
    np.testing.assert_allclose(got, np.arange(12) / 25, atol=1e-6)
    info = probe(path)
    assert info.duration_s == pytest.approx(12 / 25) and info.frame_count == 12 and info.variable_frame_rate is None
    if encoder == "libx264":
        assert faults.missing_timestamps == 12
        assert said == ["12 frames without a timestamp: placed at the nominal interval"]


@pytest.mark.parametrize("ending", [".mp4", ".mkv", ".ts", ".avi", ".264"])
def test_a_part_is_the_same_as_in_the_whole(tmp_path, ending):
    """Also where there is no index to seek by, or no time at all."""
    options = {"g": "10", "bf": "3", "x264-params": "open-gop=1"}
    path = write_clip(tmp_path / f"a{ending}", moving_texture(60, 96, 64), options=options)
    whole = {frame.time_s: frame.luma for frame in read_frames(path)}
    assert len(whole) == 60
    for start_s, stop_s in [(0.0, 0.2), (1.0, 1.5), (0.39, 0.41), (2.0, None), (1.96, 2.04), (5.0, 6.0)]:
        part = list(read_frames(path, start_s=start_s, stop_s=stop_s))
        expected = [t for t in whole if t >= start_s and (stop_s is None or t < stop_s)]
        assert [frame.time_s for frame in part] == expected
        assert [frame.index for frame in part] == list(range(len(part)))
        assert all((frame.luma == whole[frame.time_s]).all() for frame in part)


def test_drop_frame_timecode():
    """SMPTE 12M: 17 982 frames to ten minutes and 107 892 to an hour at 29.97; two labels skipped each minute but each
    tenth, four at 59.94."""
    ntsc = Fraction(30000, 1001)

    def label(frame: int, start: str = "00:00:00;00", rate: Fraction = ntsc) -> str:
        return timecode(frame / rate, float(rate), start)

    assert [label(n) for n in (0, 1799, 1800, 17981, 17982, 107892)] == [
        "00:00:00;00", "00:00:59;29", "00:01:00;02", "00:09:59;29", "00:10:00;00", "01:00:00;00"]
    double = Fraction(60000, 1001)
    assert [label(n, rate=double) for n in (3599, 3600, 2 * 17982, 2 * 107892)] == [
        "00:00:59;59", "00:01:00;04", "00:10:00;00", "01:00:00;00"]
    assert label(1, "09:59:59;29") == "10:00:00;00"
    assert label(1, "23:59:59;29") == "00:00:00;00"
    assert label(1800, "01:00:00;00") == "01:01:00;02"


def test_drop_frame_labels_are_those_of_counting():
    """Counted out label by label over 21 minutes: the skipping rule itself, with no formula to share."""
    for base, drop in ((30, 2), (60, 4)):
        rate, frame = Fraction(base * 1000, 1001), 0
        for minute in range(21):
            for second in range(60):
                for number in range(base):
                    if second == 0 and minute % 10 and number < drop:
                        continue
                    if number in (0, drop, base - 1) and second in (0, 1, 59):
                        expected = f"00:{minute:02d}:{second:02d};{number:02d}"
                        assert timecode(float(frame / rate), float(rate), "00:00:00;00") == expected
                    frame += 1


def test_other_timecode():
    assert timecode(3661.5, 25) == "01:01:01:12" or timecode(3661.5, 25) == "01:01:01:13"
    assert timecode(1.48, 25, "10:00:00:00") == "10:00:01:12"
    assert timecode(0.033, 30) == "00:00:00:01"  # times rounded to milliseconds name the nearest frame
    assert timecode(60.06, 30000 / 1001) == "00:01:00:00"  # counted without dropping: label time runs slow
    assert timecode(1, 25, "00:00:00;00") == "00:00:01:00"  # there is no drop-frame count at 25
    assert timecode(1.5, 240) == "00:00:01:120"
    assert timecode(1, 23.976) == "00:00:01:00"
    for bad in ("1:2", "00:00:00", "aa:00:00:00"):
        with pytest.raises(ValueError):
            timecode(0, 25, bad)
    for rate in (0, -1, float("nan"), float("inf")):
        with pytest.raises(ValueError):
            timecode(0, rate)
    with pytest.raises(ValueError):
        timecode(float("nan"), 25)
    assert exact_rate(29.97) == Fraction(30000, 1001) and exact_rate(60.0) == 60
    assert exact_rate(59.94006) == Fraction(60000, 1001) and exact_rate(12.5) == Fraction(25, 2)


# --- damage ----------------------------------------------------------------------------------------------------------


def test_truncated_file_with_its_index_first(tmp_path, h264):
    """The frames that must come out are those whose coded bytes lie before the cut, by FFmpeg's own packet table."""
    whole = lumas(h264)
    front = tmp_path / "front.mp4"
    with av.open(str(h264)) as source, av.open(str(front), "w", container_options={"movflags": "faststart"}) as target:
        stream = target.add_stream_from_template(source.streams.video[0])
        for packet in source.demux(video=0):
            if packet.size:
                packet.stream = stream
                target.mux(packet)
    cut = cut_short(front, tmp_path / "cut.mp4", 0.55)
    with av.open(str(front)) as container:
        packets = [p for p in container.demux(video=0) if p.size]
        ends = [p.pos + p.size for p in packets]
    intact = sum(end <= cut.stat().st_size for end in ends)
    assert 20 < intact < 50
    faults, said = ReadFaults(), []
    frames = list(read_frames(cut, faults=faults, on_fault=said.append))
    assert faults.truncated and faults.promised_frames == 60
    good = [frame for frame in frames if not frame.damaged]
    assert intact - 3 <= len(good) <= intact  # frames displayed before the broken one may lean on it
    assert len(frames) <= intact + 1
    assert f"the file is truncated: {len(frames)} of 60 frames could be read" in said
    for frame in good:
        assert (frame.luma == whole[round(frame.time_s * 25)]).all()
    assert probe(cut).frame_count == 60


def test_truncated_matroska_tells_the_seconds(tmp_path):
    path = write_clip(tmp_path / "a.mkv", moving_texture(60, 192, 112), options={"g": "10"})
    cut = cut_short(path, tmp_path / "cut.mkv", 0.5)
    faults = ReadFaults()
    count = sum(1 for _ in read_frames(cut, faults=faults))
    assert faults.truncated and 15 < count < 45
    assert f"the file is truncated: {count / 25:.2f} of 2.40 s could be read" in faults.sentences()


def test_recording_cut_off_before_its_index(tmp_path, h264):
    for keep in (0.3, 0.6):
        cut = cut_short(h264, tmp_path / "cut.mp4", keep)
        with pytest.raises(FootageError, match=r"cut\.mp4: has no index \(moov box\): the recording was cut off"):
            probe(cut)
        with pytest.raises(FootageError, match="has no index"):
            read_frames(cut)


def test_fragmented_recording_survives_a_cut(tmp_path):
    options = {"movflags": "frag_keyframe+empty_moov"}
    path = write_clip(tmp_path / "a.mp4", moving_texture(60, 192, 112), options={"g": "10"}, container_options=options)
    assert probe(path).duration_s == pytest.approx(2.4) and len(lumas(path)) == 60
    cut = cut_short(path, tmp_path / "cut.mp4", 0.6)
    assert 20 <= len(lumas(cut)) < 60
    assert probe(cut).duration_s < 2.4


@pytest.mark.parametrize("threads", [1, 3])
@pytest.mark.parametrize("number", [8, 11, 15, 21, 22, 23, 27, 40, 59])
@pytest.mark.parametrize("open_groups", [False, True])
def test_no_spoiled_frame_goes_unmarked(tmp_path, number, threads, open_groups):
    """One coded frame, in decoding order, is overwritten with zeros. A frame that came out other than it was and is not
    marked as damaged would be measured as motion. In open groups of pictures, frames shown before a key frame lean on
    the group before it."""
    options = {"g": "10", "bf": "3", "crf": "12", "x264-params": f"open-gop={int(open_groups)}:scenecut=0"}
    path = write_clip(tmp_path / "a.mp4", moving_texture(60, 192, 112), options=options)
    whole = lumas(path)
    with av.open(str(path)) as container:
        victim = [p for p in container.demux(video=0) if p.size][number]
    data = bytearray(path.read_bytes())
    data[victim.pos : victim.pos + victim.size] = bytes(victim.size)
    broken = tmp_path / "broken.mp4"
    broken.write_bytes(data)
    faults = ReadFaults()
    spoiled = 0
    for frame in read_frames(broken, faults=faults, threads=threads):
        same = bool((frame.luma == whole[round(frame.time_s * 25)]).all())
        assert same or frame.damaged
        spoiled += not same
    assert faults.lost_frames >= 1 and faults.damaged_frames >= spoiled
    assert faults.frames + faults.lost_frames + faults.unordered_timestamps == 60


def test_a_frame_lost_without_an_error_marks_what_follows():
    """A decoder may say nothing; then the frame is missed by its time. Packets by hand: two groups of four frames, the
    second frame of the first never comes out."""

    def packet(pts: int) -> SimpleNamespace:
        return SimpleNamespace(pts=pts, size=100 + pts, is_keyframe=pts % 4 == 0, is_corrupt=False, is_discard=False)

    damage = _Damage(by_time=True)
    for pts in range(8):
        damage.sent(packet(pts))
    marks = {}
    for pts in (0, 2, 3, 4, 5, 6, 7):
        coded, marks[pts] = damage.received(SimpleNamespace(pts=pts, key_frame=pts % 4 == 0, is_corrupt=False))
        assert coded == (100 + pts, pts % 4 == 0, False)
    assert [pts for pts, damaged in marks.items() if damaged] == [2, 3]


def test_pictures_gone_at_the_end_are_not_a_cut_off_file(tmp_path, h264):
    data = bytearray(h264.read_bytes())
    with av.open(str(h264)) as container:
        for packet in [p for p in container.demux(video=0) if p.size][30:]:
            data[packet.pos : packet.pos + packet.size] = bytes(packet.size)
    path = tmp_path / "tail.mp4"
    path.write_bytes(data)
    faults = ReadFaults()
    count = sum(1 for _ in read_frames(path, faults=faults))
    assert 25 <= count <= 30 and not faults.truncated
    assert f"{60 - count} frames could not be decoded: the coded data are damaged" in faults.sentences()


def test_a_lost_key_frame_marks_its_whole_group(tmp_path, h264):
    whole = lumas(h264)
    with av.open(str(h264)) as container:
        packets = [p for p in container.demux(video=0) if p.size]
    victim = packets[20]
    assert victim.is_keyframe
    data = bytearray(h264.read_bytes())
    data[victim.pos : victim.pos + victim.size] = bytes(victim.size)
    broken = tmp_path / "broken.mp4"
    broken.write_bytes(data)
    faults, said = ReadFaults(), []
    frames = list(read_frames(broken, faults=faults, on_fault=said.append))
    assert 50 <= len(frames) < 60
    # Without its key frame the decoder lets frames out in the wrong order: those that come too late are dropped.
    assert faults.lost_frames + faults.unordered_timestamps == 60 - len(frames) and not faults.truncated
    assert f"{faults.lost_frames} frames could not be decoded: the coded data are damaged" in said
    numbers = [round(frame.time_s * 25) for frame in frames]
    assert set(range(18)) | set(range(30, 60)) <= set(numbers)  # the other groups of pictures
    for number, frame in zip(numbers, frames):
        assert frame.damaged or (frame.luma == whole[number]).all(), number
    assert faults.damaged_frames == sum(frame.damaged for frame in frames)
    assert all(frame.damaged for number, frame in zip(numbers, frames) if 20 <= number < 30)


@pytest.mark.parametrize("seed", range(4))
def test_scribbled_intra_frames_are_marked_or_lost(tmp_path, seed):
    """ProRes: each frame stands alone, and its decoder notices random bytes."""
    truth = moving_texture(10, 192, 112, bit_depth=10)
    path = write_clip(tmp_path / "a.mov", truth, codec="prores_ks", pixel_format="yuv422p10le")
    whole = dict(enumerate(lumas(path)))
    size = path.stat().st_size
    broken = scribble(path, tmp_path / "b.mov", int(size * (0.3 + 0.1 * seed)), 400, seed)
    faults = ReadFaults()
    frames = list(read_frames(broken, faults=faults))
    assert len(frames) >= 8 and faults.damaged_frames + faults.lost_frames >= 1 and faults.sentences()
    for frame in frames:
        assert frame.damaged or (frame.luma == whole[round(frame.time_s * 25)]).all()


@pytest.mark.parametrize("ending", [".mp4", ".mkv", ".ts", ".avi"])
@pytest.mark.parametrize("seed", range(3))
def test_damage_in_the_middle_never_stops_the_reading(tmp_path, h264, ending, seed):
    path = write_clip(tmp_path / f"a{ending}", moving_texture(60, 192, 112), options={"g": "10", "bf": "2"})
    broken = scribble(path, tmp_path / f"b{ending}", path.stat().st_size // 2, 1500, seed)
    faults = ReadFaults()
    got = [frame.time_s for frame in read_frames(broken, faults=faults)]
    assert len(got) >= 40 and got == sorted(set(got))
    assert faults.frames == len(got)
    assert faults.sentences()


def test_header_kept_and_pictures_gone(tmp_path, h264):
    data = bytearray(h264.read_bytes())
    with av.open(str(h264)) as container:
        for packet in container.demux(video=0):
            if packet.size:
                data[packet.pos : packet.pos + packet.size] = bytes(packet.size)
    path = tmp_path / "blank.mp4"
    path.write_bytes(data)
    with pytest.raises(FootageError, match="holds no frame that can be decoded"):
        probe(path)
    with pytest.raises(FootageError, match="holds no frame that can be decoded"):
        list(read_frames(path))


def test_picture_size_that_changes_mid_clip(tmp_path):
    """Two raw streams end to end, as some recorders write when the mode is switched while recording."""
    for name, size, count in (("a.264", (96, 64), 7), ("b.264", (128, 80), 5)):
        write_clip(tmp_path / name, moving_texture(count, *size))
    path = tmp_path / "both.264"
    path.write_bytes((tmp_path / "a.264").read_bytes() + (tmp_path / "b.264").read_bytes())
    faults = ReadFaults()
    assert {frame.luma.shape for frame in read_frames(path, faults=faults)} == {(64, 96)}
    assert (faults.frames, faults.other_size_frames) == (7, 5)
    assert "5 frames dropped: the picture size or format changed mid-clip" in faults.sentences()


# --- odd clips -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("ending", [".mp4", ".mkv", ".avi", ".ts"])
def test_a_clip_of_one_frame(tmp_path, ending):
    truth = moving_texture(1, 96, 64)
    path = write_clip(tmp_path / f"one{ending}", truth, options={"qp": "0"})
    info = probe(path)
    faults = ReadFaults()
    frames = list(read_frames(path, faults=faults))
    assert len(frames) == 1 and frames[0].time_s == 0.0 and faults.sentences() == ()
    np.testing.assert_array_equal(frames[0].luma, truth[0])
    assert 0 < info.duration_s <= 0.05


def test_sound_beside_the_picture(tmp_path):
    """The sound track is longer: that is not a truncated picture."""
    path = write_clip(tmp_path / "both.mkv", moving_texture(10, 96, 64), sound_s=3.0)
    faults = ReadFaults()
    assert sum(1 for _ in read_frames(path, faults=faults)) == 10
    assert faults.sentences() == ()


def test_the_larger_of_two_video_streams_is_read(tmp_path):
    path = tmp_path / "two.mp4"
    with av.open(str(path), "w") as container:
        streams = []
        for size in ((64, 48), (128, 96)):
            stream = container.add_stream("libx264", rate=25)
            stream.width, stream.height, stream.pix_fmt = *size, "yuv420p"
            streams.append((stream, moving_texture(4, *size)))
        for stream, frames in streams:
            for number, luma in enumerate(frames):
                frame = video_frame(luma, "yuv420p")
                frame.pts, frame.time_base = number, Fraction(1, 25)
                container.mux(stream.encode(frame))
            container.mux(stream.encode(None))
    assert probe(path).mode == "128x96@25"
    assert {frame.luma.shape for frame in read_frames(path)} == {(96, 128)}


def test_cover_art_is_no_clip(tmp_path):
    """An attached picture larger than the video must not be taken for it, and alone it is no video."""
    ok, picture = cv2.imencode(".jpg", np.full((480, 640, 3), 90, np.uint8))
    assert ok
    frames = moving_texture(4, 96, 64)
    for name, has_video in (("cover.mkv", True), ("song.mkv", False)):
        path = tmp_path / name
        with av.open(str(path), "w") as container:
            video = None
            if has_video:
                video = container.add_stream("libx264", rate=25)
                video.width, video.height, video.pix_fmt = 96, 64, "yuv420p"
            sound = container.add_stream("aac", rate=48000, layout="mono")
            container.add_attachment("cover.jpg", "image/jpeg", picture.tobytes())
            for number, luma in enumerate(frames if has_video else ()):
                frame = video_frame(luma, "yuv420p")
                frame.pts, frame.time_base = number, Fraction(1, 25)
                container.mux(video.encode(frame))
            if has_video:
                container.mux(video.encode(None))
            block = av.AudioFrame.from_ndarray(np.zeros((1, 1024), np.float32), format="fltp", layout="mono")
            block.sample_rate, block.pts, block.time_base = 48000, 0, Fraction(1, 48000)
            container.mux(sound.encode(block))
            container.mux(sound.encode(None))
        with av.open(str(path)) as container:  # the premise: FFmpeg shows the cover as a video stream
            assert any(s.disposition & av.stream.Disposition.attached_pic for s in container.streams.video)
        if has_video:
            assert probe(path).mode == "96x64@25" and len(lumas(path)) == 4
        else:
            with pytest.raises(FootageError, match="no video stream, only sound"):
                probe(path)


NAMES = [
    "with space.mp4", "it's \"q\".mp4", "-i.mp4", "--help.mp4", "été 日本 🎥.mp4", "new\nline.mp4", "img%03d.mp4",
    "%s.mp4", "a|b.mp4", "concat:in.mp4|in.mp4", "http:in.mp4", "file:in.mp4", "pipe:0", "data:x", "lavfi:testsrc",
    "subfile,,start,0,end,0,,:in.mp4", "x?*[a].mp4", "back\\slash.mp4", "tab\t.mp4", "$HOME.mp4", "~.mp4", "noending",
    os.fsdecode(b"bad\xff.mp4"), "is.txt", "is.m3u8", "rtsp:x", " lead.mp4", "trail.mp4 ", "a" * 251 + ".mp4",
]


def test_names_are_only_names(tmp_path, monkeypatch):
    """Opened relative and absolute: a name that FFmpeg could read as an address, a pattern or an option is a name."""
    monkeypatch.chdir(tmp_path)
    source = write_clip(tmp_path / "in.mp4", moving_texture(3, 64, 48)).read_bytes()
    for name in NAMES:
        Path(name).write_bytes(source)
        for path in (name, Path(name), tmp_path / name):
            assert probe(path).mode == "64x48@25", name
            assert sum(1 for _ in read_frames(path)) == 3, name
        os.unlink(name)
    error = FootageError("new\nline\udcff.mp4", "is a test")
    assert str(error) == "new\\nline\\udcff.mp4: is a test"


def test_a_play_list_reaches_nothing(tmp_path):
    """A list of addresses that calls itself a clip must not make a connection, to this machine or any other."""
    server = socket.create_server(("127.0.0.1", 0))
    server.settimeout(1.0)
    port = server.getsockname()[1]
    called = threading.Event()

    def listen() -> None:
        try:
            server.accept()[0].close()
            called.set()
        except OSError:
            pass

    listener = threading.Thread(target=listen)
    listener.start()
    for name, text in {
        "a.m3u8": f"#EXTM3U\n#EXT-X-TARGETDURATION:10\n#EXTINF:10,\nhttp://127.0.0.1:{port}/a.ts\n#EXT-X-ENDLIST\n",
        "b.mp4": f"#EXTM3U\n#EXT-X-TARGETDURATION:10\n#EXTINF:10,\nhttp://127.0.0.1:{port}/a.ts\n#EXT-X-ENDLIST\n",
        "c.ffconcat": f"ffconcat version 1.0\nfile http://127.0.0.1:{port}/a.mp4\n",
    }.items():
        path = tmp_path / name
        path.write_text(text)
        with pytest.raises(FootageError, match=name):
            probe(path)
    server.close()
    listener.join()
    assert not called.is_set()


def _still(ending: str) -> bytes:
    return cv2.imencode(ending, np.zeros((48, 64), np.uint8))[1].tobytes()


def _gif(frames: int) -> bytes:
    with io.BytesIO() as buffer:
        with av.open(buffer, "w", format="gif") as container:
            stream = container.add_stream("gif", rate=25)
            stream.width, stream.height, stream.pix_fmt = 64, 48, "rgb8"
            for luma in moving_texture(frames, 64, 48):
                container.mux(stream.encode(av.VideoFrame.from_ndarray(luma, format="gray").reformat(format="rgb8")))
            container.mux(stream.encode(None))
        return buffer.getvalue()


@pytest.mark.parametrize(
    "name, data, cause",
    [
        ("empty.mp4", b"", "the file is empty"),
        ("text.mp4", b"these are words\n" * 500, "is not a video file, or its header is damaged"),
        ("text.txt", b"these are words\n" * 500, "is not a video file"),
        ("zeros.mp4", bytes(100_000), "is not a video file, or its header is damaged"),
        ("noise.mov", np.random.default_rng(3).bytes(100_000), "is not a video file, or its header is damaged"),
        ("photo.jpg", _still(".jpg"), "is a still picture, not a clip"),
        ("photo.mp4", _still(".png"), "is a still picture, not a clip"),
    ],
)
def test_files_that_are_no_clips(tmp_path, name, data, cause):
    path = tmp_path / name
    path.write_bytes(data)
    for reading in (probe, read_frames):
        with pytest.raises(FootageError) as caught:
            reading(path)
        assert str(caught.value) == f"{path}: {cause}"


def test_other_paths_that_are_no_clips(tmp_path):
    os.mkfifo(tmp_path / "pipe.mp4")
    (tmp_path / "loop.mp4").symlink_to("loop.mp4")
    (tmp_path / "file").write_bytes(b"x")
    for path, cause in [
        (tmp_path / "none.mp4", "there is no such file"),
        (tmp_path, "is a folder, not a clip"),
        (tmp_path / "pipe.mp4", "is not a regular file, so not a clip"),  # and does not wait for a writer
        (tmp_path / "file" / "a.mp4", "cannot be opened: not a directory"),
        (tmp_path / ("x" * 300 + ".mp4"), "cannot be opened: file name too long"),
        (tmp_path / "loop.mp4", "cannot be opened: too many levels of symbolic links"),
    ]:
        with pytest.raises(FootageError) as caught:
            probe(path)
        assert str(caught.value) == f"{path}: {cause}"
    sound = write_clip(tmp_path / "sound.mp4", [], sound_only=True)
    with pytest.raises(FootageError, match="holds no video stream, only sound"):
        probe(sound)


def test_a_file_without_permission_is_told():
    """Root reads everything, so the test gives that up for the while."""
    with tempfile.TemporaryDirectory() as folder:
        os.chmod(folder, 0o755)
        path = write_clip(Path(folder, "locked.mp4"), moving_texture(2, 64, 48))
        os.chmod(path, 0)
        was = os.geteuid()
        if was == 0:
            os.seteuid(65534)
        try:
            with pytest.raises(FootageError, match="cannot be read: permission denied"):
                probe(path)
        finally:
            os.seteuid(was)


def test_animated_pictures_read_as_clips(tmp_path):
    path = tmp_path / "anim.gif"
    path.write_bytes(_gif(5))
    assert [luma.shape for luma in lumas(path)] == [(48, 64)] * 5


# --- finding clips ---------------------------------------------------------------------------------------------------


def touch(folder: Path, *names: str) -> None:
    for name in names:
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"x")


def test_folders_are_searched_in_natural_order(tmp_path):
    touch(tmp_path, "clip10.mp4", "clip2.MP4", "Clip1.mov", "sub/b.mkv", "sub/deep/a.avi", "notes.txt", ".hidden.mp4",
          ".trash/c.mp4", "out/clips/d.mp4", "._clip2.mp4")
    clips, errors = find_clips([tmp_path], exclude=tmp_path / "out")
    assert [str(clip.relative_to(tmp_path)) for clip in clips] == [
        "Clip1.mov", "clip2.MP4", "clip10.mp4", "sub/b.mkv", "sub/deep/a.avi"]
    assert errors == []


def test_each_clip_comes_once(tmp_path, monkeypatch):
    touch(tmp_path, "a.mp4", "sub/b.mp4")
    (tmp_path / "link.mp4").symlink_to("a.mp4")
    (tmp_path / "sub" / "again").symlink_to(tmp_path, target_is_directory=True)  # a loop
    monkeypatch.chdir(tmp_path)
    clips, errors = find_clips([".", tmp_path / "a.mp4", "sub/../a.mp4", "sub", "*.mp4"])
    assert sorted(clip.name for clip in clips if clip.name != "link.mp4" and clip.name != "a.mp4") == ["b.mp4"]
    assert len(clips) == 2 and errors == []


def test_patterns_are_expanded_where_no_file_has_that_name(tmp_path, monkeypatch):
    touch(tmp_path, "a1.mp4", "a2.mp4", "sub/a3.mp4", "odd[1].mp4", "odd1.mp4", "readme.md")
    monkeypatch.chdir(tmp_path)
    assert [str(clip) for clip in find_clips(["a*.mp4"])[0]] == ["a1.mp4", "a2.mp4"]
    assert [str(clip) for clip in find_clips(["**/a?.mp4"])[0]] == ["a1.mp4", "a2.mp4", "sub/a3.mp4"]
    assert [str(clip) for clip in find_clips(["odd[1].mp4"])[0]] == ["odd[1].mp4"]
    assert [str(clip) for clip in find_clips(["readme.md"])[0]] == ["readme.md"]  # named outright: tried


def test_paths_that_name_nothing_are_told_one_by_one(tmp_path):
    touch(tmp_path, "a.mp4", "texts/readme.md", "only/.hidden.mp4")
    given = [tmp_path / "a.mp4", tmp_path / "none.mp4", tmp_path / "texts", tmp_path / "x*.mp4", tmp_path / "only"]
    clips, errors = find_clips(given)
    assert clips == [tmp_path / "a.mp4"]
    assert [str(error) for error in errors] == [
        f"{tmp_path}/none.mp4: there is no such file or folder", f"{tmp_path}/texts: the folder holds no clip",
        f"{tmp_path}/x*.mp4: no file matches this pattern", f"{tmp_path}/only: the folder holds no clip"]
