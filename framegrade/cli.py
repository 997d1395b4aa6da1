"""The command `framegrade`: parses, calls and prints. Each command is one entry of `COMMANDS`."""

from __future__ import annotations

import argparse
import contextlib
import math
import os
import sys
import textwrap
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import NoReturn

from framegrade.version import __version__

OK, SOME_FAILED, WRONG_USE, INTERRUPTED = 0, 1, 2, 130

_EXIT_HELP = """exit status:
  0    all clips graded
  1    some clips failed, or no room was left; the others are graded
  2    wrong use: an option, a settings file or OUT is wrong, or no clip found
  130  stopped with Ctrl-C; graded clips are kept, the same command goes on"""


class _Parser(argparse.ArgumentParser):
    """Wrong use is told in one sentence, not under a page of usage."""

    def error(self, message: str) -> NoReturn:
        self.exit(WRONG_USE, f"{self.prog}: {_one_line(message)} (see {self.prog} --help)\n")


@dataclass(frozen=True)
class Command:
    """One command of the program.

    Attributes
    ----------
    summary : str
        One line for the list of commands.
    add_arguments : callable
        Takes the command's `argparse.ArgumentParser`; sets its description and epilog too.
    run : callable
        Takes the parsed arguments, returns the exit status. What it needs it imports itself: `--version` and
        `--help` must not wait for numerical libraries.
    """

    summary: str
    add_arguments: Callable[[argparse.ArgumentParser], None]
    run: Callable[[argparse.Namespace], int]


# -------------------------------------------------------------------------------------------------------------- grade

def _grade_arguments(parser: argparse.ArgumentParser) -> None:
    parser.description = (
        "Measure every clip and grade it keep, stabilise or reshoot, with the reason and its figure. Whole-picture "
        "motion (sway, shake), rolling-shutter wobble (jello) and the vibration behind both are written to OUT as "
        "tables and plots. A second run on the same OUT measures only what has changed; a run that was stopped goes on."
    )
    parser.epilog = f"""examples:
  Grade a card; the readout time and field of view of each mode from a file:
    framegrade grade card -o graded --camera camera.toml

  One mode, figures given by hand, the result for another program:
    framegrade grade 'card/*.mp4' -o graded --readout-ms 14 --hfov-deg 80 \\
      --json > result.json

  A clip whose name begins with a dash, after two dashes:
    framegrade grade -o graded -- -take1.mp4

what is in OUT:
  takes.csv      a row a clip, ranked: open this first
  tones.csv      the vibrations found: axis, frequency, amplitude
  spectrum.csv   vibration in one-third-octave bands
  ranges.csv     the usable parts of each clip
  clips/NAME/    a row a frame, a row a window, plots
  run.json       version, settings, inputs, timings
  The tables cover the clips of the last run. Results of clips no longer named
  stay in clips/.

{_EXIT_HELP}"""
    clips = parser.add_argument_group("clips and results")
    clips.add_argument("paths", nargs="+", metavar="PATH",
                       help="a clip, a folder (searched at every depth, OUT left out) or a pattern such as "
                            "'day1/*.mov'")
    clips.add_argument("-o", "--out", required=True, metavar="OUT", help="folder for the results; made if missing")
    clips.add_argument("--force", action="store_true", help="measure again what is unchanged")

    camera = parser.add_argument_group(
        "what is known of the camera",
        "Without the readout time no frequency can be told from its aliases; without\n"
        "the field of view there are no angles. A figure given here goes before the\n"
        "camera file's.")
    camera.add_argument("--camera", metavar="FILE", help="TOML file with the camera's modes")
    camera.add_argument("--readout-ms", type=_given("readout_ms"), metavar="MS",
                        help="time from the first to the last row, milliseconds, 0 to 200; 0 for a global shutter")
    camera.add_argument("--hfov-deg", type=_given("hfov_deg"), metavar="DEG",
                        help="horizontal field of view, degrees, 5 to 175")
    camera.add_argument("--exposure-ms", type=_given("exposure_ms"), metavar="MS",
                        help="exposure time of a row, milliseconds, 0 to 1000")

    grading = parser.add_argument_group("grading")
    grading.add_argument("--limits", metavar="FILE",
                         help="TOML file with other limits; `framegrade limits > my.toml` writes one to start from")

    work = parser.add_argument_group("work and output")
    work.add_argument("--jobs", type=_count, metavar="N",
                      help="clips measured at the same time, 1 to 256; default: one a core")
    work.add_argument("--json", action="store_true",
                      help="the result as JSON on standard output, all else on standard error")
    work.add_argument("--quiet", action="store_true", help="no progress and no table; failures are still told")


