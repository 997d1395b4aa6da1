"""The plots: what they show, what they say where nothing was measured, and that they can be read.

The records drawn here are computed from formulas in this file, so that the place of every mark is known.
"""

from __future__ import annotations

import itertools
import subprocess
import sys
import threading
import warnings
from dataclasses import replace
from functools import cache

import matplotlib
import numpy as np
import pandas as pd
import pytest
from matplotlib.collections import FillBetweenPolyCollection, PolyCollection
from matplotlib.colors import to_rgb
from matplotlib.image import AxesImage
from matplotlib.lines import Line2D
from matplotlib.text import Text
from PIL import Image
from skimage.color import deltaE_ciede2000, rgb2lab

from fake_take import make_record
from framegrade import records
from framegrade.measure import MeasureSettings, measure_clip
from framegrade.records import AXES, TakeRecord
from framegrade.report import plots
from media import real_clips

WIDTH_PX, HEIGHT_PX, RATE_HZ, READOUT_S, FOCAL_PX = 1280, 720, 60.0, 0.014, 762.7223
TONE_HZ, TONE_PX = 137.3, 0.42
BANDS = 32
# IEC 61260-1, nominal mid-band frequencies (values of ISO 266) from 3.15 Hz to 800 Hz
NOMINAL_HZ = ("3.15 4 5 6.3 8 10 12.5 16 20 25 31.5 40 50 63 80 100 125 160 200 250 315 400 500 630 800").split()
FIGURES = {"motion": plots.motion_figure, "spectrum": plots.spectrum_figure, "wobble": plots.wobble_figure}


def jello_record(duration_s: float = 4.0, **take) -> TakeRecord:
    """A flight with one yaw tone, jello in its second half, two repeated frames and a frozen stretch."""
    rng = np.random.default_rng(5)
    count = int(duration_s * RATE_HZ)
    time = np.arange(count) / RATE_HZ
    motion = pd.DataFrame(0.0, index=range(count), columns=list(records.MOTION_COLUMNS))
    motion["frame"], motion["time_s"], motion["interval_s"] = np.arange(count), time, 1 / RATE_HZ
    for k, axis in enumerate(AXES):
        motion[f"travel_{axis}_px"] = 100.0 * (k + 1) * time
        motion[f"sway_{axis}_px"] = (k + 1) * np.sin(2 * np.pi * 1.1 * time + k)
        motion[f"shake_{axis}_px"] = rng.normal(0, 0.2 * (k + 1), count)
    motion["jello_px"], motion["measured_pct"] = 0.4, 95.0
    motion.loc[[50, 80], "repeated"] = 1
    motion.loc[60:70, "frozen_pct"] = 40.0
    last = motion.index[-1]
    motion.loc[last, ["interval_s", "jello_px", "measured_pct", "frozen_pct"]] = np.nan

    start = np.arange(0, duration_s, 0.5)
    windows = pd.DataFrame({"start_s": start, "end_s": start + 0.5}, columns=list(records.WINDOW_COLUMNS))
    windows["score"] = np.where(start < duration_s / 2, 80.0, 30.0)
    windows["component"], windows["reason"], windows["usable"] = "jello", "jello of 0.5 px", windows["score"] >= 50
    windows["jello_px1920"] = np.where(start < duration_s / 2, 0.2, 0.7)
    ranges = pd.DataFrame([("clip", 0.0, duration_s / 2, "", "", 80.0)], columns=list(records.RANGE_COLUMNS))

    mid = 10 ** (np.arange(5, 30) / 10)  # IEC 61260-1, clause 5: exact mid-band frequencies, base ten
    spectrum = pd.concat([pd.DataFrame({
        "clip": "clip", "axis": axis, "band_hz": [float(f) for f in NOMINAL_HZ], "low_hz": mid * 10 ** -0.05,
        "high_hz": mid * 10 ** 0.05, "level_px": np.where(mid < 500, 0.01, np.nan), "level_mdeg": np.nan,
        "floor_px": 0.004, "observable_pct": np.where(mid < 3.5, 6.0, 100.0),
    }) for axis in AXES], ignore_index=True)
    frequency = np.arange(1.0, 936.0)
    density = pd.concat([pd.DataFrame({
        "axis": axis, "frequency_hz": frequency, "level_px2_per_hz": 4e-6, "floor_px2_per_hz": 1e-6,
        "observable": np.abs(frequency - RATE_HZ * np.round(frequency / RATE_HZ)) > 3,
    }) for axis in AXES], ignore_index=True)
    tones = pd.DataFrame([("clip", "yaw", TONE_HZ, 0.002, TONE_PX, 0.02, 31.6, TONE_HZ * READOUT_S)],
                         columns=list(records.TONE_COLUMNS))

    height = (np.arange(BANDS) + 0.5) / BANDS
    clock = time[:-1, None] + (height - 0.5) * READOUT_S
    swing = TONE_PX * np.sin(2 * np.pi * TONE_HZ * np.stack([clock, clock + 1 / RATE_HZ]))
    wobble = swing[1] - swing[0]
    wobble -= wobble.mean(1, keepdims=True)
    wobble[:, :4] = np.nan  # a strip of sky
    figures = dict.fromkeys(records.TAKE_COLUMNS, np.nan) | {
        "clip": "low_pass.mp4", "status": "graded", "grade": "reshoot", "score": 43.0, "reason": "jello of 0.51 px",
        "duration_s": duration_s, "width_px": WIDTH_PX, "height_px": HEIGHT_PX, "frame_rate_hz": RATE_HZ,
        "mode": "1280x720@60", "readout_ms": 14.0, "hfov_deg": 80.0, "sway_px1920": 3.7, "shake_px1920": 0.7,
        "jello_px1920": 0.51, "usable_s": duration_s / 2, "measured_pct": 95.0,
    } | take
    return TakeRecord(figures, tones, spectrum, ranges, motion, windows, density, wobble, time[:-1],
                      extra={"focal_px": FOCAL_PX, "candidates": [], "usable_score": 50.0, "dropped_gaps": 0})


