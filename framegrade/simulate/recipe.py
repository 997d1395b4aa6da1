"""Flight recipes: the TOML file that says what to film and how the camera shakes, as frozen dataclasses.

Every table of the file is one dataclass here; every key is one field, and its metadata holds the allowed range, so
that the reader, the error messages and the documentation cannot disagree.
"""

from __future__ import annotations

import dataclasses
import difflib
import math
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import Any

AXES = ("yaw", "pitch", "roll")
CODECS = ("h264", "hevc", "mjpeg", "prores", "vp9", "av1")
PIXEL_FORMATS = ("yuv420p", "yuvj420p", "yuv422p", "yuv444p", "yuv420p10le", "yuv422p10le")
PRESETS = ("ultrafast", "superfast", "veryfast", "faster", "fast", "medium", "slow", "slower", "veryslow")
PATTERNS = ("soil", "grass", "rows", "paving", "photo")


class FlightError(ValueError):
    """A flight recipe that cannot be flown; the message is one sentence that names the file, the line and the cause."""


def _number(default: Any, low: float, high: float, unit: str, text: str) -> Any:
    return field(default=default, metadata={"kind": "number", "low": low, "high": high, "unit": unit, "text": text})


def _whole(default: Any, low: int, high: int, text: str) -> Any:
    return field(default=default, metadata={"kind": "whole", "low": low, "high": high, "unit": "", "text": text})


def _choice(default: Any, choices: tuple[str, ...], text: str) -> Any:
    return field(default=default, metadata={"kind": "choice", "choices": choices, "text": text})


def _text(default: Any, text: str) -> Any:
    return field(default=default, metadata={"kind": "text", "text": text})


def _flag(default: bool, text: str) -> Any:
    return field(default=default, metadata={"kind": "flag", "text": text})


def _wholes(text: str) -> Any:
    return field(default=(), metadata={"kind": "wholes", "low": 0, "high": 10**7, "text": text})


def _numbers(low: float, high: float, text: str) -> Any:
    return field(default=(), metadata={"kind": "numbers", "low": low, "high": high, "unit": "", "text": text})


@dataclass(frozen=True)
class Camera:
    """`[camera]`: the recording mode. Times are milliseconds, the field of view is horizontal, in degrees."""

    width_px: int = _whole(1280, 16, 8192, "picture width, even")
    height_px: int = _whole(720, 16, 8192, "picture height, even")
    frame_rate: Fraction = field(
        default=Fraction(60), metadata={"kind": "rate", "low": 1, "high": 1000, "text": 'a number or "30000/1001"'}
    )
    readout_ms: float = _number(14.0, 0.0, 1000.0, "ms", "first to last row; 0 is a global shutter")
    exposure_ms: float = _number(1.0, 0.0, 1000.0, "ms", "shutter time of each row; 0 is an instant")
    hfov_deg: float = _number(80.0, 1.0, 150.0, "degrees", "horizontal field of view")
    samples: int = _whole(4, 4, 7, "instants averaged over the exposure, and sub-rows of a pixel")

    @property
    def readout_s(self) -> float:
        """Readout time in seconds."""
        return self.readout_ms * 1e-3

    @property
    def exposure_s(self) -> float:
        """Exposure time in seconds."""
        return self.exposure_ms * 1e-3

    @property
    def focal_px(self) -> float:
        """Focal length in pixels, `F = (W/2) / tan(HFOV/2)` of a pinhole camera."""
        return self.width_px / 2 / math.tan(math.radians(self.hfov_deg) / 2)

    def radians_from_px(self, axis: str, pixels: float) -> float:
        """Angle that moves the picture by `pixels`: at the centre, or for roll at the middle of the side edges."""
        return pixels / (self.width_px / 2 if axis == "roll" else self.focal_px)

    def px_from_radians(self, axis: str, angle_rad: float) -> float:
        """Pixels that a small `angle_rad` moves the picture: at the centre, or for roll at the side edges."""
        return angle_rad * (self.width_px / 2 if axis == "roll" else self.focal_px)


