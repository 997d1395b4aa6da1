"""The promised tables on disk: how a measured take is written, and read back by every later command.

A results folder OUT holds `takes.csv`, `tones.csv`, `spectrum.csv`, `ranges.csv` and `run.json`, and one folder
`clips/NAME/` a clip. `clips/NAME/take.json` is written last and lists every other file with its size and digest:
a folder without a matching list is not a result.

CSV files are UTF-8 with a header, quoted after RFC 4180, lines ending in LF. A figure that was not measured is an
empty cell. A text cell that a spreadsheet would run as a formula is written with a leading single quote, and read
back without it.
"""

from __future__ import annotations

import contextlib
import dataclasses
import hashlib
import json
import math
import os
import re
import tempfile
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from framegrade import records
from framegrade.grading import GRADES  # best first
from framegrade.paths import shown
from framegrade.records import TakeRecord

#: Version of the layout of `run.json` and `take.json`.
SCHEMA = 1
PROGRAM = "framegrade"

TAKE_FILE = "take.json"
RUN_FILE = "run.json"
WOBBLE_FILE = "wobble.npz"
PLOT_FILES = ("motion.png", "spectrum.png", "wobble.png")
DENSITY_COLUMNS = ("axis", "frequency_hz", "level_px2_per_hz", "floor_px2_per_hz", "observable")

#: The tables of one clip's folder, by attribute of `TakeRecord`: columns, and significant digits of a figure.
#: The summary tables state results (their intervals are wider than the fifth digit), the series feed later
#: computation and plots.
CLIP_TABLES: dict[str, tuple[tuple[str, ...], int]] = {
    "tones": (records.TONE_COLUMNS, 5),
    "spectrum": (records.SPECTRUM_COLUMNS, 5),
    "ranges": (records.RANGE_COLUMNS, 5),
    "motion": (records.MOTION_COLUMNS, 6),
    "windows": (records.WINDOW_COLUMNS, 5),
    "density": (DENSITY_COLUMNS, 7),
}
#: Those that are also gathered over all clips, at the top of OUT.
GATHERED_TABLES = ("tones", "spectrum", "ranges")

TEXT_COLUMNS = frozenset({
    "clip", "status", "grade", "reason", "mode", "codec", "readout_source", "axis", "in_timecode", "out_timecode",
    "component",
})

# What a spreadsheet takes for the start of a formula: = + - @ (also in full width, as typed on East Asian
# keyboards), with or without space before, and a leading tab, CR or LF, which some strip to find a formula behind
# (OWASP, "CSV Injection"). Leading single quotes count as part of it, so that guarding can be undone exactly.
_FORMULA = re.compile("^'*(?:\\s*[=+\\-@\uff1d\uff0b\uff0d\uff20]|[\t\r\n])")
# RFC 4180 quotes comma, quote, CR and LF. Semicolon and tab are quoted too: a spreadsheet set to a decimal comma
# splits at them, and what follows would again be the start of a cell.
_QUOTED = re.compile('[",;\t\r\n]|^\\s|\\s$')


class ResultError(Exception):
    """A results folder that cannot be read; its text is one sentence for the user."""


# ---------------------------------------------------------------------------------------------------------- text

def displayable(text: object) -> str:
    """Text as one line that is safe on a terminal.

    Parameters
    ----------
    text : object
        Anything; a file name may hold control characters, line breaks, marks that reverse the reading direction,
        or bytes that are not UTF-8.

    Returns
    -------
    str
        The text with every character that does not print replaced by its escape (`\\n`, `\\x1b`, `\\u202e`).
    """
    return shown(str(text))


def storable(text: str) -> str:
    """Text that can be written as UTF-8: bytes of a file name that are not UTF-8 become `\\xNN`.

    Parameters
    ----------
    text : str

    Returns
    -------
    str
    """
    # os.fsdecode carries the byte 0xNN as the lone surrogate U+DCNN.
    return re.sub("[\ud800-\udfff]", lambda found: f"\\x{ord(found[0]) & 0xFF:02x}", text)


def guard_formula(text: str) -> str:
    """Prefix a single quote to text that a spreadsheet would run as a formula.

    Parameters
    ----------
    text : str

    Returns
    -------
    str
        Undone by `unguard_formula` for every input.
    """
    return "'" + text if _FORMULA.match(text) else text


