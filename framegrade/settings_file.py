"""Read a small TOML file against a declared schema, so that every mistake is one sentence with file and line."""

from __future__ import annotations

import difflib
import math
import os
import re
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from framegrade.paths import shown, unreadable_cause

_KINDS = {
    "number": "a number",
    "integer": "a whole number",
    "text": "text in quotes",
    "flag": "true or false",
    "numbers": "a list of numbers",
}


class SettingsError(Exception):
    """A settings file that cannot be used, in one sentence: file, line and cause.

    Parameters
    ----------
    path : str or path-like
    line : int or None
        Counted from 1; None when no one line is at fault.
    cause : str
        What is wrong, without a closing full stop.
    """

    def __init__(self, path: str | os.PathLike[str], line: int | None, cause: str) -> None:
        super().__init__(path, line, cause)
        self.path = Path(path)
        self.line = line
        self.cause = cause

    def __str__(self) -> str:
        where = shown(self.path) if self.line is None else f"{shown(self.path)}, line {self.line}"
        return f"{where}: {self.cause}"


@dataclass(frozen=True)
class Field:
    """One key of a table.

    Attributes
    ----------
    kind : {"number", "integer", "text", "flag", "numbers"}
        "number" takes whole and decimal figures and gives a float; "numbers" a list of them, a tuple of floats.
    help : str
        What the key means, with its unit; it completes the sentences about wrong values.
    required : bool
    low, high : float or None
        Least and greatest value, both allowed; with `open_range` neither is.
    open_range : bool
    allowed : tuple
        The only values taken; empty for any.
    """

    kind: str
    help: str = ""
    required: bool = False
    low: float | None = None
    high: float | None = None
    open_range: bool = False
    allowed: tuple[Any, ...] = ()

    def __post_init__(self) -> None:
        if self.kind not in _KINDS:
            raise ValueError(f"unknown kind of field {self.kind!r}")

    def wish(self) -> str:
        """What a value must be, such as "a number from 0 to 100 (readout time, ms)"."""
        text = _KINDS[self.kind]
        if self.allowed:
            text = "one of " + ", ".join(_literal(value) for value in self.allowed)
        elif self.low is not None and self.high is not None:
            between = "between {:g} and {:g}" if self.open_range else "from {:g} to {:g}"
            text += " " + between.format(self.low, self.high)
        elif self.low is not None:
            text += f" {'above' if self.open_range else 'of at least'} {self.low:g}"
        elif self.high is not None:
            text += f" {'below' if self.open_range else 'of at most'} {self.high:g}"
        return f"{text} ({self.help})" if self.help else text


@dataclass(frozen=True)
class Table:
    """One table of a settings file.

    Attributes
    ----------
    fields : mapping of str to Field
    many : bool
        True for an array of tables, `[[name]]`.
    required : bool
        The table (of `many`, at least one) must be there.
    """

    fields: Mapping[str, Field]
    many: bool = False
    required: bool = False


@dataclass(frozen=True)
class Settings:
    """The checked values of a settings file.

    Attributes
    ----------
    path : Path
    tables : dict of str to list of dict
        For each table of the schema its occurrences, in file order: none or one, or any number for `many`.
    """

    path: Path
    tables: dict[str, list[dict[str, Any]]]
    _lines: dict[tuple[str | int, ...], int] = field(repr=False)
    _schema: Mapping[str, Table] = field(repr=False)

    def table(self, name: str) -> dict[str, Any]:
        """The values of a table; empty when the file does not have it."""
        found = self.tables[name]
        return found[0] if found else {}

    def line(self, name: str, key: str | None = None, nth: int = 0) -> int | None:
        """The line of a key, or of the header of its table (of `many`, the nth from 0); None when not there."""
        place: tuple[str | int, ...] = tuple(name.split(".")) if name else ()
        if self._schema[name].many:
            place += (nth,)
        return _line_of(self._lines, place + ((key,) if key is not None else ()))

    def error(self, cause: str, name: str, key: str | None = None, nth: int = 0) -> SettingsError:
        """A SettingsError at a key or table, for rules that a schema cannot tell."""
        return SettingsError(self.path, self.line(name, key, nth), cause)


