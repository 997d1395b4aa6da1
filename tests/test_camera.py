"""The camera file and the checked TOML reading under it. All cameras are invented."""

from __future__ import annotations

import dataclasses
import os
import tomllib
from fractions import Fraction
from pathlib import Path

import pytest

from framegrade.camera import Camera, CameraMode, load_camera, save_camera
from framegrade.footage import ClipInfo
from framegrade.settings_file import Field, SettingsError, Table, read_settings, statement_lines

GOOD = """\
# my camera
[camera]
name = "nose camera"

[[mode]]
width_px = 1280
height_px = 720
frame_rate_hz = 60
readout_ms = 14.0
hfov_deg = 80.0
exposure_ms = 1.0

[[mode]]
width_px = 1920
height_px = 1080
frame_rate_hz = 29.97   # and this is the other one
"""


def clip(width_px: int, height_px: int, frame_rate_hz: float, rotation_deg: int = 0) -> ClipInfo:
    return ClipInfo(
        path=Path("flight.mp4"), width_px=width_px, height_px=height_px, rotation_deg=rotation_deg,
        frame_rate_hz=frame_rate_hz, variable_frame_rate=False, codec="h264", pixel_format="yuv420p", bit_depth=8,
        duration_s=1.0, frame_count=None, bit_rate_mbps=1.0, start_timecode=None, time_base=Fraction(1, 1000),
    )


def written(folder: Path, text: str) -> Path:
    path = folder / "cam.toml"
    path.write_text(text, encoding="utf-8")
    return path


def fault(folder: Path, text: str) -> SettingsError:
    with pytest.raises(SettingsError) as caught:
        load_camera(written(folder, text))
    return caught.value


def line_with(text: str, part: str, nth: int = 0) -> int:
    """The line number, from 1, of the nth line that holds `part`: the ground truth for reported lines."""
    return [number for number, line in enumerate(text.split("\n"), 1) if part in line][nth]


def test_values_are_read_and_converted_to_seconds(tmp_path):
    camera = load_camera(written(tmp_path, GOOD))
    assert camera == Camera(
        "nose camera",
        (
            CameraMode(1280, 720, 60.0, readout_s=0.014, hfov_deg=80.0, exposure_s=0.001),
            CameraMode(1920, 1080, 29.97),
        ),
    )
    assert [mode.label for mode in camera.modes] == ["1280x720@60", "1920x1080@29.97"]


def test_clip_is_matched_by_recorded_size_and_nearest_rate(tmp_path):
    both = GOOD + "\n[[mode]]\nwidth_px = 1920\nheight_px = 1080\nframe_rate_hz = 30\nnote = 'thirty'\n"
    camera = load_camera(written(tmp_path, both))
    assert camera.mode_for(clip(1280, 720, 59.94)) is camera.modes[0]  # 0.1 % off: the same setting
    assert camera.mode_for(clip(1280, 720, 60.59)) is camera.modes[0]
    assert camera.mode_for(clip(1280, 720, 60.61)) is None
    assert camera.mode_for(clip(1280, 720, 59.39)) is None
    assert camera.mode_for(clip(1920, 1080, 30000 / 1001)) is camera.modes[1]
    assert camera.mode_for(clip(1920, 1080, 30.0)) is camera.modes[2]
    assert camera.mode_for(clip(1280, 722, 60.0)) is None
    assert camera.mode_for(clip(1280, 720, float("nan"))) is None


def test_display_rotation_does_not_swap_the_recorded_size(tmp_path):
    camera = load_camera(written(tmp_path, GOOD))
    assert camera.mode_for(clip(1280, 720, 60.0, rotation_deg=90)) is camera.modes[0]
    assert camera.mode_for(clip(720, 1280, 60.0, rotation_deg=90)) is None


