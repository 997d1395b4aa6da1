"""The pipeline and its tables: what is written, what is read back, what is measured again, what goes wrong.

Clips are small texts that a fake measurement obeys (`fake_take`), so that nothing here waits for pictures.
"""

from __future__ import annotations

import csv
import dataclasses
import io
import json
import math
import multiprocessing
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import fake_take
import numpy as np
import pandas as pd
import pytest
from fake_take import clip_text, make_record

import framegrade
from framegrade import pipeline, records
from framegrade.footage import FootageError
from framegrade.grading import load_limits
from framegrade.pipeline import Interrupted, NoRoomError, UsageError, folder_names, safe_name
from framegrade.report import tables
from framegrade.report.tables import ResultError


@pytest.fixture
def card(tmp_path):
    """A folder to put clips into: `card("day1/a.mp4", grade="keep")`."""
    folder = tmp_path / "card"
    folder.mkdir()

    def put(name, **lines):
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(clip_text(**lines), encoding="utf-8")
        return path

    put.folder = folder
    put.out = tmp_path / "graded"
    return put


@pytest.fixture
def measured(tmp_path, monkeypatch):
    """Names of the clips measured since the last call."""
    log = tmp_path / "measured.log"
    log.touch()
    monkeypatch.setenv(fake_take.LOG, str(log))

    def names():
        found = sorted(log.read_text(encoding="utf-8").splitlines())
        log.write_text("")
        return found

    return names


def grade_all(*paths, out, isolate=False, measure=fake_take.measure, plot=fake_take.plot, **options):
    return pipeline.grade_all(paths, out, isolate=isolate, measure=measure, plot=plot, **options)


# ----------------------------------------------------------------------------------------------------- cells and CSV

HOSTILE = ["=1+1", "+1", "-take1.mp4", "@cmd", "\t=1", "\r=1", "\n=1", " =1", "'=1", "''-x", "'plain", "plain", "",
           'say "hi", twice', "semi;=1+1", "tab\tinside", "two\nlines", "cr\ronly", "crlf\r\nboth", " edges ", "NA",
           "nan", "null", "007", "1e5", "true", "ünïcödé-映像.mp4", "＝1", "None", "#x"]


def test_csv_is_rfc_4180_and_inert_to_spreadsheets():
    """Read back by Python's csv module, an independent reader of RFC 4180. The characters that start a formula are
    those of OWASP's page "CSV Injection" (from memory: = + - @, tab, CR, LF and the full-width forms)."""
    table = pd.DataFrame({"clip": HOSTILE, "score": [-1.5] * len(HOSTILE)})
    rows = list(csv.reader(io.StringIO(tables.csv_text(table, ["clip", "score"]), newline="")))
    assert rows[0] == ["clip", "score"]
    assert len(rows) == len(HOSTILE) + 1
    for text, (cell, score) in zip(HOSTILE, rows[1:], strict=True):
        assert not cell.lstrip(" ").startswith(tuple("=+-@\t\r\n＝＋－＠"))
        assert tables.unguard_formula(cell) == text
        assert score == "-1.5"  # a number stays a number: no quote before its sign


def test_text_cells_come_back_as_written(tmp_path):
    written = [text for text in HOSTILE if text]  # an empty text is an empty cell, and read as missing
    path = tmp_path / "t.csv"
    table = pd.DataFrame({"clip": written, "score": np.arange(len(written)) / 3})
    path.write_text(tables.csv_text(table, ["clip", "score"]), encoding="utf-8", newline="")
    back = tables.read_csv(path)
    assert back["clip"].tolist() == written
    np.testing.assert_allclose(back["score"], table["score"], rtol=5e-5)


def test_semicolon_cells_are_quoted_for_spreadsheets_that_split_there():
    assert tables.csv_text(pd.DataFrame({"clip": ["a;=1"]}), ["clip"]) == 'clip\n"a;=1"\n'


def test_unknown_is_empty_and_never_zero():
    table = pd.DataFrame({"clip": ["a", None], "score": [np.nan, 0.0], "usable": [True, False]})
    assert tables.csv_text(table, ["clip", "score", "usable"]) == "clip,score,usable\na,,true\n,0,false\n"


@pytest.mark.parametrize(("value", "column", "text"), [
    (60000 / 1001, "frame_rate_hz", "59.94006"), (599.98333333333, "time_s", "599.983333"), (0.1 + 0.2, "x", "0.3"),
    (1234567.0, "frame", "1234567"), (0.123456789, "jello_px1920", "0.12346"), (-0.0, "x", "0"),
    (1920.0, "width_px", "1920"), (7, "frame", "7"), (np.float32(0.1), "x", "0.1"), (np.int64(3), "x", "3"),
    (math.inf, "x", "inf"),
])
def test_figures_have_sensible_digits(value, column, text):
    assert tables.csv_text(pd.DataFrame({column: [value]}), [column]).splitlines()[1] == text