def without_readout(record: TakeRecord) -> TakeRecord:
    """The same take, had its readout not been known: f and f + k x frame rate, each with its own readout."""
    cycles = TONE_HZ * READOUT_S
    frequency = [TONE_HZ + 60 * k for k in range(18)]
    found = {"axis": "yaw", "alias_hz": 17.3, "cycles_per_frame": cycles, "amplitude_px": TONE_PX,
             "candidates_hz": frequency, "readout_s": [cycles / f for f in frequency]}
    return replace(record, take=record.take | {"readout_ms": np.nan}, spectrum=record.spectrum.iloc[:0],
                   density=record.density.iloc[:0], tones=record.tones.assign(frequency_hz=np.nan),
                   extra=record.extra | {"candidates": [found]})


def of_nothing(record: TakeRecord, keep_rows: bool) -> TakeRecord:
    """The same take with nothing measured: NaN in every figure, or no rows at all."""
    kept = ("time_s", "start_s", "end_s", "band_hz", "low_hz", "high_hz", "frequency_hz")

    def emptied(table: pd.DataFrame) -> pd.DataFrame:
        if not keep_rows:
            return table.iloc[:0]
        return table.assign(**{c: np.nan for c in table if table[c].dtype.kind == "f" and c not in kept})

    tables = {name: emptied(getattr(record, name)) for name in ("spectrum", "ranges", "motion", "windows", "density")}
    tables["density"] = tables["density"].assign(observable=False)
    tables["windows"] = tables["windows"].assign(component=None, usable=False)
    take = {name: np.nan if isinstance(value, float) else value for name, value in record.take.items()}
    return replace(record, take=take | {"grade": None, "reason": None}, tones=record.tones.iloc[:0], extra={},
                   wobble_px=record.wobble_px * np.nan if keep_rows else np.zeros((0, 0)),
                   wobble_time_s=record.wobble_time_s if keep_rows else np.zeros(0), **tables)


@cache
def plain_figure(name: str):
    """A figure of the plain record, for the tests that only read it."""
    return FIGURES[name](jello_record())


def words_of(figure) -> list[str]:
    return [text.get_text() for text in figure.findobj(Text) if text.get_text().strip()]


def drawn_texts(figure, monkeypatch) -> list[Text]:
    """Texts that drawing the figure really puts on it (an axis holds labels that it does not show)."""
    seen: list[Text] = []
    draw = Text.draw

    def recording(self, renderer, *args, **kwargs):
        if self.get_visible() and self.get_text().strip():
            seen.append(self)
        return draw(self, renderer, *args, **kwargs)

    monkeypatch.setattr(Text, "draw", recording)
    figure.canvas.draw()
    monkeypatch.undo()
    return seen


# --- files -----------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def pictures(tmp_path_factory) -> list:
    """Files of one take, drawn once for the tests that only look at them."""
    return plots.write_plots(jello_record(), tmp_path_factory.mktemp("take") / "new" / "folder")


def test_three_pictures_are_written(pictures):
    assert [path.name for path in pictures] == ["motion.png", "spectrum.png", "wobble.png"]
    for path in pictures:
        with Image.open(path) as picture:
            assert picture.size == (1600, 900)
            colours = sorted(picture.convert("RGB").getcolors(1600 * 900), reverse=True)
        paper = sum(count for count, colour in colours if colour == (255, 255, 255))
        assert 0.1 < paper / (1600 * 900) < 0.97
        assert len(colours) > 100


def test_the_curves_are_on_the_picture_in_their_colours(pictures):
    with Image.open(pictures[0]) as picture:
        pixels = np.asarray(picture.convert("RGB"))
    sway_lane = pixels[290:398, 106:1246]
    for stroke in plots.AXIS_STROKE.values():
        of_colour = (sway_lane == np.round(255 * np.array(to_rgb(stroke.colour)))).all(2)
        assert np.count_nonzero(of_colour.any(0)) > 150  # columns that the curve is seen in


