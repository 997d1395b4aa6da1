"""`framegrade simulate`: render flight recipes to clips with their truth."""

from __future__ import annotations

import argparse
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

from .encode import SUFFIX
from .recipe import Flight, FlightError, describe_keys, load_flight
from .rendering import render

DESCRIPTION = """\
Render synthetic flights through a rolling shutter, with the true camera motion beside each clip.

Use it to see what a vibration looks like before you fly, to choose a camera mode, or to check this tool's
figures against a truth you set yourself.
"""

EXAMPLE = """\
A recipe is a small TOML file. This one flies forward over soil while a rotor shakes the camera:

  seed = 7
  [camera]
  width_px = 1280
  height_px = 720
  frame_rate = 60            # or "60000/1001"
  readout_ms = 14.0          # first to last row; 0 is a global shutter
  exposure_ms = 1.0
  hfov_deg = 80.0
  [flight]
  duration_s = 4.0
  height_m = 8.0
  tilt_deg = 35.0            # how far the camera looks down
  speed_mps = 5.0
  [[sway]]                   # slow swing; repeat for more
  axis = "yaw"
  frequency_hz = 0.8
  amplitude_deg = 0.4
  [[tone]]                   # one vibration; repeat for more
  axis = "yaw"
  frequency_hz = 137.3
  amplitude_px = 0.45        # peak, or amplitude_deg

Further tables: [[motors]], [[broadband]], [isolator], [[pan]], [[drift]], [[cadence]], [lamp], [scene], [[panel]],
[[cars]], [noise], [encode]; --keys lists all their keys. A wrong key is answered with the allowed ones.

examples:
  framegrade simulate hover.toml -o clips
  framegrade simulate recipes/ -o clips      every recipe of a folder
  framegrade simulate recipes/ --check       only say whether they can be flown

Writes NAME.mp4 (.mov for mjpeg and prores), NAME.truth.json (figures) and NAME.truth.npz (angles of 16 to 64
rows of every frame). Exit status: 0 all rendered, 1 some failed, 2 wrong use.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments and help.

    Parameters
    ----------
    parser : argparse.ArgumentParser
        The (sub)parser of the command.
    """
    parser.description = DESCRIPTION
    parser.epilog = EXAMPLE
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.add_argument("recipes", nargs="*", type=Path, metavar="FLIGHT.toml", help="recipes, or folders of them")
    parser.add_argument("-o", "--out", type=Path, metavar="OUT_DIR", help="folder for clips and truth; made if missing")
    parser.add_argument("--check", action="store_true", help="read the recipes and render nothing")
    parser.add_argument("--keys", action="store_true", help="list every table and key of a recipe with its range")
    parser.add_argument("--quiet", action="store_true", help="no progress bar; errors are still shown")


def recipe_files(paths: list[Path]) -> list[Path]:
    """The recipes that paths stand for: files as they are, folders as their `*.toml` in name order.

    Parameters
    ----------
    paths : list of Path

    Returns
    -------
    list of Path

    Raises
    ------
    FlightError
        When a folder holds no recipe or two recipes would write the same clip.
    """
    files: list[Path] = []
    for path in paths:
        found = sorted(path.glob("*.toml")) if path.is_dir() else [path]
        if not found:
            raise FlightError(f"{path}: the folder holds no recipe (*.toml).")
        files.extend(file for file in found if file not in files)
    names: dict[str, Path] = {}
    for file in files:
        if file.stem in names:
            raise FlightError(f"{file}: would write the same clip as {names[file.stem]}; rename one of them.")
        names[file.stem] = file
    return files


def clip_path(flight: Flight, recipe: Path, out: Path) -> Path:
    """Where a recipe's clip goes: its own name, with the suffix of the codec's container."""
    return out / (recipe.stem + SUFFIX[flight.encode.codec])


def run(args: argparse.Namespace) -> int:
    """Carry out the command.

    Parameters
    ----------
    args : argparse.Namespace
        From a parser set up by `add_arguments`.

    Returns
    -------
    int
        0 all rendered, 1 some failed, 2 wrong use.
    """
    errors = Console(stderr=True, highlight=False, soft_wrap=True)
    screen = Console(highlight=False, soft_wrap=True, quiet=args.quiet)
    if args.keys:
        screen.print(describe_keys(), markup=False, end="")
        return 0
    try:
        if not args.recipes:
            raise FlightError("simulate: name at least one recipe (FLIGHT.toml) or a folder of them.")
        if args.out is None and not args.check:
            raise FlightError("simulate: name a folder for the clips with -o OUT_DIR.")
        recipes = recipe_files(args.recipes)
        if not args.check:
            try:
                args.out.mkdir(parents=True, exist_ok=True)
            except OSError as error:
                raise FlightError(f"{args.out}: cannot be made a folder ({error.strerror}).") from error
    except FlightError as error:
        errors.print(str(error), style="red", markup=False)
        return 2
    failed = 0
    columns = (TextColumn("{task.description}", markup=False), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=errors, transient=True, disable=args.quiet or not errors.is_terminal) as bars:
        for recipe in recipes:
            try:
                line = _one(recipe, args, bars)
                screen.print(line, markup=False)
            except (FlightError, OSError) as error:
                failed += 1
                text = str(error) if str(recipe) in str(error) else f"{recipe}: {error}"
                errors.print(text, style="red", markup=False)
    if failed and len(recipes) > 1:
        errors.print(f"{failed} of {len(recipes)} recipes failed.", style="red", markup=False)
    return 1 if failed else 0


def _one(recipe: Path, args: argparse.Namespace, bars: Progress) -> str:
    """Check or render one recipe; the line to say when it is done."""
    flight = load_flight(recipe)
    camera = flight.camera
    mode = f"{camera.width_px}x{camera.height_px} @ {float(camera.frame_rate):g}, {flight.flight.duration_s:g} s"
    if args.check:
        return f"{recipe}: can be flown ({mode})"
    out = clip_path(flight, recipe, args.out)
    task = bars.add_task(recipe.stem, total=None)
    try:
        truth = render(flight, out, lambda done, total: bars.update(task, completed=done, total=total))
    finally:
        bars.remove_task(task)
    tones = len(truth.facts["tones"])
    return f"{out}: {truth.pts_s.size} frames ({mode}), {tones} tone{'' if tones == 1 else 's'}"
