"""Take after take: find the clips, measure what has changed, write each result in one step, gather the tables.

Every clip is measured in a process of its own pool, so that a decoder that crashes takes one clip with it and not the
shoot. A worker writes its result into a hidden folder beside the final one; the main process renames it into place.
So a killed run loses at most the clips in flight, and the next run takes up everything that is unchanged: same
content, same settings as far as they touch the clip, same version.
"""

from __future__ import annotations

import contextlib
import dataclasses
import datetime
import errno
import glob
import hashlib
import math
import multiprocessing
import os
import re
import shutil
import signal
import time
import traceback
import unicodedata
from collections import Counter, deque
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from multiprocessing.connection import Connection, wait
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

from framegrade.footage import FootageError, find_clips, probe
from framegrade.records import TakeRecord
from framegrade.report import tables
from framegrade.report.tables import GradeRun, ResultError, displayable
from framegrade.version import __version__

if TYPE_CHECKING:
    from framegrade.camera import Camera
    from framegrade.grading import Limits
    from framegrade.measure import MeasureSettings

Progress = Callable[[float], None]
Measure = Callable[[Path, "MeasureSettings", Progress], TakeRecord]
Plot = Callable[[TakeRecord, Path], "list[Path]"]

#: Figures a user may give: lowest, highest, unit. Wider than any camera; a value outside is a slip of the unit.
GIVEN_RANGES = {
    "readout_ms": (0.0, 200.0, "ms"), "hfov_deg": (5.0, 175.0, "degrees"), "exposure_ms": (0.0, 1000.0, "ms"),
}

CLIPS_FOLDER = "clips"
LOCK_FILE = ".framegrade-lock"
_PARTIAL = ".partial-"
_REPLACED = ".replaced-"
_NO_ROOM = (errno.ENOSPC, errno.EDQUOT)


class UsageError(Exception):
    """A request that cannot be carried out as put; its text is one sentence for the user."""


class NoRoomError(Exception):
    """The results folder cannot even be begun, because its disk is full; its text is one sentence for the user."""


class Interrupted(KeyboardInterrupt):
    """The user stopped the run. `run` is the `GradeRun` of what was graded until then."""

    def __init__(self, run: GradeRun) -> None:
        super().__init__()
        self.run = run


def touching(settings: MeasureSettings, clip: Path) -> dict[str, Any]:
    """The part of the settings that a clip's result depends on, as JSON holds it.

    Only the camera mode that fits the clip counts: another mode may be added to the camera file without measuring
    this clip again. Neither does the number of threads.

    Parameters
    ----------
    settings : MeasureSettings
    clip : Path

    Returns
    -------
    dict

    Raises
    ------
    FootageError
        If a camera is given and the clip cannot be opened to see its mode.
    """
    mode = None if settings.camera is None else settings.camera.mode_for(probe(clip))
    given = {name: getattr(settings, name) for name in ("readout_s", "hfov_deg", "exposure_s", "limits")}
    return tables.plain({"mode": mode, **given})


class Watcher:
    """Is told what happens during a run. This one keeps silent; `report.terminal` shows it."""

    def begin(self, sizes: Mapping[str, int]) -> None:
        """The run starts; size in bytes by name of every clip, those already done included."""

    def kept(self, row: Mapping[str, Any]) -> None:
        """A clip is unchanged since an earlier run; its row of `takes.csv`."""

    def start(self, clip: str) -> None:
        """A clip is being measured."""

    def fraction(self, clip: str, done: float) -> None:
        """Share of a clip measured, 0 to 1."""

    def again(self, clip: str) -> None:
        """The process that measured a clip broke down; it is tried once more after the others."""

    def end(self, row: Mapping[str, Any], seconds: float | None) -> None:
        """A clip is graded or failed; its row of `takes.csv` and the time it took."""

    def close(self) -> None:
        """The run ends, in whatever way."""


def default_measure(path: Path, settings: MeasureSettings, progress: Progress) -> TakeRecord:
    """Measure a clip with `framegrade.measure` (imported only where clips are measured)."""
    from framegrade.measure import measure_clip

    return measure_clip(path, settings, progress)


def default_plot(record: TakeRecord, folder: Path) -> list[Path]:
    """Draw the plots of a take with `framegrade.report.plots` (imported only where clips are measured)."""
    from framegrade.report.plots import write_plots

    return write_plots(record, folder)


# ------------------------------------------------------------------------------------------------- the two entries

