"""The camera file: what is known of a camera's modes, matched to clips by picture size and frame rate.

::

    [camera]
    name = "nose camera"

    [[mode]]
    width_px = 1280
    height_px = 720
    frame_rate_hz = 60
    readout_ms = 14.0
    hfov_deg = 80.0
    exposure_ms = 1.0

`readout_ms`, `hfov_deg` and `exposure_ms` may be left out, and so may the 95 % half-widths `readout_ci_ms` and
`hfov_ci_deg` of measured values, and `note`.
"""

from __future__ import annotations

import json
import os
import shutil
from dataclasses import dataclass
from pathlib import Path

from framegrade.footage import ClipInfo, rate_label
from framegrade.settings_file import Field, Settings, SettingsError, Table, read_settings

#: A clip belongs to a mode whose frame rate is this close to its own.
RATE_TOLERANCE = 0.01

#: Rows cannot be read out, nor light gathered, for longer than from one frame to the next; rounding is allowed.
_INTERVAL_SLACK = 1.01

#: Two modes of the same size whose rates are closer than this cannot be told apart: 60 and 59.94 can.
_SAME_RATE = 1e-4


@dataclass(frozen=True)
class CameraMode:
    """One camera setting. A value that is not known is None.

    Attributes
    ----------
    width_px, height_px : int
        Recorded picture.
    frame_rate_hz : float
    readout_s : float or None
        Seconds from the first to the last row; 0 for a global shutter.
    hfov_deg : float or None
        Horizontal field of view of the recorded picture.
    exposure_s : float or None
    readout_ci_ms, hfov_ci_deg : float or None
        95 % half-widths, where the values were measured.
    note : str or None
    """

    width_px: int
    height_px: int
    frame_rate_hz: float
    readout_s: float | None = None
    hfov_deg: float | None = None
    exposure_s: float | None = None
    readout_ci_ms: float | None = None
    hfov_ci_deg: float | None = None
    note: str | None = None

    @property
    def label(self) -> str:
        """The mode by name, such as "1280x720@60"."""
        return f"{self.width_px}x{self.height_px}@{rate_label(self.frame_rate_hz)}"


@dataclass(frozen=True)
class Camera:
    """A camera and its known modes.

    Attributes
    ----------
    name : str
    modes : tuple of CameraMode
    """

    name: str
    modes: tuple[CameraMode, ...]

    def mode_for(self, info: ClipInfo) -> CameraMode | None:
        """The mode a clip was shot in.

        Parameters
        ----------
        info : ClipInfo

        Returns
        -------
        CameraMode or None
            Of the modes with exactly the clip's recorded size, the one nearest in frame rate, when it is within 1 %.
        """
        fitting = [
            mode
            for mode in self.modes
            if (mode.width_px, mode.height_px) == (info.width_px, info.height_px)
            and abs(info.frame_rate_hz / mode.frame_rate_hz - 1) <= RATE_TOLERANCE
        ]
        return min(fitting, key=lambda mode: abs(mode.frame_rate_hz - info.frame_rate_hz), default=None)


_SCHEMA = {
    "camera": Table({"name": Field("text", "what you call the camera", required=True)}, required=True),
    "mode": Table(
        {
            "width_px": Field("integer", "recorded picture width, pixels", required=True, low=16, high=65536),
            "height_px": Field("integer", "recorded picture height, pixels", required=True, low=16, high=65536),
            "frame_rate_hz": Field(
                "number", "frames per second", required=True, low=0, high=100_000, open_range=True
            ),
            "readout_ms": Field("number", "first to last row, milliseconds; 0 for a global shutter", low=0, high=1000),
            "hfov_deg": Field("number", "horizontal field of view, degrees", low=5, high=175, open_range=True),
            "exposure_ms": Field("number", "exposure time, milliseconds", low=0, high=1000, open_range=True),
            "readout_ci_ms": Field("number", "95 % half-width of readout_ms, milliseconds", low=0),
            "hfov_ci_deg": Field("number", "95 % half-width of hfov_deg, degrees", low=0),
            "note": Field("text", "any remark"),
        },
        many=True,
        required=True,
    ),
}


def load_camera(path: str | os.PathLike[str]) -> Camera:
    """Read a camera file.

    Parameters
    ----------
    path : str or path-like

    Returns
    -------
    Camera

    Raises
    ------
    SettingsError
        For a file that cannot be read or holds a mistake: the sentence names the line.
    """
    settings = read_settings(path, _SCHEMA)
    modes = tuple(_mode(row) for row in settings.tables["mode"])
    fault = _fault(modes)
    if fault:
        nth, key, cause = fault
        raise settings.error(_with_line_of_twin(settings, modes, nth, cause), "mode", key, nth)
    return Camera(settings.table("camera")["name"], modes)