def _given(name: str) -> Callable[[str], float]:
    """A parser of a figure within its sensible range."""

    def parse(text: str) -> float:
        from framegrade.pipeline import GIVEN_RANGES

        low, high, unit = GIVEN_RANGES[name]
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        if not low <= value <= high:
            raise argparse.ArgumentTypeError(f"{text!r} is not a number from {low:g} to {high:g} ({unit})")
        return value

    return parse


def _count(text: str) -> int:
    if not (text.isascii() and text.isdigit() and 1 <= int(text) <= 256):
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number from 1 to 256")
    return int(text)


def _grade(arguments: argparse.Namespace) -> int:
    from framegrade.pipeline import Interrupted, NoRoomError, UsageError, grade_all
    from framegrade.report.tables import run_json
    from framegrade.report.terminal import make_console, make_watcher, print_run
    from framegrade.settings_file import SettingsError

    aside = make_console(sys.stderr)
    status = OK
    try:
        run = grade_all(
            arguments.paths, arguments.out, camera=arguments.camera, readout_ms=arguments.readout_ms,
            hfov_deg=arguments.hfov_deg, exposure_ms=arguments.exposure_ms, limits=arguments.limits,
            jobs=arguments.jobs, force=arguments.force, watcher=make_watcher(aside, quiet=arguments.quiet),
        )
    except (UsageError, SettingsError) as error:
        _complain("grade", error)
        return WRONG_USE
    except NoRoomError as error:
        _complain("grade", error)
        return SOME_FAILED
    except Interrupted as stopped:
        run = stopped.run
        status = INTERRUPTED

    if run.failed:
        status = status or SOME_FAILED
    if arguments.quiet:
        for clip, reason in run.failed.items():
            _complain("grade", f"{clip}: {reason}")
    else:
        print_run(run, aside if arguments.json else make_console(sys.stdout))
    counts = run.run["counts"]
    so_far = f"{counts['graded']} of {counts['clips']} clips are graded and kept"
    if run.run["stopped_because"]:
        status = status or SOME_FAILED
        _complain("grade", f"{arguments.out}: {run.run['stopped_because']}; {so_far}; put that right and run the same "
                           "command again to go on.")
    if status == INTERRUPTED:
        _complain("grade", f"stopped; {so_far}; run the same command again to go on.")
    if arguments.json:
        sys.stdout.write(run_json(run))
        sys.stdout.flush()
    return status


# ------------------------------------------------------------------------------------------------------------- limits

def _limits_arguments(parser: argparse.ArgumentParser) -> None:
    parser.description = (
        "Print the built-in grading limits as a commented TOML file. Copy it, change what should count as clean and as "
        "spoiled, and give it to `framegrade grade` with --limits."
    )
    parser.epilog = """example:
    framegrade limits > my.toml
    framegrade grade card -o graded --limits my.toml"""


def _limits(arguments: argparse.Namespace) -> int:
    from framegrade.grading import default_limits_text

    sys.stdout.write(default_limits_text())
    return OK


# ------------------------------------------------------------------------------------------------------------ readout

def _readout_arguments(parser: argparse.ArgumentParser) -> None:
    from framegrade.readout import command

    command.add_arguments(parser)


def _readout(arguments: argparse.Namespace) -> int:
    from framegrade.readout import command

    return command.run(arguments)


# ----------------------------------------------------------------------------------------------------------- simulate

def _simulate_arguments(parser: argparse.ArgumentParser) -> None:
    from framegrade.simulate import command

    command.add_arguments(parser)


