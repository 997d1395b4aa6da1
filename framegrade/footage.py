"""Open a clip: its metadata, and its frames as (time, luma plane) without colour conversion.

Everything later in the line works on the picture *as recorded*: the sensor's own row order. A display rotation
written in the file is reported but never applied, because the rows must stay in the order they were exposed in.
"""

from __future__ import annotations

import glob
import heapq
import math
import os
import re
import struct
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from pathlib import Path
from typing import Any, NamedTuple

import av
import numpy as np

from framegrade.paths import shown, unreadable_cause

#: File name endings that a folder is searched for (a file named outright is tried whatever its ending).
CLIP_EXTENSIONS = frozenset(
    ".mp4 .mov .m4v .mkv .webm .avi .mts .m2ts .ts .mpg .mpeg .mxf .3gp .wmv .flv .ogv .mjpeg .mjpg".split()
)

#: Containers that hold their own pictures. Play lists and numbered stills, which point at other files, are refused.
_CONTAINERS = frozenset(
    "mov mp4 m4a 3gp 3g2 mj2 matroska webm avi mpegts mpeg mpegvideo mxf flv asf ogg ivf nut h264 hevc vvc av1 obu m4v "
    "mjpeg yuv4mpegpipe gif apng dv vc1 rm gxf dirac".split()
)

#: Frame rates that cameras are set to, in hertz; a measured average this close is printed under the nominal figure.
_NOMINAL_RATES_HZ = tuple(
    base * factor
    for base in (24, 25, 30, 48, 50, 60, 90, 100, 120, 240)
    for factor in (Fraction(1), Fraction(1000, 1001))
)
_NOMINAL_TOLERANCE = 3e-4  # less than a third of the 0.1 % between 30 and 29.97

#: Consecutive failed reads after which the rest of a file is given up as unreadable.
_MAX_FAILED_READS = 16


class FootageError(Exception):
    """A clip that cannot be used, in one sentence: the file and the cause.

    Parameters
    ----------
    path : str or path-like
        The file, as the user named it.
    cause : str
        What is wrong, without the file name and without a closing full stop.
    """

    def __init__(self, path: str | os.PathLike[str], cause: str) -> None:
        super().__init__(path, cause)
        self.path = Path(path)
        self.cause = cause

    def __str__(self) -> str:
        return f"{shown(self.path)}: {self.cause}"


@dataclass(frozen=True)
class ClipInfo:
    """What a clip's container and first frame tell about it.

    Attributes
    ----------
    path : Path
        As given.
    width_px, height_px : int
        The recorded (decoded) picture, in the sensor's row order; a display rotation is not applied.
    rotation_deg : int
        Clockwise turn a player applies for display: 0, 90, 180 or 270.
    frame_rate_hz : float
        Average over the clip, or what most frame intervals say where they are uneven (a few dropped frames do not make
        another camera mode); NaN when neither container nor stream tells it.
    variable_frame_rate : bool or None
        True when frames are not evenly spaced by more than one tick of the container's clock. None when only
        reading the whole clip can tell.
    codec, pixel_format : str
        FFmpeg's names, such as "h264" and "yuv420p".
    profile : str or None
        Profile of the codec, such as "High".
    bit_depth : int
        Bits per luma sample.
    duration_s : float
        NaN when unknown.
    frame_count : int or None
        Frames the container promises; None when it promises none.
    bit_rate_mbps : float
        Megabit per second of the video stream, or of the whole file where the container does not part them.
    start_timecode : str or None
        "HH:MM:SS:FF", or "HH:MM:SS;FF" for drop-frame counting.
    time_base : Fraction
        Seconds per tick of the presentation timestamps.
    container : str
        FFmpeg's name of the container format.
    file_bytes : int
        Size of the file.
    """

    path: Path
    width_px: int
    height_px: int
    rotation_deg: int
    frame_rate_hz: float
    variable_frame_rate: bool | None
    codec: str
    pixel_format: str
    bit_depth: int
    duration_s: float
    frame_count: int | None
    bit_rate_mbps: float
    start_timecode: str | None
    time_base: Fraction
    profile: str | None = None
    container: str = ""
    file_bytes: int = 0

    @property
    def bits_per_pixel(self) -> float:
        """Coded bits per picture element and frame; NaN when bit rate or frame rate is unknown."""
        return self.bit_rate_mbps * 1e6 / (self.width_px * self.height_px * self.frame_rate_hz)

    @property
    def frame_interval_s(self) -> float:
        """Average time from frame to frame; NaN when unknown."""
        return 1.0 / self.frame_rate_hz

    @property
    def mode(self) -> str:
        """The camera setting by name, such as "1280x720@60" or "1920x1080@29.97"."""
        return f"{self.width_px}x{self.height_px}@{rate_label(self.frame_rate_hz)}"

    @property
    def luma_scale(self) -> float:
        """Factor that brings the values of `Frame.luma` to 0..255."""
        return luma_scale(self.pixel_format, self.bit_depth)