def unguard_formula(text: str) -> str:
    """Undo `guard_formula`.

    Parameters
    ----------
    text : str

    Returns
    -------
    str
    """
    return text[1:] if text.startswith("'") and _FORMULA.match(text) else text


# ------------------------------------------------------------------------------------------------------- figures

def is_unknown(value: Any) -> bool:
    """Whether a cell's value stands for "not measured".

    Parameters
    ----------
    value : Any
        A scalar.

    Returns
    -------
    bool
        True for None, NaN and pandas' missing values.
    """
    return value is None or value is pd.NA or value is pd.NaT or (isinstance(value, float) and math.isnan(value))


def rounded(value: float, column: str, digits: int) -> float | int:
    """A figure with the digits that its column is written with.

    Parameters
    ----------
    value : float
        A finite or infinite number.
    column : str
        Names ending in `_s` are rounded to a microsecond (frame times must stay apart however long the clip);
        in `_hz` to seven significant digits (59.94006); other figures to `digits`.
    digits : int
        Significant digits.

    Returns
    -------
    float or int
        An int where the number is whole.
    """
    if math.isinf(value):
        return value
    if column.endswith("_s"):
        result = round(value, 6)
    elif float(value).is_integer():
        result = value
    else:
        result = float(f"{value:.{7 if column.endswith('_hz') else digits}g}")
    return int(result) if float(result).is_integer() and abs(result) < 1e15 else result


def plain(value: Any) -> Any:
    """A value as JSON can hold it.

    Parameters
    ----------
    value : Any
        Nested mappings, sequences, dataclasses, numpy and pandas values.

    Returns
    -------
    Any
        dict, list, str, int, float, bool or None; NaN and infinity, which JSON lacks, become None.

    Raises
    ------
    TypeError
        If a value has no JSON form.
    """
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {f.name: plain(getattr(value, f.name)) for f in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, pd.DataFrame):
        return [plain(row) for row in value.to_dict("records")]
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, (list, tuple, set, frozenset)):
        return [plain(item) for item in value]
    if isinstance(value, os.PathLike):
        return os.fspath(value)
    if is_unknown(value):
        return None
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, str):
        return value
    raise TypeError(f"{type(value).__name__} has no JSON form")


def take_row(take: Mapping[str, Any]) -> dict[str, Any]:
    """One row of `takes.csv` with the written digits.

    Parameters
    ----------
    take : mapping
        Keyed by `records.TAKE_COLUMNS`.

    Returns
    -------
    dict
        In column order; None for what was not measured.

    Raises
    ------
    ValueError
        If a column is missing or unknown.
    """
    if set(take) != set(records.TAKE_COLUMNS):
        raise ValueError(f"a take has other columns than promised: {sorted(set(take) ^ set(records.TAKE_COLUMNS))}")
    row = {}
    for column in records.TAKE_COLUMNS:
        value = plain(take[column])
        number = isinstance(value, (int, float)) and not isinstance(value, bool)
        row[column] = rounded(value, column, 5) if number else value
    return row


def failed_row(clip: str, reason: str) -> dict[str, Any]:
    """The row of `takes.csv` of a clip that could not be graded: its reason, all figures empty.

    Parameters
    ----------
    clip, reason : str

    Returns
    -------
    dict
        Keyed by `records.TAKE_COLUMNS`.
    """
    return {**dict.fromkeys(records.TAKE_COLUMNS), "clip": clip, "status": "failed", "reason": reason}


def natural_key(text: str) -> list[tuple[int, int, str]]:
    """Sort key under which `take 9` comes before `take 10`.

    Parameters
    ----------
    text : str

    Returns
    -------
    list of tuple
    """
    parts = re.split(r"(\d+)", text.casefold())
    return [(0, int(part), "") if part.isdecimal() else (1, 0, part) for part in parts if part]


def rank_key(row: Mapping[str, Any]) -> tuple:
    """Sort key of `takes.csv`: keep, stabilise, reshoot; then the higher score; failed clips last.

    Parameters
    ----------
    row : mapping
        A row keyed by `records.TAKE_COLUMNS`.

    Returns
    -------
    tuple
    """
    failed = row["status"] != "graded"
    grade = GRADES.index(row["grade"]) if row["grade"] in GRADES else len(GRADES)
    score = -math.inf if is_unknown(row["score"]) else float(row["score"])
    return failed, grade, -score, natural_key(str(row["clip"])), str(row["clip"])