def test_a_folder_that_cannot_be_made_is_an_os_error(tmp_path):
    (tmp_path / "taken").write_text("a file")
    with pytest.raises(OSError, match="taken"):
        plots.write_plots(jello_record(), tmp_path / "taken")


def test_no_window_toolkit_and_no_global_figures():
    code = ("import sys, warnings; warnings.simplefilter('error'); import framegrade.report.plots; "
            "assert 'matplotlib.pyplot' not in sys.modules and 'tkinter' not in sys.modules")
    subprocess.run([sys.executable, "-c", code], check=True, timeout=60)


def test_settings_of_the_user_change_nothing(pictures, tmp_path, monkeypatch):
    monkeypatch.setattr(plots, "FIGURES", plots.FIGURES[1:])  # two of them: time
    theirs = {"font.size": 31, "axes.facecolor": "red", "lines.linewidth": 9, "axes.grid": True, "savefig.dpi": 40,
              "savefig.bbox": "tight", "hatch.linewidth": 5, "font.family": ["serif"], "image.interpolation": "bicubic"}
    with matplotlib.rc_context(theirs):
        before = dict(matplotlib.rcParams)
        paths = plots.write_plots(jello_record(), tmp_path)
        assert dict(matplotlib.rcParams) == before
    assert [path.read_bytes() for path in paths] == [path.read_bytes() for path in pictures[1:]]


