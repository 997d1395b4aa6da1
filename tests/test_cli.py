"""The command line: exit statuses, sentences, what goes to which stream, and the look of the result."""

from __future__ import annotations

import contextlib
import functools
import io
import json
import os
import re
import shlex
import signal
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import fake_take
import media
import pytest
from fake_take import clip_text, make_record
from rich.cells import cell_len
from rich.console import Console

import framegrade
from framegrade import cli, pipeline
from framegrade.grading import GRADES, default_limits_text, load_limits
from framegrade.report import tables, terminal

CONTROL = re.compile(r"[\x00-\x09\x0b-\x1f\x7f]")


@pytest.fixture
def shoot(tmp_path, monkeypatch):
    """An empty working folder in which `framegrade grade` measures with the fake, in this process."""
    monkeypatch.chdir(tmp_path)
    for name in ("COLUMNS", "FORCE_COLOR", "NO_COLOR"):
        monkeypatch.delenv(name, raising=False)
    fake = functools.partial(pipeline.grade_all, isolate=False, measure=_quiet_measure, plot=fake_take.full_disk_plot)
    monkeypatch.setattr(pipeline, "grade_all", fake)

    def put(name, **lines):
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(clip_text(**lines), encoding="utf-8")

    return put


def _quiet_measure(path, settings, progress):
    # In this process the fake's print would land in the output under test; worker processes redirect it.
    with contextlib.redirect_stdout(io.StringIO()):
        return fake_take.measure(path, settings, progress)


# ------------------------------------------------------------------------------------------------------- exit statuses

def test_all_graded_is_0_some_failed_is_1(shoot, capsys):
    shoot("card/a.mp4", score=91)
    assert cli.main(["grade", "card", "-o", "graded"]) == 0
    shoot("card/b.mp4", fail="the file is empty")
    assert cli.main(["grade", "card", "-o", "graded"]) == 1
    out = capsys.readouterr().out
    assert "the file is empty" in out and "2 clips: 1 keep, 1 failed; 1 unchanged since an earlier run." in out


def wrong_use(capsys, *argv):
    """The one sentence with which a wrong use is refused."""
    assert cli.main(list(argv)) == 2
    shown = capsys.readouterr()
    assert shown.out == ""
    assert shown.err.count("\n") == 1 and shown.err.endswith("\n")
    assert not CONTROL.search(shown.err)
    return shown.err


@pytest.mark.parametrize(("options", "words"), [
    ([], "-o/--out"),
    (["-o", "graded", "--readout-ms", "201"], "--readout-ms: '201' is not a number from 0 to 200 (ms)"),
    (["-o", "graded", "--readout-ms", "-1"], "'-1' is not a number from 0 to 200"),
    (["-o", "graded", "--readout-ms", "14,5"], "'14,5' is not a number"),
    (["-o", "graded", "--readout-ms", "nan"], "'nan' is not a number"),
    (["-o", "graded", "--hfov-deg", "180"], "--hfov-deg: '180' is not a number from 5 to 175 (degrees)"),
    (["-o", "graded", "--exposure-ms", "1e4"], "--exposure-ms: '1e4' is not a number from 0 to 1000 (ms)"),
    (["-o", "graded", "--jobs", "0"], "--jobs: '0' is not a whole number from 1 to 256"),
    (["-o", "graded", "--jobs", "two"], "--jobs: 'two'"),
    (["-o", "graded", "--wat"], "--wat"),
    (["-o", "graded", "--out-of", "x"], "--out-of"),
    (["-o", "a.mp4"], "a.mp4 is a file; name a folder for the results"),
    (["-o", "graded", "--camera", "none.toml"], "none.toml"),
    (["-o", "graded", "--limits", "none.toml"], "none.toml"),
    (["-o", "graded", "nothing*.mp4\n"], None),
])
def test_wrong_use_is_2_with_one_sentence(shoot, capsys, options, words):
    shoot("a.mp4")
    if words is None:  # no clip at all; the name holds a line break and must not break the sentence
        assert r"nothing*.mp4\n" in wrong_use(capsys, "grade", "-o", "graded", "nothing*.mp4\n")
    else:
        assert words in wrong_use(capsys, "grade", "a.mp4", *options)
    assert not Path("graded").exists()