def test_a_missing_promised_column_is_an_error_not_an_empty_column():
    with pytest.raises(ValueError, match="score"):
        tables.csv_text(pd.DataFrame({"clip": ["a"]}), ["clip", "score"])


def test_displayable_leaves_nothing_that_moves_a_cursor_or_reverses_text():
    shown = tables.displayable("a\nb\x1b[2Jc\u202egnp.exe\u2028映")
    assert shown == r"a\nb\x1b[2Jc\u202egnp.exe\u2028映"
    assert shown.isprintable()


def test_json_has_no_nan_and_keeps_undecodable_paths():
    value = {"x": np.float64("nan"), "y": [np.int64(3), np.bool_(True)], "path": Path(os.fsdecode(b"a\xff.mp4"))}
    text = tables.json_text(value)
    back = json.loads(text.encode("utf-8"), parse_constant=lambda word: pytest.fail(f"{word} is no JSON"))
    assert back["x"] is None and back["y"] == [3, True]
    assert os.fsencode(back["path"]) == b"a\xff.mp4"


def test_natural_order():
    names = ["take10.mp4", "take9.mp4", "Take1.mp4", "a/2.mp4", "a/10.mp4"]
    assert sorted(names, key=tables.natural_key) == ["a/2.mp4", "a/10.mp4", "Take1.mp4", "take9.mp4", "take10.mp4"]


# -------------------------------------------------------------------------------------------------- takes, to and fro

def same_table(back: pd.DataFrame, written: pd.DataFrame, rtol: float) -> None:
    assert list(back.columns) == list(written.columns)
    for column in written.columns:
        if written[column].dtype == float:
            # Times keep a microsecond, everything else its digits.
            np.testing.assert_allclose(back[column].astype(float), written[column], rtol=rtol, atol=5.1e-7)
        else:
            assert back[column].tolist() == written[column].tolist()


@pytest.mark.parametrize("rows", [3, 0])
def test_a_take_comes_back_as_written(card, rows):
    notes = ("Two frames, 17 and 18, repeat.", 'A "quoted"\nnote')
    record = make_record("clip.mp4", rows=rows, notes=notes, extra={"a": {"b": [1, None, 2.5]}}, reason="=jello")
    card("clip.mp4")
    out = card.out
    grade_all(card.folder, out=out, measure=lambda *a: record)
    back = tables.load_take(out / "clips" / "clip")
    for column in records.TAKE_COLUMNS:
        value, expected = back.take[column], record.take[column]
        if isinstance(expected, float):
            assert value == pytest.approx(expected, rel=5e-5, nan_ok=True)
        else:
            assert value == expected
    for name, (_, digits) in tables.CLIP_TABLES.items():
        same_table(getattr(back, name), getattr(record, name), rtol=0.51 * 10.0 ** (1 - digits))
    np.testing.assert_allclose(back.wobble_px, record.wobble_px, rtol=1e-6)
    np.testing.assert_array_equal(back.wobble_time_s, record.wobble_time_s)
    assert back.notes == notes and back.extra == record.extra


def test_load_run_equals_what_grade_all_returned(card):
    card("good.mp4", grade="keep", score=88)
    card("bad.mp4", fail="the file is empty")
    run = grade_all(card.folder, out=card.out)
    back = tables.load_run(card.out)
    assert back.run == run.run
    for name in ("takes", *tables.GATHERED_TABLES):
        written, read = getattr(run, name), getattr(back, name)
        assert written.shape == read.shape
        for column in written.columns:
            if column in tables.TEXT_COLUMNS:
                assert [None if tables.is_unknown(v) else v for v in written[column]] == \
                    [None if tables.is_unknown(v) else v for v in read[column]]
            else:
                np.testing.assert_allclose(read[column].astype(float), written[column].astype(float), rtol=1e-9)
    assert back.graded == ("good.mp4",) and back.failed == {"bad.mp4": "the file is empty"}
    assert back.record("good.mp4").take["score"] == 88
    assert [record.take["clip"] for record in back.records()] == ["good.mp4"]
    with pytest.raises(KeyError):
        back.record("bad.mp4")


def test_load_run_names_the_cause_when_there_is_nothing_to_load(tmp_path):
    with pytest.raises(ResultError, match="nowhere is not a folder"):
        tables.load_run(tmp_path / "nowhere")
    with pytest.raises(ResultError, match=r"run\.json is missing"):
        tables.load_run(tmp_path)
    (tmp_path / "run.json").write_text('{"program": "other"}')
    with pytest.raises(ResultError, match="not written by framegrade"):
        tables.load_run(tmp_path)
    (tmp_path / "run.json").write_text('{"program": "framegrade", "schema": 99}')
    with pytest.raises(ResultError, match="layout 99"):
        tables.load_run(tmp_path)