# ----------------------------------------------------------------------------------------------------------- CSV

def _cell(value: Any, column: str, digits: int) -> str:
    if is_unknown(value):
        return ""
    if isinstance(value, (bool, np.bool_)):
        return "true" if value else "false"
    if isinstance(value, (int, np.integer)):
        return str(int(value))
    if isinstance(value, (float, np.floating)):
        return str(rounded(float(value), column, digits))
    text = guard_formula(storable(str(value)))
    return '"' + text.replace('"', '""') + '"' if _QUOTED.search(text) else text


def csv_text(table: pd.DataFrame, columns: Sequence[str], digits: int = 5) -> str:
    """A table as CSV.

    Parameters
    ----------
    table : pandas.DataFrame
    columns : sequence of str
        The promised columns, in order. Further columns of the table follow them.
    digits : int
        Significant digits of a figure (see `rounded` for times and frequencies).

    Returns
    -------
    str
        Header and rows, each ending in LF.

    Raises
    ------
    ValueError
        If a promised column is missing: an empty column would pass for "not measured".
    """
    missing = [column for column in columns if column not in table.columns]
    if missing:
        raise ValueError(f"a table lacks the promised columns {missing}")
    order = [*columns, *(column for column in table.columns if column not in columns)]
    cells = [[_cell(value, column, digits) for value in table[column].tolist()] for column in order]
    rows = [",".join(order), *(",".join(row) for row in zip(*cells, strict=True))]
    return "\n".join(rows) + "\n"


def read_csv(path: Path) -> pd.DataFrame:
    """Read a table written by this module.

    Parameters
    ----------
    path : Path

    Returns
    -------
    pandas.DataFrame
        Text columns as str without the formula guard, figures as numbers, empty cells NaN.

    Raises
    ------
    ResultError
        If the file is missing or is no such table.
    """
    try:
        header = pd.read_csv(path, nrows=0, encoding="utf-8").columns
        text = {column: str for column in header if column in TEXT_COLUMNS}
        # Only an empty cell is missing: a clip may well be called "NA" or "nan".
        table = pd.read_csv(path, encoding="utf-8", dtype=text, keep_default_na=False, na_values=[""])
    except (OSError, ValueError) as error:
        raise ResultError(f"{displayable(path)} cannot be read as a table: {displayable(error)}") from error
    for column in text:
        table[column] = table[column].map(unguard_formula, na_action="ignore")
    return table


# ------------------------------------------------------------------------------------------------- files, safely

def write_atomically(path: Path, text: str) -> None:
    """Replace a file in one step: after a crash the old or the new content is there, never a part.

    Parameters
    ----------
    path : Path
    text : str
        Written as UTF-8.

    Raises
    ------
    OSError
        If it cannot be written; the old file is then untouched.
    """
    handle, name = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".partial", dir=path.parent)
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(name, 0o666 & ~_umask())  # mkstemp makes files private; results are for everyone the user lets in
        os.replace(name, path)
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(name)
        raise
    sync_folder(path.parent)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def sync_folder(folder: Path) -> None:
    """Have the names in a folder reach the disk (a rename is not lasting before that).

    Parameters
    ----------
    folder : Path
    """
    # Some systems cannot open or sync a folder; there the rename itself is all there is.
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def json_text(value: Any) -> str:
    """A value as readable JSON.

    Parameters
    ----------
    value : Any
        See `plain`.

    Returns
    -------
    str
        Always encodable as UTF-8: a path with bytes that are not keeps them as `\\udcNN` escapes.
    """
    value = plain(value)
    text = json.dumps(value, indent=1, ensure_ascii=False, allow_nan=False) + "\n"
    try:
        text.encode("utf-8")
    except UnicodeEncodeError:
        text = json.dumps(value, indent=1, allow_nan=False) + "\n"
    return text