@dataclass(frozen=True)
class Encode:
    """`[encode]`: codec and rate. At most one of the three rate keys; none means 0.15 bits per pixel.

    mjpeg takes only crf (a quantiser of 1 to 31, 3 by default) and prores only the rates; its default is the codec's.
    """

    codec: str = _choice("h264", CODECS, "codec")
    bit_rate_mbps: float | None = _number(None, 0.01, 2000.0, "Mbit/s", "target rate")
    bits_per_pixel: float | None = _number(None, 0.001, 24.0, "bits", "target rate per pixel and frame")
    crf: float | None = _number(None, 0.0, 63.0, "", "constant quality; 0 is (nearly) lossless")
    pixel_format: str | None = _choice(None, PIXEL_FORMATS, "pixel format; by default the codec's usual one")
    gop: int | None = _whole(None, 1, 600, "frames from one key frame to the next; one second by default")
    preset: str = _choice("veryfast", PRESETS, "speed preset of the H.264 and HEVC encoders")

    @property
    def stored_format(self) -> str:
        """Pixel format that is stored: the one asked for, or the codec's usual one."""
        return self.pixel_format or _FORMATS[self.codec][0]


@dataclass(frozen=True)
class Noise:
    """`[noise]`: sensor noise in grey levels (of 255) before encoding; sd = sqrt(read^2 + shot^2 grey / 100)."""

    read_grey: float = _number(0.8, 0.0, 60.0, "grey levels", "sd of the signal-independent noise")
    shot_grey: float = _number(0.8, 0.0, 60.0, "grey levels", "sd of the signal-dependent noise at grey 100")


@dataclass(frozen=True)
class Lamp:
    """`[lamp]`: a flickering lamp multiplies the scene by `1 + depth cos(2 pi f t)`, averaged over each exposure."""

    flicker_hz: float = _number(100.0, 0.1, 10000.0, "Hz", "flicker frequency (twice the mains frequency)")
    depth: float = _number(0.0, 0.0, 1.0, "", "modulation depth")
    phase_deg: float = _number(0.0, -360.0, 360.0, "degrees", "phase at time 0")


@dataclass(frozen=True)
class Path3D:
    """`[flight]`: how the camera travels and where it looks."""

    duration_s: float = _number(4.0, 0.01, 3600.0, "s", "clip length")
    height_m: float = _number(8.0, 0.05, 1000.0, "m", "height above the ground at the start")
    tilt_deg: float = _number(35.0, -90.0, 90.0, "degrees", "how far the camera looks down")
    heading_deg: float = _number(0.0, -360.0, 360.0, "degrees", "where it looks at the start, positive to the left")
    speed_mps: float = _number(0.0, -100.0, 100.0, "m/s", "ground speed")
    course_deg: float = _number(0.0, -360.0, 360.0, "degrees", "direction of flight, positive to the left")
    climb_mps: float = _number(0.0, -50.0, 50.0, "m/s", "climb rate")


@dataclass(frozen=True)
class Pan:
    """`[[pan]]`: an intended turn. `axis = "heading"` turns about the vertical, the others about the camera's axes."""

    axis: str = _choice("heading", ("heading", *AXES), "what it turns about")
    rate_deg_per_s: float = _number(10.0, -720.0, 720.0, "degrees/s", "rate; positive moves the picture right or down")
    start_s: float = _number(0.0, -10.0, 3600.0, "s", "when the turn begins")
    stop_s: float | None = _number(None, -10.0, 3600.0, "s", "when it ends; the end of the clip by default")
    ramp_s: float = _number(0.0, 0.0, 60.0, "s", "time to reach and to leave the full rate")


@dataclass(frozen=True)
class Sway:
    """`[[sway]]`: one slow sinusoid of the camera's angle; never touched by the isolator."""

    axis: str = _choice("yaw", AXES, "axis")
    frequency_hz: float = _number(1.0, 0.001, 20000.0, "Hz", "frequency")
    amplitude_deg: float = _number(0.1, 0.0, 45.0, "degrees", "peak angle")
    phase_deg: float | None = _number(None, -360.0, 360.0, "degrees", "phase of the sine at time 0; seeded by default")


@dataclass(frozen=True)
class Drift:
    """`[[drift]]`: one sinusoid of the camera's position."""

    direction: str = _choice("right", ("right", "up", "forward"), "direction, in the heading-0 world frame")
    frequency_hz: float = _number(1.0, 0.001, 20000.0, "Hz", "frequency")
    amplitude_m: float = _number(0.01, 0.0, 100.0, "m", "peak displacement")
    phase_deg: float | None = _number(None, -360.0, 360.0, "degrees", "phase of the sine at time 0; seeded by default")


