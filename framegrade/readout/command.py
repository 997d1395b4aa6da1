"""`framegrade readout`: measure a camera's modes and keep the figures in a camera file."""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from framegrade.camera import Camera, CameraMode, load_camera, save_camera
from framegrade.footage import ClipInfo, FootageError, exact_rate, find_clips, probe
from framegrade.paths import shown
from framegrade.readout import clip as clips
from framegrade.readout.clip import Undecided
from framegrade.readout.estimate import CannotTell, Readout
from framegrade.readout.field_of_view import FieldOfView
from framegrade.readout.vibration import Line
from framegrade.settings_file import SettingsError

OK, SOME_FAILED, WRONG_USE = 0, 1, 2
METHODS = ("auto", "swing", "flicker", "vibration")
FLICKER_RANGE_HZ = (10.0, 5000.0)
#: Figures of one mode that differ by more than this many of their joint intervals contradict each other.
AGREEMENT = 1.5
#: A field of view that the camera file states without an interval is taken as good to this share.
STATED_SHARE = 0.02

DESCRIPTION = """\
Measure the readout time of the mode each clip was shot in, and keep it in a camera file that
`framegrade grade --camera` reads. With --pan-turn, measure the field of view instead.

Without the readout time a vibration's frequency cannot be told from its aliases, and makers rarely publish it.
"""

EPILOG = """\
how to film, in two minutes:
  swing      Stand before a still, richly textured scene 10 m away or more (trees, a brick wall). Swing the camera
             left and right by hand, 3 to 5 degrees, about twice a second, for 5 s. Turn it, do not shift it.
  flicker    Film an evenly lit, plain, light wall under one lamp on alternating current, exposure time well under
             half a flicker period (1/400 s or shorter), camera held still, for 4 s. Lamps flicker at twice the mains
             frequency: --flicker-hz 100 or 120. Choose a frame rate that does not divide it evenly.
  vibration  A flight clip serves when its motors run at unlike speeds or the throttle changes. Several flights of
             one mode are weighed together. The harmonics of one steady shaft alone never decide; rivals are named.
  pan turn   Turn the camera once around on the spot, a little more than 360 degrees in 10 to 20 s, the lens over
             the turning axis, scenery 20 m away or more.

examples:
  framegrade readout swing.mp4 -o camera.toml
  framegrade readout lamp.mp4 --flicker-hz 100 -o camera.toml
  framegrade readout --pan-turn turn.mp4 -o camera.toml

A camera file that exists is updated: modes measured now get the new figure, all else in it stays (but comments).
Readout time: from the top to the bottom edge of the picture, 0 for a global shutter. All +- are 95 % intervals.

exit status: 0 every clip told, 1 some clip could not tell (the others are written), 2 wrong use.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments and help.

    Parameters
    ----------
    parser : argparse.ArgumentParser
        The (sub)parser of the command.
    """
    parser.description = DESCRIPTION
    parser.epilog = EPILOG
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.add_argument("paths", nargs="+", metavar="CLIP", help="a clip, a folder of clips or a pattern")
    parser.add_argument("-o", "--out", type=Path, metavar="FILE", help="camera file to write or update")
    parser.add_argument("--method", choices=METHODS, default="auto",
                        help="what the clips show; auto: flicker when --flicker-hz is given, else a swing or a flight")
    parser.add_argument("--flicker-hz", type=_flicker_hz, metavar="HZ",
                        help="flicker frequency of the lamp: twice the mains frequency, 100 or 120")
    parser.add_argument("--pan-turn", action="store_true", help="the clips show a full turn: measure the field of view")
    parser.add_argument("--camera-name", metavar="NAME", help="name of the camera in the file")