class Frame(NamedTuple):
    """One decoded frame.

    Attributes
    ----------
    index : int
        Counts the frames of this reading from 0; without `start_s` it is the frame's number in the clip.
    time_s : float
        Presentation time from the clip's first frame, exactly `(pts - first pts) * time_base` rounded once.
    luma : ndarray, shape (height_px, width_px), uint8 or uint16
        Read-only view of the decoder's luma plane, in its native code values; rows are contiguous, the row stride
        may be longer than the width. It stays valid as long as it is referenced, but each one held keeps a whole
        decoder buffer alive: copy what is to be kept for long.
    key : bool
        True for a frame that is decodable on its own.
    size_bytes : int or None
        Coded size; None when it cannot be told.
    damaged : bool
        True when this frame, or one it may have been predicted from, was not decoded intact.
    """

    index: int
    time_s: float
    luma: np.ndarray
    key: bool
    size_bytes: int | None
    damaged: bool = False


@dataclass
class ReadFaults:
    """What went wrong while a clip was read. Filled in by `read_frames`; complete when its iterator has ended.

    Attributes
    ----------
    frames : int
        Frames handed out.
    promised_frames : int or None
        Frames the container promised.
    read_s, promised_s : float
        End of the last frame handed out, and the duration the container promised; NaN when unknown.
    decode_errors : int
        Packets the decoder refused.
    lost_frames : int
        Frames that are in the file but came out of the decoder not at all.
    damaged_frames : int
        Frames handed out with `Frame.damaged` set.
    missing_timestamps, unordered_timestamps, other_size_frames : int
        Frames whose time was filled in; frames dropped because their time did not advance; frames dropped because
        the picture size or format changed.
    read_errors : int
        Failed reads from the file.
    truncated : bool
        The file ended before what its container promised.
    """

    frames: int = 0
    promised_frames: int | None = None
    read_s: float = math.nan
    promised_s: float = math.nan
    decode_errors: int = 0
    lost_frames: int = 0
    damaged_frames: int = 0
    missing_timestamps: int = 0
    unordered_timestamps: int = 0
    other_size_frames: int = 0
    read_errors: int = 0
    truncated: bool = False

    def sentences(self) -> tuple[str, ...]:
        """The faults as sentences without a file name; empty for a clean clip."""
        found = []
        if self.truncated:
            state = "truncated or damaged" if self.lost_frames or self.decode_errors else "truncated"
            if self.promised_frames:
                found.append(f"the file is {state}: {self.frames} of {self.promised_frames} frames could be read")
            else:
                found.append(f"the file is {state}: {self.read_s:.2f} of {self.promised_s:.2f} s could be read")
        if self.read_errors:
            found.append(f"{_times(self.read_errors, 'read')} from the file failed")
        if self.lost_frames or self.decode_errors:
            lost = max(self.lost_frames, self.decode_errors)
            found.append(f"{_times(lost, 'frame')} could not be decoded: the coded data are damaged")
        if self.damaged_frames:
            found.append(f"{_times(self.damaged_frames, 'frame')} may be spoiled by damaged coded data")
        if self.missing_timestamps:
            count = _times(self.missing_timestamps, "frame")
            found.append(f"{count} without a timestamp: placed at the nominal interval")
        if self.unordered_timestamps:
            found.append(f"{_times(self.unordered_timestamps, 'frame')} dropped: the timestamp did not advance")
        if self.other_size_frames:
            count = _times(self.other_size_frames, "frame")
            found.append(f"{count} dropped: the picture size or format changed mid-clip")
        return tuple(found)