@dataclass(frozen=True)
class Tone:
    """`[[tone]]`: one narrow-band vibration. Give the peak amplitude as degrees or as native pixels."""

    axis: str = _choice("yaw", AXES, "axis")
    frequency_hz: float = _number(100.0, 0.01, 20000.0, "Hz", "frequency")
    amplitude_deg: float | None = _number(None, 0.0, 45.0, "degrees", "peak angle before the isolator")
    amplitude_px: float | None = _number(None, 0.0, 1000.0, "px", "peak, picture centre (roll: mid side edge)")
    phase_deg: float | None = _number(None, -360.0, 360.0, "degrees", "phase of the sine at time 0; seeded by default")
    wander_pct: float = _number(0.0, 0.0, 50.0, "%", "rms of the slow relative frequency wander")
    wander_time_s: float = _number(1.0, 0.01, 1000.0, "s", "correlation time of the wander")
    start_s: float | None = _number(None, -10.0, 3600.0, "s", "onset; always on by default")
    stop_s: float | None = _number(None, -10.0, 3600.0, "s", "end; always on by default")
    fade_s: float = _number(0.05, 0.001, 60.0, "s", "raised-cosine fade at onset and end")
    decay_s: float | None = _number(None, 0.001, 3600.0, "s", "time constant of an exponential decay after the onset")


@dataclass(frozen=True)
class Motors:
    """`[[motors]]`: several rotors near one speed; expands to one wandering tone each."""

    count: int = _whole(4, 1, 64, "number of rotors")
    axis: str = _choice("yaw", AXES, "axis")
    frequency_hz: float = _number(140.0, 0.1, 20000.0, "Hz", "mean rotation frequency")
    spread_pct: float = _number(2.0, 0.0, 50.0, "%", "half width of the rotors' spread around it")
    wander_pct: float = _number(0.5, 0.0, 50.0, "%", "rms frequency wander of each rotor")
    wander_time_s: float = _number(1.0, 0.01, 1000.0, "s", "correlation time of the wander")
    amplitude_deg: float | None = _number(None, 0.0, 45.0, "degrees", "peak angle of each rotor before the isolator")
    amplitude_px: float | None = _number(None, 0.0, 1000.0, "px", "peak of each rotor at the picture centre")


@dataclass(frozen=True)
class Broadband:
    """`[[broadband]]`: gaussian vibration, flat between two frequencies. Give its rms as degrees or native pixels."""

    axis: str = _choice("yaw", AXES, "axis")
    low_hz: float = _number(80.0, 0.001, 20000.0, "Hz", "lower edge")
    high_hz: float = _number(160.0, 0.001, 20000.0, "Hz", "upper edge")
    rms_deg: float | None = _number(None, 0.0, 45.0, "degrees", "rms angle before the isolator")
    rms_px: float | None = _number(None, 0.0, 1000.0, "px", "rms at the picture centre (roll: mid side edge)")


@dataclass(frozen=True)
class Isolator:
    """`[isolator]`: a damped spring between airframe and camera; filters every tone, motor and broadband."""

    natural_frequency_hz: float = _number(10.0, 0.01, 10000.0, "Hz", "natural frequency")
    damping_ratio: float = _number(0.1, 0.0, 10.0, "", "damping ratio")


@dataclass(frozen=True)
class Cadence:
    """`[[cadence]]`: a fault of the recorder.

    `drop` leaves frames out, `repeat` stores the previous picture again, `jitter` writes timestamps that wander
    about the true instant, `variable` truly records with the repeating pattern of frame intervals, and `restamp`
    rewrites all timestamps to the nominal rate (so that dropped frames leave no gap behind).
    """

    fault: str = _choice("drop", ("drop", "repeat", "jitter", "variable", "restamp"), "kind of fault")
    frames: tuple[int, ...] = _wholes("frame numbers that are dropped or repeated")
    rate_pct: float = _number(0.0, 0.0, 90.0, "%", "share of frames dropped or repeated at random")
    jitter_ms: float = _number(0.0, 0.0, 100.0, "ms", "sd of the timestamp error")
    intervals: tuple[float, ...] = _numbers(0.1, 10.0, "frame intervals as multiples of the nominal one")