def read_settings(path: str | os.PathLike[str], schema: Mapping[str, Table]) -> Settings:
    """Read and check a TOML file.

    Parameters
    ----------
    path : str or path-like
    schema : mapping of str to Table
        By table name; "a.b" for the table [a.b], "" for keys above the first header.

    Returns
    -------
    Settings

    Raises
    ------
    SettingsError
        For a file that cannot be read, is not TOML, or departs from the schema. The first fault in the file is told.
    """
    path = Path(path)
    cause = unreadable_cause(path, "a settings file")
    if cause is not None:
        raise SettingsError(path, None, cause)
    text = _decoded(path)
    try:
        document = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _syntax_error(path, text, error) from None
    lines = statement_lines(text)
    # A misspelt key is also a missing one: the spelling is the better hint, so names are checked before values.
    for faults in (_name_faults(document, schema, lines), _value_faults(document, schema, lines)):
        first = min(faults, key=lambda fault: fault[0] or math.inf, default=None)
        if first is not None:
            raise SettingsError(path, *first)
    tables = {name: [_converted(row, table) for row in _rows(document, name)] for name, table in schema.items()}
    return Settings(path, tables, lines, schema)


# --- text ------------------------------------------------------------------------------------------------------------


def _decoded(path: Path) -> str:
    data = path.read_bytes()
    try:
        # Some editors put a byte order mark first and end lines with CR LF.
        return data.decode("utf-8-sig").replace("\r\n", "\n")
    except UnicodeDecodeError as error:
        raise SettingsError(path, data.count(b"\n", 0, error.start) + 1, "is not UTF-8 text") from None


def _syntax_error(path: Path, text: str, error: tomllib.TOMLDecodeError) -> SettingsError:
    message = str(error)
    place = re.search(r" \(at (?:line (\d+), column \d+|end of document)\)$", message)
    line = None
    if place:
        message = message[: place.start()]
        line = int(place[1]) if place[1] else text.rstrip("\n").count("\n") + 1
    return SettingsError(path, line, f"is not valid TOML: {message[:1].lower()}{message[1:]}")


def statement_lines(text: str) -> dict[tuple[str | int, ...], int]:
    """The line, from 1, that each table header and key of a valid TOML text starts on.

    Parameters
    ----------
    text : str

    Returns
    -------
    dict
        Keyed by path, such as ("camera", "name") or ("mode", 1, "width_px") for the second [[mode]]; the tables
        themselves by ("camera",) and ("mode", 1).

    Notes
    -----
    A statement of TOML is valid by itself, so lines are gathered until they parse: that takes dotted and quoted keys
    and values over several lines as the TOML reader does.
    """
    found: dict[tuple[str | int, ...], int] = {}
    last_of: dict[tuple[str | int, ...], int] = {}  # array of tables -> index of its latest
    table: tuple[str | int, ...] = ()
    gathered: list[str] = []
    for number, line in enumerate(text.split("\n"), start=1):
        gathered.append(line)
        try:
            parsed = tomllib.loads("\n".join(gathered))
        except tomllib.TOMLDecodeError:
            continue
        start = number - len(gathered) + 1
        is_header = gathered[0].lstrip().startswith("[")
        gathered = []
        if not parsed:  # blank, or a comment
            continue
        if not is_header:
            for path in _paths(parsed):
                found.setdefault(table + path, start)
            continue
        table = ()
        while parsed:
            (key, parsed), = parsed.items()
            table += (key,)
            if isinstance(parsed, list):
                last_of[table] = last_of.get(table, -1) + 1
                parsed = parsed[0]
            if table in last_of:
                table += (last_of[table],)
            found.setdefault(table, start)
    return found


def _paths(parsed: Any, at: tuple[str | int, ...] = ()) -> Iterator[tuple[str | int, ...]]:
    """Every path in a parsed value, through tables and lists of tables."""
    if at:
        yield at
    items = parsed.items() if isinstance(parsed, dict) else enumerate(parsed) if isinstance(parsed, list) else ()
    for key, value in items:
        yield from _paths(value, at + (key,))


def _line_of(lines: Mapping[tuple[str | int, ...], int], path: tuple[str | int, ...]) -> int | None:
    """The line of a path, or of the innermost table around it that has one."""
    while path and path not in lines:
        path = path[:-1]
    return lines.get(path)


# --- checking --------------------------------------------------------------------------------------------------------