def test_promised_files_columns_and_order(card):
    """The promise of section 6 of the design: files, columns, rank."""
    for name, grade, score in [("a", "reshoot", 3), ("b", "keep", 71), ("c", "stabilise", 99), ("d", "keep", 90)]:
        card(f"{name}.mp4", grade=grade, score=score)
    card("0.mp4", fail="there is no picture in it")
    grade_all(card.folder, out=card.out)
    with (card.out / "takes.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert tuple(rows[0]) == records.TAKE_COLUMNS
    assert [row["clip"] for row in rows] == ["d.mp4", "b.mp4", "c.mp4", "a.mp4", "0.mp4"]
    failed = rows[-1]
    assert (failed.pop("clip"), failed.pop("status"), failed.pop("reason")) == \
        ("0.mp4", "failed", "there is no picture in it")
    assert set(failed.values()) == {""}
    for name, columns in [("tones", records.TONE_COLUMNS), ("spectrum", records.SPECTRUM_COLUMNS),
                          ("ranges", records.RANGE_COLUMNS)]:
        lines = (card.out / f"{name}.csv").read_text(encoding="utf-8").splitlines()
        assert lines[0] == ",".join(columns)
        assert [line.split(",")[0] for line in lines[1::3]] == ["d.mp4", "b.mp4", "c.mp4", "a.mp4"]
    assert {path.name for path in (card.out / "clips" / "d").iterdir()} == {
        "motion.csv", "windows.csv", "tones.csv", "spectrum.csv", "ranges.csv", "density.csv", "wobble.npz",
        "take.json", "motion.png", "spectrum.png", "wobble.png"}
    run = json.loads((card.out / "run.json").read_text(encoding="utf-8"))
    assert run["schema"] == 1 and run["version"] == framegrade.__version__ and run["state"] == "complete"
    assert run["counts"] == {"clips": 5, "graded": 4, "failed": 1, "measured": 5, "kept": 0, "not_measured": 0}
    entry = run["clips"][0]
    status = (card.folder / "d.mp4").stat()
    assert (entry["size_bytes"], entry["modified_ns"]) == (status.st_size, status.st_mtime_ns)
    assert entry["measured_s"] > 0 and entry["source"] == str(card.folder / "d.mp4")


# ---------------------------------------------------------------------------------------------------- hostile names

def test_hostile_names_keep_apart_and_are_told_truly(card):
    names = ["two words.mp4", "it's \"quoted\".mp4", "-rf.mp4", "映像é.mp4", "line\nbreak.mp4", "=1+1.mp4",
             "%03d.mp4", "..hidden..mp4", "CON.mp4", "[bold]x.mp4", "a/same.mp4", "b/same.mp4", "x" * 200 + ".mp4"]
    for score, name in enumerate(names):
        card(name, score=score)
    paths = [card.folder / name for name in names]
    run = grade_all(card.folder, *paths, out=card.out)
    assert not run.failed
    assert sorted(run.graded) == sorted(names)
    folders = [run.folder(name) for name in names]
    assert len(set(folders)) == len(names)
    for folder in folders:
        assert folder.parent == card.out / "clips" and folder.name.isprintable()
        assert not folder.name.startswith((".", "-")) and " " not in folder.name and len(folder.name) <= 130
    back = tables.load_run(card.out)
    assert sorted(back.takes["clip"]) == sorted(names)
    for score, name in enumerate(names):
        assert back.record(name).take["score"] == score
        assert set(back.record(name).tones["clip"]) == {name}


def test_undecodable_names_are_spelt_out(card):
    path = card.folder / os.fsdecode(b"caf\xe9.mp4")
    try:
        path.write_text(clip_text(score=7))
    except OSError:
        pytest.skip("this file system takes only UTF-8 names")
    run = grade_all(card.folder, out=card.out)
    assert run.graded == (r"caf\xe9.mp4",)
    assert tables.load_run(card.out).record(r"caf\xe9.mp4").take["score"] == 7
    assert json.loads((card.out / "run.json").read_text())["clips"][0]["source"] == str(path)


@pytest.mark.parametrize(("stem", "name"), [
    ("take 1", "take_1"), ("../../etc", "etc"), ("a/b", "a_b"), ("...", "clip"), ("", "clip"), ("-x", "x"),
    ("nul", "clip_nul"),
    ("com1.raw", "clip_com1.raw"), ("映像", "映像"), ("cafe\u0301", "caf\u00e9"), ("a\nb\x1b", "a_b"),
])
def test_safe_name(stem, name):
    assert safe_name(stem) == name


def test_folder_names_do_not_depend_on_the_company():
    a, b, c = "/card/day1/x.mp4", "/card/day2/x.mp4", "/card/day2/y.mp4"
    alone = folder_names([a], {})
    assert alone == ["x"]
    assert folder_names([b, a, c], {"x": a}) == ["x-day2", "x", "y"]
    assert folder_names([b], {"x": a, "x-day2": b}) == ["x-day2"]
    both = folder_names([a, b, c], {})
    assert both == ["x-day1", "x-day2", "y"]
    assert folder_names([c, b, a], {}) == both[::-1]


def test_folder_names_differ_where_case_does_not_count_and_parents_agree():
    sources = ["/one/cam/X.mp4", "/two/cam/x.mp4", "/two/cam/x.mov"]
    names = folder_names(sources, {"other": ""})
    assert len({name.casefold() for name in names}) == 3
    assert folder_names(["/card/other.mp4"], {"other": ""}) == ["other-card"]
    assert folder_names(sources, dict(zip(names, sources, strict=True))) == names


def test_clips_are_named_below_what_the_user_named(card, monkeypatch):
    card("day1/a.mp4")
    assert grade_all(card.folder, out=card.out).graded == ("day1/a.mp4",)
    assert grade_all(card.folder / "day1", out=card.out).graded == ("a.mp4",)
    assert grade_all(card.folder / "day1" / "a.mp4", out=card.out).graded == ("a.mp4",)
    assert grade_all(card.folder / "day*" / "*.mp4", out=card.out).graded == ("day1/a.mp4",)
    monkeypatch.chdir(card.folder)
    assert grade_all("day1", out="../graded").graded == ("a.mp4",)
    card("day2/b.mp4", grade="reshoot")
    assert grade_all("day1", "day2/b.mp4", out="../graded").graded == ("day1/a.mp4", "day2/b.mp4")
    assert tables.load_take(card.out / "clips" / "a").take["clip"] == "day1/a.mp4"


# --------------------------------------------------------------------------------------------------- what is searched

def test_out_inside_the_input_is_not_searched(card, measured):
    card("a.mp4")
    out = card.folder / "graded"
    grade_all(card.folder, out=out)
    (out / "clips" / "a" / "cut.mp4").write_text(clip_text())
    other = card.folder / "earlier"
    grade_all(card.folder / "a.mp4", out=other)
    (other / "clips" / "old.mp4").write_text(clip_text())
    measured()
    assert grade_all(card.folder, out=out).graded == ("a.mp4",)
    assert measured() == []
    # Named outright it is a clip like any other.
    assert grade_all(other / "clips" / "old.mp4", out=out).graded == ("old.mp4",)


def test_results_above_the_clips_do_not_hide_them(card):
    card("a.mp4")
    out = card.folder.parent
    grade_all(card.folder, out=out)
    assert grade_all(card.folder, out=out).graded == ("a.mp4",)
    assert grade_all(str(card.folder / "*.mp4"), out=out).graded == ("a.mp4",)


def test_wrong_out_is_told_in_one_sentence(card, tmp_path):
    clip = card("a.mp4")
    with pytest.raises(UsageError, match="both searched for clips and named for the results"):
        grade_all(card.folder, out=card.folder)
    with pytest.raises(UsageError, match="is a file; name a folder"):
        grade_all(clip, out=clip)
    with pytest.raises(UsageError, match="cannot be used as the results folder: Not a directory"):
        grade_all(clip, out=clip / "below")
    taken = tmp_path / "taken"
    taken.mkdir()
    (taken / "takes.csv").write_text("mine")
    with pytest.raises(UsageError, match=r"takes\.csv that framegrade did not write"):
        grade_all(clip, out=taken)
    assert (taken / "takes.csv").read_text() == "mine"


def test_out_that_cannot_be_written(card, monkeypatch):
    """Root may write anywhere, so the refusal is put in where the lock is opened."""
    clip = card("a.mp4")
    real = os.open

    def refuse(path, *rest, **options):
        if str(path).endswith(pipeline.LOCK_FILE):
            raise PermissionError(13, "Permission denied", str(path))
        return real(path, *rest, **options)

    monkeypatch.setattr(os, "open", refuse)
    with pytest.raises(UsageError, match="cannot be used as the results folder: Permission denied"):
        grade_all(clip, out=card.out)


def test_missing_path_and_empty_folder_fail_beside_the_clips_that_are_there(card):
    card("a.mp4")
    empty = card.folder.parent / "empty"
    empty.mkdir()
    missing = card.folder / "missing.mp4"
    run = grade_all(missing, card.folder, empty, out=card.out)
    assert run.graded == ("a.mp4",)
    assert run.failed == {str(missing): "there is no such file or folder", str(empty): "the folder holds no clip"}


def test_no_clip_at_all_is_wrong_use_and_makes_nothing(card):
    with pytest.raises(UsageError, match="no clip was found: .*missing.mp4.*no such file"):
        grade_all(card.folder / "missing.mp4", out=card.out)
    with pytest.raises(UsageError, match="holds no clip"):
        grade_all(card.folder, out=card.out)
    with pytest.raises(UsageError, match="no clip is named"):
        grade_all(out=card.out)
    assert not card.out.exists()


def test_unreadable_clip_fails_alone(card):
    """Root reads everything, so the unreadable clip is one whose target cannot be reached: a link to itself."""
    card("a.mp4")
    loop = card.folder / "loop.mp4"
    loop.symlink_to(loop)
    run = grade_all(card.folder / "a.mp4", loop, out=card.out)
    assert run.graded == ("a.mp4",)
    assert "Too many levels of symbolic links" in run.failed["loop.mp4"]


@pytest.mark.parametrize(("option", "value", "match"), [
    ("readout_ms", 201, "from 0 to 200 ms, not 201"), ("readout_ms", -1, "readout_ms"),
    ("hfov_deg", 4, "5 to 175 degrees"), ("exposure_ms", math.nan, "not nan"), ("jobs", 0, "1 or more"),
])
def test_figures_outside_their_range_are_wrong_use(card, option, value, match):
    with pytest.raises(UsageError, match=match):
        grade_all(card("a.mp4"), out=card.out, **{option: value})


# -------------------------------------------------------------------------------------------------------------- resume

def test_unchanged_clips_are_skipped_whatever_their_time(card, measured):
    first, second = card("a.mp4", score=80), card("b.mp4", score=70)
    grade_all(card.folder, out=card.out)
    assert measured() == ["a.mp4", "b.mp4"]
    before = {path: path.stat().st_mtime_ns for path in (card.out / "clips").rglob("*")}
    os.utime(first, ns=(1, 1))  # copied from a card: another time, the same clip
    run = grade_all(card.folder, out=card.out)
    assert measured() == []
    assert run.run["counts"]["kept"] == 2 and run.graded == ("a.mp4", "b.mp4")
    assert {path: path.stat().st_mtime_ns for path in (card.out / "clips").rglob("*")} == before
    grade_all(second, out=card.out, force=True)
    assert measured() == ["b.mp4"]


def test_changed_content_is_measured_again_even_with_size_and_time_kept(card, measured):
    clip = card("a.mp4", score=80)
    card("b.mp4")
    grade_all(card.folder, out=card.out)
    measured()
    status = clip.stat()
    card("a.mp4", score=79)
    os.utime(clip, ns=(status.st_atime_ns, status.st_mtime_ns))
    assert clip.stat().st_size == status.st_size
    run = grade_all(card.folder, out=card.out)
    assert measured() == ["a.mp4"]
    assert run.record("a.mp4").take["score"] == 79


def test_fingerprint_sees_the_ends_and_between(tmp_path):
    path = tmp_path / "clip"
    content = bytearray(np.random.default_rng(5).bytes(5_000_000))
    path.write_bytes(content)
    seen = pipeline.fingerprint(path)
    assert seen["size_bytes"] == 5_000_000
    assert seen == pipeline.fingerprint(path)
    for position in (0, 100_000, 4_999_999):
        changed = content.copy()
        changed[position] ^= 1
        path.write_bytes(changed)
        assert pipeline.fingerprint(path) != seen
    half = content[:2_400_000] + np.random.default_rng(6).bytes(200_000) + content[2_600_000:]
    path.write_bytes(half)
    assert pipeline.fingerprint(path) != seen


def test_settings_and_version_are_part_of_the_result(card, measured, monkeypatch):
    clip = card("a.mp4")
    base = {"out": card.out, "readout_ms": 14.0, "hfov_deg": 80.0}
    grade_all(clip, **base)
    measured()
    grade_all(clip, **base, jobs=3, threads=5)  # how the work is shared out is not
    assert measured() == []
    changed = dataclasses.replace(load_limits(None), keep_s=4.5)
    for change in ({"readout_ms": 14.5}, {"hfov_deg": 81.0}, {"exposure_ms": 1.0}, {"limits": changed}):
        run = grade_all(clip, **(base | change))
        assert measured() == ["a.mp4"]
    monkeypatch.setattr(pipeline, "__version__", "0.0.0")
    run = grade_all(clip, **(base | change))
    assert measured() == ["a.mp4"]
    assert run.record("a.mp4").extra["readout_s"] == 0.014


def test_only_the_mode_that_fits_the_clip_counts(card, measured, monkeypatch):
    @dataclasses.dataclass(frozen=True)
    class Mode:
        width_px: int
        readout_s: float

    @dataclasses.dataclass(frozen=True)
    class TwoModes:
        modes: tuple

        def mode_for(self, info):
            return next((mode for mode in self.modes if mode.width_px == info), None)

    monkeypatch.setattr(pipeline, "probe", lambda path: 1280 if path.name == "a.mp4" else 1920)
    card("a.mp4")
    card("b.mp4")
    grade_all(card.folder, out=card.out, camera=TwoModes((Mode(1280, 0.014), Mode(1920, 0.02))))
    measured()
    grade_all(card.folder, out=card.out, camera=TwoModes((Mode(1280, 0.014), Mode(1920, 0.024))))
    assert measured() == ["b.mp4"]


@pytest.mark.parametrize("damage", ["truncate", "flip", "delete", "no take.json", "half a take.json", "other columns"])
def test_a_damaged_result_is_repeated_in_place(card, measured, damage):
    card("a.mp4")
    grade_all(card.folder, out=card.out)
    measured()
    folder = card.out / "clips" / "a"
    motion = folder / "motion.csv"
    if damage == "truncate":
        motion.write_bytes(motion.read_bytes()[:-10])
    elif damage == "flip":
        motion.write_bytes(motion.read_bytes()[:-2] + b"9\n")
    elif damage == "delete":
        motion.unlink()
    elif damage == "no take.json":
        (folder / "take.json").unlink()
    elif damage == "half a take.json":
        (folder / "take.json").write_bytes((folder / "take.json").read_bytes()[:200])
    else:
        stamp = json.loads((folder / "take.json").read_text())
        del stamp["take"]["score"]
        (folder / "take.json").write_text(json.dumps(stamp))
    run = grade_all(card.folder, out=card.out)
    assert measured() == ["a.mp4"]
    assert [path.name for path in (card.out / "clips").iterdir()] == ["a"]
    assert run.record("a.mp4").take["score"] == 91


def test_failed_clips_are_tried_again(card, measured, tmp_path):
    card("a.mp4", fail="the card was pulled out", once=tmp_path / "tried")
    assert grade_all(card.folder, out=card.out).failed == {"a.mp4": "the card was pulled out"}
    assert grade_all(card.folder, out=card.out).graded == ("a.mp4",)
    assert measured() == ["a.mp4", "a.mp4"]


def test_clips_no_longer_named_leave_the_tables_and_keep_their_result(card, measured):
    card("a.mp4", score=80)
    card("b.mp4", score=70)
    grade_all(card.folder, out=card.out)
    run = grade_all(card.folder / "a.mp4", out=card.out)
    assert run.graded == ("a.mp4",) and set(tables.load_run(card.out).tones["clip"]) == {"a.mp4"}
    measured()
    assert grade_all(card.folder, out=card.out).graded == ("a.mp4", "b.mp4")
    assert measured() == []


def test_same_names_in_two_folders_resume_whatever_is_named(card, measured):
    card("day1/x.mp4", score=80)
    card("day2/x.mp4", score=70)
    grade_all(card.folder / "day2", out=card.out)
    assert grade_all(card.folder, out=card.out).graded == ("day1/x.mp4", "day2/x.mp4")
    assert measured() == ["x.mp4", "x.mp4"]
    for again in (card.folder / "day1", card.folder / "day2", card.folder):
        grade_all(again, out=card.out)
    assert measured() == []
    assert tables.load_take(card.out / "clips" / "x").take["score"] == 70


def test_a_card_mounted_elsewhere_is_not_measured_again(card, measured):
    card("a.mp4", score=80)
    grade_all(card.folder, out=card.out)
    moved = card.folder.rename(card.folder.with_name("mounted"))
    measured()
    run = grade_all(moved, out=card.out)
    assert measured() == []
    assert run.run["clips"][0]["source"] == str(moved / "a.mp4")
    # A different clip of that name does not get that result.
    (card.folder).mkdir()
    card("a.mp4", score=10)
    assert grade_all(card.folder, out=card.out).takes.loc[0, "score"] == 10
    assert measured() == ["a.mp4"]


def test_files_the_user_added_survive_a_new_measurement(card):
    card("a.mp4", score=80)
    grade_all(card.folder, out=card.out)
    folder = card.out / "clips" / "a"
    (folder / "remarks.txt").write_text("lovely light")
    (folder / "stills").mkdir()
    (folder / "stills" / "1.txt").write_text("one")
    run = grade_all(card.folder, out=card.out, force=True)
    assert (folder / "remarks.txt").read_text() == "lovely light" and (folder / "stills" / "1.txt").exists()
    assert run.folder("a.mp4") == folder


def test_a_folder_that_is_not_ours_is_not_touched(card):
    card("a.mp4")
    mine = card.out / "clips" / "a"
    mine.mkdir(parents=True)
    (mine / "diary.txt").write_text("dear diary")
    run = grade_all(card.folder, out=card.out)
    assert run.folder("a.mp4").name == "a-card"
    assert [path.name for path in mine.iterdir()] == ["diary.txt"]


def test_leftovers_of_a_killed_run_are_cleared_and_an_earlier_result_restored(card, measured):
    card("a.mp4")
    grade_all(card.folder, out=card.out)
    measured()
    clips = card.out / "clips"
    (clips / ".partial-999-b").mkdir()
    (clips / ".partial-999-b" / "motion.csv").write_text("half")
    (clips / "a").rename(clips / ".replaced-a")  # killed between the two renames of a replacement
    (card.out / ".takes.csv.abc.partial").write_text("half")
    grade_all(card.folder, out=card.out)
    assert measured() == []
    assert sorted(path.name for path in clips.iterdir()) == ["a"]
    assert not list(card.out.glob(".*.partial"))


# ---------------------------------------------------------------------------------------------------- what goes wrong

def test_a_fault_of_the_program_fails_one_clip_and_is_kept_for_us(card):
    card("a.mp4", **{"raise": "shapes [3] and [4]"})
    card("b.mp4")
    run = grade_all(card.folder, out=card.out)
    assert run.graded == ("b.mp4",)
    assert run.failed["a.mp4"] == "measuring failed by a fault of framegrade (ValueError: shapes [3] and [4])"
    assert "Traceback" in run.run["clips"][-1]["detail"]


def test_a_measurement_stands_without_its_plots(card):
    card("a.mp4")
    run = grade_all(card.folder, out=card.out, plot=fake_take.broken_plot)
    assert run.notes == {"a.mp4": ("The plots could not be drawn (ValueError: no such colour).",)}
    assert not (run.folder("a.mp4") / "motion.png").exists()
    assert tables.read_stamp(run.folder("a.mp4"))["take"]["score"] == 91


needs_full_device = pytest.mark.skipif(not os.path.exists("/dev/full"), reason="this system has no /dev/full")


@needs_full_device
def test_no_room_left_stops_and_keeps_what_is_there(card, measured):
    card("a.mp4", padding="x" * 3000)  # the largest is first
    card("big.mp4", padding="x" * 2000)
    card("c.mp4")
    run = grade_all(card.folder, out=card.out, plot=fake_take.full_disk_plot)
    assert measured() == ["a.mp4", "big.mp4"]
    assert run.run["state"] == "stopped" and run.run["stopped_because"] == "no room is left in the results folder"
    assert run.graded == ("a.mp4",)
    assert set(run.failed.values()) == {"not measured: no room is left in the results folder"}
    assert sorted(path.name for path in (card.out / "clips").iterdir()) == ["a"]
    assert tables.load_run(card.out).graded == ("a.mp4",)
    assert grade_all(card.folder, out=card.out).run["state"] == "complete"
    assert measured() == ["big.mp4", "c.mp4"]


def test_no_room_for_the_tables(card, monkeypatch):
    """The table is refused at the last step, as by a disk that is full just then."""
    card("a.mp4")
    grade_all(card.folder, out=card.out)
    before = (card.out / "takes.csv").read_bytes()
    card("b.mp4")
    real = os.replace

    def full(source, target):
        if Path(target).name == "takes.csv":
            raise OSError(28, "No space left on device")
        real(source, target)

    monkeypatch.setattr(os, "replace", full)
    run = grade_all(card.folder, out=card.out)
    assert run.run["state"] == "stopped" and run.graded == ("a.mp4",)
    assert (card.out / "takes.csv").read_bytes() == before
    assert not list(card.out.glob(".*.partial"))


def test_no_room_to_begin(card, monkeypatch):
    def full(self, **options):
        raise OSError(28, "No space left on device")

    clip = card("a.mp4")
    monkeypatch.setattr(Path, "mkdir", full)
    with pytest.raises(NoRoomError, match="no room is left for the results folder"):
        grade_all(clip, out=card.out)


def _hold(out, ready, leave):
    with pipeline._locked(out):
        ready.set()
        leave.wait(20)


def test_two_runs_on_one_folder_and_a_lock_left_behind(card, measured):
    clip = card("a.mp4")
    grade_all(clip, out=card.out)
    context = multiprocessing.get_context("spawn")
    ready, leave = context.Event(), context.Event()
    holder = context.Process(target=_hold, args=(card.out, ready, leave))
    holder.start()
    try:
        assert ready.wait(20)
        with pytest.raises(UsageError, match=f"is being written by process {holder.pid}; wait"):
            grade_all(clip, out=card.out)
    finally:
        holder.kill()
        holder.join()
    # The holder died without a chance to clean up. Its lock went with it.
    assert f"{holder.pid}" in (card.out / pipeline.LOCK_FILE).read_text()
    assert grade_all(clip, out=card.out).graded == ("a.mp4",)


def test_ctrl_c_leaves_the_tables_written(card, measured):
    card("a.mp4", padding="x" * 3000)
    card("b.mp4", padding="x" * 2000, interrupt=1)
    card("c.mp4")
    with pytest.raises(Interrupted) as stop:
        grade_all(card.folder, out=card.out)
    assert stop.value.run.graded == ("a.mp4",)
    back = tables.load_run(card.out)
    assert back.run["state"] == "interrupted"
    assert back.failed == dict.fromkeys(["b.mp4", "c.mp4"], "not measured: the run ended before this clip")
    assert not list((card.out / "clips").glob(".partial*"))


# --------------------------------------------------------------------------------------------------- worker processes

def test_a_crash_takes_one_clip_with_it(card, measured, tmp_path):
    """One that always dies and one that dies once, among clips that do nothing wrong; real processes and signals."""
    card("segfault.mp4", signal=int(signal.SIGSEGV), padding="x" * 900)
    card("once.mp4", signal=int(signal.SIGKILL), once=tmp_path / "tried", padding="x" * 600)
    for number in range(4):
        card(f"good{number}.mp4", score=90 - number)
    run = grade_all(card.folder, out=card.out, isolate=True, jobs=2)
    assert run.graded == ("once.mp4", "good0.mp4", "good1.mp4", "good2.mp4", "good3.mp4")
    assert run.failed == {"segfault.mp4": "the process that measured it crashed (Segmentation fault)"}
    assert measured().count("segfault.mp4") == 2  # tried again, alone
    assert not list((card.out / "clips").glob(".partial*"))


@pytest.mark.parametrize(("exit_code", "words"), [
    (-9, "was killed, most likely because the machine ran out of memory"), (-6, "crashed (Aborted)"),
    (3, "ended early (exit status 3)"),
])
def test_what_a_worker_died_of(exit_code, words):
    """Signal numbers 6 and 9 as POSIX fixes them."""
    assert words in pipeline._cause_of_death(exit_code)


def _environment(path, settings, progress):
    raise FootageError(path, f"{os.environ['OPENBLAS_NUM_THREADS']} {os.environ['OMP_NUM_THREADS']}")


def test_workers_share_the_cores_out_unless_the_user_says_otherwise(card, monkeypatch):
    card("a.mp4")
    monkeypatch.delenv("OPENBLAS_NUM_THREADS", raising=False)
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    run = grade_all(card.folder, out=card.out, isolate=True, threads=3, measure=_environment)
    assert run.failed == {"a.mp4": "3 7"}
    assert "OPENBLAS_NUM_THREADS" not in os.environ


_KILLED_RUN = """
import sys
sys.path.insert(0, {tests!r})
import fake_take
from framegrade.pipeline import grade_all
if __name__ == "__main__":
    grade_all([{card!r}], {out!r}, jobs=1, measure=fake_take.measure, plot=fake_take.plot)
"""


def _until(condition, seconds=30.0):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.02)