@dataclass(frozen=True)
class Scene:
    """`[scene]`: what is filmed: a ground plane, or a flat backdrop square to the camera at a known distance."""

    kind: str = _choice("ground", ("ground", "backdrop"), "ground plane or flat backdrop")
    distance_m: float = _number(5.0, 0.05, 10000.0, "m", "distance of the backdrop at the start")
    pattern: str = _choice("soil", PATTERNS, "surface")
    photo: str | None = _text(None, 'picture file for pattern = "photo", relative to the recipe')
    tile_m: float | None = _number(None, 0.05, 100000.0, "m", "size after which the surface repeats")
    brightness: float = _number(118.0, 1.0, 250.0, "grey levels", "mean grey of the surface")
    contrast: float = _number(30.0, 0.0, 120.0, "grey levels", "sd of the surface's grey")
    detail: float = _number(1.0, 0.0, 3.0, "", "share of fine structure; 0 leaves only broad patches")
    sky_grey: float = _number(205.0, 0.0, 255.0, "grey levels", "grey of the sky at the horizon")
    sky_fall: float = _number(60.0, -200.0, 200.0, "grey levels", "how much darker the sky is at the zenith")


@dataclass(frozen=True)
class Panel:
    """`[[panel]]`: an upright textured rectangle that stands on the ground (heading-0 world frame)."""

    right_m: float = _number(0.0, -10000.0, 10000.0, "m", "centre, to the right of the start")
    forward_m: float = _number(20.0, -10000.0, 10000.0, "m", "centre, ahead of the start")
    bottom_m: float = _number(0.0, -1000.0, 1000.0, "m", "height of its lower edge")
    width_m: float = _number(4.0, 0.01, 10000.0, "m", "width")
    height_m: float = _number(3.0, 0.01, 10000.0, "m", "height")
    facing_deg: float = _number(0.0, -360.0, 360.0, "degrees", "turn about the vertical; 0 faces the start")
    pattern: str = _choice("paving", PATTERNS[:-1], "surface")
    brightness: float = _number(140.0, 1.0, 250.0, "grey levels", "mean grey")
    contrast: float = _number(30.0, 0.0, 120.0, "grey levels", "sd of the grey")


@dataclass(frozen=True)
class Cars:
    """`[[cars]]`: textured patches that slide on the ground within a rectangle and enter again on the other side."""

    count: int = _whole(10, 1, 500, "number of cars")
    length_m: float = _number(4.2, 0.05, 100.0, "m", "length")
    width_m: float = _number(1.8, 0.05, 100.0, "m", "width")
    speed_mps: float = _number(3.0, 0.0, 100.0, "m/s", "mean speed")
    spread_pct: float = _number(30.0, 0.0, 100.0, "%", "half width of the speeds around it")
    direction: str = _choice("across", ("across", "along", "both"), "across the view, along it, or some of each")
    right_m: float = _number(0.0, -10000.0, 10000.0, "m", "centre of the rectangle")
    forward_m: float = _number(12.0, -10000.0, 10000.0, "m", "centre of the rectangle")
    span_right_m: float = _number(30.0, 0.1, 10000.0, "m", "size of the rectangle")
    span_forward_m: float = _number(20.0, 0.1, 10000.0, "m", "size of the rectangle")


@dataclass(frozen=True)
class Flight:
    """One synthetic clip: everything that decides its pictures, bit for bit.

    Attributes
    ----------
    seed : int
        Seed of every random choice.
    title : str
        Free text.
    camera, encode, noise, lamp, flight, isolator, scene
        The single tables; `lamp` and `isolator` are None when absent.
    pan, sway, drift, tone, motors, broadband, cadence, panel, cars : tuple
        The repeatable tables.
    source : str
        Text of the recipe, copied into the truth file.
    folder : str
        Folder that relative picture names start from; empty for the working folder.
    """

    seed: int = 0
    title: str = ""
    camera: Camera = Camera()
    encode: Encode = Encode()
    noise: Noise = Noise()
    lamp: Lamp | None = None
    flight: Path3D = Path3D()
    isolator: Isolator | None = None
    scene: Scene = Scene()
    pan: tuple[Pan, ...] = ()
    sway: tuple[Sway, ...] = ()
    drift: tuple[Drift, ...] = ()
    tone: tuple[Tone, ...] = ()
    motors: tuple[Motors, ...] = ()
    broadband: tuple[Broadband, ...] = ()
    cadence: tuple[Cadence, ...] = ()
    panel: tuple[Panel, ...] = ()
    cars: tuple[Cars, ...] = ()
    source: str = field(default="", compare=False)
    folder: str = ""