def test_wrong_settings_files_are_named_with_line_and_allowed_values(shoot, capsys):
    shoot("a.mp4")
    Path("camera.toml").write_text('[camera]\nname = "nose"\n[[mode]]\nwidth_px = 1280\nheight_px = 720\n'
                                   "frame_rate_hz = 60\nreadout_mss = 14\n")
    sentence = wrong_use(capsys, "grade", "a.mp4", "-o", "graded", "--camera", "camera.toml")
    assert "camera.toml, line 7" in sentence and "readout_mss" in sentence and "readout_ms" in sentence
    limits = default_limits_text().replace("clean_px1920 = 0.12", 'clean_px1920 = "much"')
    Path("my.toml").write_text(limits)
    line = limits[:limits.index('"much"')].count("\n") + 1
    sentence = wrong_use(capsys, "grade", "a.mp4", "-o", "graded", "--limits", "my.toml")
    assert f"my.toml, line {line}:" in sentence and "clean_px1920" in sentence and "a number" in sentence
    Path("my.toml").write_text("[jello\n")
    assert "my.toml" in wrong_use(capsys, "grade", "a.mp4", "-o", "graded", "--limits", "my.toml")


def test_searching_out_itself_and_no_clip_are_wrong_use(shoot, capsys):
    shoot("card/a.mp4")
    Path("empty").mkdir()
    assert "name a folder of its own" in wrong_use(capsys, "grade", "card", "-o", "card")
    assert "holds no clip" in wrong_use(capsys, "grade", "empty", "-o", "graded")
    assert "no such file" in wrong_use(capsys, "grade", "missing.mp4", "-o", "graded")


def test_commands_are_told_when_none_or_an_unknown_one_is_given(capsys):
    assert cli.main([]) == 2
    assert "commands:" in capsys.readouterr().err
    assert "did you mean grade?" in wrong_use(capsys, "grad")
    assert f"the commands are {', '.join(sorted(cli.COMMANDS))}" in wrong_use(capsys, "\x1b[2J")


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="this system has no /dev/full")
def test_no_room_left_is_1_with_one_sentence(shoot, capsys):
    shoot("card/a.mp4", padding="x" * 900)
    shoot("card/big.mp4")
    assert cli.main(["grade", "card", "-o", "graded", "--quiet"]) == 1
    sentence = capsys.readouterr().err.splitlines()[-1]
    assert sentence == ("framegrade grade: graded: no room is left in the results folder; 1 of 2 clips are graded and "
                        "kept; put that right and run the same command again to go on.")


# --------------------------------------------------------------------------------------------------- help and version

def test_version_and_entry_point():
    command = [sys.executable, "-m", "framegrade.cli", "--version"]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert done.stdout == f"framegrade {framegrade.__version__}\n"


@pytest.mark.parametrize("command", sorted(cli.COMMANDS))
def test_help_of_each_command_has_an_example_that_parses(command, capsys):
    assert cli.main([command, "--help"]) == 0
    text = capsys.readouterr().out
    lines = text.replace("\\\n", " ").splitlines()
    examples = [line.strip() for line in lines if line.strip().startswith(f"framegrade {command} ")]
    assert examples
    for example in examples:
        words = shlex.split(example.split(" >")[0].split("   ")[0], comments=True)[2:]
        if words and "..." not in words and "[-h]" not in words:
            cli.make_parser(command).parse_args(words)  # exits if the example is wrong


