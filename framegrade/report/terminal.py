"""What a run shows on the terminal: progress while it measures, and the ranked takes at the end.

Without a terminal (a file, a pipe, a log) the same is told in plain lines without control codes. Names and reasons are
data: whatever they hold, they are shown as text on one line (`tables.displayable`), never as markup.
"""

from __future__ import annotations

import time
from collections.abc import Iterator, Mapping
from typing import Any, TextIO

from rich.cells import cell_len, set_cell_size
from rich.console import Console
from rich.progress import BarColumn, Progress, TaskID, TextColumn
from rich.text import Text

from framegrade.grading import GRADES
from framegrade.pipeline import Watcher
from framegrade.report.tables import GradeRun, displayable, is_unknown

#: The word always carries the grade; the style only helps to find it.
STYLES = {"keep": "bold cyan", "stabilise": "bold yellow", "reshoot": "bold magenta", "failed": "bold red"}

_NOTES_SHOWN = 20
_WIDEST_CLIP = 48


def make_console(stream: TextIO) -> Console:
    """A console that prints what it is given: no markup, no emoji names, no guessed highlights.

    Parameters
    ----------
    stream : file
        Colours are used on a terminal only, and not where the environment sets `NO_COLOR`.

    Returns
    -------
    rich.console.Console
    """
    return Console(file=stream, markup=False, emoji=False, highlight=False)


# ------------------------------------------------------------------------------------------------------ small words