# Pixel formats each codec can store, its usual one first.
_FORMATS = {
    "h264": ("yuv420p", "yuv422p", "yuv444p", "yuv420p10le", "yuv422p10le"),
    "hevc": ("yuv420p", "yuv422p", "yuv444p", "yuv420p10le", "yuv422p10le"),
    "mjpeg": ("yuvj420p",), "prores": ("yuv422p10le",), "vp9": ("yuv420p",), "av1": ("yuv420p", "yuv420p10le"),
}

_SINGLE = {
    "camera": Camera, "encode": Encode, "noise": Noise, "lamp": Lamp, "flight": Path3D, "isolator": Isolator,
    "scene": Scene,
}
_REPEATED = {
    "pan": Pan, "sway": Sway, "drift": Drift, "tone": Tone, "motors": Motors, "broadband": Broadband,
    "cadence": Cadence, "panel": Panel, "cars": Cars,
}


def describe_keys() -> str:
    """Every table and key of a recipe with its default, range and meaning, as plain text from the definitions."""
    lines = ["seed = 0           whole number; the same seed gives the same pictures", 'title = ""         free text']
    for name, kind in (_SINGLE | _REPEATED).items():
        lines += ["", f"[[{name}]]" if name in _REPEATED else f"[{name}]"]
        for entry in dataclasses.fields(kind):
            meta, default = entry.metadata, entry.default
            if meta["kind"] == "choice":
                allowed = " | ".join(meta["choices"])
            elif "low" in meta and meta["kind"] != "rate":
                allowed = _range_text(meta)
            else:
                allowed = ""
            quoted = f'"{default}"' if isinstance(default, str) else str(default)
            shown = "" if default is None or default == () else f" = {quoted}"
            text = "; ".join(part for part in (meta["text"], allowed) if part)
            lines.append(f"  {entry.name + shown:<30} {text}")
    return "\n".join(lines) + "\n"


class _Where:
    """Names a place of the recipe in an error: file, line and key."""

    def __init__(self, name: str, text: str):
        self.name = name
        self.lines = _key_lines(text)

    def error(self, table: str, index: int, key: str, cause: str) -> FlightError:
        line = self.lines.get((table, index, key)) or self.lines.get((table, index, ""))
        place = f"{self.name}, line {line}" if line else self.name
        label = ".".join(part for part in (f"[{table}]" if table else "", key) if part).replace("].", "] ")
        return FlightError(f"{place}: {label} {cause}")


def _key_lines(text: str) -> dict[tuple[str, int, str], int]:
    """Line number of every (table, index of its repeat, key); good enough for recipes, which do not nest tables."""
    lines: dict[tuple[str, int, str], int] = {}
    table, index, seen = "", 0, {}
    for number, line in enumerate(text.splitlines(), start=1):
        if heading := re.match(r"\s*(\[\[?)\s*([\w-]+)\s*\]", line):
            table = heading.group(2)
            index = seen.get(table, -1) + 1
            seen[table] = index
            lines[table, index, ""] = number
        elif assignment := re.match(r"\s*([\w-]+)\s*=", line):
            lines.setdefault((table, index, assignment.group(1)), number)
    return lines


def _unknown(name: str, known: tuple[str, ...]) -> str:
    near = difflib.get_close_matches(name, known, n=1)
    hint = f"did you mean {near[0]}?" if near else f"known are {', '.join(sorted(known))}."
    return f"is not known; {hint}"


def _range_text(meta: Mapping[str, Any]) -> str:
    unit = f" {meta['unit']}" if meta.get("unit") else ""
    return f"{meta['low']:g} to {meta['high']:g}{unit}"


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)


def _rate(value: Any) -> Fraction | None:
    """Exact frame rate; a decimal such as 29.97 is taken as the broadcast fraction 30000/1001."""
    try:
        if isinstance(value, bool):
            return None
        rate = Fraction(value) if isinstance(value, (str, int)) else Fraction(str(value))
    except (ValueError, ZeroDivisionError, TypeError):
        return None
    nominal = Fraction(math.ceil(rate) * 1000, 1001)
    return nominal if rate.denominator > 1 and abs(rate - nominal) < Fraction(1, 200) else rate