@pytest.mark.parametrize(
    "old, new, marker, words",
    [
        ("width_px = 1280", "widht_px = 1280", "widht_px", ['unknown key "widht_px"', 'did you mean "width_px"',
                                                            "height_px, frame_rate_hz, readout_ms"]),
        ("readout_ms = 14.0", "readout = 14.0", "readout =", ['unknown key "readout"', "[[mode]]"]),
        ("[camera]", "[camra]", "[camra]", ['unknown table "camra"', 'did you mean "camera"', "[camera], [[mode]]"]),
        ("height_px = 720\n", "", "[[mode]]", ['the key "height_px" is missing', "whole number"]),
        ("height_px = 720", "height_px = 720.5", "720.5", ["720.5", "a whole number from 16"]),
        ("height_px = 720", "height_px = true", "true", ["true", "a whole number"]),
        ("height_px = 720", 'height_px = "720"', '"720"', ['"720"', "a whole number"]),
        ("frame_rate_hz = 60", "frame_rate_hz = 0", "= 0", ["frame_rate_hz", "between 0 and"]),
        ("frame_rate_hz = 60", "frame_rate_hz = nan", "nan", ["frame_rate_hz", "nan"]),
        ("readout_ms = 14.0", "readout_ms = -1", "-1", ["readout_ms", "-1", "from 0 to"]),
        ("hfov_deg = 80.0", "hfov_deg = 175", "175", ["hfov_deg", "between 5 and 175", "degrees"]),
        ("hfov_deg = 80.0", "hfov_deg = 5", "hfov_deg", ["between 5 and 175"]),
        ('name = "nose camera"', "name = 3", "name", ["name", "text in quotes"]),
        # 60 frames/s leave 16.67 ms: a longer readout or exposure cannot be (1 % is let pass for rounding).
        ("readout_ms = 14.0", "readout_ms = 16.9", "16.9", ['"readout_ms" = 16.9 is impossible', "16.67 ms"]),
        ("exposure_ms = 1.0", "exposure_ms = 17", "17", ['"exposure_ms" = 17 is impossible', "16.67 ms"]),
        ("readout_ms = 14.0", "readout_ci_ms = 0.1", "readout_ci_ms", ["readout_ci_ms", "without", '"readout_ms"']),
    ],
)
def test_a_mistake_is_one_sentence_with_file_and_line(tmp_path, old, new, marker, words):
    text = GOOD.replace(old, new, 1)
    assert text != GOOD
    error = fault(tmp_path, text)
    assert error.line == line_with(text, marker)
    sentence = str(error)
    assert sentence.startswith(f"{tmp_path / 'cam.toml'}, line {error.line}: ")
    assert "\n" not in sentence
    for word in words:
        assert word in sentence


def test_limits_of_the_physical_are_let_pass(tmp_path):
    text = GOOD.replace("readout_ms = 14.0", "readout_ms = 16.8").replace("exposure_ms = 1.0", "exposure_ms = 16.7")
    assert load_camera(written(tmp_path, text)).modes[0].readout_s == pytest.approx(0.0168)
    text = GOOD.replace("readout_ms = 14.0", "readout_ms = 0")
    assert load_camera(written(tmp_path, text)).modes[0].readout_s == 0.0  # global shutter: known, and zero


def test_the_second_of_two_equal_modes_is_named(tmp_path):
    text = GOOD.replace("1920", "1280").replace("1080", "720").replace("29.97", "60.0")
    error = fault(tmp_path, text)
    assert error.line == line_with(text, "[[mode]]", 1)
    assert f"1280x720@60 is given twice, first in line {line_with(text, '[[mode]]', 0)}" in str(error)


def test_missing_tables(tmp_path):
    assert "[camera] is missing" in str(fault(tmp_path, GOOD.replace('[camera]\nname = "nose camera"\n', "")))
    assert "[[mode]] is missing" in str(fault(tmp_path, '[camera]\nname = "x"\n'))
    assert "[camera] is missing" in str(fault(tmp_path, ""))
    error = fault(tmp_path, '[camera]\nname = "x"\n[mode]\nwidth_px = 1280\nheight_px = 720\nframe_rate_hz = 60\n')
    assert "write [[mode]]" in str(error) and error.line == 3
    assert "at least one" in str(fault(tmp_path, 'mode = []\n[camera]\nname = "x"\n'))