def _simulate(arguments: argparse.Namespace) -> int:
    from framegrade.simulate import command

    return command.run(arguments)


# -------------------------------------------------------------------------------------------------------------- trace

def _trace_arguments(parser: argparse.ArgumentParser) -> None:
    from framegrade import trace_command

    trace_command.add_arguments(parser)


def _trace(arguments: argparse.Namespace) -> int:
    from framegrade import trace_command

    return trace_command.run(arguments)


COMMANDS: dict[str, Command] = {
    "grade": Command("measure clips and grade them keep, stabilise or reshoot", _grade_arguments, _grade),
    "limits": Command("print the grading limits, to copy and change", _limits_arguments, _limits),
    "readout": Command("measure a camera's readout time and field of view", _readout_arguments, _readout),
    "simulate": Command("render flights whose motion is known, to try things out", _simulate_arguments, _simulate),
    "trace": Command("explain tones: what turns or swings at each frequency", _trace_arguments, _trace),
}


# --------------------------------------------------------------------------------------------------------------- main

def _top_help() -> str:
    width = max(map(len, COMMANDS))
    rows = "\n".join(f"  {name:{width}}  {command.summary}" for name, command in COMMANDS.items())
    return f"""usage: framegrade COMMAND ...
       framegrade COMMAND --help
       framegrade --version

framegrade scores the stability of recorded video and names the vibration behind it: which takes can be used, which
parts of them, what is wrong with the rest, and at how many hertz it shakes.

commands:
{rows}

example:
    framegrade grade card -o graded --camera camera.toml

{_EXIT_HELP}
"""


def make_parser(name: str) -> argparse.ArgumentParser:
    """The parser of one command.

    Parameters
    ----------
    name : str
        A key of `COMMANDS`.

    Returns
    -------
    argparse.ArgumentParser
    """
    # Examples in an epilog keep their lines, and so descriptions are wrapped here.
    parser = _Parser(prog=f"framegrade {name}", formatter_class=argparse.RawDescriptionHelpFormatter,
                     allow_abbrev=False)
    COMMANDS[name].add_arguments(parser)
    if parser.description and "\n" not in parser.description:
        parser.description = textwrap.fill(parser.description, 79)
    return parser


def main(argv: Sequence[str] | None = None) -> int:
    """Run the program.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments; those of the process by default.

    Returns
    -------
    int
        Exit status.
    """
    argv = list(sys.argv[1:] if argv is None else argv)
    for stream in (sys.stdout, sys.stderr):
        # A name must not stop the program where the terminal cannot show it.
        with contextlib.suppress(AttributeError, ValueError):
            stream.reconfigure(errors="backslashreplace")
    try:
        return _dispatch(argv)
    except SystemExit as end:  # argparse: --help, or wrong use
        return end.code if isinstance(end.code, int) else WRONG_USE
    except KeyboardInterrupt:
        print("framegrade: stopped", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        # Whoever read the output has seen enough. Python would complain once more while closing it.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return SOME_FAILED


def _dispatch(argv: list[str]) -> int:
    if not argv:
        sys.stderr.write(_top_help())
        return WRONG_USE
    if argv[0] in ("-h", "--help", "help"):
        sys.stdout.write(_top_help())
        return OK
    if argv[0] == "--version":
        print(f"framegrade {__version__}")
        return OK
    name = argv[0]
    if name not in COMMANDS:
        import difflib

        near = difflib.get_close_matches(name, COMMANDS, 1)
        hint = f"; did you mean {near[0]}?" if near else f"; the commands are {', '.join(COMMANDS)}"
        _complain("", f"{name!r} is not a command{hint}")
        return WRONG_USE
    arguments = make_parser(name).parse_args(argv[1:])
    return COMMANDS[name].run(arguments)


def _complain(command: str, message: object) -> None:
    print(f"{f'framegrade {command}'.rstrip()}: {_one_line(str(message))}", file=sys.stderr)


def _one_line(text: str) -> str:
    """A sentence that holds names as the user gave them, safe to print."""
    from framegrade.paths import shown

    return shown(text)


if __name__ == "__main__":
    sys.exit(main())