def _flicker_hz(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    low, high = FLICKER_RANGE_HZ
    if not low <= value <= high:
        raise argparse.ArgumentTypeError(f"{text!r} is not a number from {low:g} to {high:g} (hertz)")
    return value


@dataclass(frozen=True)
class Measured:
    """What one clip, or several together, told about a mode: a `Readout` or a `FieldOfView`."""

    name: str
    info: ClipInfo
    figure: Readout | FieldOfView


@dataclass(frozen=True)
class _Pending:
    """A flight that alone could not tell."""

    path: Path
    info: ClipInfo
    interval_s: float
    lines: tuple[Line, ...]
    error: CannotTell


def run(args: argparse.Namespace) -> int:
    """Carry out the command.

    Parameters
    ----------
    args : argparse.Namespace
        From a parser set up by `add_arguments`.

    Returns
    -------
    int
        0 every clip told, 1 some could not, 2 wrong use.
    """
    wrong = _wrong_use(args)
    if wrong:
        return _complain(wrong, WRONG_USE)
    try:
        camera = load_camera(args.out) if args.out is not None and args.out.exists() else None
    except SettingsError as error:
        return _complain(error, WRONG_USE)
    paths, errors = find_clips(args.paths)
    for error in errors:
        _complain(error)
    if not paths:
        return _complain("no clip was found", WRONG_USE)

    told, failed = measure_all(paths, args)
    try:
        modes = combine(told)
    except CannotTell as error:
        return _complain(error, SOME_FAILED)
    for line in _comparison(camera, modes):
        print(line)
    if args.out is not None and modes:
        try:
            save_camera(update(camera, modes, args.camera_name), args.out)
        except ValueError as error:
            return _complain(f"{args.out}: {error}", SOME_FAILED)
        except OSError as error:
            return _complain(f"{args.out}: cannot be written: {(error.strerror or str(error)).lower()}", SOME_FAILED)
        print(f"{shown(args.out)}: written")
    return SOME_FAILED if failed or errors else OK


def _wrong_use(args: argparse.Namespace) -> str | None:
    if args.pan_turn and (args.method != "auto" or args.flicker_hz is not None):
        return "--pan-turn measures the field of view and goes with neither --method nor --flicker-hz"
    if args.method == "flicker" and args.flicker_hz is None:
        return ("--method flicker needs the lamp's flicker frequency: add --flicker-hz 100 (or 120), "
                "twice the mains frequency")
    if args.method in ("swing", "vibration") and args.flicker_hz is not None:
        return f"--flicker-hz does not go with --method {args.method}"
    if args.camera_name is not None and args.out is None:
        return "--camera-name names the camera in a file: add -o FILE"
    return None


def _complain(message: object, status: int = SOME_FAILED) -> int:
    print(f"framegrade readout: {shown(str(message))}", file=sys.stderr)
    return status


# --- measuring ---------------------------------------------------------------------------------------------------


def measure_all(paths: Sequence[Path], args: argparse.Namespace) -> tuple[list[Measured], int]:
    """Measure clip after clip, telling each result as it comes.

    Returns
    -------
    list of Measured
    int
        How many clips could not tell.
    """
    told: list[Measured] = []
    pending: list[_Pending] = []
    failed = 0
    for path in paths:
        try:
            info = probe(path)
            result = _measure_one(path, info, args)
        except (FootageError, CannotTell) as error:
            failed += 1
            _complain(error if isinstance(error, FootageError) else f"{path}: {error}")
            continue
        if isinstance(result, _Pending):
            pending.append(result)
            continue
        told.append(Measured(path.name, info, result))
        print(sentence(told[-1]))
    together, left = _weigh_together(pending)
    for measured in together:
        told.append(measured)
        print(sentence(measured))
    for one in left:
        failed += 1
        _complain(f"{one.path}: {one.error}")
    return told, failed


def _measure_one(path: Path, info: ClipInfo, args: argparse.Namespace) -> Readout | FieldOfView | _Pending:
    if args.pan_turn:
        return clips.turn_field_of_view(path)
    if args.flicker_hz is not None:
        return clips.flicker_readout(path, args.flicker_hz)
    if args.method == "swing":
        return clips.swing_readout(clips.read_motion(path, longest_s=clips.LONGEST_S))
    motion = clips.read_motion(path)
    if args.method == "vibration":
        lines = clips.vibration_lines(motion)
        try:
            return clips.vibration_readout(lines, motion.interval_s)
        except CannotTell as error:
            return _Pending(path, info, motion.interval_s, lines, error)
    try:
        return clips.automatic_readout(motion)[0]
    except Undecided as error:
        return _Pending(path, info, motion.interval_s, error.lines, error)


def _same_mode(one: ClipInfo, other: ClipInfo) -> bool:
    return ((one.width_px, one.height_px) == (other.width_px, other.height_px)
            and abs(one.frame_rate_hz / other.frame_rate_hz - 1) < 0.01)


def _weigh_together(pending: list[_Pending]) -> tuple[list[Measured], list[_Pending]]:
    """Flights of one mode that alone could not tell, each mode's lines weighed together."""
    told, left, rest = [], [], list(pending)
    while rest:
        group = [p for p in rest if _same_mode(p.info, rest[0].info)]
        rest = [p for p in rest if p not in group]
        lines = tuple(line for p in group for line in p.lines)
        try:
            if len(group) < 2:
                raise group[0].error
            readout = clips.vibration_readout(lines, group[0].interval_s)
            told.append(Measured(" + ".join(p.path.name for p in group), group[0].info, readout))
        except CannotTell:
            left += group
    return told, left


def sentence(measured: Measured) -> str:
    """What a clip told, in one line."""
    figure, head = measured.figure, f"{shown(measured.name)}: {measured.info.mode}"
    if isinstance(figure, FieldOfView):
        return (f"{head}: horizontal field of view {figure.hfov_deg:.2f} +- {figure.hfov_ci_deg:.2f} degrees "
                f"(turn of {figure.turn_s:.1f} s)")
    if figure.global_shutter:
        most_ms = 1e3 * (abs(figure.readout_s) + figure.ci_s)
        return f"{head}: global shutter (readout 0, less than {most_ms:.2g} ms; {figure.method}: {figure.basis})"
    return (
        f"{head}: readout {figure.readout_s * 1e3:.3f} +- {figure.ci_s * 1e3:.3f} ms ({figure.method}: {figure.basis})"
    )


# --- the camera file ---------------------------------------------------------------------------------------------


def combine(told: Sequence[Measured]) -> list[CameraMode]:
    """One figure for each mode, from all clips of it.

    Parameters
    ----------
    told : sequence of Measured

    Returns
    -------
    list of CameraMode
        With only what was measured.

    Raises
    ------
    CannotTell
        When clips of one mode contradict each other.
    """
    modes, rest = [], list(told)
    while rest:
        group = [m for m in rest if _same_mode(m.info, rest[0].info)]
        rest = [m for m in rest if m not in group]
        info = group[0].info
        mode = CameraMode(info.width_px, info.height_px, float(exact_rate(info.frame_rate_hz)))
        if isinstance(group[0].figure, FieldOfView):
            hfov, ci = _mean([(m.name, m.figure.hfov_deg, m.figure.hfov_ci_deg) for m in group], info.mode, "degrees")
            modes.append(replace(mode, hfov_deg=round(hfov, 3), hfov_ci_deg=round(ci, 3)))
            continue
        value, ci = _mean([(m.name, m.figure.readout_s * 1e3, m.figure.ci_s * 1e3) for m in group], info.mode, "ms")
        if abs(value) <= ci:  # global shutter: the interval says how far from it the rows may be
            modes.append(replace(mode, readout_s=0.0, readout_ci_ms=round(abs(value) + ci, 4)))
        else:  # rows cannot be read for longer than from frame to frame
            longest = 1e3 / mode.frame_rate_hz
            modes.append(replace(mode, readout_s=round(min(value, longest), 4) / 1e3, readout_ci_ms=round(ci, 4)))
    return modes


def _mean(figures: list[tuple[str, float, float]], mode: str, unit: str) -> tuple[float, float]:
    """Weighted mean and 95 % half-width; the half-widths of clips share a systematic part, so they shrink no further
    than to that of the best clip.

    Raises
    ------
    CannotTell
    """
    values, cis = np.array([f[1] for f in figures]), np.array([f[2] for f in figures])
    weights = 1 / cis ** 2
    mean = float((weights * values).sum() / weights.sum())
    low, high = int(np.argmin(values)), int(np.argmax(values))
    if values[high] - values[low] > AGREEMENT * np.hypot(cis[low], cis[high]):
        raise CannotTell(
            f"the clips of {mode} contradict each other: {shown(figures[low][0])} gives {values[low]:.3f} and "
            f"{shown(figures[high][0])} {values[high]:.3f} {unit}, so nothing is written"
        )
    return mean, float(cis.min())


def _matching(camera: Camera | None, mode: CameraMode) -> CameraMode | None:
    """The mode of the file that clips of `mode` belong to."""
    if camera is None:
        return None
    fitting = [m for m in camera.modes if (m.width_px, m.height_px) == (mode.width_px, mode.height_px)
               and abs(m.frame_rate_hz / mode.frame_rate_hz - 1) <= 0.01]
    return min(fitting, key=lambda m: abs(m.frame_rate_hz - mode.frame_rate_hz), default=None)


def _comparison(camera: Camera | None, modes: Sequence[CameraMode]) -> list[str]:
    """How each measured figure compares with the one the camera file holds, in one line each."""
    lines = []
    for mode in modes:
        old = _matching(camera, mode)
        if old is None:
            continue
        if mode.hfov_deg is not None and old.hfov_deg is not None:
            stated = old.hfov_ci_deg if old.hfov_ci_deg is not None else STATED_SHARE * old.hfov_deg
            lines.append(_compared(mode.label, "field of view", old.hfov_deg, mode.hfov_deg,
                                   float(np.hypot(stated, mode.hfov_ci_deg)), "degrees"))
        if mode.readout_s is not None and old.readout_s is not None:
            before, now = old.readout_s * 1e3, mode.readout_s * 1e3
            stated = old.readout_ci_ms if old.readout_ci_ms is not None else STATED_SHARE * before
            lines.append(
                _compared(mode.label, "readout", before, now, float(np.hypot(stated, mode.readout_ci_ms)), "ms")
            )
    return lines


def _compared(label: str, what: str, before: float, now: float, allowed: float, unit: str) -> str:
    if abs(now - before) <= allowed:
        return f"{label}: agrees with the camera file's {what} of {before:.4g} {unit}"
    share = f" ({100 * (now / before - 1):+.1f} %)" if before else ""
    return (f"{label}: differs from the camera file's {what} of {before:.4g} {unit}{share}; "
            "the measured figure takes its place")


def update(camera: Camera | None, modes: Sequence[CameraMode], name: str | None) -> Camera:
    """The camera with measured figures put in; what was not measured stays.

    Parameters
    ----------
    camera : Camera or None
        As it was; None for a new one.
    modes : sequence of CameraMode
        From `combine`.
    name : str or None
        New name; None keeps the old one.

    Returns
    -------
    Camera
    """
    kept = list(camera.modes) if camera is not None else []
    for mode in modes:
        old = _matching(camera, mode)
        measured = {key: value for key, value in (("readout_s", mode.readout_s), ("readout_ci_ms", mode.readout_ci_ms),
                                                  ("hfov_deg", mode.hfov_deg), ("hfov_ci_deg", mode.hfov_ci_deg))
                    if value is not None}
        if old is None:
            kept.append(mode)
        else:
            kept[kept.index(old)] = replace(old, **measured)
    return Camera(name or (camera.name if camera is not None else "camera"), tuple(kept))