def _convert(value: Any, meta: Mapping[str, Any]) -> tuple[Any, str]:
    """The checked value and, when it is refused, the cause (else an empty string)."""
    kind = meta["kind"]
    if kind == "number":
        if not _is_number(value):
            return None, f"must be a number from {_range_text(meta)}, not {value!r}."
        if not meta["low"] <= value <= meta["high"]:
            return None, f"is {value:g} but must be {_range_text(meta)}."
        return float(value), ""
    if kind == "whole":
        if not isinstance(value, int) or isinstance(value, bool):
            return None, f"must be a whole number from {_range_text(meta)}, not {value!r}."
        if not meta["low"] <= value <= meta["high"]:
            return None, f"is {value} but must be {_range_text(meta)}."
        return value, ""
    if kind == "choice":
        if value not in meta["choices"]:
            return None, f"is {value!r} but must be one of {', '.join(meta['choices'])}."
        return value, ""
    if kind == "text":
        return (value, "") if isinstance(value, str) else (None, f"must be text in quotes, not {value!r}.")
    if kind == "flag":
        return (value, "") if isinstance(value, bool) else (None, f"must be true or false, not {value!r}.")
    if kind == "rate":
        rate = _rate(value)
        if rate is None or not meta["low"] <= rate <= meta["high"]:
            limits = f"{meta['low']} to {meta['high']} frames/s"
            return None, f'must be {limits}, as a number or "30000/1001", not {value!r}.'
        return rate, ""
    if not isinstance(value, (list, tuple)):
        return None, f"must be a list of numbers, not {value!r}."
    for item in value:
        whole = isinstance(item, int) and not isinstance(item, bool)
        if not (whole if kind == "wholes" else _is_number(item)) or not meta["low"] <= item <= meta["high"]:
            name = "whole numbers" if kind == "wholes" else "numbers"
            return None, f"must be a list of {name} from {_range_text(meta)}, but holds {item!r}."
    return tuple(int(item) if kind == "wholes" else float(item) for item in value), ""


def _build(kind: type, table: Any, name: str, index: int, where: _Where) -> Any:
    if not isinstance(table, Mapping):
        raise where.error("", 0, name, f"must be a table, written [{name}], not {table!r}.")
    known = {entry.name: entry for entry in dataclasses.fields(kind)}
    values = {}
    for key, value in table.items():
        if key not in known:
            raise where.error(name, index, key, _unknown(key, tuple(known)))
        values[key], cause = _convert(value, known[key].metadata)
        if cause:
            raise where.error(name, index, key, cause)
    return kind(**values)


