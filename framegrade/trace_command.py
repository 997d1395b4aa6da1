"""The command `framegrade trace`: reads finished takes and an airframe file, prints and writes what made each tone."""

from __future__ import annotations

import argparse
import dataclasses
import math
import sys
import textwrap
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd
from rich.text import Text

from framegrade.airframe import Airframe, load_airframe
from framegrade.report.tables import (
    PROGRAM, SCHEMA, GradeRun, ResultError, csv_text, displayable, json_text, load_run, rounded, write_atomically,
)
from framegrade.report.terminal import make_console
from framegrade.settings_file import SettingsError
from framegrade.sources import GROUND_RUN_CAUTIONS, Candidate, TakeTrace, ToneTrace, trace_take
from framegrade.sources.wording import percent

OK, SOME_FAILED, WRONG_USE = 0, 1, 2
TRACE_FILE = "trace.csv"

#: Columns of trace.csv: a row a cause of a tone, likeliest first; a tone without any cause has one row.
TRACE_COLUMNS = (
    "clip", "tone", "axis", "frequency_hz", "frequency_ci_hz", "amplitude_px", "throttle", "low_hz", "high_hz",
    "confidence", "rank", "cause", "order_per_turn", "shaft_rpm", "shaft", "candidate_hz", "readout_ms",
    "probability_pct", "reason", "advice",
)
STYLES = {"named": "bold cyan", "likely": "cyan", "one of": "yellow", "unexplained": "magenta"}
_THROTTLE_WORDS = {"follows": "follows the throttle", "stays": "stays while the throttle changes", "drifts": "drifts"}


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments.

    Parameters
    ----------
    parser : argparse.ArgumentParser
        The (sub)parser of the command.
    """
    parser.description = (
        "Explain the tones of graded clips: which part of the aircraft turns or swings at each frequency. Causes are "
        "ranked with their reasons; none is given whose shaft speed the airframe cannot reach. OUT/trace.csv holds all "
        "of them."
    )
    parser.epilog = f"""example:
    framegrade grade card -o graded --camera camera.toml
    framegrade trace graded --airframe airframe.toml

airframe.toml, the least that is needed:
    [airframe]
    motors = 4
    blades = 2
    kv_rpm_per_volt = 920
    cells = 4
  worth adding, where known: idle_rpm, hover_rpm, full_rpm, magnet_poles,
  rotor_mass_g; in [mount] gimbal, resonance_hz, camera_mass_g,
  isolator_sag_mm or isolator_stiffness_n_per_mm, isolator_damping_ratio;
  for other parts known to swing, [[resonance]] with part and frequency_hz.

how sure:
  named        90 % and more, and something besides the tone itself speaks for it
  likely       60 % and more
  one of       several causes fit
  unexplained  nothing in the airframe file fits

Confirm a cause before you trust it: change the one part and film again.