@pytest.mark.parametrize(
    "text, line",
    [
        ('[camera]\nname = "x\n', 2),
        ("[camera]\nname = nose\n", 2),
        ("[camera\n", 1),
        ('[camera]\nname = "x"\nname = "y"\n', 3),
        ('[camera]\nname = """x\n\n\n', 2),
        ("a = [1,\n2\n", 2),
    ],
)
def test_syntax_errors_name_the_line(tmp_path, text, line):
    error = fault(tmp_path, text)
    assert "is not valid TOML" in str(error)
    assert error.line == line


def test_unusable_files(tmp_path):
    for path, words in [(tmp_path / "none.toml", "there is no such file"), (tmp_path, "is a folder")]:
        with pytest.raises(SettingsError, match=words):
            load_camera(path)
    latin = tmp_path / "latin.toml"
    latin.write_bytes("# first\n[camera]\nname = 'caméra'\n".encode("latin-1"))
    with pytest.raises(SettingsError, match="line 3: is not UTF-8"):
        load_camera(latin)


def test_byte_order_mark_and_windows_line_ends(tmp_path):
    path = tmp_path / "win.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert load_camera(path).name == "nose camera"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").replace("= 720", "= 7.5").encode())
    with pytest.raises(SettingsError, match=f"line {line_with(GOOD, '= 720')}: "):
        load_camera(path)


TANGLED = '''\
top = 1 # [not.a.header]
"quoted key" = """
[fake]
a = 3
"""
a.b."c d" = [
  1, # ] = [
  "]",
]

[ x . "y.z" ]
v = 1
w = \'\'\'
[[rows]]
\'\'\'
[[rows]]
k = {p = 1, q = {r = 2}}
[[rows]]
# k = 0
[rows.inner]
deep = 5
[[rows.list]]
z = 1
[[rows.list]]
z = 2
'''


def test_lines_are_found_through_every_form_of_toml():
    lines = statement_lines(TANGLED)
    for path, marker, nth in [
        (("top",), "top =", 0), (("quoted key",), '"quoted key"', 0), (("a", "b", "c d"), "a.b.", 0),
        (("x", "y.z"), '[ x . "y.z" ]', 0), (("x", "y.z", "v"), "v = 1", 0), (("x", "y.z", "w"), "w = ", 0),
        (("rows", 0), "[[rows]]", 1), (("rows", 0, "k"), "k = {", 0), (("rows", 0, "k", "q", "r"), "k = {", 0),
        (("rows", 1), "[[rows]]", 2), (("rows", 1, "inner", "deep"), "deep", 0),
        (("rows", 1, "list", 0, "z"), "z = 1", 0), (("rows", 1, "list", 1, "z"), "z = 2", 0),
    ]:
        assert lines[path] == line_with(TANGLED, marker, nth), path
    assert ("fake",) not in lines and ("rows", 2) not in lines and ("rows", 1, "k") not in lines


def test_every_path_of_the_toml_reader_has_a_line():
    """The independent reading is the whole document by tomllib: the same paths, no more and no fewer."""

    def paths(value, at=()):
        items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
        for key, inner in items:
            yield at + (key,)
            yield from paths(inner, at + (key,))

    for text in (GOOD, TANGLED):
        document_paths = set(paths(tomllib.loads(text)))
        found = set(statement_lines(text))
        assert found <= document_paths
        # Tables that a header makes on its way down ([x."y.z"] makes x) have no line of their own.
        rest = document_paths - found
        assert {path for path in rest if not any(other[: len(path)] == path for other in found)} == set()


SCHEMA = {
    "": Table({"version": Field("integer", low=1)}),
    "limits.sway": Table({"clean": Field("number", "px", required=True, low=0), "on": Field("flag")}, required=True),
    "limits.window": Table({"kind": Field("text", allowed=("short", "long")), "steps": Field("numbers", low=0)}),
    "part": Table({"hz": Field("number", low=1)}, many=True),
}