def test_kill_9_loses_the_clip_in_flight_only(card, measured, tmp_path):
    card("a.mp4", padding="x" * 900, score=80)
    card("slow.mp4", padding="x" * 800, wait=2, score=70, once=tmp_path / "tried")
    card("c.mp4", score=60)
    script = tmp_path / "killed_run.py"
    tests = str(Path(__file__).parent)
    script.write_text(_KILLED_RUN.format(tests=tests, card=str(card.folder), out=str(card.out)))
    process = subprocess.Popen([sys.executable, str(script)], stderr=subprocess.DEVNULL)
    _until(lambda: (tmp_path / "tried").exists() or process.poll() is not None)
    children = Path(f"/proc/{process.pid}/task/{process.pid}/children")
    workers = children.read_text().split() if children.exists() else []
    process.kill()
    process.wait()
    assert measured() == ["a.mp4", "slow.mp4"]
    (card.out / "clips" / ".partial-1-slow").mkdir()
    run = grade_all(card.folder, out=card.out)
    assert measured() == ["c.mp4", "slow.mp4"]
    assert run.graded == ("a.mp4", "slow.mp4", "c.mp4")
    # The worker notices that the main process is gone, and leaves no result and no process behind.
    _until(lambda: not any(os.path.exists(f"/proc/{worker}/cmdline") and _running(worker) for worker in workers))
    grade_all(card.folder, out=card.out)
    assert sorted(path.name for path in (card.out / "clips").iterdir()) == ["a", "c", "slow"]