def test_threads_can_draw_at_once(pictures, tmp_path, monkeypatch):
    monkeypatch.setattr(plots, "FIGURES", plots.FIGURES[:1])
    takes = [jello_record(), of_nothing(jello_record(), keep_rows=False)]
    together: dict[int, list] = {}

    def draw(k: int) -> None:
        together[k] = plots.write_plots(takes[k], tmp_path / str(k))

    threads = [threading.Thread(target=draw, args=(k,)) for k in range(2)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    alone = plots.write_plots(takes[1], tmp_path / "alone")
    for one, other in zip(together[0] + together[1], [pictures[0], *alone], strict=True):
        assert one.read_bytes() == other.read_bytes()


# --- what is said ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", FIGURES)
def test_the_heading_names_clip_mode_grade_score_and_reason(name):
    words = words_of(FIGURES[name](jello_record(reason="jello of 0.51 px (rms, 1920-wide)")))
    assert "low_pass.mp4" in words
    assert any("1280x720@60" in w and "RESHOOT" in w and "43 of 100" in w for w in words)
    assert "jello of 0.51 px (rms, 1920-wide)" in words


def test_every_axis_that_has_numbers_says_its_unit():
    units = ("px", "mdeg", " Hz", " s", "ms", "%", "of 100")
    figures = [plain_figure(name) for name in FIGURES]
    for figure in [*figures, plots.spectrum_figure(without_readout(jello_record()))]:
        figure.canvas.draw()
        numbered = 0
        for ax, side in itertools.product(figure.axes, "xy"):
            axis = ax.xaxis if side == "x" else ax.yaxis
            ticks = axis.get_major_ticks() if axis.get_visible() else []
            shown = any(tick.label1.get_visible() or tick.label2.get_visible() for tick in ticks)
            if shown and any(c.isdigit() for t in axis.get_ticklabels() for c in t.get_text()):
                numbered += 1
                assert any(unit in axis.get_label_text() for unit in units), axis.get_label_text()
        assert numbered >= 2


def test_lanes_give_each_axis_with_its_figure():
    record = jello_record()
    words = words_of(plots.motion_figure(record))
    for k, axis in enumerate(AXES):
        sway = record.motion[f"sway_{axis}_px"].to_numpy() * 1920 / WIDTH_PX
        assert f"{axis} {np.sqrt(np.mean(sway ** 2)):.3g} px rms" in words
        ends = 100.0 * (k + 1) * record.motion["time_s"].max() * 1920 / WIDTH_PX
        told = next(w for w in words if w.startswith(axis) and w.endswith("px from end to end"))
        assert float(told.split()[1]) == pytest.approx(ends, rel=0.005)
    assert "3.7 px rms, all axes" in words
    assert "worst: 30 at 2.0 s, for its jello" in words
    assert "usable limit: 50" in words
    assert "2 repeated" in words


def test_usable_parts_are_shaded_on_every_lane_and_named():
    figure = plain_figure("motion")
    assert "usable 0.00 to 2.00 s, score 80" in words_of(figure)
    lanes = [ax for ax in figure.axes if ax.get_ylabel()]
    assert len(lanes) == 6
    for ax in lanes:
        spans = [c.get_paths()[0].get_extents() for c in ax.collections if type(c) is PolyCollection]
        assert any(span.x0 == 0.0 and span.x1 == 2.0 for span in spans)
    hatched = [c for c in figure.axes[0].collections if c.get_hatch()]
    assert len(hatched) == 1


def test_faults_stand_at_their_times():
    record = jello_record()
    figure = plots.motion_figure(record)
    lane = next(ax for ax in figure.axes if ax.get_ylabel() == "picture, %")
    marks = [line for line in lane.lines if line.get_marker() == "v"]
    assert np.allclose(marks[0].get_xdata(), np.array([50, 80]) / RATE_HZ)
    frozen = [c for c in lane.collections if isinstance(c, FillBetweenPolyCollection)]
    extent = frozen[0].get_paths()[0].get_extents()
    assert (extent.x0, extent.x1) == pytest.approx((60 / RATE_HZ, 70 / RATE_HZ))
    assert extent.y1 == 40.0


def test_gaps_stand_at_their_times():
    record = jello_record()
    motion = record.motion.copy()
    motion.loc[100, "interval_s"] = 4 / RATE_HZ
    figure = plots.motion_figure(replace(record, motion=motion, extra={}))
    lane = next(ax for ax in figure.axes if ax.get_ylabel() == "picture, %")
    mark = next(line for line in lane.lines if line.get_marker() == "x")
    assert mark.get_xdata() == pytest.approx([100 / RATE_HZ])
    assert "1 gap" in words_of(figure)


def test_windows_without_a_score_are_hatched_on_every_lane():
    record = jello_record()
    windows = record.windows.copy()
    windows.loc[[4, 5], "score"] = np.nan
    figure = plots.motion_figure(replace(record, windows=windows))
    for ax in (ax for ax in figure.axes if ax.get_ylabel()):
        hatched = [patch.get_extents().transformed(ax.transData.inverted()) for patch in ax.patches
                   if patch.get_hatch() == plots.NOT_SCORED["hatch"]]
        assert [(box.x0, box.x1) for box in hatched] == [pytest.approx((2.0, 3.0))]
    assert "not scored: too little measured" in words_of(figure)


def test_the_limit_is_shown_only_where_it_is_known():
    record = jello_record()
    assert plots.usable_limit(record) == (50.0, "usable limit")
    bare = replace(record, extra={})
    assert plots.usable_limit(bare) == (50.0, "default usable limit")
    other = replace(bare, windows=record.windows.assign(usable=False))  # graded with another limit than the default
    assert np.isnan(plots.usable_limit(other)[0])
    assert not any("usable limit" in w for w in words_of(plots.motion_figure(other)))


# --- spectrum --------------------------------------------------------------------------------------------------------


def test_tones_are_named_in_hertz_and_stand_at_their_rms():
    figure = plain_figure("spectrum")
    words = words_of(figure)
    assert "137.3 Hz, 0.42 px" in words
    assert any("137.30 Hz \N{PLUS-MINUS SIGN} 0.01" in w and "31.6 mdeg" in w for w in words)
    panel = figure.axes[0]
    dots = [line for line in panel.lines if line.get_marker() == "o"]
    assert dots[0].get_xdata()[0] == TONE_HZ
    assert dots[0].get_ydata()[0] == pytest.approx(TONE_PX / np.sqrt(2))  # rms of a sinusoid


def test_many_close_tones_keep_their_names_apart(monkeypatch):
    record = jello_record()
    many = pd.concat([record.tones] * 9, ignore_index=True)
    many["frequency_hz"] += 0.6 * np.arange(9)
    many["amplitude_px"] *= np.linspace(1, 0.2, 9)
    figure = plots.spectrum_figure(replace(record, tones=many))
    named = [t for t in drawn_texts(figure, monkeypatch) if t.get_text().endswith(" px") and " Hz, " in t.get_text()]
    assert len(named) == plots.TONES_NAMED
    boxes = sorted((box.x0, box.x1) for box in (Text.get_window_extent(t) for t in named))
    assert all(left[1] <= right[0] for left, right in zip(boxes, boxes[1:]))


def test_band_ticks_are_the_nominal_frequencies():
    figure = plain_figure("spectrum")
    figure.canvas.draw()
    panels = [ax for ax in figure.axes if ax.get_ylabel().endswith("px rms")]
    assert [t.get_text() for t in panels[-1].get_xticklabels()] == NOMINAL_HZ  # IEC 61260-1, ISO 266
    assert panels[-1].get_xticks() == pytest.approx(10 ** (np.arange(5, 30) / 10), rel=1e-9)


def test_blind_intervals_are_hatched_at_multiples_of_the_frame_rate():
    figure = plain_figure("spectrum")
    for panel in figure.axes:
        if not panel.get_ylabel().endswith("px rms"):
            continue
        spans = next(c for c in panel.collections if c.get_hatch() and len(c.get_paths()) > 5)
        extents = [path.get_extents() for path in spans.get_paths()]
        for k in range(1, 16):
            assert any(box.x0 < 60 * k - 2 and 60 * k + 2 < box.x1 for box in extents)
        assert not any(box.x0 < TONE_HZ < box.x1 for box in extents)
    assert any("blind: multiples of the frame rate (60, 120, 180" in w for w in words_of(figure))


def test_levels_below_the_floor_are_marked_at_the_floor():
    figure = plain_figure("spectrum")
    marks = next(line for line in figure.axes[0].lines if line.get_marker() == "v")
    assert marks.get_xdata() == pytest.approx(10 ** (np.arange(27, 30) / 10))  # 500, 630 and 800 Hz
    assert marks.get_ydata() == pytest.approx(0.004)
    # 3.15 Hz lies within the blind interval around 0 Hz: neither a level nor a floor
    assert "blind" in [t.get_text() for t in figure.axes[0].texts]


def test_the_angle_axis_follows_the_focal_length():
    figure = plain_figure("spectrum")
    panels = {ax.get_ylabel(): ax for ax in figure.axes if ax.get_ylabel().endswith("px rms")}
    angles = [ax for ax in figure.axes if ax.get_ylabel() == "mdeg rms"]
    for axis, angle in zip(AXES, angles):
        # angle of a small shift: pinhole camera, atan(px / F); roll turns about the centre, lever half the width
        expected = 1000 * np.degrees(1 / (WIDTH_PX / 2) if axis == "roll" else np.arctan(1 / FOCAL_PX))
        ratio = np.array(angle.get_ylim()) / np.array(panels[f"{axis}, px rms"].get_ylim())
        assert ratio == pytest.approx(expected, rel=1e-4)
    unknown = plots.spectrum_figure(jello_record(hfov_deg=np.nan))
    assert len([ax for ax in unknown.axes if ax.get_ylabel() == "mdeg rms"]) == 1  # roll needs no field of view


def test_without_a_readout_the_candidates_are_named_and_no_single_frequency():
    figure = plots.spectrum_figure(without_readout(jello_record()))
    words = words_of(figure)
    assert any("readout time of this mode is not known" in w for w in words)
    for candidate in ("137.3 Hz", "197.3 Hz", "257.3 Hz"):
        assert candidate in words
    assert any("137.3 Hz (14.0 ms), 197.3 Hz (9.7 ms)" in w.replace("\n", " ") for w in words)
    assert not any(w.startswith("137.3 Hz, ") for w in words)
    dots = next(line for line in figure.axes[0].lines if line.get_marker() == "o")
    assert dots.get_xdata() * dots.get_ydata() == pytest.approx(1e3 * TONE_HZ * READOUT_S)


def test_a_quiet_take_without_a_readout_says_so():
    record = without_readout(jello_record())
    words = words_of(plots.spectrum_figure(replace(record, extra={"candidates": []})))
    assert any("no tone stands out" in w for w in words)


def test_a_folded_tone_is_not_given_a_frequency():
    record = jello_record(readout_ms=0.0)
    found = {"axis": "yaw", "alias_hz": 42.7, "cycles_per_frame": 0.0, "amplitude_px": 0.4,
             "candidates_hz": [17.3, 42.7, 77.3, 102.7, 137.3], "readout_s": [0.0] * 5}
    words = words_of(plots.spectrum_figure(replace(record, tones=record.tones.iloc[:0], extra={"candidates": [found]})))
    assert "appears at 17.3 Hz, 0.4 px" in words  # 42.7 Hz sampled at 60 Hz is 17.3 Hz backwards
    assert any("one of 17.3, 42.7, 77.3, 102.7" in w for w in words)


# --- wobble ----------------------------------------------------------------------------------------------------------


def test_the_picture_of_the_rows_is_the_record():
    record = jello_record(1.4)
    figure = plots.wobble_figure(record)
    picture = next(ax for ax in figure.axes if ax.get_ylabel() == "height in the picture").findobj(AxesImage)[0]
    rgba = picture.get_array()
    limit = plots.colour_limit_px(record.wobble_px, record.wobble_px, WIDTH_PX)
    pairs = len(record.wobble_px)
    for pair, band in itertools.product(range(0, pairs, 7), range(BANDS)):
        shown = rgba[band, int((pair + 0.5) / pairs * rgba.shape[1])]
        value = record.wobble_px[pair, band]
        if np.isnan(value):
            assert shown[3] == 0
        else:
            expected = matplotlib.colormaps["PuOr"]((value + limit) / (2 * limit), bytes=True)
            assert tuple(shown) == tuple(expected)
    assert "not measured" in words_of(figure)
    assert picture.origin == "upper" and tuple(picture.get_extent()) == pytest.approx((0, pairs / RATE_HZ, 0, 1))


def test_rows_by_time_keeps_the_strongest_and_leaves_gaps_open():
    rng = np.random.default_rng(3)
    time = np.sort(rng.uniform(0, 10, 300))
    time = time[(time < 4) | (time > 6)]
    values = rng.normal(size=(len(time), 3))
    values[rng.random(values.shape) < 0.1] = np.nan
    picture = plots.rows_by_time(time, values, 0.0, 10.0, 40)
    assert picture.shape == (3, 40)
    edges = np.linspace(0, 10, 41)
    for column, (low, high) in enumerate(zip(edges, edges[1:])):
        inside = values[(time >= low) & (time < high)]
        if len(inside) >= 2:
            for band in range(3):
                known = inside[:, band][np.isfinite(inside[:, band])]
                expected = known[np.argmax(np.abs(known))] if known.size else np.nan
                assert picture[band, column] == pytest.approx(expected, nan_ok=True)
    assert np.isnan(picture[:, 17:24]).all()  # 4.25 to 6.0 s: frames are missing


def test_the_worst_excerpt_is_where_the_burst_is():
    time = np.arange(1200) / 60
    wobble = np.random.default_rng(2).normal(0, 0.05, (1200, 20))
    wobble[700:790] += np.sin(np.arange(90))[:, None]
    start, end = plots.worst_excerpt(time, wobble)
    assert end - start == pytest.approx(1.5)
    assert start == pytest.approx(700 / 60, abs=0.05)
    # far stronger, but only a sixth of a second of it was measured: that is no picture of a take
    wobble[20:160] = np.nan
    wobble[100:110] = 5 * np.sin(np.arange(20))
    assert plots.worst_excerpt(time, wobble)[0] == pytest.approx(700 / 60, abs=0.05)
    assert plots.worst_excerpt(time[:60], wobble[:60]) == pytest.approx((0.0, 1.0))


def test_the_pole_is_drawn_with_the_stated_exaggeration():
    record = jello_record()
    figure = plots.wobble_figure(record)
    ax = next(ax for ax in figure.axes if any(line.get_linewidth() == 4.5 for line in ax.lines))
    pole = next(line for line in ax.lines if line.get_linewidth() == 4.5)
    strongest = np.nanargmax(np.nanmean(record.wobble_px ** 2, 1))
    rms = np.sqrt(np.nanmean(np.asarray(pole.get_xdata()) ** 2))
    assert rms == pytest.approx(np.sqrt(np.nanmean(record.wobble_px[strongest] ** 2)), rel=0.02)
    assert pole.get_ydata()[0] > pole.get_ydata()[-1]  # the first row is on top
    assert np.nanmax(np.abs(pole.get_xdata())) < ax.get_xlim()[1]
    stated = next(float(w.split()[-3]) for w in words_of(figure) if w.endswith("x larger"))
    assert plots.round_down(stated) == stated
    box = ax.get_window_extent()
    across = box.width / np.ptp(ax.get_xlim())  # screen pixels for a picture pixel sideways
    down = box.height / HEIGHT_PX
    assert across / down == pytest.approx(stated, rel=1e-3)


def test_a_calm_take_looks_calm():
    record = jello_record()
    calm = replace(record, wobble_px=record.wobble_px * 0.01)
    limit = plots.colour_limit_px(calm.wobble_px, calm.wobble_px, WIDTH_PX)
    assert limit >= plots.LEAST_COLOUR_PX1920 * WIDTH_PX / 1920
    picture = plots.wobble_figure(calm).axes[0].findobj(AxesImage)[0].get_array()
    seen = picture[picture[..., 3] > 0][:, :3].astype(float)
    assert np.ptp(seen) < 30  # near the white middle of the map


# --- nothing to show, and too much -----------------------------------------------------------------------------------

HOSTILE = "$x_{\\frac\n\x1b[31m \u202e\N{GRINNING FACE}\u65e5\u672c\udcff $\\notacommand{" + "W" * 300 + ".mp4"


@pytest.mark.parametrize("record", [
    pytest.param(of_nothing(jello_record(), keep_rows=True), id="all NaN"),
    pytest.param(of_nothing(jello_record(), keep_rows=False), id="no rows"),
    pytest.param(make_record(rows=0), id="fake, no rows"),
    pytest.param(make_record(rows=1), id="fake, one row"),
    pytest.param(replace(make_record(rows=3), take={}), id="fake, no figures"),
    pytest.param(jello_record(clip=HOSTILE, reason="$\\frac{ _^" * 60, mode="$^_{"), id="hostile names"),
    pytest.param(without_readout(jello_record(clip=HOSTILE, frame_rate_hz=np.nan)), id="hostile, no readout, no rate"),
])
def test_odd_records_plot_without_a_warning(record, tmp_path):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for path in plots.write_plots(record, tmp_path):
            assert path.stat().st_size > 5000


def test_names_are_shown_as_they_are_not_as_formulas():
    figure = plots.motion_figure(jello_record(clip="$x_{1}$\n.mp4", reason="$a$ px", mode="$b$"))
    words = words_of(figure)
    assert "$x_{1}$\\n.mp4" in words and "$a$ px" in words
    assert not any(t.get_parse_math() for t in figure.findobj(Text) if "$" in t.get_text())


def test_long_names_keep_both_ends():
    assert plots.shortened("abcdefghij", 10) == "abcdefghij"
    assert plots.shortened("abcdefghijk", 7) == "abc\N{HORIZONTAL ELLIPSIS}ijk"
    assert plots.shortened("abcdefghijk", 6) == "abc\N{HORIZONTAL ELLIPSIS}jk"
    name = next(w for w in words_of(plots.motion_figure(jello_record(clip=HOSTILE))) if w.startswith("$x_"))
    assert name.endswith("W.mp4") and "\N{HORIZONTAL ELLIPSIS}" in name


def test_unknown_is_said_not_drawn_as_zero():
    record = of_nothing(jello_record(), keep_rows=True)
    figure = plots.motion_figure(record)
    assert "no figure (rms, all axes)" in words_of(figure) and "no window could be scored" in words_of(figure)
    for ax in figure.axes:
        for line in ax.lines:
            if len(line.get_xdata()) > 2:
                assert not np.isfinite(np.asarray(line.get_ydata(), float)).any()
    assert any("no rows were measured" in w for w in words_of(plots.wobble_figure(record)))


def test_a_long_take_is_drawn_with_few_points_and_keeps_its_peaks():
    record = jello_record(600.0)
    motion = record.motion.copy()
    motion.loc[20_011, "shake_yaw_px"] = 25.0
    figure = plots.motion_figure(replace(record, motion=motion))
    assert max(len(line.get_xdata()) for line in figure.findobj(Line2D)) <= plots.CURVE_SAMPLES
    shake = figure.axes[3]
    assert max(np.nanmax(line.get_ydata()) for line in shake.lines) == pytest.approx(25.0 * 1920 / WIDTH_PX)
    picture = plots.wobble_figure(record)
    assert max(image.get_array().shape[1] for image in picture.findobj(AxesImage)) <= plots.IMAGE_COLUMNS
    assert any("the strongest of about 33 frames" in w for w in words_of(picture))


def test_envelope_holds_every_extreme():
    rng = np.random.default_rng(8)
    values = rng.normal(size=10_007)
    values[2000:2100] = np.nan
    time = np.arange(len(values)) / 60
    t, low, high = plots.envelope(time, values, 480)
    assert len(t) == 480 and np.all(np.diff(t) > 0)
    assert np.nanmin(low) == np.nanmin(values) and np.nanmax(high) == np.nanmax(values)
    edges = np.linspace(0, len(values), 481).astype(int)
    part = np.searchsorted(edges, np.arange(len(values)), "right") - 1
    table = pd.Series(values).groupby(part)  # pandas skips NaN as the envelope does
    assert np.array_equal(low, table.min(), equal_nan=True) and np.array_equal(high, table.max(), equal_nan=True)


def test_labels_are_spread_without_overlap():
    rng = np.random.default_rng(4)
    for _ in range(200):
        count = rng.integers(1, 8)
        widths = rng.uniform(50, 140, count)
        wanted = np.sort(rng.uniform(-50, 1150, count))
        centres = plots.spread_labels(wanted, widths, 0, 1070)
        assert centres[0] - widths[0] / 2 >= -1e-9 and centres[-1] + widths[-1] / 2 <= 1070 + 1e-9
        assert np.all(np.diff(centres) >= (widths[1:] + widths[:-1]) / 2 - 1e-9)
    apart = plots.spread_labels([200, 500, 900], [100, 100, 100], 0, 1070)
    assert apart.tolist() == [200, 500, 900]  # with room, every label stays where it belongs


@pytest.mark.parametrize("value, text", [
    (0.0, "0"), (0.000123, "0.000123"), (0.12345, "0.123"), (9.996, "10"), (31.5, "31.5"), (1234.4, "1234"),
    (-0.5, "-0.5"), (1e6, "1000000"), (np.nan, "not measured"),
])
def test_numbers_have_no_exponent(value, text):
    assert plots.figure_text(value) == text


@pytest.mark.parametrize("value, up, down", [
    (0.333, 0.4, 0.3), (1.0, 1.0, 1.0), (1.05, 1.2, 1.0), (9.9, 10.0, 8.0), (440, 500, 400),
])
def test_round_figures(value, up, down):
    assert plots.round_up(value) == up
    assert plots.round_down(value) == down


# --- can it be read? -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name, record", [
    ("motion", jello_record(clip=HOSTILE, reason="shakes " * 90)),
    ("motion", of_nothing(jello_record(), keep_rows=True)),
    ("motion", jello_record(600.0)),
    ("spectrum", jello_record(clip=HOSTILE, reason="W" * 400)),
    ("spectrum", without_readout(jello_record(clip=HOSTILE))),
    ("wobble", jello_record(clip=HOSTILE, reason="shakes " * 90)),
    ("wobble", jello_record(600.0)),
])
def test_no_text_overlaps_another_or_leaves_the_sheet(name, record, monkeypatch):
    figure = FIGURES[name](record)
    boxes = [(t.get_text(), Text.get_window_extent(t)) for t in drawn_texts(figure, monkeypatch)]
    assert len(boxes) > 20
    for text, box in boxes:
        assert 0 <= box.x0 and box.x1 <= 1600 and 0 <= box.y0 and box.y1 <= 900, text
    for (one, a), (two, b) in itertools.combinations(boxes, 2):
        across = min(a.x1, b.x1) - max(a.x0, b.x0)
        down = min(a.y1, b.y1) - max(a.y0, b.y0)
        # a line's box has room for tall letters and descenders: 2 pixels shared are not seen
        assert across <= 2 or down <= 2, (one, two)