def _check(flight: Flight, where: _Where) -> Flight:
    """Rules that span several keys."""
    camera = flight.camera
    for key in ("width_px", "height_px"):
        if getattr(camera, key) % 2:
            raise where.error("camera", 0, key, f"is {getattr(camera, key)} but must be even.")
    if camera.readout_s > 1 / camera.frame_rate:
        longest = 1e3 / float(camera.frame_rate)
        raise where.error(
            "camera", 0, "readout_ms",
            f"is {camera.readout_ms:g} but must be at most the frame interval of {longest:.3f} ms.",
        )
    if camera.exposure_s > 1 / camera.frame_rate:
        longest = 1e3 / float(camera.frame_rate)
        raise where.error(
            "camera", 0, "exposure_ms",
            f"is {camera.exposure_ms:g} but must be at most the frame interval of {longest:.3f} ms.",
        )
    rates = [key for key in ("bit_rate_mbps", "bits_per_pixel", "crf") if getattr(flight.encode, key) is not None]
    if len(rates) > 1:
        raise where.error("encode", 0, rates[1], f"cannot go with {rates[0]}; give only one of the two.")
    codec, pixel_format = flight.encode.codec, flight.encode.pixel_format
    if pixel_format is not None and pixel_format not in _FORMATS[codec]:
        allowed = ", ".join(_FORMATS[codec])
        raise where.error("encode", 0, "pixel_format", f"is {pixel_format!r} but {codec} stores only {allowed}.")
    if flight.encode.crf is not None and codec == "prores":
        raise where.error("encode", 0, "crf", "is not known to prores; give bit_rate_mbps or bits_per_pixel.")
    for key in ("bit_rate_mbps", "bits_per_pixel"):
        if getattr(flight.encode, key) is not None and codec == "mjpeg":
            raise where.error("encode", 0, key, "is not known to mjpeg; give crf, a quantiser of 1 to 31.")
    if flight.scene.pattern == "photo" and not flight.scene.photo:
        raise where.error("scene", 0, "pattern", 'is "photo" but the key photo names no picture file.')
    lowest = flight.flight.height_m + min(0.0, flight.flight.climb_mps * flight.flight.duration_s)
    if flight.scene.kind == "ground" and lowest <= 0:
        raise where.error("flight", 0, "climb_mps", "takes the camera below the ground before the clip ends.")
    for name, keys in (("tone", ("amplitude_deg", "amplitude_px")), ("motors", ("amplitude_deg", "amplitude_px")),
                       ("broadband", ("rms_deg", "rms_px"))):
        for index, entry in enumerate(getattr(flight, name)):
            given = [key for key in keys if getattr(entry, key) is not None]
            if len(given) != 1:
                raise where.error(name, index, given[1] if given else "", f"needs exactly one of {' and '.join(keys)}.")
    for index, band in enumerate(flight.broadband):
        if band.high_hz <= band.low_hz:
            raise where.error("broadband", index, "high_hz", f"must be above low_hz, which is {band.low_hz:g}.")
    for index, fault in enumerate(flight.cadence):
        need = {"drop": ("frames", "rate_pct"), "repeat": ("frames", "rate_pct"), "jitter": ("jitter_ms",),
                "variable": ("intervals",), "restamp": ()}[fault.fault]
        if need and not any(getattr(fault, key) for key in need):
            raise where.error("cadence", index, "fault", f"{fault.fault!r} needs {' or '.join(need)}.")
    return flight


def flight_from_dict(
    table: Mapping[str, Any], *, name: str = "flight", source: str = "", folder: str | Path = ""
) -> Flight:
    """Check a recipe that is already parsed.

    Parameters
    ----------
    table : mapping
        The TOML document as a dict.
    name : str
        What errors call it.
    source : str
        Text of the recipe, if there is one: gives errors their line and is kept in the truth file.
    folder : str or Path
        Folder that picture names in the recipe start from.

    Returns
    -------
    Flight

    Raises
    ------
    FlightError
        For an unknown key, a wrong type or a value out of range; one sentence with the allowed values.
    """
    where = _Where(name, source)
    values: dict[str, Any] = {"source": source, "folder": str(folder)}
    for key, value in table.items():
        if key == "seed":
            if not isinstance(value, int) or isinstance(value, bool) or value < 0:
                raise where.error("", 0, key, f"must be a whole number from 0, not {value!r}.")
            values[key] = value
        elif key == "title":
            if not isinstance(value, str):
                raise where.error("", 0, key, f"must be text in quotes, not {value!r}.")
            values[key] = value
        elif key in _SINGLE:
            values[key] = _build(_SINGLE[key], value, key, 0, where)
        elif key in _REPEATED:
            if not isinstance(value, (list, tuple)):
                raise where.error(key, 0, "", f"may be given several times, so write it [[{key}]].")
            values[key] = tuple(_build(_REPEATED[key], item, key, index, where) for index, item in enumerate(value))
        else:
            raise where.error("", 0, key, _unknown(key, ("seed", "title", *_SINGLE, *_REPEATED)))
    return _check(Flight(**values), where)


def load_flight(path: str | Path) -> Flight:
    """Read a flight recipe.

    Parameters
    ----------
    path : str or Path
        TOML file.

    Returns
    -------
    Flight

    Raises
    ------
    FlightError
        When the file cannot be read, is no TOML, or holds something that cannot be flown.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise FlightError(f"{path}: there is no such file.") from None
    except (OSError, UnicodeDecodeError) as error:
        raise FlightError(f"{path}: cannot be read ({getattr(error, 'strerror', None) or error}).") from error
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise FlightError(f"{path}: is not valid TOML ({error}).") from error
    return flight_from_dict(table, name=str(path), source=text, folder=path.parent)