def grade(
    path: str | os.PathLike[str], *, camera: str | os.PathLike[str] | Camera | None = None,
    readout_ms: float | None = None, hfov_deg: float | None = None, exposure_ms: float | None = None,
    limits: str | os.PathLike[str] | Limits | None = None, out: str | os.PathLike[str] | None = None,
    threads: int | None = None, measure: Measure = default_measure, plot: Plot = default_plot,
) -> TakeRecord:
    """Measure and grade one clip in this process.

    Parameters
    ----------
    path : str or path-like
        The clip.
    camera : str, path-like or Camera, optional
        Camera file, or what `load_camera` makes of one.
    readout_ms : float, optional
        Time from the first to the last row, milliseconds; 0 for a global shutter. Goes before the camera's.
    hfov_deg : float, optional
        Horizontal field of view, degrees.
    exposure_ms : float, optional
        Exposure time of a row, milliseconds.
    limits : str, path-like or Limits, optional
        Limits file; the built-in limits otherwise.
    out : str or path-like, optional
        Folder to write tables and plots to, as `grade_all` does. Nothing is written without it.
    threads : int, optional
        Decoder threads; one a core by default.
    measure, plot : callable
        Other functions in place of the product's own.

    Returns
    -------
    TakeRecord
        With full digits; with `out` as written there.

    Raises
    ------
    FootageError
        If the clip cannot be graded.
    SettingsError
        If the camera or limits file is wrong.
    UsageError
        If a figure is outside its sensible range, or `out` cannot be used.

    Examples
    --------
    >>> record = framegrade.grade("flight.mp4", readout_ms=14.0, hfov_deg=80.0)   # doctest: +SKIP
    >>> record.take["grade"], record.tones.frequency_hz.tolist()                  # doctest: +SKIP
    ('stabilise', [137.3])
    """
    path = Path(path)
    if out is None:
        settings = make_settings(camera, readout_ms, hfov_deg, exposure_ms, limits)
        return measure(path, dataclasses.replace(settings, threads=threads or available_cores()), lambda done: None)
    if path.is_dir():
        raise FootageError(path, "is a folder, not a clip")
    run = grade_all(
        [path], out, camera=camera, readout_ms=readout_ms, hfov_deg=hfov_deg, exposure_ms=exposure_ms, limits=limits,
        jobs=1, threads=threads, isolate=False, measure=measure, plot=plot,
    )
    for reason in run.failed.values():
        raise FootageError(path, reason)
    return next(run.records())