def read_json(path: Path) -> dict[str, Any]:
    """Read `run.json` or `take.json`.

    Parameters
    ----------
    path : Path

    Returns
    -------
    dict

    Raises
    ------
    ResultError
        If it is missing, no JSON, not of this program, or of a newer layout.
    """
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise ResultError(f"{displayable(path)} is missing.") from error
    except (OSError, ValueError) as error:
        raise ResultError(f"{displayable(path)} cannot be read: {displayable(error)}.") from error
    if not isinstance(content, dict) or content.get("program") != PROGRAM:
        raise ResultError(f"{displayable(path)} was not written by {PROGRAM}.")
    if content.get("schema") != SCHEMA:
        raise ResultError(f"{displayable(path)} has layout {content.get('schema')!r}; this version reads {SCHEMA}.")
    return content


# ---------------------------------------------------------------------------------------------- one clip's folder

def file_seal(path: Path) -> list[Any]:
    """Size in bytes and digest of a file, as listed in `take.json`.

    Parameters
    ----------
    path : Path

    Returns
    -------
    list
        `[size_bytes, digest]`.
    """
    content = path.read_bytes()
    return [len(content), hashlib.blake2b(content, digest_size=8).hexdigest()]


def write_tables(record: TakeRecord, folder: Path) -> list[Path]:
    """Write all of a take but its plots and `take.json` into a folder.

    Parameters
    ----------
    record : TakeRecord
    folder : Path
        Exists.

    Returns
    -------
    list of Path
        The files written.

    Raises
    ------
    OSError
        If a file cannot be written.
    ValueError
        If a table lacks a promised column.
    """
    written = []
    for name, (columns, digits) in CLIP_TABLES.items():
        path = folder / f"{name}.csv"
        with path.open("w", encoding="utf-8", newline="") as file:
            file.write(csv_text(getattr(record, name), columns, digits))
        written.append(path)
    path = folder / WOBBLE_FILE
    # Single precision holds a displacement to a ten-millionth of itself; times keep double precision.
    np.savez_compressed(path, wobble_px=np.asarray(record.wobble_px, np.float32),
                        wobble_time_s=np.asarray(record.wobble_time_s, np.float64))
    written.append(path)
    return written


def seal_take(record: TakeRecord, folder: Path, files: Iterable[Path], stamp: Mapping[str, Any]) -> None:
    """Write `take.json`, which makes a folder a finished result.

    Parameters
    ----------
    record : TakeRecord
    folder : Path
    files : iterable of Path
        All other files of the result, inside `folder`.
    stamp : mapping
        What the result was made from: `version`, `source` (str), `fingerprint`, `settings` (dict), and more.

    Raises
    ------
    OSError
        If it cannot be written.
    TypeError
        If `record.extra` has no JSON form.
    """
    write_atomically(folder / TAKE_FILE, json_text({
        "schema": SCHEMA, "program": PROGRAM, **stamp,
        "take": take_row(record.take), "notes": list(record.notes), "extra": record.extra,
        "files": {path.name: file_seal(path) for path in files},
    }))


def read_stamp(folder: Path, *, verify: bool = True) -> dict[str, Any]:
    """Read `take.json` of a clip's folder.

    Parameters
    ----------
    folder : Path
    verify : bool
        Compare every listed file with its size and digest.

    Returns
    -------
    dict
        The content of `take.json`.

    Raises
    ------
    ResultError
        If the folder holds no whole result.
    """
    stamp = read_json(folder / TAKE_FILE)
    kinds = {"version": str, "source": str, "fingerprint": dict, "settings": dict, "take": dict, "notes": list,
             "extra": dict, "files": dict}
    if any(not isinstance(stamp.get(key), kind) for key, kind in kinds.items()):
        raise ResultError(f"{displayable(folder / TAKE_FILE)} is incomplete.")
    if set(stamp["take"]) != set(records.TAKE_COLUMNS):
        raise ResultError(f"{displayable(folder / TAKE_FILE)} has other columns than this version writes.")
    for name, seal in stamp["files"].items() if verify else ():
        path = folder / name
        try:
            intact = path.stat().st_size == seal[0] and file_seal(path) == seal
        except OSError as error:
            raise ResultError(f"{displayable(path)} cannot be read: {error.strerror}.") from error
        if not intact:
            raise ResultError(f"{displayable(path)} was changed or damaged after it was written.")
    return stamp