def duration_words(seconds: float) -> str:
    """A duration as one reads it on a clock: `12 s`, `3 min 20 s`, `2 h 5 min`.

    Parameters
    ----------
    seconds : float

    Returns
    -------
    str
    """
    whole = round(seconds)
    if whole < 60:
        return f"{seconds:.1f} s" if seconds < 9.95 else f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600} h {whole % 3600 // 60} min"


def time_left_s(elapsed_s: float, done: float, total: float) -> float | None:
    """Time left if the rest goes as fast as what is done.

    Parameters
    ----------
    elapsed_s : float
    done, total : float
        Work, in any unit.

    Returns
    -------
    float or None
        Seconds; None before anything is done.
    """
    return elapsed_s * (total - done) / done if done > 0 else None


def outcome_words(row: Mapping[str, Any]) -> str:
    """A clip's outcome in a few words: `keep 91`, or `failed: there is no such file`.

    Parameters
    ----------
    row : mapping
        A row of `takes.csv`.

    Returns
    -------
    str
    """
    if row["status"] != "graded":
        return f"failed: {displayable(row['reason'])}"
    score = "" if is_unknown(row["score"]) else f" {row['score']:.0f}"
    return f"{'not graded' if is_unknown(row['grade']) else row['grade']}{score}"


# ---------------------------------------------------------------------------------------------------------- progress

class PlainWatcher(Watcher):
    """Progress in lines: one when a clip is done, with the time left for all.

    Parameters
    ----------
    console : rich.console.Console
    """

    def __init__(self, console: Console) -> None:
        self.console = console
        self.sizes: dict[str, int] = {}
        self.fractions: dict[str, float] = {}
        self.settled = 0
        self.total = self.done = 0.0
        self.began = time.monotonic()

    def begin(self, sizes: Mapping[str, int]) -> None:
        # Work is counted in bytes of footage; one more each, so that empty files count as clips too.
        self.sizes = {clip: size + 1 for clip, size in sizes.items()}
        self.total = float(sum(self.sizes.values()))

    def kept(self, row: Mapping[str, Any]) -> None:
        self.settled += 1
        self.total -= self.sizes[row["clip"]]  # no work, so it must not count for the speed
        self.say(row, "unchanged")

    def start(self, clip: str) -> None:
        if not self.fractions and not self.done:
            self.began = time.monotonic()  # the first clip: finding and comparing is over
        self.fractions[clip] = 0.0

    def fraction(self, clip: str, done: float) -> None:
        self.fractions[clip] = done

    def again(self, clip: str) -> None:
        self.fractions.pop(clip, None)
        self.line(Text(f"{displayable(clip)}: the process that measured it broke down; it is tried again at the end"))

    def end(self, row: Mapping[str, Any], seconds: float | None) -> None:
        self.settled += 1
        self.fractions.pop(row["clip"], None)
        self.done += self.sizes[row["clip"]]
        self.say(row, "" if seconds is None else duration_words(seconds))

    def left_words(self) -> str:
        """How long the rest will take, in words; empty when there is no rest or no telling."""
        done = self.done + sum(self.sizes[clip] * share for clip, share in self.fractions.items())
        left = time_left_s(time.monotonic() - self.began, done, self.total)
        return "" if left is None or done >= self.total else f"about {duration_words(left)} left"

    def say(self, row: Mapping[str, Any], detail: str) -> None:
        """One line about a settled clip."""
        count = len(str(len(self.sizes)))
        line = Text(f"[{self.settled:{count}}/{len(self.sizes)}] {displayable(row['clip'])}: ")
        style = STYLES.get(row["grade"] if row["status"] == "graded" else "failed", "")
        line.append(outcome_words(row), style)
        further = [words for words in (detail, self.left_words()) if words]
        line.append(f" ({', '.join(further)})" if further else "")
        self.line(line)

    def line(self, text: Text) -> None:
        """Print one line whatever its length: a log is searched by lines."""
        self.console.print(text, soft_wrap=True)


class LiveWatcher(PlainWatcher):
    """Progress on a terminal: a bar for each clip in hand and one for all, below the lines of what is done.

    Parameters
    ----------
    console : rich.console.Console
    """

    def __init__(self, console: Console) -> None:
        super().__init__(console)
        self.progress = Progress(
            TextColumn("{task.fields[name]}", markup=False), BarColumn(bar_width=24),
            TextColumn("{task.percentage:>3.0f} %", markup=False), TextColumn("{task.fields[left]}", markup=False),
            console=console, transient=True,
        )
        self.tasks: dict[str, TaskID] = {}
        self.overall: TaskID | None = None

    def begin(self, sizes: Mapping[str, int]) -> None:
        super().begin(sizes)
        self.progress.start()
        self.overall = self.progress.add_task("", name=_cut("all clips", 26), left="", total=self.total)

    def start(self, clip: str) -> None:
        super().start(clip)
        self.tasks[clip] = self.progress.add_task("", name=_cut(displayable(clip), 26), left="", total=1.0)
        self.refresh()

    def fraction(self, clip: str, done: float) -> None:
        super().fraction(clip, done)
        self.progress.update(self.tasks[clip], completed=done)
        self.refresh()

    def again(self, clip: str) -> None:
        super().again(clip)
        self.progress.remove_task(self.tasks.pop(clip))
        self.refresh()

    def end(self, row: Mapping[str, Any], seconds: float | None) -> None:
        super().end(row, seconds)
        if row["clip"] in self.tasks:
            self.progress.remove_task(self.tasks.pop(row["clip"]))
        self.refresh()

    def refresh(self) -> None:
        """Bring the bar for all clips up to date."""
        done = self.done + sum(self.sizes[clip] * share for clip, share in self.fractions.items())
        self.progress.update(self.overall, completed=done, total=self.total, left=self.left_words())

    def close(self) -> None:
        self.progress.stop()


def make_watcher(console: Console, *, quiet: bool = False) -> Watcher:
    """The way to show progress that a console is fit for.

    Parameters
    ----------
    console : rich.console.Console
    quiet : bool
        Show nothing.

    Returns
    -------
    Watcher
    """
    if quiet:
        return Watcher()
    if console.is_terminal and not console.is_dumb_terminal:
        return LiveWatcher(console)
    return PlainWatcher(console)


# ------------------------------------------------------------------------------------------------------- ranked takes

def _cut(text: str, width: int) -> str:
    """Text in exactly `width` cells; of a long path the end is kept, which tells clips apart."""
    if cell_len(text) > width:
        while cell_len(text) > width - 1:
            text = text[1:]
        text = "…" + text
    return set_cell_size(text, width)


def _figure(value: Any, digits: int, unit: str = "") -> str:
    return "-" if is_unknown(value) else f"{value:.{digits}f}{unit}"


def take_lines(run: GradeRun, width: int) -> Iterator[Text]:
    """The ranked takes as lines of text: two or more a clip, its figures and below them its reason.

    Parameters
    ----------
    run : GradeRun
    width : int
        Columns of the terminal; the lines fit from 72 on.

    Yields
    ------
    rich.text.Text
    """
    takes = run.takes.to_dict("records")
    rank_width = max(2, len(str(len(takes))))
    mode_width = max([4, *(len(take["mode"]) for take in takes if not is_unknown(take["mode"]))])
    fixed = rank_width + 2 + 10 + 6 + 1 + mode_width + 7 + 7 + 11
    room = max(12, width - fixed)
    longest = max([4, *(cell_len(displayable(take["clip"])) for take in takes)])
    clip_width = min(room, longest, _WIDEST_CLIP)

    yield Text(f"{'':{rank_width}}  {'clip':{clip_width}} {'grade':9} {'score':>5} {'mode':{mode_width}} "
               f"{'shake':>6} {'jello':>6}  {'strongest':>9}", "underline")
    for rank, take in enumerate(takes, 1):
        failed = take["status"] != "graded"
        word = "failed" if failed else "-" if is_unknown(take["grade"]) else take["grade"]
        mode = "-" if is_unknown(take["mode"]) else displayable(take["mode"])
        line = Text(f"{rank:{rank_width}}  {_cut(displayable(take['clip']), clip_width)} ")
        line.append(f"{word:9}", STYLES.get(word, ""))
        if not failed:
            line.append(f" {_figure(take['score'], 0):>5} {mode:{mode_width}} {_figure(take['shake_px1920'], 2):>6} "
                        f"{_figure(take['jello_px1920'], 2):>6}  {_figure(take['strongest_hz'], 1, ' Hz'):>9}")
        line.rstrip()
        yield line
        if not is_unknown(take["reason"]):
            yield from _indented(displayable(take["reason"]), rank_width + 2, width)


def _indented(text: str, indent: int, width: int) -> Iterator[Text]:
    """Text broken into lines of at most `width` cells."""
    console = Console(width=width, markup=False, emoji=False, highlight=False)
    for line in Text(text).wrap(console, max(20, width - indent)):
        line.rstrip()
        yield Text(" " * indent) + line


def closing_lines(run: GradeRun, width: int) -> Iterator[Text]:
    """What stands below the ranked takes: units, notes, counts, and what to open first.

    Parameters
    ----------
    run : GradeRun
    width : int

    Yields
    ------
    rich.text.Text
    """
    yield from _indented("shake, jello: pixels rms on a picture 1920 wide. strongest: the strongest vibration. "
                         "-: not measured.", 0, width)
    yield from _note_lines(run, width)
    yield Text("")
    yield from _indented(count_words(run), 0, width)
    out = displayable(run.out)
    yield Text(f"Results are in {out}")
    yield Text("Open takes.csv first: a row a clip, ranked.")
    if run.graded:
        folder = displayable(run.folder(run.graded[0]).relative_to(run.out).as_posix())
        yield Text(f"Plots and series of the first take: {folder}/")


def count_words(run: GradeRun) -> str:
    """How many clips got which grade, in one sentence.

    Parameters
    ----------
    run : GradeRun

    Returns
    -------
    str
    """
    counts = run.run["counts"]
    grades = run.takes.loc[run.takes["status"] == "graded", "grade"].value_counts()
    parts = [f"{grades[grade]} {grade}" for grade in GRADES if grades.get(grade, 0)]
    parts += [f"{counts['failed']} failed"] if counts["failed"] else []
    kept = f"; {counts['kept']} unchanged since an earlier run" if counts["kept"] else ""
    clips = "1 clip" if counts["clips"] == 1 else f"{counts['clips']} clips"
    return f"{clips}: {', '.join(parts)}{kept}."


def _note_lines(run: GradeRun, width: int) -> Iterator[Text]:
    """Notes, each once with the clips it is about."""
    clips_of: dict[str, list[str]] = {}
    for clip, notes in run.notes.items():
        for note in notes:
            clips_of.setdefault(note, []).append(displayable(clip))
    if clips_of:
        yield Text("")
        yield Text("Notes", "bold")
    for note, clips in list(clips_of.items())[:_NOTES_SHOWN]:
        about = ", ".join(clips[:3]) + (f" and {len(clips) - 3} more" if len(clips) > 3 else "")
        yield from _indented(f"{about}: {displayable(note)}", 2, width)
    if len(clips_of) > _NOTES_SHOWN:
        yield Text(f"  and {len(clips_of) - _NOTES_SHOWN} more notes, in run.json")


def print_run(run: GradeRun, console: Console) -> None:
    """Print the ranked takes, the notes, and where everything is.

    Parameters
    ----------
    run : GradeRun
    console : rich.console.Console
    """
    for line in (*take_lines(run, console.width), *closing_lines(run, console.width)):
        # Lines are fitted already; a path must not be broken by the console.
        console.print(line, soft_wrap=True)