def test_help_fits_80_columns_and_states_units_and_exit_statuses(capsys):
    assert cli.main(["grade", "--help"]) == 0
    text = capsys.readouterr().out
    assert max(map(len, text.splitlines())) <= 80
    for words in ("milliseconds, 0 to", "degrees, 5 to 175", "exit status:", "wrong use", "takes.csv"):
        assert words in text
    assert cli.main(["--help"]) == 0
    text = capsys.readouterr().out
    assert max(map(len, text.splitlines())) <= 120
    assert all(command.summary in text for command in cli.COMMANDS.values())


def test_limits_can_be_copied_changed_and_used(shoot, capsys):
    assert cli.main(["limits"]) == 0
    text = capsys.readouterr().out
    assert text.count("#") >= 5 and "jello" in tomllib.loads(text)
    Path("my.toml").write_text(text)
    assert load_limits(Path("my.toml")) == load_limits(None)
    changed = re.sub(r"(?m)^keep_s = .*$", "keep_s = 2.5", text)
    Path("my.toml").write_text(changed)
    shoot("a.mp4")
    assert cli.main(["grade", "a.mp4", "-o", "graded", "--limits", "my.toml", "--quiet"]) == 0
    assert tables.load_run(Path("graded")).run["settings"]["limits"]["keep_s"] == 2.5


# ---------------------------------------------------------------------------------------------------- what goes where

def test_json_is_all_there_is_on_standard_output(shoot, capsys):
    shoot("card/=a.mp4", score=91.25, note="Two frames repeat.")
    shoot("card/b.mp4", fail="the file is empty")
    assert cli.main(["grade", "card", "-o", "graded", "--json"]) == 1
    shown = capsys.readouterr()
    result = json.loads(shown.out, parse_constant=lambda word: pytest.fail(f"{word} is no JSON"))
    assert [take["clip"] for take in result["takes"]] == ["=a.mp4", "b.mp4"]  # a name is no formula here
    first, failed = result["takes"]
    assert set(first) == {*tables.records.TAKE_COLUMNS, "tones", "spectrum", "ranges", "notes", "folder"}
    assert first["score"] == 91.25 and first["smear_px1920"] is None and first["notes"] == ["Two frames repeat."]
    assert first["tones"][0]["frequency_hz"] == 137.3042 and first["ranges"][2]["score"] is None
    assert (Path(result["out"]) / first["folder"] / "motion.csv").exists()
    assert (failed["status"], failed["reason"], failed["folder"], failed["tones"]) == \
        ("failed", "the file is empty", None, [])
    assert result["counts"]["graded"] == 1 and result["schema"] == 1
    assert "strongest" in shown.err and "the file is empty" in shown.err
    assert cli.main(["grade", "card", "-o", "graded", "--json", "--quiet"]) == 1
    shown = capsys.readouterr()
    assert json.loads(shown.out)["counts"]["kept"] == 1
    assert shown.err == "framegrade grade: b.mp4: the file is empty\n"


def test_json_says_nothing_on_wrong_use(shoot, capsys):
    assert wrong_use(capsys, "grade", "missing.mp4", "-o", "graded", "--json")


def test_progress_is_plain_lines_on_standard_error(shoot, capsys):
    shoot("card/a.mp4", score=91, padding="x" * 900)
    shoot("card/b.mp4", fail="no picture in it")
    cli.main(["grade", "card", "-o", "graded"])
    shown = capsys.readouterr()
    lines = shown.err.splitlines()
    assert re.fullmatch(r"\[1/2\] a\.mp4: keep 91 \(0\.\d s, about 0\.\d s left\)", lines[0])
    assert re.fullmatch(r"\[2/2\] b\.mp4: failed: no picture in it \(0\.\d s\)", lines[1])
    assert not CONTROL.search(shown.err + shown.out)
    cli.main(["grade", "card", "-o", "graded"])
    assert capsys.readouterr().err.startswith("[1/2] a.mp4: keep 91 (unchanged)\n")
    cli.main(["grade", "card/a.mp4", "-o", "graded", "--quiet"])
    assert capsys.readouterr() == ("", "")