def test_schema_reads_nested_tables_and_keeps_occurrences(tmp_path):
    text = "version = 2\nlimits.sway.clean = 3\n[[part]]\nhz = 4\n[[part]]\n[limits.window]\nsteps=[1,2.5]\n"
    path = written(tmp_path, text)
    settings = read_settings(path, SCHEMA)
    assert settings.table("")["version"] == 2
    assert settings.table("limits.sway") == {"clean": 3.0} and isinstance(settings.table("limits.sway")["clean"], float)
    assert settings.table("limits.window") == {"steps": (1.0, 2.5)}
    assert settings.tables["part"] == [{"hz": 4.0}, {}]
    lines = [settings.line("limits.sway", "clean"), settings.line("part", nth=1), settings.line("part", "hz")]
    assert lines == [2, 5, 4]
    assert str(settings.error("is odd", "part", "hz")) == f"{path}, line 4: is odd"


@pytest.mark.parametrize(
    "text, line, words",
    [
        ("[limits.sway]\nclean = 1\n[limits.swai]\nclean = 1\n", 3, ['unknown table "limits.swai"', 'mean "sway"']),
        ("[limits.sway]\nclean = 1\n[limits]\nfoo = 1\n", 4, ['unknown key "foo" in [limits]']),
        ("vers = 1\n[limits.sway]\nclean = 1\n", 1, ['unknown key "vers" above the first table', 'mean "version"']),
        ("[limits.sway]\nclean = 1\n[[part]]\nhz = 2\n[[part]]\nhz = 0\n", 6, ["hz", "of at least 1"]),
        ("[limits.sway]\nclean = 1\n[[part]]\n[[part]]\nrpm = 0\n", 5, ['unknown key "rpm" in [[part]]']),
        ("[limits.sway]\nclean = 1\non = 1\n", 3, ["true or false"]),
        ('[limits.sway]\nclean = 1\n[limits.window]\nkind = "x"\n', 4, ['one of "short", "long"']),
        ("[limits.sway]\nclean = 1\n[limits.window]\nsteps = [1, -2]\n", 4, ["a list of numbers"]),
        ("limits.sway = 3\n", 1, ['"limits.sway" must be a table: write [limits.sway]']),
    ],
)
def test_schema_faults(tmp_path, text, line, words):
    with pytest.raises(SettingsError) as caught:
        read_settings(written(tmp_path, text), SCHEMA)
    assert caught.value.line == line
    for word in words:
        assert word in str(caught.value)


def test_saved_camera_reads_back_the_same(tmp_path):
    camera = Camera(
        'side "A" \\ caméra\n\t\x7f',
        (
            CameraMode(2704, 1520, 59.94, readout_s=0.0143, hfov_deg=91.25, exposure_s=1 / 2000, readout_ci_ms=0.05,
                       hfov_ci_deg=0.4, note="swung by hand, 3 clips"),
            CameraMode(640, 480, 120.0, readout_s=0.0),
        ),
    )
    path = tmp_path / "out.toml"
    save_camera(camera, path)
    assert load_camera(path) == camera
    first = path.read_bytes()
    save_camera(load_camera(path), path)
    assert path.read_bytes() == first
    assert "readout_ms = 14.3\n" in path.read_text(encoding="utf-8")
    assert [entry.name for entry in tmp_path.iterdir()] == ["out.toml"]


def test_a_failed_save_leaves_the_old_file_alone(tmp_path):
    path = written(tmp_path, GOOD)
    os.chmod(path, 0o640)
    camera = load_camera(path)
    impossible = Camera("x", (dataclasses.replace(camera.modes[0], readout_s=0.1),))
    for bad in (impossible, Camera("x", ()), Camera("\udcff", camera.modes), Camera("x", camera.modes * 2)):
        with pytest.raises(ValueError):
            save_camera(bad, path)
    assert path.read_text() == GOOD
    assert [entry.name for entry in tmp_path.iterdir()] == ["cam.toml"]
    save_camera(dataclasses.replace(camera, name="y"), path)
    assert load_camera(path).name == "y"
    assert path.stat().st_mode & 0o777 == 0o640


def test_saving_through_a_link_keeps_the_link(tmp_path):
    path = written(tmp_path, GOOD)
    link = tmp_path / "link.toml"
    link.symlink_to(path.name)
    save_camera(dataclasses.replace(load_camera(link), name="z"), link)
    assert link.is_symlink() and load_camera(path).name == "z"