def load_take(folder: Path, clip: str | None = None) -> TakeRecord:
    """Read one finished take back.

    Parameters
    ----------
    folder : Path
        `OUT/clips/NAME`.
    clip : str, optional
        Name to show the clip under in its tables, instead of the one it was written with.

    Returns
    -------
    TakeRecord
        As written: figures carry the written digits. Missing values of `extra` are None.

    Raises
    ------
    ResultError
        If the folder holds no whole result.
    """
    folder = Path(folder)
    stamp = read_stamp(folder, verify=False)
    tables = {name: read_csv(folder / f"{name}.csv") for name in CLIP_TABLES}
    try:
        with np.load(folder / WOBBLE_FILE, allow_pickle=False) as arrays:
            wobble_px, wobble_time_s = arrays["wobble_px"], arrays["wobble_time_s"]
    except (OSError, ValueError, KeyError, EOFError) as error:
        raise ResultError(f"{displayable(folder / WOBBLE_FILE)} cannot be read: {displayable(error)}.") from error
    # A figure that was not measured is NaN in a record, a text None (see records).
    take = {column: stamp["take"][column] if column in TEXT_COLUMNS or stamp["take"][column] is not None else math.nan
            for column in records.TAKE_COLUMNS}
    record = TakeRecord(take=take, wobble_px=wobble_px, wobble_time_s=wobble_time_s, notes=tuple(stamp["notes"]),
                        extra=stamp["extra"], **tables)
    return record if clip is None else named(record, clip)


def named(record: TakeRecord, clip: str) -> TakeRecord:
    """The same take under another clip name, in its row and in all its tables.

    Parameters
    ----------
    record : TakeRecord
    clip : str

    Returns
    -------
    TakeRecord
    """
    tables = {name: getattr(record, name).assign(clip=clip) for name in GATHERED_TABLES}
    return dataclasses.replace(record, take={**record.take, "clip": clip}, **tables)


# -------------------------------------------------------------------------------------------------- a whole run

@dataclass(frozen=True)
class GradeRun:
    """A graded shoot: the tables over all clips, and the way to each single take.

    Attributes
    ----------
    out : Path
        The results folder.
    takes : pandas.DataFrame
        A row a clip, columns `records.TAKE_COLUMNS`, ranked.
    tones, spectrum, ranges : pandas.DataFrame
        The rows of all graded clips, in the order of `takes`.
    run : dict
        The content of `run.json`: version, settings, counts, and per clip its source, folder, timing and notes.
    """

    out: Path
    takes: pd.DataFrame
    tones: pd.DataFrame
    spectrum: pd.DataFrame
    ranges: pd.DataFrame
    run: dict[str, Any]

    @property
    def graded(self) -> tuple[str, ...]:
        """Names of the graded clips, best first."""
        return tuple(self.takes.loc[self.takes["status"] == "graded", "clip"])

    @property
    def failed(self) -> dict[str, str]:
        """Reason by name of each clip that failed."""
        rows = self.takes[self.takes["status"] != "graded"]
        return dict(zip(rows["clip"], rows["reason"], strict=True))

    @property
    def notes(self) -> dict[str, tuple[str, ...]]:
        """Sentences a user must read, by clip; clips without any are left out."""
        return {clip["clip"]: tuple(clip["notes"]) for clip in self.run["clips"] if clip["notes"]}

    def folder(self, clip: str) -> Path:
        """The folder of a graded clip.

        Parameters
        ----------
        clip : str
            As in `takes`.

        Returns
        -------
        Path

        Raises
        ------
        KeyError
            If the clip is not in this run, or failed.
        """
        for entry in self.run["clips"]:
            if entry["clip"] == clip and entry["folder"] is not None:
                return self.out / entry["folder"]
        raise KeyError(clip)

    def record(self, clip: str) -> TakeRecord:
        """Read all that was measured of one graded clip.

        Parameters
        ----------
        clip : str
            As in `takes`.

        Returns
        -------
        TakeRecord

        Raises
        ------
        KeyError
            If the clip is not in this run, or failed.
        ResultError
            If its files were removed or damaged.
        """
        return load_take(self.folder(clip), clip)

    def records(self) -> Iterator[TakeRecord]:
        """Read the graded takes one after another, best first (one at a time: they may not fit in memory at once).

        Yields
        ------
        TakeRecord
        """
        for clip in self.graded:
            yield self.record(clip)