def test_hostile_names_and_markup_are_shown_as_text(shoot, capsys):
    shoot("card/[bold red]x[/].mp4", score=80, reason="jello :smile: [link=file:///]0.12[/link] px")
    shoot("card/line\nbreak\x1b[31m.mp4", score=70)
    shoot("card/\u202egnp.mp4", fail="\x1b]0;title\x07")
    assert cli.main(["grade", "card", "-o", "graded"]) == 1
    shown = capsys.readouterr()
    text = shown.out + shown.err
    assert not CONTROL.search(text) and "\u202e" not in text
    for words in ("[bold red]x[/].mp4", r"line\nbreak\x1b[31m.mp4", r"\u202egnp.mp4", ":smile: [link=file:///]0.12",
                  r"\x1b]0;title\x07"):
        assert words in text


def test_a_clip_with_a_leading_dash(shoot, capsys):
    shoot("-take1.mp4")
    assert cli.main(["grade", "-o", "graded", "--", "-take1.mp4"]) == 0
    assert (Path("graded") / "takes.csv").read_text().splitlines()[1].startswith("'-take1.mp4,graded")
    assert tables.load_run(Path("graded")).graded == ("-take1.mp4",)


# ------------------------------------------------------------------------------------------------------------ the look

class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self):
        return True


def lines_of(run, width):
    console = Console(file=io.StringIO(), width=width, markup=False, emoji=False, highlight=False)
    terminal.print_run(run, console)
    return console.file.getvalue().splitlines()


@pytest.fixture
def run(shoot):
    shoot("card/north field/low pass with a very long name indeed, number 12.mp4", score=91.4)
    shoot("card/映像/映像映像映像映像映像映像映像映像.mp4", grade="stabilise", score=60,
          reason="shake 3.21 px1920 for most of the take, which steadying takes out for 7.5 % of the picture")
    shoot("card/c.mp4", grade="reshoot", score=0)
    shoot("card/d.mp4", fail="the file is empty")
    return pipeline.grade_all(["card"], "graded")


@pytest.mark.parametrize("width", [72, 80, 120])
def test_the_ranked_takes_fit_the_terminal(run, width):
    text = list(terminal.take_lines(run, width))
    assert max(cell_len(line.plain) for line in text) <= width
    plain = "\n".join(line.plain for line in text)
    assert [word for word in re.findall(r"keep|stabilise|reshoot|failed", plain)] == \
        ["keep", "stabilise", "reshoot", "failed"]  # the grade is a word, whatever the colours
    assert "12.mp4" in plain and "1280x720@59.94" in plain and "137.3 Hz" in plain
    assert "of the picture" in plain and "the file is empty" in plain
    columns = [line.plain for line in text if "137.3 Hz" in line.plain]
    assert len({cell_len(line) for line in columns}) == 1  # aligned, wide characters or not


def test_order_is_that_of_takes_csv_and_the_end_says_what_to_open(run):
    text = "\n".join(lines_of(run, 80))
    found = re.findall(r"(?m)^ ?(\d+)  (\S.*?)(?:  | keep| stabilise| reshoot| failed)", text)
    names = [name.strip("…") for _, name in found]
    assert [number for number, _ in found] == ["1", "2", "3", "4"]
    assert all(clip.endswith(name) for clip, name in zip(run.takes["clip"], names, strict=True))
    assert "4 clips: 1 keep, 1 stabilise, 1 reshoot, 1 failed." in text
    assert f"Results are in {run.out}" in text and "Open takes.csv first" in text
    assert "Plots and series of the first take: clips/low_pass_with" in text


def test_notes_are_told_once_with_their_clips(shoot):
    for number in range(5):
        shoot(f"card/{number}.mp4", note="Two frames repeat.")
    text = "\n".join(lines_of(pipeline.grade_all(["card"], "graded"), 80))
    assert text.count("Two frames repeat.") == 1
    assert "0.mp4, 1.mp4, 2.mp4 and 2 more: Two frames repeat." in text