def _mode(row: dict) -> CameraMode:
    readout_ms, exposure_ms = row.get("readout_ms"), row.get("exposure_ms")
    return CameraMode(
        width_px=row["width_px"],
        height_px=row["height_px"],
        frame_rate_hz=row["frame_rate_hz"],
        readout_s=None if readout_ms is None else readout_ms / 1e3,
        hfov_deg=row.get("hfov_deg"),
        exposure_s=None if exposure_ms is None else exposure_ms / 1e3,
        readout_ci_ms=row.get("readout_ci_ms"),
        hfov_ci_deg=row.get("hfov_ci_deg"),
        note=row.get("note"),
    )


def _twin(modes: tuple[CameraMode, ...], nth: int) -> int | None:
    """The earlier mode that the nth cannot be told from."""
    mode = modes[nth]
    for earlier, other in enumerate(modes[:nth]):
        same_size = (other.width_px, other.height_px) == (mode.width_px, mode.height_px)
        if same_size and abs(other.frame_rate_hz / mode.frame_rate_hz - 1) < _SAME_RATE:
            return earlier
    return None


def _fault(modes: tuple[CameraMode, ...]) -> tuple[int, str | None, str] | None:
    """The first mode that cannot be, as (number, key of the file, cause); None when all can."""
    for nth, mode in enumerate(modes):
        interval_ms = 1e3 / mode.frame_rate_hz
        for key, value_s in (("readout_ms", mode.readout_s), ("exposure_ms", mode.exposure_s)):
            if value_s is not None and value_s * 1e3 > interval_ms * _INTERVAL_SLACK:
                limit = f"{interval_ms:.4g} ms from frame to frame at {mode.frame_rate_hz:g} frames/s"
                return nth, key, f'"{key}" = {value_s * 1e3:.10g} is impossible: it is longer than the {limit}'
        for key, ci, value in (
            ("readout_ci_ms", mode.readout_ci_ms, mode.readout_s), ("hfov_ci_deg", mode.hfov_ci_deg, mode.hfov_deg)
        ):
            if ci is not None and value is None:
                return nth, key, f'"{key}" is given without the value it belongs to, "{key.replace("_ci", "")}"'
        if _twin(modes, nth) is not None:
            return nth, None, f"the mode {mode.label} is given twice"
    return None


def _with_line_of_twin(settings: Settings, modes: tuple[CameraMode, ...], nth: int, cause: str) -> str:
    twin = _twin(modes, nth)
    return cause if twin is None else f"{cause}, first in line {settings.line('mode', nth=twin)}"


def save_camera(camera: Camera, path: str | os.PathLike[str]) -> None:
    """Write a camera file, whole or not at all.

    Parameters
    ----------
    camera : Camera
    path : str or path-like
        Replaced when it exists. Comments that a user wrote into it are not kept; `note` is.

    Raises
    ------
    ValueError
        For a camera whose file `load_camera` would refuse.
    OSError
        When the folder cannot be written to.
    """
    path = Path(os.path.realpath(path))  # a link stays a link
    text = _toml(camera)
    # Written beside the target under another name and read back, so that no half-written or unreadable file is left.
    temporary = path.with_name(f".{path.name}.{os.getpid()}.tmp")
    try:
        with temporary.open("x", encoding="utf-8", newline="\n") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        load_camera(temporary)
        if path.exists():
            shutil.copymode(path, temporary)
        os.replace(temporary, path)
    except SettingsError as error:
        raise ValueError(f"the camera cannot be saved: {error.cause}") from None
    finally:
        temporary.unlink(missing_ok=True)


def _quoted(text: str) -> str:
    """A TOML basic string: JSON's escapes are TOML's, but for the delete character."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _toml(camera: Camera) -> str:
    blocks = [
        "# What is known of this camera's modes. A clip is matched by its recorded size and, within 1 %, frame rate.\n"
        "# readout: first to last row (0: global shutter); hfov: horizontal field of view; _ci_: 95 % half-width.\n\n"
        f"[camera]\nname = {_quoted(camera.name)}\n"
    ]
    for mode in camera.modes:
        values = {
            "width_px": mode.width_px,
            "height_px": mode.height_px,
            "frame_rate_hz": mode.frame_rate_hz,
            "readout_ms": None if mode.readout_s is None else mode.readout_s * 1e3,
            "readout_ci_ms": mode.readout_ci_ms,
            "hfov_deg": mode.hfov_deg,
            "hfov_ci_deg": mode.hfov_ci_deg,
            "exposure_ms": None if mode.exposure_s is None else mode.exposure_s * 1e3,
        }
        rows = [f"{key} = {value:.12g}" for key, value in values.items() if value is not None]
        if mode.note is not None:
            rows.append(f"note = {_quoted(mode.note)}")
        blocks.append("[[mode]]\n" + "\n".join(rows) + "\n")
    return "\n".join(blocks)