def _literal(value: Any) -> str:
    """A value as the user wrote it, shortened."""
    if isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, str):
        text = '"' + shown(value) + '"'
    elif isinstance(value, dict):
        text = "a table"
    else:
        text = str(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _did_you_mean(name: str, known: list[str]) -> str:
    close = difflib.get_close_matches(name.lower(), known, n=1)
    return f' (did you mean "{close[0]}"?)' if close else ""


def _header(name: str, many: bool) -> str:
    return f"[[{name}]]" if many else f"[{name}]"


def _rows(document: Mapping[str, Any], name: str) -> list[dict[str, Any]]:
    """The occurrences of a table in a document."""
    value: Any = document
    for part in name.split(".") if name else ():
        value = value.get(part, [])
        if not isinstance(value, dict):
            return list(value)
    return [value]


def _converted(row: Mapping[str, Any], table: Table) -> dict[str, Any]:
    values = {}
    for key, value in row.items():
        if key in table.fields:
            kind = table.fields[key].kind
            values[key] = float(value) if kind == "number" else tuple(map(float, value)) if kind == "numbers" else value
    return values


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def _fits(value: Any, wanted: Field) -> bool:
    if wanted.kind == "numbers":
        return isinstance(value, list) and all(_is_number(item) and _in_range(item, wanted) for item in value)
    if wanted.kind == "number" and not _is_number(value):
        return False
    if wanted.kind == "integer" and (not isinstance(value, int) or isinstance(value, bool)):
        return False
    if wanted.kind == "text" and not isinstance(value, str):
        return False
    if wanted.kind == "flag" and not isinstance(value, bool):
        return False
    if wanted.allowed and value not in wanted.allowed:
        return False
    return wanted.kind not in ("number", "integer") or _in_range(value, wanted)


def _in_range(value: float, wanted: Field) -> bool:
    if wanted.open_range:
        return (wanted.low is None or value > wanted.low) and (wanted.high is None or value < wanted.high)
    return (wanted.low is None or value >= wanted.low) and (wanted.high is None or value <= wanted.high)


_Fault = tuple[int | None, str]


def _value_faults(
    document: Mapping[str, Any], schema: Mapping[str, Table], lines: Mapping[tuple[str | int, ...], int]
) -> Iterator[_Fault]:
    """Missing tables and keys, and values that do not fit, as (line, cause)."""
    for name, table in schema.items():
        place: tuple[str | int, ...] = tuple(name.split(".")) if name else ()
        value: Any = document
        for part in place:
            value = value.get(part) if isinstance(value, dict) else None
        rows = value if table.many else [value]
        if value is None:
            if table.required:
                yield None, f"the table {_header(name, table.many)} is missing"
        elif not isinstance(rows, list) or not all(isinstance(row, dict) for row in rows):
            yield _line_of(lines, place), f'"{name}" must be a table: write {_header(name, table.many)}'
        elif table.required and not rows:
            yield _line_of(lines, place), f"at least one table {_header(name, table.many)} is needed"
        else:
            for nth, row in enumerate(rows):
                yield from _row_faults(row, name, table, place + ((nth,) if table.many else ()), lines)


def _row_faults(
    row: Mapping[str, Any], name: str, table: Table, at: tuple[str | int, ...],
    lines: Mapping[tuple[str | int, ...], int],
) -> Iterator[_Fault]:
    inside = f" in {_header(name, table.many)}" if name else ""
    for key, wanted in table.fields.items():
        if key not in row:
            if wanted.required:
                yield _line_of(lines, at), f'the key "{key}" is missing{inside}: give {wanted.wish()}'
        elif not _fits(row[key], wanted):
            yield (
                _line_of(lines, at + (key,)),
                f'"{key}" = {_literal(row[key])}{inside} cannot be used: give {wanted.wish()}',
            )


def _name_faults(
    node: Mapping[str, Any], schema: Mapping[str, Table], lines: Mapping[tuple[str | int, ...], int],
    at: tuple[str, ...] = (), occurrence: tuple[str | int, ...] = (),
) -> Iterator[_Fault]:
    """Keys and tables that the schema does not know, from one table of the document downward.

    `at` is that table's name in parts; `occurrence` the same with the number of each table of an array put in.
    """
    name = ".".join(at)
    table = schema.get(name)
    fields = table.fields if table else {}
    parts = [tuple(other.split(".")) for other in schema if other]
    inner = list(dict.fromkeys(other[len(at)] for other in parts if other[: len(at)] == at and len(other) > len(at)))
    for key, value in node.items():
        if key in fields:
            continue
        path = at + (key,)
        if key in inner:
            rows = value if isinstance(value, list) else [value]
            for nth, row in enumerate(rows):
                if isinstance(row, dict):
                    spot = occurrence + (key,) + ((nth,) if isinstance(value, list) else ())
                    yield from _name_faults(row, schema, lines, path, spot)
            continue
        known = list(fields) + inner
        line = _line_of(lines, occurrence + (key,))
        if isinstance(value, dict) or (isinstance(value, list) and value and isinstance(value[0], dict)):
            headers = ", ".join(_header(other, schema[other].many) for other in schema if other)
            yield line, f'unknown table "{".".join(path)}"{_did_you_mean(key, known)}; the tables are {headers}'
        else:
            inside = f" in {_header(name, bool(table and table.many))}" if name else " above the first table"
            allowed = f"the keys are {', '.join(fields)}" if fields else "no key is expected here"
            yield line, f'unknown key "{shown(key)}"{inside}{_did_you_mean(key, known)}; {allowed}'