def gather(
    rows: Iterable[Mapping[str, Any]], tables: Mapping[str, Mapping[str, pd.DataFrame]]
) -> dict[str, pd.DataFrame]:
    """Put the takes of a run together, ranked.

    Parameters
    ----------
    rows : iterable of mapping
        One a clip, keyed by `records.TAKE_COLUMNS`.
    tables : mapping
        `tables[clip][name]` for the graded clips, with `name` in `GATHERED_TABLES`.

    Returns
    -------
    dict of pandas.DataFrame
        `takes` and each of `GATHERED_TABLES`.
    """
    ranked = sorted(rows, key=rank_key)
    result = {"takes": pd.DataFrame(ranked, columns=list(records.TAKE_COLUMNS))}
    for column in records.TAKE_COLUMNS:
        if column not in TEXT_COLUMNS:
            result["takes"][column] = pd.to_numeric(result["takes"][column])
    for name in GATHERED_TABLES:
        columns = list(CLIP_TABLES[name][0])
        parts = [tables[row["clip"]][name] for row in ranked if row["clip"] in tables]
        parts = [part[columns] for part in parts if len(part)]
        result[name] = pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=columns)
    return result


def write_run(out: Path, gathered: Mapping[str, pd.DataFrame], run: Mapping[str, Any]) -> None:
    """Write the tables of a run and `run.json`, each in one step.

    Parameters
    ----------
    out : Path
    gathered : mapping of pandas.DataFrame
        From `gather`.
    run : mapping
        Content of `run.json`.

    Raises
    ------
    OSError
        If a file cannot be written; the others are whole.
    """
    write_atomically(out / "takes.csv", csv_text(gathered["takes"], records.TAKE_COLUMNS))
    for name in GATHERED_TABLES:
        write_atomically(out / f"{name}.csv", csv_text(gathered[name], *CLIP_TABLES[name]))
    write_atomically(out / RUN_FILE, json_text({"schema": SCHEMA, "program": PROGRAM, **run}))


def load_run(out: Path) -> GradeRun:
    """Read a results folder.

    Parameters
    ----------
    out : Path
        The OUT of an earlier `framegrade grade`.

    Returns
    -------
    GradeRun

    Raises
    ------
    ResultError
        If the folder is missing or holds no results.
    """
    out = Path(out)
    if not out.is_dir():
        raise ResultError(f"{displayable(out)} is not a folder with results of framegrade grade.")
    run = read_json(out / RUN_FILE)
    if not isinstance(run.get("clips"), list):
        raise ResultError(f"{displayable(out / RUN_FILE)} is incomplete.")
    return GradeRun(out=out, run=run, takes=read_csv(out / "takes.csv"),
                    **{name: read_csv(out / f"{name}.csv") for name in GATHERED_TABLES})


def run_json(run: GradeRun) -> str:
    """A run as one JSON object, for other programs.

    Parameters
    ----------
    run : GradeRun

    Returns
    -------
    str
        `takes` in ranked order, each with the columns of `takes.csv` (null where not measured), its `tones`,
        `spectrum` and `ranges`, its `notes` and its `folder` below `out`.
    """
    entries = {entry["clip"]: entry for entry in run.run["clips"]}
    parts = {name: dict(list(getattr(run, name).groupby("clip", sort=False))) for name in GATHERED_TABLES}
    takes = []
    for take in run.takes.to_dict("records"):
        clip = take["clip"]
        rows: dict[str, list] = {name: [] for name in GATHERED_TABLES}
        for name in GATHERED_TABLES:
            if clip in parts[name]:
                own = parts[name][clip].drop(columns="clip").to_dict("records")
                rows[name] = [_json_row(row, CLIP_TABLES[name][1]) for row in own]
        takes.append({**_json_row(take, 5), **rows, "notes": entries[clip]["notes"], "folder": entries[clip]["folder"]})
    head = {key: run.run[key] for key in ("version", "state", "stopped_because", "counts", "settings")}
    return json_text({"schema": SCHEMA, "program": PROGRAM, "out": run.out, **head, "takes": takes})


def _json_row(row: Mapping[str, Any], digits: int) -> dict[str, Any]:
    values = {column: plain(value) for column, value in row.items()}
    return {column: rounded(value, column, digits) if isinstance(value, float) else value
            for column, value in values.items()}