def _running(process_id: str) -> bool:
    """Whether a process runs; one that has ended stays listed until its parent asks."""
    try:
        return Path(f"/proc/{process_id}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except FileNotFoundError:
        return False


# -------------------------------------------------------------------------------------------------------------- library

def test_grade_one_clip_in_memory_or_with_files(card):
    clip = card("a.mp4", score=77.77777777)
    fakes = {"measure": fake_take.measure, "plot": fake_take.plot}
    record = framegrade.grade(clip, readout_ms=14, **fakes)
    assert record.take["score"] == 77.77777777 and record.extra["readout_s"] == 0.014
    assert [path.name for path in card.folder.parent.iterdir()] == ["card"]
    written = framegrade.grade(clip, readout_ms=14, out=card.out, **fakes)
    assert written.take["score"] == 77.778
    assert written.take == pytest.approx(tables.load_take(card.out / "clips" / "a").take, nan_ok=True)
    bad = card("bad.mp4", fail="the file is empty")
    for out in (None, card.out):
        with pytest.raises(FootageError, match="bad.mp4: the file is empty"):
            framegrade.grade(bad, out=out, **fakes)
    with pytest.raises(FootageError, match="is a folder"):
        framegrade.grade(card.folder, out=card.out, **fakes)


def test_a_lone_path_is_one_path(card):
    run = framegrade.grade_all(str(card("a.mp4")), card.out, isolate=False, measure=fake_take.measure,
                               plot=fake_take.plot)
    assert run.graded == ("a.mp4",)


def test_importing_the_package_is_light():
    code = "import sys, framegrade; print(framegrade.__version__, 'numpy' in sys.modules, 'av' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.split() == [framegrade.__version__, "False", "False"]
    with pytest.raises(AttributeError):
        framegrade.nothing_of_that_name