def _times(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


# --- rates and timecode ----------------------------------------------------------------------------------------------


def exact_rate(frame_rate_hz: float | Fraction) -> Fraction:
    """The exact frame rate behind a printed or averaged one: 29.97 becomes 30000/1001.

    Parameters
    ----------
    frame_rate_hz : float or Fraction
        Positive, hertz.

    Returns
    -------
    Fraction
        The whole number or 1000/1001 of it within 20 parts per million, else the value itself.

    Raises
    ------
    ValueError
        For a rate that is not positive and finite.
    """
    if not (math.isfinite(frame_rate_hz) and frame_rate_hz > 0):
        raise ValueError(f"a frame rate must be positive and finite, got {frame_rate_hz}")
    rate = Fraction(frame_rate_hz)
    for candidate in (Fraction(round(rate)), Fraction(round(rate * 1001 / 1000) * 1000, 1001)):
        if candidate and abs(rate - candidate) <= candidate * Fraction(2, 100_000):
            return candidate
    return rate.limit_denominator(1_000_000)


def rate_label(frame_rate_hz: float) -> str:
    """A frame rate as modes are named: "60", "29.97", "23.976"; other rates to two decimals.

    Parameters
    ----------
    frame_rate_hz : float
        Hertz; NaN gives "?".

    Returns
    -------
    str
    """
    if math.isnan(frame_rate_hz):
        return "?"
    nearest = min(_NOMINAL_RATES_HZ, key=lambda rate: abs(float(rate) - frame_rate_hz))
    if abs(float(nearest) / frame_rate_hz - 1) < _NOMINAL_TOLERANCE:
        # Two decimals name every nominal rate but the 24000/1001 family, which is known by three.
        digits = 3 if nearest == Fraction(24000, 1001) else 2
        return f"{float(nearest):.{digits}f}".rstrip("0").rstrip(".")
    return f"{frame_rate_hz:.2f}".rstrip("0").rstrip(".")


_TIMECODE = re.compile(r"(\d{1,2}):(\d{2}):(\d{2})([:;.,])(\d{2,3})")


def timecode(time_s: float, frame_rate_hz: float | Fraction, start_timecode: str | None = None) -> str:
    """The SMPTE 12M time label of the frame nearest to a time in the clip.

    Parameters
    ----------
    time_s : float
        Seconds from the clip's first frame.
    frame_rate_hz : float or Fraction
        Frame rate; 29.97, 59.94 and their like are taken as the exact 1000/1001 multiples.
    start_timecode : str, optional
        Label of the first frame. A semicolon before the frames asks for drop-frame counting, which exists for 30,
        60 and 120 times 1000/1001 and is ignored at other rates. Without it the count is non-drop from 00:00:00:00.

    Returns
    -------
    str
        "HH:MM:SS:FF", with ";" before the frames when counted drop-frame; it wraps after 24 hours.

    Raises
    ------
    ValueError
        For a start timecode that is not of the form HH:MM:SS:FF, a time that is not finite, or a bad rate.

    Notes
    -----
    Drop-frame counting (SMPTE 12M) skips label numbers 0 and 1 (at 59.94: 0 to 3) at the start of each minute but
    each tenth, 17 982 frames to ten minutes at 29.97.
    """
    rate = exact_rate(frame_rate_hz)
    if not math.isfinite(time_s):
        raise ValueError(f"a time must be finite, got {time_s}")
    base = max(round(rate), 1)  # labels count whole frames to the second: 30 for 29.97
    first, drop = 0, 0
    if start_timecode is not None:
        match = _TIMECODE.fullmatch(start_timecode.strip())
        if match is None:
            raise ValueError(f"a timecode has the form HH:MM:SS:FF, got {start_timecode!r}")
        hours, minutes, seconds, frames = (int(match[group]) for group in (1, 2, 3, 5))
        if match[4] != ":" and base % 30 == 0 and rate == Fraction(base * 1000, 1001):
            drop = base // 15
        total_minutes = 60 * hours + minutes
        first = (total_minutes * 60 + seconds) * base + frames - drop * (total_minutes - total_minutes // 10)

    number = first + math.floor(Fraction(time_s) * rate + Fraction(1, 2))
    if drop:
        per_minute, per_ten_minutes = 60 * base - drop, 600 * base - 9 * drop
        tens, rest = divmod(number, per_ten_minutes)
        # The first minute of each ten keeps all its labels, hence the offset by `drop`.
        number += 9 * drop * tens + drop * max(0, (rest - drop) // per_minute)
    seconds, frame = divmod(number, base)
    return f"{seconds // 3600 % 24:02d}:{seconds // 60 % 60:02d}:{seconds % 60:02d}{';' if drop else ':'}{frame:02d}"


# --- opening ---------------------------------------------------------------------------------------------------------


def _index_is_missing(path: Path) -> bool:
    """True for an ISO base media file (ISO/IEC 14496-12) whose top-level boxes hold no `moov`: the index a camera
    writes last."""
    seen = set()
    with path.open("rb") as file:
        size = os.fstat(file.fileno()).st_size
        position = 0
        while position + 8 <= size:
            file.seek(position)
            header = file.read(16)
            length, kind = struct.unpack(">I4s", header[:8])
            seen.add(kind)
            if length == 1 and len(header) == 16:
                length = struct.unpack(">Q", header[8:])[0]
            if length < 8:  # 0: to the end of the file
                break
            position += length
    return bool(seen & {b"ftyp", b"mdat"}) and b"moov" not in seen


def _open(path: Path) -> av.container.InputContainer:
    cause = unreadable_cause(path, "a clip")
    if cause is None and not path.stat().st_size:
        cause = "the file is empty"
    if cause is not None:
        raise FootageError(path, cause)
    try:
        # "file:" and an absolute path, because FFmpeg takes a bare name with a colon for a protocol; and the
        # whitelist, so that a file that points elsewhere can reach nothing over a network.
        container = av.open(
            "file:" + os.path.abspath(path), mode="r", container_options={"protocol_whitelist": "file"},
            metadata_errors="replace",
        )
    except (av.FFmpegError, ValueError) as error:
        if _index_is_missing(path):
            cause = "has no index (moov box): the recording was cut off before the camera closed the file"
        elif isinstance(error, OSError):  # the card, not what is written on it
            cause = f"cannot be read: {(error.strerror or str(error)).lower()}"
        else:
            cause = "is not a video file, or its header is damaged"
        raise FootageError(path, cause) from None
    return container


def _choose_stream(path: Path, container: av.container.InputContainer) -> av.VideoStream:
    """The video stream to measure: the largest moving picture, no cover art or thumbnails."""
    stills = (
        av.stream.Disposition.attached_pic | av.stream.Disposition.timed_thumbnails | av.stream.Disposition.still_image
    )
    moving = [stream for stream in container.streams.video if not stream.disposition & stills]
    if not moving:
        held = "only sound" if container.streams.audio else "no moving picture"
        raise FootageError(path, f"holds no video stream, {held}")
    if not _CONTAINERS & set(container.format.name.split(",")):
        raise FootageError(path, _not_a_clip(container.format.name))
    decodable = [stream for stream in moving if stream.codec_context is not None]
    if not decodable:
        raise FootageError(path, "its video is coded in a way that the installed decoders do not know")
    return max(
        decodable,
        key=lambda stream: (
            stream.codec_context.width * stream.codec_context.height,
            bool(stream.disposition & av.stream.Disposition.default),
            -stream.index,
        ),
    )


def _not_a_clip(container_format: str) -> str:
    if container_format.endswith("_pipe") or container_format.startswith("image2"):
        return "is a still picture, not a clip"
    if container_format in ("hls", "dash", "concat"):
        return "is a play list, not a clip"
    return "is not a video file"


def _first_frame(path: Path, container: av.container.InputContainer, stream: av.VideoStream) -> av.VideoFrame:
    """The first frame that decodes."""
    for packet in _packets(container, stream, ReadFaults()):
        try:
            frames = packet.decode()
        except av.FFmpegError:
            continue
        if frames:
            return frames[0]
    raise FootageError(path, "holds no frame that can be decoded")


def _packets(
    container: av.container.InputContainer, stream: av.VideoStream, faults: ReadFaults
) -> Iterator[av.Packet]:
    """Packets of one stream to the end, reading on after errors as far as the container allows.

    The last one is empty and asks the decoder for what it still holds. A packet before it that the end of the file cut
    in two is left out: its frame would be half a picture, and the error it gives a decoder of several threads comes in
    place of the good frames asked for last.
    """
    failures = 0
    held = None
    flush = av.Packet()
    flush.stream = stream
    while failures < _MAX_FAILED_READS:
        try:
            for packet in container.demux(stream):
                failures = 0
                if packet.size:
                    if held is not None:
                        yield held
                    held = packet
            break
        except av.FFmpegError:
            faults.read_errors += 1
            failures += 1
    if held is not None and not held.is_corrupt:
        yield held
    yield flush


@dataclass(frozen=True)
class _Index:
    """What a table of samples says: presented frames, all entries, their bytes, and how they are spaced."""

    frames: int
    entries: int
    coded_bytes: int
    uneven: bool
    typical_ticks: float  # median spacing, in ticks of the stream's time base; NaN for a single entry


def _sample_index(container: av.container.InputContainer, stream: av.VideoStream) -> _Index | None:
    """The table of samples of an ISO base media file or an AVI; None where none lists every frame."""
    if not stream.frames:
        return None
    entries = list(stream.index_entries)
    # An edit list may leave frames of an ISO file out; elsewhere the table must be whole to be one of all frames.
    if not entries or ("mov" not in container.format.name.split(",") and len(entries) != stream.frames):
        return None
    ticks = np.diff([entry.timestamp for entry in entries])
    return _Index(
        frames=sum(not entry.is_discard for entry in entries),
        entries=len(entries),
        coded_bytes=sum(entry.size for entry in entries),
        uneven=bool(ticks.size and ticks.max() - ticks.min() > 1),
        typical_ticks=float(np.median(ticks)) if ticks.size else math.nan,
    )


def _start_timecode(container: av.container.InputContainer, stream: av.VideoStream) -> str | None:
    for tags in (stream.metadata, container.metadata, *(other.metadata for other in container.streams)):
        label = {key.lower(): value for key, value in tags.items()}.get("timecode", "").strip()
        if _TIMECODE.fullmatch(label):
            return label
    return None


def _stream_duration_s(container: av.container.InputContainer, stream: av.VideoStream) -> float:
    """Duration of the video by the container; NaN when it does not tell."""
    if stream.duration:
        return float(stream.duration * stream.time_base)
    tag = re.fullmatch(r"(\d+):(\d\d):(\d\d(?:\.\d+)?)", stream.metadata.get("DURATION", ""))
    if tag and (tag_s := int(tag[1]) * 3600 + int(tag[2]) * 60 + float(tag[3])) > 0:
        return tag_s
    if container.duration:
        return container.duration / av.time_base
    return math.nan


def _counted(container: av.container.InputContainer, stream: av.VideoStream) -> tuple[int, float]:
    """(frames, seconds) from the packets themselves, without decoding; seconds NaN when they carry no time."""
    count, earliest, latest = 0, None, None
    for packet in _packets(container, stream, ReadFaults()):
        if packet.size and not packet.is_discard:
            count += 1
            if packet.pts is not None:
                end = packet.pts + (packet.duration or 0)
                earliest = packet.pts if earliest is None else min(earliest, packet.pts)
                latest = end if latest is None else max(latest, end)
    if earliest is None or latest == earliest:
        return count, math.nan
    return count, float((latest - earliest) * stream.time_base)


def probe(path: str | os.PathLike[str]) -> ClipInfo:
    """Read a clip's metadata and decode its first frame.

    Parameters
    ----------
    path : str or path-like
        The file. Its name is never read as an address or a pattern.

    Returns
    -------
    ClipInfo

    Raises
    ------
    FootageError
        When the path is missing, a folder, unreadable or empty, or holds no video that can be decoded.
    """
    path = Path(path)
    with _open(path) as container:
        stream = _choose_stream(path, container)
        frame = _first_frame(path, container, stream)
        index = _sample_index(container, stream)
        frame_count = index.frames if index else stream.frames or None
        duration_s = _stream_duration_s(container, stream)
        average = stream.average_rate or stream.guessed_rate
        rate = float(average) if average else math.nan
        if math.isnan(duration_s):
            with _open(path) as again:
                frame_count, duration_s = _counted(again, again.streams[stream.index])
            if math.isnan(duration_s) and rate > 0:
                duration_s = frame_count / rate
        if math.isnan(duration_s):
            raise FootageError(path, "lasts no time: it holds a single picture, or frames without times")

        variable = None
        if index:
            variable = index.uneven
            if index.uneven and index.typical_ticks > 0:
                # dropped frames lower the average; the camera was set to what most intervals say
                rate = 1 / float(index.typical_ticks * stream.time_base)
        elif frame.pts is not None and stream.average_rate and stream.base_rate:
            # The lowest rate that fits all timestamps against their average: they differ when frames are uneven.
            variable = True if abs(stream.average_rate / stream.base_rate - 1) > 0.001 else None

        file_bytes = path.stat().st_size
        bits_per_s = 8 * index.coded_bytes / duration_s if index else stream.bit_rate or 8 * file_bytes / duration_s
        return ClipInfo(
            path=path,
            width_px=frame.width,
            height_px=frame.height,
            rotation_deg=_clockwise_rotation_deg(frame, stream),
            frame_rate_hz=rate,
            variable_frame_rate=variable,
            codec=stream.codec_context.codec.canonical_name,
            pixel_format=frame.format.name,
            bit_depth=frame.format.components[0].bits,
            duration_s=duration_s,
            frame_count=frame_count,
            bit_rate_mbps=bits_per_s / 1e6,
            start_timecode=_start_timecode(container, stream),
            time_base=stream.time_base,
            profile=stream.profile,
            container=container.format.name,
            file_bytes=file_bytes,
        )


def _clockwise_rotation_deg(frame: av.VideoFrame, stream: av.VideoStream) -> int:
    """Display rotation in quarter turns; the display matrix wins over the older `rotate` tag."""
    angle = -frame.rotation  # the display matrix counts counter-clockwise
    if not angle:
        try:
            angle = float(stream.metadata.get("rotate", 0))
        except ValueError:
            angle = 0
    return round(angle / 90) % 4 * 90


# --- luma ------------------------------------------------------------------------------------------------------------


class _Layout(NamedTuple):
    """How a luma plane is stored, or (`target`) what it must be converted to first."""

    dtype: np.dtype
    scale: float
    target: str | None


_PLANAR_8 = re.compile(r"yuv[aj]?\d{3}p|gray8?|nv(12|21|16|24|42)")
_PLANAR_LOW_BITS = re.compile(r"(?:yuva?\d{3}p|gray)(9|10|12|14|16)le|nv20le")
_PLANAR_HIGH_BITS = re.compile(r"p[024](10|12|16)le")


@lru_cache
def _layout(pixel_format: str, bit_depth: int) -> _Layout:
    if _PLANAR_8.fullmatch(pixel_format):
        return _Layout(np.dtype(np.uint8), 1.0, None)
    if _PLANAR_LOW_BITS.fullmatch(pixel_format):
        return _Layout(np.dtype("<u2"), 2.0 ** (8 - bit_depth), None)
    if _PLANAR_HIGH_BITS.fullmatch(pixel_format):
        return _Layout(np.dtype("<u2"), 2.0**-8, None)
    # The documented exception: RGB, palettes, interleaved and big-endian samples have no luma plane to look at.
    if bit_depth > 8:
        return _Layout(np.dtype("<u2"), 2.0**-8, "gray16le")
    return _Layout(np.dtype(np.uint8), 1.0, "gray")


def luma_scale(pixel_format: str, bit_depth: int) -> float:
    """Factor that brings the luma values of `read_frames` to 0..255: 1 for 8 bit, 1/4 for 10 bit in the low bits.

    Parameters
    ----------
    pixel_format : str
        FFmpeg's name.
    bit_depth : int
        Bits per luma sample.

    Returns
    -------
    float
    """
    return _layout(pixel_format, bit_depth).scale


def luma_plane(frame: av.VideoFrame) -> np.ndarray:
    """The luma plane of a decoded frame, as a read-only view wherever the format has one.

    Parameters
    ----------
    frame : av.VideoFrame

    Returns
    -------
    ndarray, shape (height_px, width_px), uint8 or uint16
        Native code values in the recorded row order. RGB, palette, interleaved and big-endian formats have no
        such plane and are converted to grey first.

    Raises
    ------
    ValueError
        For a pixel format that cannot be converted.
    """
    layout = _layout(frame.format.name, frame.format.components[0].bits)
    if layout.target:
        frame = frame.reformat(format=layout.target)
    plane = frame.planes[0]
    stride = plane.line_size
    samples = np.frombuffer(memoryview(plane).toreadonly(), layout.dtype)  # the decoder still predicts from them
    luma = samples.reshape(frame.height, abs(stride) // layout.dtype.itemsize)[:, : frame.width]
    return luma[::-1] if stride < 0 else luma  # negative: stored bottom row first


# --- reading ---------------------------------------------------------------------------------------------------------


def read_frames(
    path: str | os.PathLike[str],
    *,
    threads: int = 0,
    on_fault: Callable[[str], None] | None = None,
    faults: ReadFaults | None = None,
    start_s: float | None = None,
    stop_s: float | None = None,
) -> Iterator[Frame]:
    """Decode a clip frame after frame, in presentation order, holding only a few frames at a time.

    Parameters
    ----------
    path : str or path-like
    threads : int, optional
        Decoder threads; 0 takes one for each core.
    on_fault : callable, optional
        Called with each sentence of `ReadFaults.sentences` when the reading has ended.
    faults : ReadFaults, optional
        Filled in while reading, for callers that want the counts.
    start_s, stop_s : float, optional
        Hand out only frames with `start_s <= time_s < stop_s`, seconds from the clip's first frame.

    Yields
    ------
    Frame

    Raises
    ------
    FootageError
        When the clip cannot be opened (at the call), or nothing in it can be decoded (while iterating).

    Notes
    -----
    Faults inside a clip are counted, not raised: what decodes is handed out. Frames after a damaged one are marked
    `damaged` up to the next key frame, because they are predicted from it.
    """
    path = Path(path)
    container = _open(path)
    stream = _choose_stream(path, container)
    faults = ReadFaults() if faults is None else faults
    return _read(path, container, stream, threads, on_fault, faults, start_s, stop_s)


def _read(
    path: Path,
    container: av.container.InputContainer,
    stream: av.VideoStream,
    threads: int,
    on_fault: Callable[[str], None] | None,
    faults: ReadFaults,
    start_s: float | None,
    stop_s: float | None,
) -> Iterator[Frame]:
    with container:
        index = _sample_index(container, stream)
        faults.promised_frames = index.frames if index else stream.frames or None
        faults.promised_s = _stream_duration_s(container, stream)
        promised_packets = index.entries if index else stream.frames or None
        clock = _Clock(container, stream)
        if start_s is not None and start_s > 0 and not clock.in_decoding_order:
            clock.origin = _seek(path, container, stream, start_s)
        whole = clock.origin is None  # read from the very first packet on
        stream.codec_context.thread_count = threads
        stream.codec_context.thread_type = "AUTO"

        form = None
        damage = _Damage(by_time=not clock.in_decoding_order)
        packets = discarded = decoded = 0
        for packet in _packets(container, stream, faults):
            if packet.size:
                packets += 1
                discarded += packet.is_discard
                clock.note(packet)
                damage.sent(packet)
            try:
                frames = packet.decode()
            except av.FFmpegError:
                faults.decode_errors += 1
                damage.refused()
                continue
            for frame in frames:
                decoded += 1
                coded, damaged = damage.received(frame)
                time_s = clock.time_s(frame, faults)
                if time_s is None:
                    continue
                form = form or (frame.width, frame.height, frame.format.name)
                if form != (frame.width, frame.height, frame.format.name):
                    faults.other_size_frames += 1
                    continue
                if start_s is not None and time_s < start_s:
                    continue
                if stop_s is not None and time_s >= stop_s:
                    _report(faults, on_fault)
                    return
                try:
                    luma = luma_plane(frame)
                except ValueError as error:
                    raise FootageError(path, f"its pixel format {frame.format.name} cannot be read: {error}") from None
                faults.damaged_frames += damaged
                faults.frames += 1
                faults.read_s = time_s + clock.interval_s
                yield Frame(faults.frames - 1, time_s, luma, coded.key, coded.size_bytes, damaged)
        if not decoded and whole:
            raise FootageError(path, "holds no frame that can be decoded")
        faults.lost_frames = max(0, packets - discarded - decoded)
        if whole:
            missing = max(0, promised_packets - packets) if promised_packets else None
            faults.truncated = _ends_early(clock, faults.promised_s, missing)
            if missing and not faults.truncated:  # they are missing from the middle
                faults.lost_frames += missing
    _report(faults, on_fault)


def _report(faults: ReadFaults, on_fault: Callable[[str], None] | None) -> None:
    if on_fault is not None:
        for sentence in faults.sentences():
            on_fault(sentence)


def _ends_early(clock: _Clock, promised_s: float, missing: int | None) -> bool:
    """Whether the file ends well before its promised end.

    `missing` is the number of promised frames that the file does not hold, None where no number was promised. The
    duration alone may be rounded, or that of a longer sound track: it is allowed half a second.
    """
    if missing == 0:
        return False
    if clock.last_s is None or math.isnan(promised_s):
        return missing is not None
    return promised_s - clock.last_s > clock.interval_s * 1.5 + (0.5 if missing is None else 0.0)


class _Coded(NamedTuple):
    """A packet's coded size (None: cannot be told), whether it is a key frame, and cut short in the file.

    The packet's word for a key frame is taken: after damage decoders give the mark to frames that are none.
    """

    size_bytes: int | None
    key: bool
    corrupt: bool


class _Damage:
    """Tells which frames are not intact, themselves or by what they may be predicted from.

    Frames are predicted from others of their group of pictures: a key frame and what is coded after it, up to the next.
    So a fault taints the frames of its group that come out after it, but not the key frame. Frames shown before the key
    frame they are coded after may lean on the group before as well.

    Frames are told by their timestamps (`by_time`). Without these the groups are those of the frames as they come out.
    """

    def __init__(self, by_time: bool) -> None:
        self._by_time = by_time
        self._group = 0  # of the latest packet
        self._tainted: set[int] = set()
        self._keys: dict[int, int] = {}  # group -> time of its key frame
        self._waiting: dict[int, tuple[_Coded, int]] = {}  # time -> (packet, group)
        self._shown_broken = False

    def sent(self, packet: av.Packet) -> None:
        """Take note of a packet about to be decoded."""
        if packet.is_keyframe:
            self._group += 1
        if packet.pts is None or not self._by_time:
            return
        if packet.is_keyframe:
            self._keys[self._group] = packet.pts
        if not packet.is_discard:
            self._waiting[packet.pts] = (_Coded(packet.size, packet.is_keyframe, packet.is_corrupt), self._group)

    def refused(self) -> None:
        """The decoder reported an error on the latest packet, or (with several threads) one shortly before."""
        self._tainted |= {self._group} | {group for _, group in self._waiting.values()}
        self._shown_broken = True

    def received(self, frame: av.VideoFrame) -> tuple[_Coded, bool]:
        """What is known of a decoded frame's packet, and whether the frame is damaged."""
        # Frames come in order of time: an earlier packet still waiting has lost its frame without an error.
        for pts in [pts for pts in self._waiting if frame.pts is not None and pts < frame.pts]:
            self._tainted.add(self._waiting.pop(pts)[1])
        coded, group = self._waiting.pop(frame.pts, (_Coded(None, bool(frame.key_frame), False), None))
        faulty = coded.corrupt or frame.is_corrupt
        self._shown_broken = faulty or (self._shown_broken and not coded.key)
        if group is None:
            return coded, self._shown_broken
        if faulty:
            self._tainted.add(group)
        leading = frame.pts < self._keys.get(group, frame.pts)
        leans_on = {group, group - 1} if leading else {group}
        damaged = faulty or (not coded.key and bool(self._tainted & leans_on))
        self._tainted = {old for old in self._tainted if old >= group - 2}
        self._keys = {old: pts for old, pts in self._keys.items() if old >= group - 2}
        return coded, damaged


class _Clock:
    """Turns timestamps into seconds from the clip's first frame, and keeps them increasing.

    Attributes
    ----------
    origin : int or None
        Timestamp of the clip's first frame, in ticks; taken from the first frame seen when not set before.
    in_decoding_order : bool
        True where the container stores only decoding times (AVI) and the codec reorders frames. The presentation
        times FFmpeg then makes up are wrong; but the times themselves are right once sorted.
    """

    def __init__(self, container: av.container.InputContainer, stream: av.VideoStream) -> None:
        rate = stream.average_rate or stream.guessed_rate
        self._ticks = stream.time_base
        self._step = max(1, round(1 / (rate * stream.time_base))) if rate else 1
        self._last: int | None = None
        self._pending: list[int] = []
        self.origin: int | None = None
        self.in_decoding_order = container.format.name == "avi" and stream.codec_context.has_b_frames

    @property
    def interval_s(self) -> float:
        """The nominal frame interval."""
        return float(self._step * self._ticks)

    @property
    def last_s(self) -> float | None:
        """Time of the latest frame; None before the first."""
        return None if self._last is None else self._seconds(self._last)

    def _seconds(self, pts: int) -> float:
        # Integers up to the one division: rounded once, exact for any length of clip.
        return (pts - self.origin) * self._ticks.numerator / self._ticks.denominator

    def note(self, packet: av.Packet) -> None:
        """Take the time of a packet about to be decoded."""
        if self.in_decoding_order and packet.dts is not None:
            heapq.heappush(self._pending, packet.dts)

    def time_s(self, frame: av.VideoFrame, faults: ReadFaults) -> float | None:
        """Seconds of a frame; None when its timestamp does not advance and the frame must be dropped."""
        pts = frame.pts
        if self.in_decoding_order:
            pts = heapq.heappop(self._pending) if self._pending else None
        if pts is None:
            faults.missing_timestamps += 1
            pts = 0 if self._last is None else self._last + self._step
        elif self._last is not None and pts <= self._last:
            faults.unordered_timestamps += 1
            return None
        if self.origin is None:
            self.origin = pts
        self._last = pts
        return self._seconds(pts)


def _seek(path: Path, container: av.container.InputContainer, stream: av.VideoStream, start_s: float) -> int | None:
    """Go to a key frame before a time; returns the timestamp of the clip's first frame.

    None, with the container still at its start, for a stream without timestamps to seek by.
    """
    with _open(path) as other:  # apart, so that the decoder of this reading starts fresh
        origin = _first_frame(path, other, other.streams[stream.index]).pts
    if origin is None:
        return None
    # Containers look key frames up by decoding time, which runs ahead of presentation: aim a second early.
    target = origin + math.floor((Fraction(start_s) - 1) / stream.time_base)
    if target > origin:
        try:
            container.seek(target, stream=stream, backward=True)
        except av.FFmpegError:
            pass  # no index to go by: read through from the start
    return origin


# --- finding clips ---------------------------------------------------------------------------------------------------


def _natural_key(path: Path) -> list[Any]:
    """Sorts clip2 before clip10: digits compare as numbers."""
    parts = re.split(r"(\d+)", str(path).casefold())
    return [[(0, int(part), "") if part.isdecimal() else (1, 0, part) for part in parts], str(path)]


def _walk(folder: Path, excluded: set[str], errors: list[FootageError]) -> Iterator[Path]:
    """Clips under a folder by their ending; hidden names are skipped, every real folder is entered once."""
    visited = set(excluded)

    def unreadable(error: OSError) -> None:
        errors.append(FootageError(error.filename, f"the folder cannot be read: {error.strerror}"))

    for root, folders, files in os.walk(folder, onerror=unreadable, followlinks=True):
        if os.path.realpath(root) in visited:
            folders.clear()
            continue
        visited.add(os.path.realpath(root))
        folders[:] = [name for name in folders if not name.startswith(".")]
        for name in files:
            if not name.startswith(".") and os.path.splitext(name)[1].lower() in CLIP_EXTENSIONS:
                yield Path(root, name)


def find_clips(
    paths: Iterable[str | os.PathLike[str]], *, exclude: str | os.PathLike[str] | None = None
) -> tuple[list[Path], list[FootageError]]:
    """The clips that a list of files, folders and patterns names.

    Parameters
    ----------
    paths : iterable of str or path-like
        Files are taken whatever their ending; folders are searched at every depth for `CLIP_EXTENSIONS`; a name
        that does not exist and holds `*`, `?` or `[` is expanded as a pattern (`**` spans folders).
    exclude : str or path-like, optional
        A folder not to search, such as the one results are written to.

    Returns
    -------
    clips : list of Path
        Each file once, in natural order (clip2 before clip10).
    errors : list of FootageError
        One for each path that names nothing.
    """
    clips: list[Path] = []
    errors: list[FootageError] = []
    excluded = {os.path.realpath(exclude)} if exclude is not None else set()
    for given in paths:
        given = Path(given)
        if os.path.lexists(given):
            matches = [given]
        elif glob.has_magic(str(given)):
            matches = [Path(match) for match in glob.glob(str(given), recursive=True)]
            if not matches:
                errors.append(FootageError(given, "no file matches this pattern"))
        else:
            matches = []
            errors.append(FootageError(given, "there is no such file or folder"))
        for match in matches:
            if not match.is_dir():
                clips.append(match)
                continue
            known = len(errors)
            found = list(_walk(match, excluded, errors))
            clips += found
            if not found and len(errors) == known:
                errors.append(FootageError(match, "the folder holds no clip"))
    unique: dict[str, Path] = {}
    for clip in clips:
        unique.setdefault(os.path.realpath(clip), clip)
    return sorted(unique.values(), key=_natural_key), errors