def test_colour_only_on_a_terminal_that_wants_it(run, monkeypatch):
    def printed():
        stream = Terminal()
        terminal.print_run(run, terminal.make_console(stream))
        return stream.getvalue()

    monkeypatch.setenv("TERM", "xterm-256color")
    assert "\x1b[1;36mkeep" in printed()
    monkeypatch.setenv("NO_COLOR", "1")
    assert not re.search(r"\x1b\[[\d;]*3\dm", printed())


def test_live_progress_shows_each_clip_and_all(monkeypatch):
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    console = Console(file=io.StringIO(), force_terminal=True, width=80, markup=False, highlight=False, emoji=False)
    watcher = terminal.make_watcher(console)
    assert isinstance(watcher, terminal.LiveWatcher)
    row = make_record("b\n.mp4").take
    watcher.begin({"a.mp4": 100, "b\n.mp4": 299, "c.mp4": 5000})
    watcher.kept({**row, "clip": "c.mp4"})
    watcher.start("a.mp4")
    watcher.start("b\n.mp4")
    watcher.fraction("b\n.mp4", 0.5)
    overall = watcher.progress.tasks[0]
    assert overall.percentage == pytest.approx(100 * 150 / 401)
    assert "left" in overall.fields["left"]
    watcher.again("a.mp4")
    assert watcher.progress.tasks[0].percentage == pytest.approx(100 * 150 / 401)
    watcher.end(row, 3.0)
    watcher.start("a.mp4")
    watcher.end({**row, "clip": "a.mp4"}, None)
    assert watcher.progress.tasks[0].percentage == 100
    watcher.close()
    text = console.file.getvalue()
    assert "all clips" in text and r"b\n.mp4: " in text and "(3.0 s" in text and "unchanged" in text


@pytest.mark.parametrize(("seconds", "words"), [
    (3.21, "3.2 s"), (9.96, "10 s"), (59.4, "59 s"), (59.7, "1 min 0 s"), (3599.4, "59 min 59 s"), (7500, "2 h 5 min"),
])
def test_durations_in_words(seconds, words):
    assert terminal.duration_words(seconds) == words


# ----------------------------------------------------------------------------------------------------- real processes

_SLOW_RUN = """
import functools, sys
sys.path.insert(0, {tests!r})
import fake_take
from framegrade import cli, pipeline
from framegrade.grading import GRADES, default_limits_text, load_limits
if __name__ == "__main__":
    pipeline.grade_all = functools.partial(pipeline.grade_all, measure=fake_take.measure, plot=fake_take.plot)
    sys.exit(cli.main(sys.argv[1:]))
"""


@pytest.fixture
def real(tmp_path):
    """Start the command in a process of its own, with the fake measurement in worker processes."""
    script = tmp_path / "slow_run.py"
    script.write_text(_SLOW_RUN.format(tests=str(Path(__file__).parent)))
    started = []

    def start(*argv, **options):
        process = subprocess.Popen([sys.executable, str(script), *map(str, argv)], cwd=tmp_path, text=True,
                                   stdout=subprocess.PIPE, stderr=subprocess.PIPE, start_new_session=True, **options)
        started.append(process)
        return process

    yield start
    for process in started:
        process.kill()
        process.communicate()


@pytest.mark.skipif(os.name != "posix", reason="process groups as on POSIX")
def test_ctrl_c_is_130_and_keeps_what_is_graded(real, tmp_path):
    """The signal goes to the whole group, as a terminal sends it."""
    card = tmp_path / "card"
    card.mkdir()
    (card / "a.mp4").write_text(clip_text(padding="x" * 900))
    (card / "slow.mp4").write_text(clip_text(wait=60, once=tmp_path / "tried"))
    process = real("grade", "card", "-o", "graded", "--jobs", "1", "--json")
    end = time.monotonic() + 30
    while not (tmp_path / "tried").exists() and process.poll() is None and time.monotonic() < end:
        time.sleep(0.02)
    begun = time.monotonic()
    assert process.poll() is None, process.stderr.read()
    os.killpg(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=20)
    assert time.monotonic() - begun < 10  # the clip in hand is given up, not waited for
    assert process.returncode == 130
    result = json.loads(out)  # what a library prints in a worker does not get here
    assert result["state"] == "interrupted"
    assert {take["clip"]: take["status"] for take in result["takes"]} == {"a.mp4": "graded", "slow.mp4": "failed"}
    assert err.splitlines()[-1] == ("framegrade grade: stopped; 1 of 2 clips are graded and kept; run the same command "
                                    "again to go on.")
    assert "Traceback" not in err
    assert sorted(path.name for path in (tmp_path / "graded" / "clips").iterdir()) == ["a"]