def grade_all(
    paths: str | os.PathLike[str] | Iterable[str | os.PathLike[str]], out: str | os.PathLike[str], *,
    camera: str | os.PathLike[str] | Camera | None = None, readout_ms: float | None = None,
    hfov_deg: float | None = None, exposure_ms: float | None = None,
    limits: str | os.PathLike[str] | Limits | None = None, jobs: int | None = None, threads: int | None = None,
    force: bool = False, isolate: bool = True, watcher: Watcher | None = None,
    measure: Measure = default_measure, plot: Plot = default_plot,
) -> GradeRun:
    """Measure and grade a shoot into a results folder, skipping what an earlier run did.

    Parameters
    ----------
    paths : str, path-like, or iterable of them
        Files, folders (searched at every depth) and patterns. `out`, and any other folder with results below a
        searched folder, is left out of the search.
    out : str or path-like
        Results folder; made if missing. The tables at its top cover the clips of this call; the results of other
        clips stay in `clips/` for a later call that names them again.
    camera, readout_ms, hfov_deg, exposure_ms, limits
        As for `grade`.
    jobs : int, optional
        Clips measured at the same time; one a core by default, at most one a clip.
    threads : int, optional
        Decoder threads of each; the cores shared out among the jobs by default.
    force : bool
        Measure again what is unchanged.
    isolate : bool
        Measure in processes of their own. They are spawned: a script that calls this needs the usual
        `if __name__ == "__main__":`. Without it clips are measured one by one in the calling process, and a crash
        of a decoder ends it.
    watcher : Watcher, optional
        Is told what happens.
    measure, plot : callable
        Other functions in place of the product's own; at module level if `isolate`.

    Returns
    -------
    GradeRun
        Tables and, clip by clip, records. `run["state"]` is "complete", or "stopped" with the sentence in
        `run["stopped_because"]` when `out` could not be written any more.

    Raises
    ------
    UsageError
        If no clip is found, a figure is outside its sensible range, or `out` cannot be used.
    NoRoomError
        If there is no room to begin `out`.
    SettingsError
        If the camera or limits file is wrong.
    Interrupted
        If the user stopped the run. The tables are written.

    Examples
    --------
    >>> run = framegrade.grade_all(["card"], "graded", camera="camera.toml")      # doctest: +SKIP
    >>> run.takes[["clip", "grade", "score", "reason"]]                           # doctest: +SKIP
    """
    settings = make_settings(camera, readout_ms, hfov_deg, exposure_ms, limits)
    cores = available_cores()
    for name, value in (("jobs", jobs), ("threads", threads)):
        if value is not None and value < 1:
            raise UsageError(f"{name} must be 1 or more, not {value}.")
    if isinstance(paths, (str, os.PathLike)):
        paths = [paths]  # a lone path would be taken letter by letter
    arguments = [os.fspath(path) for path in paths]
    out = Path(os.path.abspath(out))
    clips = _find(arguments, out)
    jobs = min(jobs or cores, len([clip for clip in clips if clip.error is None]))
    threads = threads or max(1, cores // jobs)
    settings = dataclasses.replace(settings, threads=threads)

    _make_out(out)
    with _locked(out):
        _tidy(out / CLIPS_FOLDER)
        described = {
            "camera": settings.camera, "camera_file": _file_of(camera), "readout_ms": readout_ms,
            "hfov_deg": hfov_deg, "exposure_ms": exposure_ms, "limits": settings.limits,
            "limits_file": _file_of(limits), "jobs": jobs, "threads": threads,
        }
        run = _Run(out, clips, settings, tables.plain(described), watcher or Watcher())
        try:
            run.watcher.begin({clip.label: clip.size_bytes or 0 for clip in clips})
            run.assign_folders()
            if not force:
                run.keep_unchanged()
            work = run.work()
            events = _isolated(work, jobs, measure, plot) if isolate else _inline(work, measure, plot)
            return run.carry_out(events)
        finally:
            run.watcher.close()
            _tidy(out / CLIPS_FOLDER)


def make_settings(camera: Any, readout_ms: float | None, hfov_deg: float | None, exposure_ms: float | None,
                  limits: Any) -> MeasureSettings:
    """Load the files and check the figures that `grade` is given.

    Parameters
    ----------
    camera, readout_ms, hfov_deg, exposure_ms, limits
        As for `grade`.

    Returns
    -------
    MeasureSettings

    Raises
    ------
    SettingsError
        If a file is wrong.
    UsageError
        If a figure is outside its sensible range.
    """
    from framegrade.camera import load_camera
    from framegrade.grading import load_limits
    from framegrade.measure import MeasureSettings

    for name, value in (("readout_ms", readout_ms), ("hfov_deg", hfov_deg), ("exposure_ms", exposure_ms)):
        if value is not None:
            check_given(name, value)
    if limits is None or isinstance(limits, (str, os.PathLike)):
        limits = load_limits(None if limits is None else Path(limits))
    return MeasureSettings(
        camera=load_camera(Path(camera)) if isinstance(camera, (str, os.PathLike)) else camera,
        readout_s=None if readout_ms is None else readout_ms / 1e3, hfov_deg=hfov_deg,
        exposure_s=None if exposure_ms is None else exposure_ms / 1e3, limits=limits,
    )


def check_given(name: str, value: float) -> None:
    """Check a figure the user gives.

    Parameters
    ----------
    name : {"readout_ms", "hfov_deg", "exposure_ms"}
    value : float

    Raises
    ------
    UsageError
        If it is outside `GIVEN_RANGES`, or no number.
    """
    low, high, unit = GIVEN_RANGES[name]
    if not low <= value <= high:
        raise UsageError(f"{name} must be from {low:g} to {high:g} {unit}, not {value:g}.")


def available_cores() -> int:
    """Processor cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _file_of(given: Any) -> str | None:
    return os.path.abspath(given) if isinstance(given, (str, os.PathLike)) else None


# ------------------------------------------------------------------------------------------------- finding the clips

@dataclass
class _Clip:
    """One row to be: a clip, or a path that named none (`error`)."""

    label: str
    path: Path
    size_bytes: int | None = None
    modified_ns: int | None = None
    error: str | None = None
    # Filled in as the run goes on:
    folder: str | None = None
    row: dict[str, Any] | None = None
    stamp: dict[str, Any] = field(default_factory=dict)
    tables: dict[str, pd.DataFrame] = field(default_factory=dict)
    kept: bool = False
    detail: str | None = None

    @property
    def source(self) -> str:
        return os.path.abspath(self.path)


def _find(arguments: Sequence[str], out: Path) -> list[_Clip]:
    """The clips that the arguments name, each with a label that is unique; errors as clips that have failed already."""
    if not arguments:
        raise UsageError("no clip is named.")
    for argument in arguments:
        if os.path.isdir(argument) and os.path.realpath(argument) == os.path.realpath(out):
            better = displayable(Path(argument) / "graded")
            raise UsageError(f"{displayable(argument)} is both searched for clips and named for the results; "
                             f"name a folder of its own for the results, such as {better}.")
    found, errors = find_clips(arguments, exclude=out)
    roots = {argument: root for argument in arguments if (root := _search_root(argument)) is not None}
    literal = {os.path.abspath(argument) for argument in arguments if not os.path.isdir(argument)}
    searched = {root for argument, root in roots.items() if not os.path.lexists(argument) or os.path.isdir(argument)}
    paths = [path for path in found if os.path.abspath(path) in literal or not _in_results(path, searched, out)]
    if not paths:
        causes = [str(error) for error in errors] or ["all clips found lie in folders with results of an earlier run"]
        raise UsageError("no clip was found: " + "; ".join(causes) + ".")
    # An argument that led to no clip has no say in what the clips are named relative to.
    found_in = {parent for path in paths for parent in map(str, Path(os.path.abspath(path)).parents)}
    fruitful = [root for root in roots.values() if root in found_in]
    try:
        common = os.path.commonpath(fruitful)
    except ValueError:  # several drives have nothing in common: full paths it is
        common = None
    taken: set[str] = set()
    clips = []
    for path in paths:
        full = os.path.abspath(path)
        inside = common is not None and Path(full).is_relative_to(common)
        label = Path(os.path.relpath(full, common) if inside else full).as_posix()
        clips.append(_Clip(_unique(tables.storable(label), taken), path, *_size_and_time(path)))
    for error in errors:
        clips.append(_Clip(_unique(tables.storable(str(error.path)), taken), error.path, error=error.cause))
    return clips


def _search_root(argument: str) -> str | None:
    """The folder that an argument's clips are named relative to."""
    full = os.path.abspath(argument)
    if os.path.isdir(full):
        return full
    if os.path.lexists(full):
        return os.path.dirname(full)
    if glob.has_magic(argument):
        while glob.has_magic(full):
            full = os.path.dirname(full)
        return full
    return None


def _in_results(path: Path, searched: set[str], out: Path) -> bool:
    """Whether a clip found by searching lies in a results folder below the folder that was searched."""
    for parent in Path(os.path.abspath(path)).parents:
        if str(parent) in searched:
            return False
        if parent == out or _holds_results(parent):
            return True
    return False


def _holds_results(folder: Path) -> bool:
    try:
        tables.read_json(folder / tables.RUN_FILE)
    except ResultError:
        return False
    return True


def _unique(label: str, taken: set[str]) -> str:
    """A label not in `taken`, to which it is added. Labels differ by path already; only names whose undecodable bytes
    were spelt out, or a missing path spelt like a found one, can meet."""
    candidate, count = label, 1
    while candidate in taken:
        count += 1
        candidate = f"{label} ({count})"
    taken.add(candidate)
    return candidate


def _size_and_time(path: Path) -> tuple[int | None, int | None]:
    try:
        status = path.stat()
    except OSError:
        return None, None
    return status.st_size, status.st_mtime_ns


# ----------------------------------------------------------------------------------------------- telling clips apart

_ENDS_BYTES = 256 * 1024
_PIECE_BYTES = 32 * 1024
_PIECES = 30


def fingerprint(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Size and digest by which a changed clip is noticed.

    Parameters
    ----------
    path : str or path-like

    Returns
    -------
    dict
        `size_bytes` and `digest`: BLAKE2b (RFC 7693) over the first and the last 256 KiB and 30 pieces of 32 KiB
        spread evenly between; over the whole of a file smaller than that. The time of modification does not enter:
        copying a card changes it, and not the clip.

    Raises
    ------
    OSError
        If the file cannot be read.
    """
    digest = hashlib.blake2b(digest_size=16)
    with open(path, "rb") as file:
        size = os.fstat(file.fileno()).st_size
        if size <= 2 * _ENDS_BYTES + _PIECES * _PIECE_BYTES:
            digest.update(file.read())
        else:
            digest.update(file.read(_ENDS_BYTES))
            room = size - 2 * _ENDS_BYTES - _PIECE_BYTES
            for piece in range(_PIECES):
                file.seek(_ENDS_BYTES + room * piece // (_PIECES - 1))
                digest.update(file.read(_PIECE_BYTES))
            file.seek(size - _ENDS_BYTES)
            digest.update(file.read())
    return {"size_bytes": size, "digest": digest.hexdigest()}


def safe_name(stem: str) -> str:
    """A clip's name as a folder name that any system, shell and link can hold.

    Parameters
    ----------
    stem : str
        File name without its ending.

    Returns
    -------
    str
        Letters and digits of any script, `.`, `-` and `_`; at most 60 characters; never empty, hidden or a name that
        some systems reserve for devices.
    """
    text = unicodedata.normalize("NFC", tables.storable(stem))
    text = re.sub(r"[^\w.-]+", "_", text).strip("._-")
    # A letter takes up to four bytes and systems allow 255 in a name; suffixes need room too.
    text = text[:60].rstrip("._-") or "clip"
    reserved = re.fullmatch(r"(con|prn|aux|nul|com\d|lpt\d)(\..*)?", text, re.IGNORECASE)
    return f"clip_{text}" if reserved else text


def folder_names(sources: Sequence[str], existing: Mapping[str, str]) -> list[str]:
    """A folder name for each clip, the same in every run on one results folder.

    A clip keeps the folder that an earlier run gave it, whatever other clips are named now. A new clip gets its own
    name; where that is another's already, or where several new clips share it, the name of its folder is added, and
    where that is not enough, a digest of its path.

    Parameters
    ----------
    sources : sequence of str
        Absolute paths of the clips, all different.
    existing : mapping
        Source by folder name, of folders that are there already; an empty source marks a folder that is not ours.

    Returns
    -------
    list of str
        All different, also where case does not count.
    """
    owner = {source: name for name, source in existing.items() if source}
    names = {source: owner[source] for source in sources if source in owner}
    taken = {unicodedata.normalize("NFC", name).casefold() for name in existing}
    fresh = [source for source in sources if source not in names]
    for level in range(4):
        wanted = {source: _candidate(source, level) for source in fresh}
        counts = Counter(name.casefold() for name in wanted.values())
        for source, name in wanted.items():
            if counts[name.casefold()] == 1 and name.casefold() not in taken:
                names[source] = name
        fresh = [source for source in fresh if source not in names]
        taken.update(name.casefold() for name in names.values())
    return [names[source] for source in sources]


def _candidate(source: str, level: int) -> str:
    path = Path(source)
    digest = hashlib.blake2b(os.fsencode(source), digest_size=16).hexdigest()
    parts = (safe_name(path.stem), safe_name(path.parent.name), digest[:8], digest)
    return "-".join((parts[:1], parts[:2], parts[:3], (*parts[:2], parts[3]))[level])


# ---------------------------------------------------------------------------------------------------- results folder

def _make_out(out: Path) -> None:
    if out.exists() and not out.is_dir():
        raise UsageError(f"{displayable(out)} is a file; name a folder for the results.")
    try:
        (out / CLIPS_FOLDER).mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise _unusable(out, error) from error
    if not (out / LOCK_FILE).exists() and not _holds_results(out):
        promised = ["takes.csv", *(f"{name}.csv" for name in tables.GATHERED_TABLES), tables.RUN_FILE]
        foreign = [name for name in promised if (out / name).exists()]
        if foreign:
            raise UsageError(f"{displayable(out)} already holds a {foreign[0]} that framegrade did not write; "
                             "name another folder for the results.")


def _unusable(out: Path, error: OSError) -> UsageError | NoRoomError:
    if error.errno in _NO_ROOM:
        return NoRoomError(f"no room is left for the results folder {displayable(out)}.")
    return UsageError(f"{displayable(out)} cannot be used as the results folder: {error.strerror}.")


@contextlib.contextmanager
def _locked(out: Path) -> Iterator[None]:
    """Hold a results folder for this run. The system lets go of the lock when its process ends, however it ends, so
    a lock is never stale; the file itself stays, because removing it would let two later runs lock different files."""
    try:
        handle = os.open(out / LOCK_FILE, os.O_RDWR | os.O_CREAT, 0o666)
    except OSError as error:
        raise _unusable(out, error) from error
    try:
        if not _try_lock(handle):
            holder = os.pread(handle, 32, 1).decode("ascii", "replace").strip() if hasattr(os, "pread") else ""
            who = f"process {holder}" if holder.isdecimal() else "another process"
            raise UsageError(f"{displayable(out)} is being written by {who}; wait for it to end, "
                             "or name another folder.")
        try:
            # The first byte is the one that is locked where locks are on byte ranges; the holder comes after it.
            os.ftruncate(handle, 0)
            os.write(handle, f"\n{os.getpid()}\n".encode("ascii"))
        except OSError as error:
            raise _unusable(out, error) from error
        yield
    finally:
        os.close(handle)


def _try_lock(handle: int) -> bool:
    """Lock an open file without waiting; False if another process holds it. True where the file system has no locks:
    a run without the protection is better than none."""
    try:
        import fcntl
    except ImportError:
        import msvcrt

        try:
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        return True
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        return error.errno not in (errno.EWOULDBLOCK, errno.EACCES)
    return True


def _tidy(folder: Path) -> None:
    """Remove what a run that ended early left half written."""
    for path in folder.glob(f"{_REPLACED}*"):
        # Between the two renames of `_put_in_place` the earlier result has only this name: give it back.
        home = folder / path.name.removeprefix(_REPLACED)
        if home.exists():
            shutil.rmtree(path, ignore_errors=True)
        else:
            with contextlib.suppress(OSError):
                path.rename(home)
    for path in folder.glob(f"{_PARTIAL}*"):
        shutil.rmtree(path, ignore_errors=True)
    for path in folder.parent.glob(".*.partial"):
        if re.fullmatch(r"\.(takes\.csv|tones\.csv|spectrum\.csv|ranges\.csv|run\.json)\..+\.partial", path.name):
            with contextlib.suppress(OSError):
                path.unlink()


def _sync_files(folder: Path) -> None:
    for path in folder.iterdir():
        with path.open("rb+") as file:
            os.fsync(file.fileno())
    tables.sync_folder(folder)


def _own_files(folder: Path) -> set[str]:
    """Names of the files in a clip's folder that this program wrote."""
    own = {tables.TAKE_FILE, tables.WOBBLE_FILE, *tables.PLOT_FILES, *(f"{name}.csv" for name in tables.CLIP_TABLES)}
    with contextlib.suppress(ResultError):
        own |= set(tables.read_stamp(folder, verify=False)["files"])
    return own


def _put_in_place(partial: Path, home: Path) -> None:
    """Make a finished partial folder the clip's result. Files that the user put into the old one are kept."""
    replaced = home.with_name(_REPLACED + home.name)
    if home.exists():
        own = _own_files(home)
        for path in home.iterdir():
            if path.name not in own and not (partial / path.name).exists():
                if path.is_dir():
                    shutil.copytree(path, partial / path.name, symlinks=True)
                else:
                    shutil.copy2(path, partial / path.name, follow_symlinks=False)
        home.rename(replaced)
    partial.rename(home)
    tables.sync_folder(home.parent)
    shutil.rmtree(replaced, ignore_errors=True)


def _existing_results(folder: Path) -> dict[str, str]:
    """Source by name of each folder in OUT/clips; empty where the folder is not a result of ours."""
    sources = {}
    for path in sorted(folder.iterdir()):
        if path.name.startswith((_PARTIAL, _REPLACED)):
            continue
        try:
            sources[path.name] = tables.read_stamp(path, verify=False)["source"]
        except ResultError:
            # A damaged result may be written over; a folder with anything else in it may not.
            if not path.is_dir() or {item.name for item in path.iterdir()} - _own_files(path):
                sources[path.name] = ""
    return sources


# ------------------------------------------------------------------------------------------------------ one clip's work

@dataclass(frozen=True)
class _Job:
    """All that a worker needs to measure one clip."""

    label: str
    path: Path
    partial: Path
    settings: MeasureSettings


@dataclass(frozen=True)
class _Started:
    pass


@dataclass(frozen=True)
class _Fraction:
    done: float


@dataclass(frozen=True)
class _BrokeDown:
    pass


@dataclass(frozen=True)
class _Finished:
    """How a clip's work ended: graded (no reason), failed for a reason, or OUT could not be written (`out_error`)."""

    reason: str | None = None
    out_error: str | None = None
    detail: str | None = None
    seconds: float | None = None


def _work(job: _Job, measure: Measure, plot: Plot, progress: Progress) -> _Finished:
    """Measure one clip and write its result into the job's partial folder. Raises nothing."""
    started = time.perf_counter()
    modified_ns = _size_and_time(job.path)[1]
    try:
        # Before measuring: if the clip changes meanwhile, the next run sees another fingerprint.
        seen = {**fingerprint(job.path), "modified_ns": modified_ns}
    except OSError:
        seen = {}  # measuring will say what is wrong with the file
    try:
        relevant = touching(job.settings, job.path)
        record = tables.named(measure(job.path, job.settings, progress), job.label)
    except FootageError as error:
        return _Finished(reason=error.cause, seconds=time.perf_counter() - started)
    except MemoryError:
        return _Finished(reason="there was not enough memory to measure it", detail=traceback.format_exc())
    except Exception as error:
        # A fault of this program must fail one clip, not the shoot. The details go to run.json.
        cause = f"{type(error).__name__}: {error}" if str(error) else type(error).__name__
        return _Finished(reason=f"measuring failed by a fault of framegrade ({displayable(cause)})",
                         detail=traceback.format_exc(), seconds=time.perf_counter() - started)
    try:
        shutil.rmtree(job.partial, ignore_errors=True)
        job.partial.mkdir(parents=True)
        files = tables.write_tables(record, job.partial)
        try:
            files += plot(record, job.partial)
        except OSError:
            raise
        except Exception as error:
            # The measurement stands without its pictures.
            note = f"The plots could not be drawn ({type(error).__name__}: {displayable(error)})."
            record = dataclasses.replace(record, notes=(*record.notes, note))
            for path in set(job.partial.iterdir()) - set(files):
                path.unlink()
        seconds = time.perf_counter() - started
        tables.seal_take(record, job.partial, files, {
            "version": __version__, "source": os.path.abspath(job.path), "fingerprint": seen, "settings": relevant,
            "measured_s": round(seconds, 3),
        })
        _sync_files(job.partial)
    except OSError as error:
        return _Finished(out_error=_out_sentence(error), seconds=time.perf_counter() - started)
    except Exception as error:
        return _Finished(reason=f"its result could not be written ({type(error).__name__}: {displayable(error)})",
                         detail=traceback.format_exc(), seconds=time.perf_counter() - started)
    return _Finished(seconds=seconds)


def _out_sentence(error: OSError) -> str:
    if error.errno in _NO_ROOM:
        return "no room is left in the results folder"
    return f"the results folder cannot be written ({error.strerror or error})"


_Events = Iterator[tuple[_Job, "_Started | _Fraction | _BrokeDown | _Finished"]]


def _inline(jobs: Iterable[_Job], measure: Measure, plot: Plot) -> _Events:
    """Do the work in this process, one clip after another."""
    for job in jobs:
        yield job, _Started()
        yield job, _work(job, measure, plot, lambda done: None)


# ------------------------------------------------------------------------------------------- work in other processes

class _Worker:
    """A process that measures clips one at a time. A pool of one each, rather than one pool of many: when a process
    dies it is certain whose clip it held, and the system tells what it died of."""

    def __init__(self, measure: Measure, plot: Plot, threads: int) -> None:
        context = multiprocessing.get_context("spawn")  # a fork would copy the locks of decoder threads, held
        self.connection, other_end = context.Pipe()
        self.process = context.Process(target=_serve, args=(other_end, measure, plot), daemon=True)
        with _thread_share(threads):
            self.process.start()
        other_end.close()  # so that the worker's death closes the pipe

    def stop(self) -> None:
        self.process.kill()
        self.process.join()
        self.connection.close()

    def cause_of_death(self) -> str:
        self.process.join()
        return _cause_of_death(self.process.exitcode)


def _cause_of_death(exit_code: int | None) -> str:
    """Why a worker ended, from its exit status: the negative number of a signal, or what it exited with itself."""
    code = exit_code or 0
    if code == -9:
        return "the process that measured it was killed, most likely because the machine ran out of memory"
    if code < 0:
        return f"the process that measured it crashed ({signal.strsignal(-code) or f'signal {-code}'})"
    return f"the process that measured it ended early (exit status {code})"


@contextlib.contextmanager
def _thread_share(threads: int) -> Iterator[None]:
    """Have numerical libraries in a process started meanwhile use no more threads than its share of the cores. They
    read this once, when they are loaded; left to themselves each takes all cores, and several workers spend a good
    part of their time waiting for each other. What the user has set stays."""
    names = [name for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS") if name not in os.environ]
    os.environ.update(dict.fromkeys(names, str(threads)))
    try:
        yield
    finally:
        for name in names:
            del os.environ[name]


def _serve(connection: Connection, measure: Measure, plot: Plot) -> None:
    """A worker's life: take jobs, tell how far each is, until the main process closes the pipe or dies."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C reaches the whole group; the main process decides
    with contextlib.suppress(OSError):
        os.dup2(2, 1)  # standard output belongs to the result, whatever a library prints
    while True:
        try:
            job: _Job = connection.recv()
            connection.send(_work(job, measure, plot, _sender(connection)))
        except (EOFError, OSError):
            return


def _sender(connection: Connection) -> Progress:
    last = -math.inf

    def send(done: float) -> None:
        nonlocal last
        now = time.monotonic()
        if now - last < 0.1:  # ten times a second is as often as anyone looks
            return
        last = now
        try:
            connection.send(_Fraction(min(max(float(done), 0.0), 1.0)))
        except OSError:
            os._exit(1)  # the main process is gone, and with it the reason to go on

    return send


def _isolated(jobs: Iterable[_Job], workers: int, measure: Measure, plot: Plot) -> _Events:
    """Do the work in `workers` processes. A clip whose process dies is tried once more, alone, after all others: if
    memory ran out, the system may have killed the wrong one, or there may be enough for one."""
    waiting, broken = deque(jobs), deque()
    last_try = False
    idle: list[_Worker] = []
    busy: dict[Connection, tuple[_Worker, _Job]] = {}
    try:
        while waiting or busy or broken:
            if not waiting and not busy:
                waiting, broken, last_try, workers = broken, deque(), True, 1
                while idle:
                    idle.pop().stop()
            while waiting and len(busy) < workers:
                worker = idle.pop() if idle else _Worker(measure, plot, waiting[0].settings.threads)
                try:
                    worker.connection.send(waiting[0])
                except OSError:  # died while idle: no clip's fault
                    worker.stop()
                    continue
                job = waiting.popleft()
                busy[worker.connection] = worker, job
                yield job, _Started()
            for connection in wait(list(busy)):
                worker, job = busy[connection]
                try:
                    event = connection.recv()
                except (EOFError, OSError):
                    del busy[connection]
                    cause = worker.cause_of_death()
                    worker.stop()
                    if last_try:
                        yield job, _Finished(reason=cause)
                    else:
                        broken.append(job)
                        yield job, _BrokeDown()
                    continue
                if isinstance(event, _Finished):
                    del busy[connection]
                    idle.append(worker)
                yield job, event
    finally:
        for worker in [*idle, *(worker for worker, _ in busy.values())]:
            worker.stop()


# ------------------------------------------------------------------------------------------------------------ the run

_NOT_YET = "not measured: the run ended before this clip"


class _Run:
    """The state of one run: its clips, and what is known of each. Everything is written from here."""

    def __init__(self, out: Path, clips: list[_Clip], settings: MeasureSettings, described: dict[str, Any],
                 watcher: Watcher) -> None:
        self.out, self.clips, self.settings, self.described, self.watcher = out, clips, settings, described, watcher
        self.started = datetime.datetime.now(datetime.UTC)
        self.clock = time.perf_counter()
        self.saved_at = self.save_cost = -math.inf
        for clip in clips:
            if clip.error is not None:
                clip.row = tables.failed_row(clip.label, clip.error)

    # -- before measuring

    def assign_folders(self) -> None:
        """Give every clip its folder name."""
        folder = self.out / CLIPS_FOLDER
        clips = [clip for clip in self.clips if clip.error is None]
        existing = self._with_moved(_existing_results(folder), clips)
        for clip, name in zip(clips, folder_names([clip.source for clip in clips], existing), strict=True):
            clip.folder = name

    def _with_moved(self, existing: dict[str, str], clips: list[_Clip]) -> dict[str, str]:
        """Hand the result of a clip that is gone from its place to the clip of the same name and content elsewhere: a
        card that is mounted under another name must not be measured again."""
        known = set(existing.values())
        current = {clip.source for clip in clips}
        moved = dict(existing)
        for clip in clips:
            if clip.source in known:
                continue
            for name, source in existing.items():
                if (source and moved[name] == source and source not in current and not os.path.lexists(source)
                        and safe_name(Path(source).stem) == safe_name(clip.path.stem)):
                    with contextlib.suppress(OSError, ResultError):
                        stamp = tables.read_stamp(self.out / CLIPS_FOLDER / name, verify=False)
                        if self._same_content(stamp, clip):
                            moved[name] = clip.source
                            break
        return moved

    @staticmethod
    def _same_content(stamp: Mapping[str, Any], clip: _Clip) -> bool:
        seen = stamp["fingerprint"]
        if seen.get("size_bytes") != clip.size_bytes:
            return False
        return {key: seen.get(key) for key in ("size_bytes", "digest")} == fingerprint(clip.path)

    def keep_unchanged(self) -> None:
        """Take up the results that still hold."""
        for clip in self.clips:
            if clip.row is not None:
                continue
            try:
                stamp = tables.read_stamp(self.out / CLIPS_FOLDER / clip.folder)
                if (stamp["version"] != __version__ or not self._same_content(stamp, clip)
                        or stamp["settings"] != touching(self.settings, clip.path)):
                    continue
                self._take_up(clip)
                if stamp["source"] != clip.source or stamp["take"]["clip"] != clip.label:
                    self._rename(clip)
            except (ResultError, FootageError, OSError):
                # Missing, damaged or unreadable, or no room to rename it: measuring finds out and tells.
                clip.row, clip.stamp, clip.tables = None, {}, {}
                continue
            clip.kept = True
            self.watcher.kept(clip.row)

    def _take_up(self, clip: _Clip) -> None:
        """Read a finished result into the run."""
        folder = self.out / CLIPS_FOLDER / clip.folder
        clip.stamp = tables.read_stamp(folder, verify=False)
        clip.tables = {name: tables.read_csv(folder / f"{name}.csv").assign(clip=clip.label)
                       for name in tables.GATHERED_TABLES}
        clip.row = {**clip.stamp["take"], "clip": clip.label}

    def _rename(self, clip: _Clip) -> None:
        """Write the clip's present name and place into its result. A crash between the files leaves a mismatch, which
        the next run notices."""
        folder = self.out / CLIPS_FOLDER / clip.folder
        for name, table in clip.tables.items():
            tables.write_atomically(folder / f"{name}.csv", tables.csv_text(table, *tables.CLIP_TABLES[name]))
            clip.stamp["files"][f"{name}.csv"] = tables.file_seal(folder / f"{name}.csv")
        clip.stamp["source"] = clip.source
        clip.stamp["take"]["clip"] = clip.label
        tables.write_atomically(folder / tables.TAKE_FILE, tables.json_text(clip.stamp))

    def work(self) -> list[_Job]:
        """What is left to measure, largest clip first: so the last minutes are not one long clip on one core."""
        left = sorted((clip for clip in self.clips if clip.row is None), key=lambda clip: -(clip.size_bytes or 0))
        folder = self.out / CLIPS_FOLDER
        # The process number keeps a worker that outlives a killed run away from the next run's folders.
        return [_Job(clip.label, clip.path, folder / f"{_PARTIAL}{os.getpid()}-{clip.folder}", self.settings)
                for clip in left]

    # -- measuring

    def carry_out(self, events: _Events) -> GradeRun:
        """Follow the work to its end, whichever that is, and leave the tables written."""
        by_label = {clip.label: clip for clip in self.clips}
        stopped = self._attempt(lambda: self._save("running"))
        try:
            for job, event in () if stopped else events:
                clip = by_label[job.label]
                if isinstance(event, _Started):
                    self.watcher.start(clip.label)
                elif isinstance(event, _Fraction):
                    self.watcher.fraction(clip.label, event.done)
                elif isinstance(event, _BrokeDown):
                    self.watcher.again(clip.label)
                else:
                    stopped = event.out_error or self._attempt(lambda c=clip, j=job, e=event: self._settle(c, j, e))
                    if stopped:
                        break
        except KeyboardInterrupt:
            events.close()  # ends the workers, so that they write no more
            raise Interrupted(self._conclude("interrupted")) from None
        finally:
            events.close()
        return self._conclude("stopped" if stopped else "complete", stopped)

    @staticmethod
    def _attempt(write: Callable[[], Any]) -> str | None:
        """Write to the results folder; the sentence if that fails."""
        try:
            write()
        except OSError as error:
            return _out_sentence(error)
        return None

    def _settle(self, clip: _Clip, job: _Job, event: _Finished) -> None:
        if event.reason is None:
            try:
                _put_in_place(job.partial, self.out / CLIPS_FOLDER / clip.folder)
                self._take_up(clip)
            except ResultError as error:
                event = dataclasses.replace(event, reason=str(error))
        if event.reason is not None:
            clip.row = tables.failed_row(clip.label, event.reason)
            clip.detail = event.detail
            shutil.rmtree(job.partial, ignore_errors=True)
        self.watcher.end(clip.row, event.seconds)
        if time.perf_counter() - self.saved_at > 10 * self.save_cost:
            self._save("running")  # each clip, but never more than a tenth of the time

    # -- writing

    def _conclude(self, state: str, stopped_because: str | None = None) -> GradeRun:
        _tidy(self.out / CLIPS_FOLDER)  # makes room, if that is what lacks
        try:
            return self._save(state, stopped_because)
        except OSError as error:
            # The results of the clips are safe; only the tables over them are those of a moment ago.
            return self._build("stopped", stopped_because or _out_sentence(error))

    def _save(self, state: str, stopped_because: str | None = None) -> GradeRun:
        begun = time.perf_counter()
        run = self._build(state, stopped_because)
        gathered = {name: getattr(run, name) for name in ("takes", *tables.GATHERED_TABLES)}
        tables.write_run(self.out, gathered, run.run)
        self.saved_at = time.perf_counter()
        self.save_cost = self.saved_at - begun
        return run

    def _build(self, state: str, stopped_because: str | None) -> GradeRun:
        pending = _NOT_YET if stopped_because is None else f"not measured: {stopped_because}"
        rows = [clip.row or tables.failed_row(clip.label, pending) for clip in self.clips]
        by_label = {clip.label: clip for clip in self.clips}
        gathered = tables.gather(rows, {clip.label: clip.tables for clip in self.clips if clip.tables})
        graded = [row for row in rows if row["status"] == "graded"]
        now = datetime.datetime.now(datetime.UTC)
        run = {
            "schema": tables.SCHEMA, "program": tables.PROGRAM, "version": __version__,
            "state": state, "stopped_because": stopped_because,
            "started": self.started.isoformat(timespec="seconds"), "written": now.isoformat(timespec="seconds"),
            "elapsed_s": round(time.perf_counter() - self.clock, 3),
            "settings": self.described,
            "counts": {
                "clips": len(rows), "graded": len(graded), "failed": len(rows) - len(graded),
                "measured": sum(clip.row is not None and not clip.kept and clip.error is None for clip in self.clips),
                "kept": sum(clip.kept for clip in self.clips),
                "not_measured": sum(clip.row is None for clip in self.clips),
            },
            "clips": [self._entry(by_label[label]) for label in gathered["takes"]["clip"]],
        }
        return GradeRun(out=self.out, run=tables.plain(run), **gathered)

    @staticmethod
    def _entry(clip: _Clip) -> dict[str, Any]:
        graded = clip.row is not None and clip.row["status"] == "graded"
        modified = None
        if clip.modified_ns is not None:
            modified = datetime.datetime.fromtimestamp(clip.modified_ns // 10**9, datetime.UTC).isoformat()
        return {
            "clip": clip.label, "status": "graded" if graded else "failed",
            "folder": f"{CLIPS_FOLDER}/{clip.folder}" if graded else None,
            "source": clip.source, "size_bytes": clip.size_bytes, "modified": modified, "modified_ns": clip.modified_ns,
            "digest": clip.stamp.get("fingerprint", {}).get("digest"),
            "measured_s": clip.stamp.get("measured_s"), "kept": clip.kept,
            "notes": clip.stamp.get("notes", []) if graded else [],
            "reason": None if graded or clip.row is None else clip.row["reason"], "detail": clip.detail,
        }