def luminance(colour: str) -> float:
    """Relative luminance of WCAG 2.1 (its definition, with the sRGB curve of IEC 61966-2-1)."""
    channel = np.array(to_rgb(colour))
    linear = np.where(channel <= 0.04045, channel / 12.92, ((channel + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def contrast(one: str, two: str) -> float:
    high, low = sorted((luminance(one), luminance(two)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def test_colours_stand_out_from_the_paper():
    # WCAG 2.1, success criteria 1.4.3 (text, 4.5 : 1) and 1.4.11 (graphical objects, 3 : 1)
    assert contrast("#FFFFFF", "#000000") == pytest.approx(21.0)
    assert contrast(plots.INK, plots.PAPER) > 4.5 and contrast("#4A4A4A", plots.PAPER) > 4.5
    for stroke in plots.AXIS_STROKE.values():
        assert contrast(stroke.colour, plots.PAPER) >= 3.0
    assert contrast(plots.BLUE, plots.USABLE["facecolor"]) >= 3.0


def test_the_palette_is_the_published_one():
    # Wong 2011, Nature Methods 8, 441: RGB (0-255) of the eight colours of Okabe and Ito; from memory, and compared
    # with the "okabe_ito" colours of matplotlib where its release has them
    published = {
        "BLACK": (0, 0, 0), "ORANGE": (230, 159, 0), "SKY_BLUE": (86, 180, 233), "BLUISH_GREEN": (0, 158, 115),
        "YELLOW": (240, 228, 66), "BLUE": (0, 114, 178), "VERMILLION": (213, 94, 0), "REDDISH_PURPLE": (204, 121, 167),
    }
    for name, rgb in published.items():
        assert tuple(round(255 * c) for c in to_rgb(getattr(plots, name))) == rgb
    if "okabe_ito" in matplotlib.color_sequences:
        library = {tuple(round(255 * c) for c in to_rgb(colour)) for colour in matplotlib.color_sequences["okabe_ito"]}
        assert library <= set(published.values())


# Machado, Oliveira, Fernandes (2009), "A physiologically-based model for simulation of color vision deficiency", IEEE
# TVCG 15(6): matrices for severity 1.0, applied to linear RGB. The same as those of the library colorspacious 1.1.2.
DICHROMACY = {
    "deuteranopia": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "protanopia": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
}


def simulated(colour: str, kind: str) -> np.ndarray:
    """sRGB colour as someone with this deficiency sees it."""
    channel = np.array(to_rgb(colour))
    linear = np.where(channel <= 0.04045, channel / 12.92, ((channel + 0.055) / 1.055) ** 2.4)
    seen = np.clip(np.array(DICHROMACY[kind]) @ linear, 0, 1)
    return np.where(seen <= 0.0031308, 12.92 * seen, 1.055 * seen ** (1 / 2.4) - 0.055)


@pytest.mark.parametrize("kind", DICHROMACY)
def test_line_colours_stay_apart_for_colour_blind_eyes(kind):
    assert np.sum(DICHROMACY[kind], axis=1) == pytest.approx(1.0, abs=2e-6)  # white stays white

    def apart(one, two) -> float:
        return float(deltaE_ciede2000(rgb2lab(one), rgb2lab(two)))

    # the simulation does what it should: a red and a green that are far apart come near each other
    red, green = "#C04000", "#608000"
    assert apart(simulated(red, kind), simulated(green, kind)) < 0.6 * apart(to_rgb(red), to_rgb(green))
    colours = [stroke.colour for stroke in plots.AXIS_STROKE.values()]
    for one, two in itertools.combinations(colours, 2):
        # CIEDE2000 of 10 is several times what is just seen side by side (about 1, CIE 142-2001)
        assert apart(simulated(one, kind), simulated(two, kind)) > 10
    for sign in itertools.product(("#7F3B08", "#E08214"), ("#2D004B", "#8073AC")):  # both ends of PuOr, ColorBrewer
        assert apart(simulated(sign[0], kind), simulated(sign[1], kind)) > 10


def test_no_meaning_rests_on_colour_alone():
    strokes = plots.AXIS_STROKE.values()
    assert len({str(stroke.dash) for stroke in strokes}) == len({stroke.marker for stroke in strokes}) == 3
    areas = (plots.USABLE, plots.NOT_SCORED, plots.NOT_MEASURED, plots.FROZEN, plots.BLIND, plots.OVER_THE_TAKE)
    assert len({area["hatch"] for area in areas}) == len(areas)


def test_a_real_recording(tmp_path):
    clip = real_clips()["carphone_distorted"]
    paths = plots.write_plots(measure_clip(clip, MeasureSettings(threads=1)), tmp_path)
    assert all(path.stat().st_size > 20_000 for path in paths)