def test_real_clips_from_the_command_to_the_tables(tmp_path, monkeypatch, capsys):
    """Nothing faked: encoded pictures, worker processes, the product's own measurement and plots."""
    monkeypatch.chdir(tmp_path)
    Path("card").mkdir()
    media.write_clip(Path("card/pan.mp4"), media.moving_texture(40, 320, 180), rate=30)
    Path("card/text.mp4").write_text("no video at all")
    assert cli.main(["grade", "card", "-o", "graded", "--readout-ms", "10", "--hfov-deg", "80", "--json"]) == 1
    result = json.loads(capsys.readouterr().out)
    take, failed = result["takes"]
    assert (take["clip"], take["mode"], take["readout_ms"]) == ("pan.mp4", "320x180@30", 10)
    assert take["grade"] in GRADES and 0 <= take["score"] <= 100
    assert not [note for note in take["notes"] if "plots" in note]
    assert (failed["clip"], failed["status"]) == ("text.mp4", "failed")
    record = tables.load_run(Path("graded")).record("pan.mp4")
    assert len(record.motion) == 40
    for name in tables.PLOT_FILES:
        assert (Path("graded/clips/pan") / name).read_bytes().startswith(b"\x89PNG")
    assert cli.main(["grade", "card/pan.mp4", "-o", "graded", "--readout-ms", "10", "--hfov-deg", "80"]) == 0
    assert "unchanged" in capsys.readouterr().err


def test_a_reader_that_has_seen_enough():
    command = f"{sys.executable} -m framegrade.cli limits | true"
    done = subprocess.run(command, shell=True, capture_output=True, text=True)
    assert done.stderr == ""


@pytest.mark.skipif(os.name != "posix", reason="the script is for bash")
@pytest.mark.parametrize(("command", "status"), [("true", 0), ("exit 3", 3)])
def test_ci_run_does_the_test_command_of_the_readme_in_a_copy(tmp_path, command, status):
    script = Path(__file__).parents[1] / ".ci" / "run"
    checkout = tmp_path / "check out"
    (checkout / ".ci").mkdir(parents=True)
    (checkout / ".ci" / "run").write_bytes(script.read_bytes())
    (checkout / "README.md").write_text(
        "<!-- first-command -->\n```sh\ntouch first\n```\n\n<!-- test-command -->\n```sh\n"
        f"pwd > '{tmp_path}/where'\ntouch made\n{command}\n```\n\n```sh\ntouch third\n```\n")
    done = subprocess.run(["bash", str(checkout / ".ci" / "run")], capture_output=True, text=True)
    assert done.returncode == status, done.stderr
    where = Path((tmp_path / "where").read_text().strip())
    assert where != checkout and not where.exists()  # a copy, removed again
    assert sorted(path.name for path in checkout.iterdir()) == [".ci", "README.md"]


def test_ci_run_says_when_the_readme_has_no_test_command(tmp_path):
    script = Path(__file__).parents[1] / ".ci" / "run"
    (tmp_path / ".ci").mkdir()
    (tmp_path / ".ci" / "run").write_bytes(script.read_bytes())
    (tmp_path / "README.md").write_text("no mark here\n```sh\ntrue\n```\n")
    done = subprocess.run(["bash", str(tmp_path / ".ci" / "run")], capture_output=True, text=True)
    assert done.returncode == 2 and "test-command" in done.stderr
