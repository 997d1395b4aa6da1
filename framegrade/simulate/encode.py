"""Writing pictures to a video file with exact timestamps."""

from __future__ import annotations

import os
from fractions import Fraction
from pathlib import Path

import av
import numpy as np

from .recipe import Flight, FlightError

_ENCODERS = {
    "h264": ("libx264",), "hevc": ("libx265",), "mjpeg": ("mjpeg",), "prores": ("prores_ks", "prores"),
    "vp9": ("libvpx-vp9",), "av1": ("libsvtav1", "libaom-av1"),
}
#: Container that holds each codec and keeps timestamps exact (Matroska would round them to milliseconds).
SUFFIX = {"h264": ".mp4", "hevc": ".mp4", "mjpeg": ".mov", "prores": ".mov", "vp9": ".mp4", "av1": ".mp4"}
_DEFAULT_BITS_PER_PIXEL = 0.15
_STILL_QUALITY = 3


def _encoder(codec: str) -> str:
    for name in _ENCODERS[codec]:
        if name in av.codecs_available:
            return name
    raise FlightError(f"encode.codec {codec}: this machine's video library has no encoder for it.")


def _bits_per_pixel(flight: Flight) -> float:
    camera, encode = flight.camera, flight.encode
    if encode.bit_rate_mbps is not None:
        return encode.bit_rate_mbps * 1e6 / (camera.width_px * camera.height_px * float(camera.frame_rate))
    return encode.bits_per_pixel or _DEFAULT_BITS_PER_PIXEL


def _options(flight: Flight, encoder: str) -> dict[str, str]:
    encode = flight.encode
    options: dict[str, str] = {}
    if encoder == "prores_ks" and (encode.bit_rate_mbps or encode.bits_per_pixel):
        # This encoder heeds no bit rate, only the bits of a macroblock of 16 x 16 pixels.
        options["bits_per_mb"] = str(min(8192, max(128, round(256 * _bits_per_pixel(flight)))))
    if encoder in ("libx264", "libx265"):
        options["preset"] = encode.preset
    if encoder == "libx265":
        options["x265-params"] = "log-level=error"
    if encoder == "libsvtav1":
        options["svtav1-params"] = "lp=2"
    if encoder == "libvpx-vp9":
        options |= {"deadline": "realtime", "cpu-used": "6", "row-mt": "1"}
    if encoder == "libsvtav1":
        options["preset"] = "10"
    if encoder == "libaom-av1":
        options |= {"cpu-used": "8", "usage": "realtime"}
    if encode.codec == "mjpeg":
        # The encoder's own rate control fails with fine timestamps; a fixed quantiser is what cameras use anyway.
        quality = _STILL_QUALITY if encode.crf is None else min(31, max(1, round(encode.crf)))
        options |= {"qmin": str(quality), "qmax": str(quality)}
    elif encode.crf is not None:
        options["crf"] = f"{encode.crf:g}"
    return options


class ClipWriter:
    """Encodes grey pictures one by one.

    Parameters
    ----------
    path : str or Path
        File to write; its suffix chooses the container.
    flight : Flight
        For camera and encode settings.
    time_base : Fraction
        Seconds a tick of the timestamps.

    Raises
    ------
    FlightError
        When the file or the encoder cannot be opened.
    """

    def __init__(self, path: str | Path, flight: Flight, time_base: Fraction):
        camera, encode = flight.camera, flight.encode
        encoder = _encoder(encode.codec)
        if encoder == "libsvtav1":
            # It prints its settings on the terminal unless told otherwise this way.
            os.environ.setdefault("SVT_LOG", "1")
        self._path = path
        self._time_base = time_base
        if not Path(path).parent.is_dir():
            raise FlightError(f"{path}: cannot be written, since its folder does not exist.")
        try:
            # No dates or versions in the file: the same pictures should give the same file as far as encoders allow.
            self._container = av.open(str(path), "w", options={"fflags": "+bitexact"})
            stream = self._container.add_stream(encoder, rate=camera.frame_rate, options=_options(flight, encoder))
            stream.width, stream.height = camera.width_px, camera.height_px
            stream.pix_fmt = encode.stored_format
            stream.time_base = time_base
            stream.codec_context.time_base = time_base
            stream.gop_size = encode.gop or max(1, round(camera.frame_rate))
            # A fixed number of encoder threads, so that a file does not depend on the machine's cores.
            stream.codec_context.thread_count = 2
            if encode.crf is None:
                pixels_per_s = camera.width_px * camera.height_px * float(camera.frame_rate)
                stream.bit_rate = round(_bits_per_pixel(flight) * pixels_per_s)
            else:
                stream.bit_rate = 0
        except (av.error.FFmpegError, OSError, ValueError) as error:
            raise FlightError(f"{path}: cannot be opened for writing ({error}).") from error
        self._stream = stream
        self._format = stream.pix_fmt

    def add(self, grey: np.ndarray, pts_ticks: int) -> None:
        """Encode one picture.

        Parameters
        ----------
        grey : ndarray, shape (rows, columns)
            Grey 0 to 255, written to the luma plane as it is.
        pts_ticks : int
            Timestamp in ticks of the time base.
        """
        frame = av.VideoFrame(grey.shape[1], grey.shape[0], self._format)
        deep = self._format.endswith("10le")
        for index, plane in enumerate(frame.planes):
            kind = np.dtype("<u2") if deep else np.dtype(np.uint8)
            view = np.frombuffer(plane, dtype=kind).reshape(plane.height, plane.line_size // kind.itemsize)
            if index == 0:
                scaled = np.rint(grey * 4 if deep else grey)
                view[:, : plane.width] = np.clip(scaled, 0, 1023 if deep else 255)
            else:
                view[:] = 512 if deep else 128
        frame.pts = int(pts_ticks)
        frame.time_base = self._time_base
        self._mux(frame)

    def _mux(self, frame: av.VideoFrame | None) -> None:
        try:
            for packet in self._stream.encode(frame):
                self._container.mux(packet)
        except (av.error.FFmpegError, OSError, ValueError) as error:
            raise FlightError(f"{self._path}: encoding failed ({error}).") from error

    def close(self) -> None:
        """Flush the encoder and finish the file."""
        self._mux(None)
        self._container.close()

    def abandon(self) -> None:
        """Close the file without finishing it."""
        self._container.close()