exit status:
  {OK}  all graded clips traced
  {SOME_FAILED}  a clip's results could not be read, or {TRACE_FILE} not be written
  {WRONG_USE}  wrong use: OUT holds no results, or the airframe file is wrong"""
    parser.add_argument("out", metavar="OUT", help="results folder of an earlier `framegrade grade`")
    parser.add_argument("--airframe", required=True, metavar="FILE", help="TOML file with what turns on the aircraft")
    parser.add_argument("--json", action="store_true",
                        help="the result as JSON on standard output, and nothing else there")


def run(arguments: argparse.Namespace) -> int:
    """Carry out the command.

    Parameters
    ----------
    arguments : argparse.Namespace
        From a parser set up by `add_arguments`.

    Returns
    -------
    int
        0 all traced, 1 some not, 2 wrong use.
    """
    try:
        airframe = load_airframe(arguments.airframe)
        graded = load_run(Path(arguments.out))
    except (SettingsError, ResultError) as error:
        _complain(error)
        return WRONG_USE
    if not graded.graded:
        _complain(f"{displayable(graded.out)} holds no graded clip.")
        return SOME_FAILED
    traced, failed = _trace_all(graded, airframe)
    status = SOME_FAILED if failed else OK
    for reason in failed.values():
        _complain(reason)
    table = trace_table(traced)
    try:
        write_atomically(graded.out / TRACE_FILE, csv_text(table, TRACE_COLUMNS))
    except OSError as error:
        _complain(f"{displayable(graded.out / TRACE_FILE)} cannot be written: {error.strerror}.")
        status = SOME_FAILED
    if arguments.json:
        sys.stdout.write(trace_json(graded, airframe, traced, failed))
        sys.stdout.flush()
        return status
    console = make_console(sys.stdout)
    for line in report_lines(traced, airframe, console.width):
        console.print(line, soft_wrap=True)
    if status == OK:
        console.print(Text(f"All causes are in {displayable(graded.out / TRACE_FILE)}"), soft_wrap=True)
    return status


def _trace_all(graded: GradeRun, airframe: Airframe) -> tuple[list[TakeTrace], dict[str, str]]:
    """Traces of all graded clips, and the sentence about each that could not be read."""
    traced, failed = [], {}
    for clip in graded.graded:
        try:
            traced.append(trace_take(graded.record(clip), airframe))
        except ResultError as error:
            failed[clip] = str(error)
        except (KeyError, TypeError, ValueError):
            # the tables are whole, or ResultError would have said so: what later commands read beside them is not
            failed[clip] = (f"{displayable(graded.folder(clip))}: its results are incomplete; grade "
                            f"{displayable(clip)} again.")
    return traced, failed


def _complain(message: object) -> None:
    print(f"framegrade trace: {displayable(message)}", file=sys.stderr)


# --- tables ----------------------------------------------------------------------------------------------------------


def trace_table(traced: Sequence[TakeTrace]) -> pd.DataFrame:
    """Rows of trace.csv.

    Parameters
    ----------
    traced : sequence of TakeTrace

    Returns
    -------
    pandas.DataFrame
        Columns `TRACE_COLUMNS`.
    """
    rows = [row for take in traced for number, tone in enumerate(take.tones, 1)
            for row in _tone_rows(take.clip, number, tone)]
    return pd.DataFrame(rows, columns=list(TRACE_COLUMNS))


def _tone_rows(clip: str, number: int, tone: ToneTrace) -> Iterator[tuple]:
    head = (clip, number, " ".join(tone.axes), tone.frequency_hz, tone.frequency_ci_hz, tone.amplitude_px,
            tone.throttle, tone.low_hz, tone.high_hz, tone.confidence)
    if not tone.candidates:
        yield head + (None, None, None, math.nan, None, math.nan, math.nan, math.nan, tone.why, tone.advice)
    for rank, one in enumerate(tone.candidates, 1):
        first = rank == 1
        candidate_hz = one.frequency_hz if math.isnan(tone.frequency_hz) else math.nan
        yield head + (rank, one.cause, one.order, one.shaft_rpm, tone.shaft if first else None, candidate_hz,
                      1e3 * one.readout_s, 100 * one.probability, one.reason, tone.advice if first else None)


def trace_json(graded: GradeRun, airframe: Airframe, traced: Sequence[TakeTrace], failed: dict[str, str]) -> str:
    """The traces as one JSON object, for other programs.

    Parameters
    ----------
    graded : GradeRun
    airframe : Airframe
    traced : sequence of TakeTrace
    failed : dict
        Sentence by clip that could not be traced.

    Returns
    -------
    str
    """
    reach = airframe.reach
    return json_text({
        "schema": SCHEMA, "program": PROGRAM, "out": graded.out,
        "airframe": _written({**dataclasses.asdict(airframe), "doubt": airframe.doubt, "lowest_rpm": reach.lowest_rpm,
                              "highest_rpm": reach.highest_rpm}),
        "takes": [_written(dataclasses.asdict(take)) for take in traced],
        "failed": failed, "cautions": GROUND_RUN_CAUTIONS,
    })


def _written(value: Any, key: str = "") -> Any:
    """A value with the digits that its column would be written with."""
    if isinstance(value, dict):
        return {name: _written(item, name) for name, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_written(item, key) for item in value]
    return rounded(value, key, 5) if isinstance(value, float) and math.isfinite(value) else value


# --- terminal --------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Todo:
    """A piece of advice and the tones it is for."""

    text: str
    about: list[str]


def report_lines(traced: Sequence[TakeTrace], airframe: Airframe, width: int) -> Iterator[Text]:
    """What the terminal shows: each clip's tones with their causes, then what to do, and what to mind.

    Parameters
    ----------
    traced : sequence of TakeTrace
    airframe : Airframe
    width : int
        Columns of the terminal.

    Yields
    ------
    rich.text.Text
    """
    yield from _wrapped(f"{displayable(airframe.name or 'aircraft')}: {_count(airframe.motors, 'motor')}, "
                        f"{_count(airframe.blades, 'blade')}; shafts reach {airframe.reach.words()}", 0, width)
    if airframe.doubt:
        yield from _wrapped(airframe.doubt, 0, width)
    for take in traced:
        yield Text("")
        yield Text(displayable(take.clip), "bold")
        for tone in take.tones:
            yield from _tone_lines(tone, width)
        for note in take.notes:
            yield from _wrapped(note, 2, width)
    todo = _todo(traced)
    if todo:
        yield Text("")
        yield Text("What to do", "bold")
        for one in todo:
            about = "; ".join(one.about[:3]) + (f" and {len(one.about) - 3} more" if len(one.about) > 3 else "")
            yield from _wrapped(f"{about}:", 2, width)
            yield from _wrapped(one.text, 4, width)
        yield Text("")
        yield Text("Before propellers turn on the ground", "bold")
        for caution in GROUND_RUN_CAUTIONS:
            yield from _wrapped(caution, 2, width, "- ")
    yield Text("")


def _count(number: int, what: str) -> str:
    return f"{number} {what}{'s' * (number != 1)}"


def _tone_lines(tone: ToneTrace, width: int) -> Iterator[Text]:
    first = tone.candidates[0] if tone.candidates else None
    explained = first is not None and tone.confidence != "unexplained"
    line = Text(f"  {_frequency_words(tone):>11}  {'+'.join(tone.axes):14} {tone.amplitude_px:6.2f} px  ")
    line.append(f"{tone.confidence:11}", STYLES[tone.confidence])
    line.append(f" {_cause_words(first)}" if explained else "")
    line.rstrip()
    yield line
    if explained:
        yield from _wrapped(f"{first.parts}", 6, width)
        yield from _wrapped(f"why: {first.reason} ({tone.why})", 6, width)
    else:
        yield from _wrapped(tone.why, 6, width)
    if tone.throttle and math.isfinite(tone.low_hz):
        swept = f"swept {tone.low_hz:.0f} to {tone.high_hz:.0f} Hz; {_THROTTLE_WORDS[tone.throttle]}"
        yield from _wrapped(swept, 6, width)
    for other in tone.candidates[1:3] if explained else tone.candidates[:2]:
        yield from _wrapped(f"{'or' if explained else 'least unlikely:'} {_cause_words(other)}, "
                            f"{percent(other.probability)}: {other.reason}", 6, width)
    if tone.ruled_out and tone.confidence != "named":
        yield from _wrapped(f"ruled out: {tone.ruled_out[0]}" + (
            f"; and {len(tone.ruled_out) - 1} more" if len(tone.ruled_out) > 1 else ""), 6, width)
    if tone.isolator_gain >= 1:
        yield from _wrapped(tone.isolator, 6, width)


def _frequency_words(tone: ToneTrace) -> str:
    if math.isfinite(tone.frequency_hz):
        return f"{tone.frequency_hz:.1f} Hz"
    return f"({tone.candidates[0].frequency_hz:.1f} Hz)" if tone.candidates else "? Hz"


def _cause_words(one: Candidate) -> str:
    words = one.cause
    if one.order is not None:
        words += f" ({one.order} per turn)" if one.order > 1 and "times per turn" not in one.cause else ""
        words += f", {one.shaft_rpm:.0f} rpm"
    if math.isfinite(one.readout_s):
        words += f", if the readout is {1e3 * one.readout_s:.1f} ms"
    return words


def _todo(traced: Sequence[TakeTrace]) -> list[_Todo]:
    """Advice on first causes, each once."""
    found: dict[str, _Todo] = {}
    for take in traced:
        for tone in take.tones:
            about = f"{displayable(take.clip)}, {_frequency_words(tone)}"
            found.setdefault(tone.advice, _Todo(tone.advice, [])).about.append(about)
    return list(found.values())


def _wrapped(text: str, indent: int, width: int, bullet: str = "") -> Iterator[Text]:
    room = max(40, min(width, 110))
    for line in textwrap.wrap(displayable(text), room, initial_indent=" " * indent + bullet,
                              subsequent_indent=" " * (indent + len(bullet)), break_on_hyphens=False):
        yield Text(line)

