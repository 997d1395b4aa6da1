"""Three pictures of a take: its motion over time, its vibration spectrum, and its jello as rows against time.

Each has a function that makes a figure from a record and nothing else; `write_plots` draws all three. Everything goes
through matplotlib's object-oriented interface and its default settings: no window, no global figure list, no settings
file of the user's. A lock covers the settings, which are global to matplotlib, so that threads can draw as well.

Colours are from the palette of Okabe and Ito (2008), "Color Universal Design", with the values that Wong (2011),
"Points of view: Color blindness", Nature Methods 8, 441 prints. The diverging map is PuOr of Harrower and Brewer
(2003), "ColorBrewer.org", The Cartographic Journal 40(1), colour-blind safe. No meaning rests on colour alone: line
style, hatching, marker or a word says it again.
"""

from __future__ import annotations

import textwrap
import threading
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties, findfont, get_font
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle
from matplotlib.ticker import FixedFormatter, FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from framegrade import grading
from framegrade.records import AXES, TakeRecord
from framegrade.report.tables import displayable
from framegrade.screen import px_to_mdeg, roll_px_to_mdeg, to_px1920

WIDTH_PX, HEIGHT_PX, DPI = 1600, 900, 100

# Okabe and Ito 2008, values of Wong 2011
BLACK, ORANGE, SKY_BLUE, BLUISH_GREEN = "#000000", "#E69F00", "#56B4E9", "#009E73"
YELLOW, BLUE, VERMILLION, REDDISH_PURPLE = "#F0E442", "#0072B2", "#D55E00", "#CC79A7"
INK, GREY, PALE, PAPER = "#222222", "#767676", "#E4E4E4", "#FFFFFF"

#: Text sizes, points.
NAME_PT, TEXT_PT, LABEL_PT, SMALL_PT = 17.0, 12.0, 11.0, 10.0
#: A curve with more samples than this is drawn as a band: its least to its greatest value in each of so many parts.
CURVE_SAMPLES, BAND_PARTS = 2400, 480
REASON_LETTERS = 165
IMAGE_COLUMNS = 1090
EXCERPT_S = 1.5
#: The wobble picture's colours never stand for less than this at full strength, so that a calm take looks calm.
LEAST_COLOUR_PX1920 = 0.5
TONES_NAMED, TONES_LISTED = 6, 3
CANDIDATES_SHOWN, CANDIDATES_NAMED = 4, 9
#: From this share of a frame frozen by the encoder the frame is marked.
FROZEN_MARK_PCT = 5.0
#: A band with less of its width outside the blind intervals than this is shown as blind.
LEAST_OBSERVABLE_PCT = 50.0
#: Without a readout, tones weaker than this share of the strongest are only counted.
LEAST_CANDIDATE_SHARE = 0.1


@dataclass(frozen=True)
class Stroke:
    """How one curve is drawn: colour, dash pattern and marker, so that each can be told by any one of them."""

    colour: str
    dash: Any = "-"
    marker: str = "o"
    width: float = 1.3


AXIS_STROKE = {
    "yaw": Stroke(BLUE, "-", "o"),
    "pitch": Stroke(VERMILLION, (0, (5, 1.6)), "s"),
    "roll": Stroke(BLUISH_GREEN, (0, (1.2, 1.2)), "^", 1.8),
}
AXIS_WORDS = {
    "yaw": "moves the picture sideways",
    "pitch": "moves the picture up and down",
    "roll": "tilts it: px at the left and right edge",
}

#: Filled areas, each with its own hatching.
USABLE = {"facecolor": "#CFE6F5", "edgecolor": BLUE, "hatch": "///", "linewidth": 1.0}
NOT_SCORED = {"facecolor": "#EFEFEF", "edgecolor": "#C4C4C4", "hatch": "//", "linewidth": 0}
NOT_MEASURED = {"facecolor": PALE, "edgecolor": "#A8A8A8", "hatch": "////", "linewidth": 0}
FROZEN = {"facecolor": "none", "edgecolor": VERMILLION, "hatch": "....", "linewidth": 0.8}
BLIND = {"facecolor": "#ECECEC", "edgecolor": "#9A9A9A", "hatch": "xxxx", "linewidth": 0}
OVER_THE_TAKE = {"facecolor": "#E3E0EC", "edgecolor": "#8E83B4", "hatch": "...", "linewidth": 0.8}
#: Lines and marks that stand for themselves wherever they are drawn.
LIMIT_LINE = {"color": BLUE, "linestyle": (0, (7, 3)), "linewidth": 1.2}
FLOOR_LINE = {"color": INK, "linestyle": (0, (1.2, 1.6)), "linewidth": 1.4}
FINE_LINE = {"color": "#5A5A5A", "linewidth": 0.7}
WINDOW_LINE = {"color": INK, "linewidth": 2.2}
UNDER_MARK = {"marker": "v", "markersize": 6, "markerfacecolor": PAPER, "markeredgecolor": INK, "linestyle": "none"}
REPEAT_MARK = {"marker": "v", "markersize": 6, "color": VERMILLION, "linestyle": "none"}
GAP_MARK = {"marker": "x", "markersize": 6, "color": BLACK, "linestyle": "none"}
MOMENT_MARK = {"marker": "v", "markersize": 9, "color": INK, "linestyle": "none"}
#: Behind a word that stands on a picture.
LABEL_BOX = {"facecolor": PAPER, "edgecolor": "none", "pad": 2.0}

_LOCK = threading.RLock()
_SETTINGS = {
    key: matplotlib.rcParamsDefault[key] for key in matplotlib.rcParamsDefault
    if not key.startswith(("backend", "interactive", "toolbar"))
} | {
    "figure.dpi": DPI, "font.size": LABEL_PT, "axes.labelsize": LABEL_PT, "xtick.labelsize": SMALL_PT,
    "ytick.labelsize": SMALL_PT, "axes.spines.top": False, "axes.spines.right": False, "axes.edgecolor": GREY,
    "text.color": INK, "axes.labelcolor": INK, "xtick.color": INK, "ytick.color": INK, "hatch.linewidth": 0.7,
    "text.parse_math": False, "axes.axisbelow": True, "agg.path.chunksize": 20000, "lines.dash_capstyle": "butt",
}


@contextmanager
def _house_style() -> Iterator[None]:
    with _LOCK, matplotlib.rc_context(_SETTINGS):
        yield


# --- words and numbers -----------------------------------------------------------------------------------------------


@lru_cache(maxsize=1)
def _font_letters() -> frozenset[int]:
    return frozenset(get_font(findfont(FontProperties(family="DejaVu Sans"))).get_charmap())


def plain_text(text: object) -> str:
    """One line that the font can draw.

    Parameters
    ----------
    text : object

    Returns
    -------
    str
        Control characters escaped; a letter that the font of the plots does not hold (it is matplotlib's own, the same
        on every machine) becomes an empty box.
    """
    letters = _font_letters()
    return "".join(c if ord(c) in letters else "\N{WHITE SQUARE}" for c in displayable(text))


def shortened(text: str, longest: int) -> str:
    """Text with its middle left out if it is longer than `longest` characters: both ends tell file names apart."""
    if len(text) <= longest:
        return text
    tail = (longest - 1) // 2
    return text[:longest - 1 - tail] + "\N{HORIZONTAL ELLIPSIS}" + text[len(text) - tail:]


def figure_text(value: float, digits: int = 3) -> str:
    """A number of `digits` significant digits without an exponent; `not measured` if it is none."""
    if not np.isfinite(value):
        return "not measured"
    if value == 0 or abs(value) >= 10 ** digits:
        return f"{value:.0f}"
    return np.format_float_positional(float(f"{value:.{digits}g}"), trim="-")


def _number(value: Any) -> float:
    """A figure of a record as a float; NaN for what is unknown."""
    try:
        return float(value)
    except (TypeError, ValueError):
        return np.nan


def _column(table: pd.DataFrame, name: str) -> np.ndarray:
    return pd.to_numeric(table[name], errors="coerce").to_numpy(float) if name in table else np.full(len(table), np.nan)


def _rms(values: np.ndarray) -> float:
    good = values[np.isfinite(values)]
    return float(np.sqrt(np.mean(good ** 2))) if good.size else np.nan


# --- pure helpers on arrays ------------------------------------------------------------------------------------------


def envelope(
    time_s: np.ndarray, values: np.ndarray, parts: int = BAND_PARTS
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Least and greatest value of a long curve in each of `parts` equal parts.

    Parameters
    ----------
    time_s, values : ndarray, shape (N,)
        NaN values are left out.
    parts : int

    Returns
    -------
    time_s, low, high : ndarray, shape (min(N, parts),)
        Mid-time, minimum and maximum of each part; NaN for a part without a value.
    """
    edges = np.unique(np.linspace(0, len(values), min(parts, len(values)) + 1).astype(int))[:-1]
    if not len(values):
        return time_s, values, values
    low, high = np.fmin.reduceat(values, edges), np.fmax.reduceat(values, edges)
    count = np.diff(np.append(edges, len(values)))
    return np.add.reduceat(time_s, edges) / count, low, high


def spread_labels(wanted: Sequence[float], widths: Sequence[float], low: float, high: float) -> np.ndarray:
    """Centres for labels side by side without overlap, each as near its wanted place as a simple pass allows.

    Parameters
    ----------
    wanted : sequence of float
        Wanted centres, rising.
    widths : sequence of float
        Width of each label, its gap included; they must fit into `high - low` together.
    low, high : float
        Ends of the line that the labels stand on.

    Returns
    -------
    ndarray
        Centres, rising.
    """
    centres, widths = np.array(wanted, float), np.asarray(widths, float)
    edge = low
    for k in range(len(centres)):
        centres[k] = max(centres[k], edge + widths[k] / 2)
        edge = centres[k] + widths[k] / 2
    edge = high
    for k in range(len(centres) - 1, -1, -1):
        centres[k] = min(centres[k], edge - widths[k] / 2)
        edge = centres[k] - widths[k] / 2
    return centres


def rows_by_time(time_s: np.ndarray, values: np.ndarray, low_s: float, high_s: float, columns: int) -> np.ndarray:
    """Row-by-time picture with even columns from samples at any times.

    Parameters
    ----------
    time_s : ndarray, shape (N,)
        Start of each sample, rising. A sample lasts to the next one, but not over a gap of missing frames.
    values : ndarray, shape (N, bands)
    low_s, high_s : float
        Ends of the picture's time axis.
    columns : int
        Columns of the picture.

    Returns
    -------
    ndarray, shape (bands, columns)
        The sample of each column, or the strongest of them (with its sign) where several fall into one; NaN where
        there is none.
    """
    out = np.full((columns, values.shape[1]), np.nan)
    lasting = end_of(time_s) - time_s[-1]
    edges = np.linspace(low_s, high_s, columns + 1)
    first = np.searchsorted(time_s, edges[:-1])
    last = np.searchsorted(time_s, edges[1:])
    middle = (edges[:-1] + edges[1:]) / 2
    before = np.searchsorted(time_s, middle, side="right") - 1
    single = (last - first < 2) & (before >= 0)
    single[single] &= middle[single] - time_s[before[single]] < 1.5 * lasting
    out[single] = values[before[single]]
    several = np.flatnonzero(last - first >= 2)
    if several.size:
        bounds = np.stack([first[several], last[several]], 1).ravel()
        padded = np.vstack([values, np.full((1, values.shape[1]), np.nan)])
        high = np.fmax.reduceat(padded, bounds, axis=0)[::2]
        low = np.fmin.reduceat(padded, bounds, axis=0)[::2]
        out[several] = np.where(-low > high, low, high)
    return out.T


ROUND_MANTISSAS = (1.0, 1.2, 1.6, 2.0, 2.4, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0)


def round_up(value: float) -> float:
    """Next round figure (`ROUND_MANTISSAS` times a power of ten) that is at least `value`, which is above 0."""
    power = 10.0 ** np.floor(np.log10(value))
    return float(f"{next(m for m in ROUND_MANTISSAS if m * power >= value * (1 - 1e-9)) * power:.6g}")


def round_down(value: float) -> float:
    """Next round figure (`ROUND_MANTISSAS` times a power of ten) that is at most `value`, which is above 0."""
    power = 10.0 ** np.floor(np.log10(value))
    return float(f"{next(m for m in reversed(ROUND_MANTISSAS) if m * power <= value * (1 + 1e-9)) * power:.6g}")


def runs(flags: np.ndarray) -> list[tuple[int, int]]:
    """First and one-past-last index of each run of true flags."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], np.asarray(flags, int), [0]])))
    return list(zip(edges[::2].tolist(), edges[1::2].tolist()))


def end_of(time_s: np.ndarray) -> float:
    """When the last of samples at `time_s` (shape (N,), rising) ends; a single one is taken to last a second."""
    return float(time_s[-1] + (np.median(np.diff(time_s)) if len(time_s) > 1 else 1.0))


def worst_excerpt(time_s: np.ndarray, wobble_px: np.ndarray, length_s: float = EXCERPT_S) -> tuple[float, float]:
    """Start and end of the stretch of `length_s` with the greatest mean square, among those that were mostly measured.

    The whole take if it is shorter.

    Parameters
    ----------
    time_s : ndarray, shape (N,)
    wobble_px : ndarray, shape (N, bands)
        NaN where not measured.
    """
    end = end_of(time_s)
    if end - time_s[0] <= length_s:
        return float(time_s[0]), end
    power, known = _power_per_pair(wobble_px)
    total = np.append(0.0, np.cumsum(np.where(known, power, 0)))
    count = np.append(0, np.cumsum(known))
    first = np.arange(np.searchsorted(time_s, end - length_s, side="right"))
    last = np.searchsorted(time_s, time_s[first] + length_s)
    known_in = count[last] - count[first]
    mean = (total[last] - total[first]) / np.maximum(known_in, 1)
    # a stretch of which little was measured is no picture of anything, however strong the little is
    mean = np.where(known_in >= 0.6 * known_in.max(), mean, -1.0)
    start = float(time_s[first[np.argmax(mean)]])
    return start, start + length_s


def _power_per_pair(wobble_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Mean square over the measured bands of each pair, and which pairs have most of the bands that the take has."""
    have = np.isfinite(wobble_px)
    count = have.sum(1)
    power = np.where(have, wobble_px, 0.0) ** 2
    typical = np.median(count[count > 0]) if count.any() else np.inf
    return power.sum(1) / np.maximum(count, 1), count >= 0.7 * typical


# --- the sheet: everything is placed in pixels from the top left corner ----------------------------------------------


def _sheet() -> Figure:
    figure = Figure(figsize=(WIDTH_PX / DPI, HEIGHT_PX / DPI), dpi=DPI, facecolor=PAPER)
    FigureCanvasAgg(figure)
    return figure


def _axes(figure: Figure, left: float, top: float, width: float, height: float, **kwargs) -> Axes:
    box = (left / WIDTH_PX, 1 - (top + height) / HEIGHT_PX, width / WIDTH_PX, height / HEIGHT_PX)
    return figure.add_axes(box, **kwargs)


def _say(figure: Figure, x: float, y: float, text: str, size: float = SMALL_PT, **kwargs):
    """Text with its top left corner (or as `ha`, `va` say) at a pixel."""
    return figure.text(x / WIDTH_PX, 1 - y / HEIGHT_PX, text, fontsize=size, **({"va": "top"} | kwargs))


def _swatch(figure: Figure, x: float, y: float, width: float = 26, **kwargs) -> None:
    """A short sample of a line (or a single marker, for a width of 0) at a pixel."""
    figure.add_artist(Line2D([x / WIDTH_PX, (x + width) / WIDTH_PX], [1 - y / HEIGHT_PX] * 2, **kwargs))


def _block(figure: Figure, x: float, y: float, width: float, height: float, **kwargs) -> None:
    """A filled sample at a pixel."""
    figure.add_artist(Rectangle((x / WIDTH_PX, 1 - (y + height) / HEIGHT_PX), width / WIDTH_PX, height / HEIGHT_PX,
                                transform=figure.transFigure, **kwargs))


def _text_width_px(figure: Figure, text: str, size: float, weight: str = "normal") -> float:
    font = FontProperties(family="DejaVu Sans", size=size, weight=weight)
    return figure.canvas.get_renderer().get_text_width_height_descent(text, font, False)[0]


def _fitted(figure: Figure, text: str, size: float, weight: str, width: float) -> str:
    """Text shortened in the middle until it is at most `width` pixels wide."""
    text = shortened(text, 400)  # more letters than fit in any font size used here
    if _text_width_px(figure, text, size, weight) <= width:
        return text
    fits, too_long = 3, len(text)
    while too_long - fits > 1:
        middle = (fits + too_long) // 2
        if _text_width_px(figure, shortened(text, middle), size, weight) <= width:
            fits = middle
        else:
            too_long = middle
    return shortened(text, fits)


def _heading(figure: Figure, record: TakeRecord, subject: str) -> None:
    """What every sheet says on top: the clip, what is shown, mode, grade, score and the reason."""
    take = record.take
    room = WIDTH_PX - 100 - _text_width_px(figure, subject, TEXT_PT + 1)
    name = _fitted(figure, plain_text(take.get("clip", "")), NAME_PT, "bold", room)
    _say(figure, 24, 14, name, NAME_PT, weight="bold")
    _say(figure, WIDTH_PX - 24, 18, subject, TEXT_PT + 1, ha="right")
    score = _number(take.get("score"))
    grade = take.get("grade")
    verdict = "not graded" if not isinstance(grade, str) else \
        f"grade: {plain_text(grade).upper()}" + (f", score {score:.0f} of 100" if np.isfinite(score) else "")
    mode = take.get("mode")
    parts = [plain_text(mode) if isinstance(mode, str) else "mode unknown", verdict]
    _say(figure, 24, 48, "   |   ".join(parts), TEXT_PT, weight="bold")
    reason = plain_text(take.get("reason") or "no reason given")
    lines = textwrap.wrap(reason, REASON_LETTERS, max_lines=2, placeholder=" \N{HORIZONTAL ELLIPSIS}")
    lines = [_fitted(figure, line, TEXT_PT, "normal", WIDTH_PX - 48) for line in lines]
    _say(figure, 24, 73, "\n".join(lines), TEXT_PT, linespacing=1.25)


def _apology(figure: Figure, lines: Iterable[str], top: float = 300) -> None:
    """Why there is nothing to draw, in words."""
    _say(figure, WIDTH_PX / 2, top, "\n".join(lines), TEXT_PT + 1, ha="center", linespacing=1.6)


def _nothing_hatch(ax: Axes) -> None:
    """Grey hatching behind everything: what shows through was not measured."""
    ax.add_patch(Rectangle((0, 0), 1, 1, transform=ax.transAxes, zorder=0, **NOT_MEASURED))


# --- motion ----------------------------------------------------------------------------------------------------------

_LEFT, _LANE_WIDTH, _ASIDE = 106, 1140, 1266


def motion_figure(record: TakeRecord) -> Figure:
    """The take over time: travel, sway, shake, jello, score and picture faults, a lane each, on one time axis.

    Parameters
    ----------
    record : TakeRecord

    Returns
    -------
    matplotlib.figure.Figure
        1600 x 900 pixels. Motion is in pixels of a 1920-wide picture; every lane has its own scale.
    """
    with _house_style():
        figure = _sheet()
        _heading(figure, record, "Motion over time")
        motion, windows = record.motion, record.windows
        time = _column(motion, "time_s")
        if not np.isfinite(time).any():
            _apology(figure, ["There is no motion to draw: no frames were measured."])
            return figure
        end = end_of(time[np.isfinite(time)])
        start = float(min(np.nanmin(time), 0.0))
        top, lanes = 132, []
        strip = _axes(figure, _LEFT, top, _LANE_WIDTH, 26)
        _usable_strip(figure, strip, record, start, end)
        top += 38
        width = _number(record.take.get("width_px"))
        scale = float(to_px1920(1.0, width)) if width > 0 else np.nan
        for name, words, least in (("travel", "below 0.5 Hz: the intended motion", 4.0), ("sway", "0.5 to 3 Hz", 2.0),
                                   ("shake", "whole picture, faster than 3 Hz", 0.5)):
            ax = _axes(figure, _LEFT, top, _LANE_WIDTH, 108)
            _path_lane(figure, ax, record, name, words, time, scale, least, top)
            lanes.append(ax)
            top += 119
        ax = _axes(figure, _LEFT, top, _LANE_WIDTH, 108)
        _jello_lane(figure, ax, record, time, scale, top)
        lanes.append(ax)
        top += 119
        ax = _axes(figure, _LEFT, top, _LANE_WIDTH, 108)
        _score_lane(figure, ax, record, windows, top)
        lanes.append(ax)
        top += 119
        ax = _axes(figure, _LEFT, top, _LANE_WIDTH, 58)
        _picture_lane(figure, ax, record, time, top)
        lanes.append(ax)
        ranges = [(a, b) for a, b in zip(_column(record.ranges, "in_s"), _column(record.ranges, "out_s")) if b > a]
        edges, unscored = _window_edges(windows), runs(~np.isfinite(_column(windows, "score")))
        for ax in lanes:
            ax.set_xlim(start, end)
            ax.xaxis.set_major_locator(MaxNLocator(12))
            ax.grid(axis="x", color=PALE, linewidth=0.8)
            ax.yaxis.set_label_coords(-74 / _LANE_WIDTH, 0.5)
            if ranges:
                ax.broken_barh([(a, b - a) for a, b in ranges], (0, 1), transform=ax.get_xaxis_transform(),
                               facecolor=SKY_BLUE, alpha=0.13, linewidth=0, zorder=0)
            for first, last in unscored:
                ax.axvspan(edges[first], edges[last], zorder=0.5, **NOT_SCORED)
            if ax is not lanes[-1]:
                ax.tick_params(axis="x", length=0, labelbottom=False)
                ax.spines["bottom"].set_visible(False)
        lanes[-1].set_xlabel("time in s")
        return figure


def _usable_strip(figure: Figure, ax: Axes, record: TakeRecord, start: float, end: float) -> None:
    ax.set_xlim(start, end)
    ax.set_ylim(0, 1)
    ax.xaxis.set_major_locator(NullLocator())
    ax.yaxis.set_major_locator(NullLocator())
    for side in ("left", "bottom"):
        ax.spines[side].set_visible(False)
    ax.add_patch(Rectangle((0, 0), 1, 1, transform=ax.transAxes, facecolor="#F4F4F4", linewidth=0))
    ranges = record.ranges
    spans = zip(_column(ranges, "in_s"), _column(ranges, "out_s"), _column(ranges, "score"))
    spans = [(a, b, score) for a, b, score in spans if b > a]
    if spans:
        ax.broken_barh([(a, b - a) for a, b, _ in spans], (0, 1), **USABLE)
    per_s = _LANE_WIDTH / (end - start)
    for a, b, score in spans:
        for text in (f"usable {a:.2f} to {b:.2f} s, score {score:.0f}", f"{a:.1f} to {b:.1f} s", f"{b - a:.1f} s"):
            if _text_width_px(figure, text, SMALL_PT) + 16 < (b - a) * per_s:
                ax.text((a + b) / 2, 0.48, text, ha="center", va="center", fontsize=SMALL_PT,
                        bbox=LABEL_BOX | {"facecolor": USABLE["facecolor"]})
                break
    if not spans:
        judged = isinstance(record.take.get("grade"), str)
        ax.text((start + end) / 2, 0.48, "no usable part" if judged else "not graded, so no usable part is marked",
                ha="center", va="center", fontsize=SMALL_PT)
    total = _number(record.take.get("usable_s"))
    _block(figure, _ASIDE, 138, 26, 14, **USABLE)
    _say(figure, _ASIDE + 34, 145, f"usable: {figure_text(total)} s" if np.isfinite(total) else "usable", va="center")


def _aside(figure: Figure, top: float, title: str, words: str, figure_line: str = "") -> float:
    """Name of a lane and its figure beside it; returns where the next line goes."""
    _say(figure, _ASIDE, top, title, LABEL_PT, weight="bold")
    beside = _ASIDE + _text_width_px(figure, title, LABEL_PT, "bold") + 8
    _say(figure, beside, top + 1, words, SMALL_PT, color="#4A4A4A")
    if figure_line:
        _say(figure, _ASIDE, top + 19, figure_line, LABEL_PT)
        return top + 40
    return top + 22


def _px(value: float, what: str) -> str:
    return f"{figure_text(value)} px {what}" if np.isfinite(value) else f"no figure ({what})"


def _path_lane(figure: Figure, ax: Axes, record: TakeRecord, name: str, words: str, time: np.ndarray, scale: float,
               least: float, top: float) -> None:
    """Yaw, pitch and roll of one part of the whole-picture motion."""
    series = {axis: _column(record.motion, f"{name}_{axis}_px") * scale for axis in AXES}
    line = "" if name == "travel" else _px(_number(record.take.get(f"{name}_px1920")), "rms, all axes")
    y = _aside(figure, top, name.capitalize(), words, line)
    # the widest curve goes to the back, so that the others show before it
    for order, axis in enumerate(sorted(AXES, key=lambda a: -np.nan_to_num(_rms(series[a])))):
        _curve(ax, time, series[axis], AXIS_STROKE[axis], 3 + order)
    for axis in AXES:
        stroke, values = AXIS_STROKE[axis], series[axis][np.isfinite(series[axis])]
        size = _px(np.ptp(values) if values.size else np.nan, "from end to end") if name == "travel" \
            else _px(_rms(values), "rms")
        _swatch(figure, _ASIDE, y + 8, color=stroke.colour, linestyle=stroke.dash, linewidth=stroke.width + 0.7)
        _say(figure, _ASIDE + 34, y + 8, f"{axis} {size}", va="center")
        y += 18
    every = np.concatenate(list(series.values()))
    every = every[np.isfinite(every)]
    if not every.size:
        _nothing_hatch(ax)
    middle = (every.max() + every.min()) / 2 if name == "travel" and every.size else 0.0
    half = np.abs(every - middle).max() if every.size else 0.0
    half = 1.08 * max(half, least)
    ax.set_ylim(middle - half, middle + half)
    ax.yaxis.set_major_locator(MaxNLocator(4))
    ax.axhline(0, color=GREY, linewidth=0.6, zorder=1)
    ax.set_ylabel("px, 1920-wide", fontsize=SMALL_PT)


def _curve(ax: Axes, time: np.ndarray, values: np.ndarray, stroke: Stroke, zorder: float) -> None:
    if not np.isfinite(values).any():
        return
    if len(values) <= CURVE_SAMPLES:
        ax.plot(time, values, color=stroke.colour, linestyle=stroke.dash, linewidth=stroke.width, zorder=zorder)
        return
    t, low, high = envelope(time, values)
    ax.fill_between(t, low, high, color=stroke.colour, alpha=0.4, linewidth=0, zorder=zorder)
    for edge in (low, high):
        ax.plot(t, edge, color=stroke.colour, linestyle=stroke.dash, linewidth=stroke.width, zorder=zorder)


def _window_edges(windows: pd.DataFrame) -> np.ndarray:
    start, end = _column(windows, "start_s"), _column(windows, "end_s")
    return np.append(start, end[-1:])


def _window_steps(ax: Axes, windows: pd.DataFrame, values: np.ndarray, **kwargs) -> None:
    edges = _window_edges(windows)
    if len(values) and np.isfinite(edges).all() and np.isfinite(values).any() and (np.diff(edges) > 0).all():
        ax.stairs(values, edges, **({"baseline": None} | kwargs))


def _jello_lane(figure: Figure, ax: Axes, record: TakeRecord, time: np.ndarray, scale: float, top: float) -> None:
    """Jello of each frame and, as graded, of each window."""
    frames = _column(record.motion, "jello_px") * scale
    graded = _column(record.windows, "jello_px1920")
    total = _px(_number(record.take.get("jello_px1920")), "rms, all axes")
    y = _aside(figure, top, "Jello", "rows against each other", total)
    _curve(ax, time, frames, Stroke(GREY, "-", width=0.8), 3)
    _window_steps(ax, record.windows, graded, zorder=5, **WINDOW_LINE)
    _swatch(figure, _ASIDE, y + 8, **WINDOW_LINE)
    _say(figure, _ASIDE + 34, y + 8, "each window, as graded", va="center")
    _swatch(figure, _ASIDE, y + 26, color=GREY, linewidth=0.8)
    _say(figure, _ASIDE + 34, y + 26, "each frame, noise included", va="center")
    every = np.concatenate([frames, graded])
    every = every[np.isfinite(every)]
    if not every.size:
        _nothing_hatch(ax)
    ax.set_ylim(0, max(1.08 * every.max(), 0.3) if every.size else 0.3)
    ax.yaxis.set_major_locator(MaxNLocator(4))
    ax.set_ylabel("px, 1920-wide", fontsize=SMALL_PT)


def usable_limit(record: TakeRecord) -> tuple[float, str]:
    """Least score of a usable window and how sure it is.

    The limit that a take was graded with stands in `extra["usable_score"]`. A record without it is shown with the
    default limit if its windows agree with that, and without a limit (NaN) otherwise.
    """
    given = _number(record.extra.get("usable_score"))
    if np.isfinite(given):
        return given, "usable limit"
    default = grading.load_limits(None).usable_score
    score = _column(record.windows, "score")
    usable = record.windows["usable"].to_numpy(bool) if "usable" in record.windows else np.zeros(len(score), bool)
    known = np.isfinite(score)
    agrees = known.any() and np.array_equal(score[known] >= default, usable[known])
    return (default, "default usable limit") if agrees else (np.nan, "")


def _worst_words(windows: pd.DataFrame, worst: int, score: np.ndarray, edges: np.ndarray) -> str:
    component = windows["component"].iloc[worst]
    why = f", for its {plain_text(component)}" if isinstance(component, str) else ""
    return f"worst: {score[worst]:.0f} at {edges[worst]:.1f} s{why}"


def _score_lane(figure: Figure, ax: Axes, record: TakeRecord, windows: pd.DataFrame, top: float) -> None:
    """Score of each window, and the limit of a usable one."""
    score, edges = _column(windows, "score"), _window_edges(windows)
    known = np.isfinite(score)
    ax.set_ylim(0, 104)
    ax.yaxis.set_major_locator(FixedLocator([0, 25, 50, 75, 100]))
    ax.set_ylabel("score, of 100", fontsize=SMALL_PT)
    _window_steps(ax, windows, score, zorder=5, **WINDOW_LINE)
    limit, limit_words = usable_limit(record)
    worst = int(np.nanargmin(score)) if known.any() else None
    words = "" if worst is None else _worst_words(windows, worst, score, edges)
    y = _aside(figure, top, "Score", "of each window", words)
    if worst is None:
        _nothing_hatch(ax)
        _say(figure, _ASIDE, y, "no window could be scored", SMALL_PT)
        return
    if np.isfinite(limit):
        ax.axhline(limit, zorder=4, **LIMIT_LINE)
        _swatch(figure, _ASIDE, y + 8, **LIMIT_LINE)
        _say(figure, _ASIDE + 34, y + 8, f"{limit_words}: {limit:g}", va="center")
        y += 18
    if not known.all():
        _block(figure, _ASIDE, y + 2, 26, 12, **NOT_SCORED)
        _say(figure, _ASIDE + 34, y + 8, "not scored: too little measured", va="center")


def _picture_lane(figure: Figure, ax: Axes, record: TakeRecord, time: np.ndarray, top: float) -> None:
    """How much of the picture was measured, and frames that are repeated, missing or frozen."""
    motion = record.motion
    measured, frozen = _column(motion, "measured_pct"), _column(motion, "frozen_pct")
    interval, repeated = _column(motion, "interval_s"), _column(motion, "repeated") > 0
    ax.set_ylim(0, 128)
    ax.yaxis.set_major_locator(FixedLocator([0, 50, 100]))
    ax.set_ylabel("picture, %", fontsize=SMALL_PT)
    _curve(ax, time, measured, Stroke(INK, "-", width=1.1), 3)
    if np.isfinite(frozen).any() and np.nanmax(frozen) >= FROZEN_MARK_PCT:
        t, _, high = envelope(time, frozen)
        ax.fill_between(t, 0, high, where=high >= FROZEN_MARK_PCT, zorder=4, **FROZEN)
    gap = interval > 1.5 * np.nanmedian(interval) if np.isfinite(interval).any() else np.zeros(len(time), bool)
    ax.plot(time[repeated], np.full(repeated.sum(), 115), zorder=6, **REPEAT_MARK)
    ax.plot(time[gap], np.full(gap.sum(), 115), zorder=6, **GAP_MARK)
    y = _aside(figure, top - 2, "Picture", "")
    _swatch(figure, _ASIDE + 70, top + 6, color=INK, linewidth=1.1)
    share = _number(record.take.get("measured_pct"))
    words = f"measured: {figure_text(share)} %" if np.isfinite(share) else "measured part"
    _say(figure, _ASIDE + 104, top + 6, words, va="center")
    dropped = _number(record.extra.get("dropped_gaps"))
    dropped = int(gap.sum()) if not np.isfinite(dropped) else int(dropped)
    _swatch(figure, _ASIDE + 13, y + 8, 0, **REPEAT_MARK)
    _say(figure, _ASIDE + 34, y + 8, f"{int(repeated.sum())} repeated", va="center")
    _swatch(figure, _ASIDE + 143, y + 8, 0, **GAP_MARK)
    _say(figure, _ASIDE + 160, y + 8, f"{dropped} gap{'s' * (dropped != 1)}", va="center")
    mean = float(np.mean(frozen[np.isfinite(frozen)])) if np.isfinite(frozen).any() else np.nan
    words = f"{figure_text(mean, 2)} %" if np.isfinite(mean) else "not known"
    _block(figure, _ASIDE, y + 20, 26, 12, **FROZEN)
    _say(figure, _ASIDE + 34, y + 26, f"frozen by the encoder: {words}", va="center")


# --- spectrum --------------------------------------------------------------------------------------------------------

_BAND_LEFT, _BAND_WIDTH, _BAND_ASIDE = 96, 1070, 1262


def spectrum_figure(record: TakeRecord) -> Figure:
    """The vibration spectrum: one-third-octave levels of each axis with their floor, blind intervals and named tones.

    Parameters
    ----------
    record : TakeRecord

    Returns
    -------
    matplotlib.figure.Figure
        1600 x 900 pixels. Without a readout time there is no spectrum; the figure says so and shows which frequency
        each tone would have for each readout time that fits.
    """
    with _house_style():
        figure = _sheet()
        if len(record.spectrum):
            _heading(figure, record, "Vibration spectrum of the camera")
            _levels(figure, record)
        else:
            _heading(figure, record, "Vibration: frequencies not known")
            _candidates(figure, record)
        return figure


def _levels(figure: Figure, record: TakeRecord) -> None:
    spectrum = record.spectrum
    low, high = _column(spectrum, "low_hz"), _column(spectrum, "high_hz")
    tones = record.tones
    seen = spectrum[~(_column(spectrum, "observable_pct") < LEAST_OBSERVABLE_PCT)]
    of_tones = _column(tones, "amplitude_px") / np.sqrt(2)
    rms = np.concatenate([_column(seen, "level_px"), _column(seen, "floor_px"), of_tones])
    rms = rms[np.isfinite(rms) & (rms > 0)]
    limits = (float(rms.min()) / 1.6, float(rms.max()) * 14) if rms.size else (1e-3, 1.0)
    limits = (min(limits[0], limits[1] / 1e3), limits[1])
    span = (float(np.nanmin(low)), float(np.nanmax(high)))
    span = span if span[0] < span[1] else (0.9 * span[0], 1.1 * span[1])
    panels = []
    for number, axis in enumerate(AXES):
        ax = _axes(figure, _BAND_LEFT, 132 + number * 212, _BAND_WIDTH, 198)
        ax.set_xscale("log")
        ax.set_yscale("log")
        ax.set_xlim(*span)
        ax.set_ylim(*limits)
        _log_ticks(ax, limits)
        _nominal_ticks(ax, spectrum, labelled=number == 2)
        ax.grid(axis="y", color=PALE, linewidth=0.8)
        ax.set_ylabel(f"{axis}, px rms")
        ax.yaxis.set_label_coords(-60 / _BAND_WIDTH, 0.5)
        _level_panel(ax, record, axis, limits)
        _angle_axis(ax, record, axis, limits)
        _name_tones(figure, ax, record, axis, span, limits)
        _tone_list(figure, record, axis, 132 + number * 212)
        panels.append(ax)
    panels[-1].set_xlabel("nominal mid-band frequency in Hz, one-third-octave bands (IEC 61260-1)")
    _spectrum_key(figure, record)


def _log_ticks(ax: Axes, limits: tuple[float, float]) -> None:
    decades = np.arange(np.ceil(np.log10(limits[0]) - 1e-9), np.floor(np.log10(limits[1]) + 1e-9) + 1)
    ax.yaxis.set_major_locator(FixedLocator(10.0 ** decades))
    ax.yaxis.set_minor_locator(NullLocator())
    ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: figure_text(value, 2)))


def _nominal_ticks(ax: Axes, spectrum: pd.DataFrame, labelled: bool) -> None:
    bands = spectrum.drop_duplicates("band_hz").sort_values("band_hz")
    nominal = _column(bands, "band_hz")
    ax.xaxis.set_major_locator(FixedLocator(np.sqrt(_column(bands, "low_hz") * _column(bands, "high_hz"))))
    ax.xaxis.set_minor_locator(NullLocator())
    ax.xaxis.set_major_formatter(FixedFormatter([figure_text(f, 4) for f in nominal]))
    if not labelled:
        ax.tick_params(axis="x", labelbottom=False)


def _level_panel(ax: Axes, record: TakeRecord, axis: str, limits: tuple[float, float]) -> None:
    stroke = AXIS_STROKE[axis]
    density = record.density[record.density["axis"] == axis] if len(record.density) else record.density
    frequency = _column(density, "frequency_hz")
    fine, noise = _column(density, "level_px2_per_hz"), _column(density, "floor_px2_per_hz")
    seen = density["observable"].to_numpy(bool) if len(density) else np.zeros(0, bool)
    if len(frequency) > 1:
        half = (frequency[1] - frequency[0]) / 2
        fine = np.sqrt(np.where(seen & (fine > np.nan_to_num(noise)), fine, np.nan))
        ax.plot(frequency, fine, zorder=2.5, **FINE_LINE)
        blind = [(frequency[a] - half, frequency[b - 1] + half) for a, b in runs(~seen)]
        if blind:
            spans = [(a, b - a) for a, b in blind]
            ax.broken_barh(spans, (0, 1), transform=ax.get_xaxis_transform(), zorder=1, **BLIND)
    table = record.spectrum[record.spectrum["axis"] == axis].sort_values("band_hz")
    level, floor = _column(table, "level_px"), _column(table, "floor_px")
    if not (np.isfinite(level) | np.isfinite(floor)).any():
        ax.text(0.5, 0.5, "not measured", transform=ax.transAxes, ha="center", va="center", fontsize=TEXT_PT, zorder=5,
                bbox=LABEL_BOX)
        return
    low, high = _column(table, "low_hz"), _column(table, "high_hz")
    edges = np.append(low, high[-1])
    # the level of a band that is mostly blind is that of its small seen part: no figure to compare others with
    hidden = _column(table, "observable_pct") < LEAST_OBSERVABLE_PCT
    level, floor = np.where(hidden, np.nan, level), np.where(hidden, np.nan, floor)
    if np.isfinite(level).any():
        ax.stairs(level, edges, baseline=limits[0], fill=True, color=stroke.colour, alpha=0.22, linewidth=0, zorder=2)
        ax.stairs(level, edges, baseline=None, color=stroke.colour, linewidth=1.8, zorder=4)
    if np.isfinite(floor).any():
        ax.stairs(floor, edges, baseline=None, zorder=3, **FLOOR_LINE)
    under = ~np.isfinite(level) & np.isfinite(floor)
    ax.plot(np.sqrt(low * high)[under], floor[under], zorder=5, **UNDER_MARK)
    for a, b in zip(low[hidden], high[hidden]):
        ax.text(np.sqrt(a * b), 0.5, "blind", transform=ax.get_xaxis_transform(), ha="center", va="center", rotation=90,
                fontsize=SMALL_PT, zorder=3, bbox=LABEL_BOX)


def _mdeg_per_px(record: TakeRecord, axis: str) -> float:
    """Millidegrees for one pixel, at small angles; NaN where the field of view is needed and not known."""
    width = _number(record.take.get("width_px"))
    if not width > 0:
        return np.nan
    if axis == "roll":
        return roll_px_to_mdeg(1.0, width)
    known = np.isfinite(_number(record.take.get("hfov_deg")))
    focal = _number(record.extra.get("focal_px"))
    return px_to_mdeg(1.0, focal) if known and np.isfinite(focal) else np.nan


def _angle_axis(ax: Axes, record: TakeRecord, axis: str, limits: tuple[float, float]) -> None:
    per_px = _mdeg_per_px(record, axis)
    if not np.isfinite(per_px):
        return
    angle = ax.twinx()
    angle.set_yscale("log")
    scaled = (limits[0] * per_px, limits[1] * per_px)
    angle.set_ylim(*scaled)
    _log_ticks(angle, scaled)
    angle.xaxis.set_visible(False)
    angle.spines["right"].set_visible(True)
    angle.set_ylabel("mdeg rms")
    angle.yaxis.set_label_coords(1 + 62 / _BAND_WIDTH, 0.5)


@dataclass(frozen=True)
class _Mark:
    """A tone to be named in a panel."""

    frequency_hz: float
    amplitude_px: float
    label: str


def _marks(record: TakeRecord, axis: str) -> list[_Mark]:
    """Tones of one axis, strongest first; those of a folded spectrum stand where they appear."""
    own = record.tones[record.tones["axis"] == axis] if len(record.tones) else record.tones
    frequency, amplitude = _column(own, "frequency_hz"), _column(own, "amplitude_px")
    marks = [_Mark(f, a, f"{f:.1f} Hz, {figure_text(a, 2)} px") for f, a in zip(frequency, amplitude)
             if np.isfinite(f) and a > 0]
    rate = _number(record.take.get("frame_rate_hz"))
    for found in record.extra.get("candidates") or ():
        alias, amplitude = _number(found.get("alias_hz")), _number(found.get("amplitude_px"))
        if found.get("axis") == axis and np.isfinite(alias) and amplitude > 0:
            place = abs(alias - rate) if alias > rate / 2 else alias
            marks.append(_Mark(place, amplitude, f"appears at {place:.1f} Hz, {figure_text(amplitude, 2)} px"))
    return sorted(marks, key=lambda m: -m.amplitude_px)


def _name_tones(figure: Figure, ax: Axes, record: TakeRecord, axis: str, span: tuple[float, float],
                limits: tuple[float, float]) -> None:
    """Mark tones with a stem, and the strongest of them with their name on top of the panel."""
    inside = [m for m in _marks(record, axis) if span[0] <= m.frequency_hz <= span[1]]
    chosen: list[_Mark] = []
    room = _BAND_WIDTH - 12.0
    for mark in inside[:TONES_NAMED]:
        width = _text_width_px(figure, mark.label, LABEL_PT, "bold") + 14
        if width <= room:
            chosen.append(mark)
            room -= width
    chosen.sort(key=lambda m: m.frequency_hz)
    scale = _BAND_WIDTH / np.log(span[1] / span[0])
    wanted = [np.log(m.frequency_hz / span[0]) * scale for m in chosen]
    widths = [_text_width_px(figure, m.label, LABEL_PT, "bold") + 14 for m in chosen]
    stroke = AXIS_STROKE[axis]
    for mark in inside:
        rms = mark.amplitude_px / np.sqrt(2)
        ax.plot([mark.frequency_hz] * 2, [limits[0], rms], color=INK, linewidth=1.2, zorder=6)
        ax.plot([mark.frequency_hz], [rms], marker=stroke.marker, markersize=7.5, color=stroke.colour,
                markeredgecolor=INK, zorder=7)
    for mark, centre in zip(chosen, spread_labels(wanted, widths, 0, _BAND_WIDTH)):
        ax.annotate(mark.label, xy=(mark.frequency_hz, mark.amplitude_px / np.sqrt(2)),
                    xytext=(centre / _BAND_WIDTH, 0.985), textcoords="axes fraction", ha="center", va="top",
                    fontsize=LABEL_PT, weight="bold", zorder=9, bbox=LABEL_BOX | {"alpha": 0.9},
                    arrowprops={"arrowstyle": "-", "color": INK, "linewidth": 0.8, "shrinkA": 1, "shrinkB": 5})


def _tone_list(figure: Figure, record: TakeRecord, axis: str, top: float) -> None:
    """What is known of the tones of one axis, strongest first, beside its panel."""
    _say(figure, _BAND_ASIDE, top, axis.capitalize(), LABEL_PT, weight="bold")
    _say(figure, _BAND_ASIDE, top + 19, AXIS_WORDS[axis], SMALL_PT, color="#4A4A4A")
    y = top + 44
    entries = _tone_entries(record, axis)
    for entry in entries[:TONES_LISTED]:
        _say(figure, _BAND_ASIDE, y, entry, SMALL_PT, linespacing=1.3)
        y += 19 * (entry.count("\n") + 1)
    if not entries:
        _say(figure, _BAND_ASIDE, y, "no tone stands out", SMALL_PT)
    elif len(entries) > TONES_LISTED:
        _say(figure, _BAND_ASIDE, y, f"and {len(entries) - TONES_LISTED} more: see tones.csv", SMALL_PT)


def _tone_entries(record: TakeRecord, axis: str) -> list[str]:
    own = record.tones[record.tones["axis"] == axis] if len(record.tones) else record.tones
    names = ("frequency_hz", "frequency_ci_hz", "amplitude_px", "amplitude_ci_px", "amplitude_mdeg")
    entries = []
    for frequency, frequency_ci, amplitude, amplitude_ci, angle in zip(*(_column(own, name) for name in names)):
        if np.isfinite(frequency):
            angle_words = f", {figure_text(angle)} mdeg" if np.isfinite(angle) else ""
            entries.append(f"{frequency:.2f} Hz{_interval(frequency_ci, 0.01)}\n"
                           f"   {figure_text(amplitude)} px{_interval(amplitude_ci, 0.0)}{angle_words}")
    for found in record.extra.get("candidates") or ():
        if found.get("axis") == axis:
            shown = [figure_text(f, 4) for f in found.get("candidates_hz", ())]
            more = " \N{HORIZONTAL ELLIPSIS}" if len(shown) > 4 else ""
            entries.append(textwrap.fill(f"one of {', '.join(shown[:4])}{more} Hz", 38, subsequent_indent="   "))
    return entries


def _interval(half_width: float, least: float) -> str:
    """95 % half-width in words; one that would round to 0 is given as `least`, which covers it."""
    return f" \N{PLUS-MINUS SIGN} {figure_text(max(half_width, least), 1)}" if np.isfinite(half_width) else ""


def _spectrum_key(figure: Figure, record: TakeRecord) -> None:
    y, x = 838, 96
    rate = _number(record.take.get("frame_rate_hz"))
    first = ", ".join(figure_text(k * rate, 4) for k in (1, 2, 3))
    multiples = f" ({first} \N{HORIZONTAL ELLIPSIS} Hz)" if np.isfinite(rate) else ""
    _block(figure, x, y - 7, 26, 14, facecolor="#CFE3F0", edgecolor=BLUE, linewidth=1.8)
    x = _key_text(figure, x + 34, y, "level in each band")
    _swatch(figure, x, y, **FLOOR_LINE)
    x = _key_text(figure, x + 34, y, "floor: what noise alone would show")
    _swatch(figure, x + 6, y, 0, **UNDER_MARK)
    x = _key_text(figure, x + 20, y, "below the floor")
    _block(figure, x, y - 7, 26, 14, **BLIND)
    x = _key_text(figure, x + 34, y, f"blind: multiples of the frame rate{multiples}")
    y, x = y + 23, 96
    _swatch(figure, x, y, **FINE_LINE)
    x = _key_text(figure, x + 34, y, "level in steps of 1 Hz, where above the floor")
    _swatch(figure, x + 6, y, 0, marker="o", markersize=7.5, color=PAPER, markeredgecolor=INK)
    x = _key_text(figure, x + 20, y, "tone: marked at its rms level, named with its peak amplitude")
    _key_text(figure, x, y, "\N{PLUS-MINUS SIGN}: half-width of the 95 % interval")
    if _number(record.take.get("readout_ms")) == 0:
        _key_text(figure, 96, y + 23, "Global shutter: what is faster than half the frame rate appears folded below.")


def _key_text(figure: Figure, x: float, y: float, text: str) -> float:
    _say(figure, x, y, text, SMALL_PT, va="center")
    return x + _text_width_px(figure, text, SMALL_PT) + 34


def _candidates(figure: Figure, record: TakeRecord) -> None:
    """Without a readout: which frequency each tone would have, for each readout that fits in a frame."""
    known = np.isfinite(_number(record.take.get("readout_ms")))
    if known:
        _apology(figure, ["No spectrum: too little of the picture could be measured."])
        return
    tones = [c for c in record.extra.get("candidates") or () if _number(c.get("amplitude_px")) > 0]
    tones.sort(key=lambda c: -c["amplitude_px"])
    drawn = [c for c in tones if len(c.get("candidates_hz", ()))]
    least = LEAST_CANDIDATE_SHARE * drawn[0]["amplitude_px"] if drawn else 0.0
    drawn = [c for c in drawn if c["amplitude_px"] > least][:CANDIDATES_SHOWN]
    last = "Until then, these are the candidates." if drawn else \
        "In this take no tone stands out of the noise." if not tones else \
        "No readout time that fits in a frame explains the tones of this take."
    why = ("The readout time of this mode is not known, so the frequency of a vibration is not either: a tone f and "
           "the tones f + k x frame rate\nlook the same, each with its own readout time. Give the readout time "
           f"(--readout-ms or a camera file) to get the spectrum. {last}")
    _say(figure, 24, 124, why, TEXT_PT, linespacing=1.35)
    if not drawn:
        return
    rate = _number(record.take.get("frame_rate_hz"))
    ax = _axes(figure, 96, 196, 1000, 618)
    every = np.concatenate([np.asarray(c["candidates_hz"], float) for c in drawn])
    readouts = np.concatenate([np.asarray(c["readout_s"], float) for c in drawn]) * 1e3
    ax.set_yscale("log")
    ax.set_ylim(every.min() / 1.5, every.max() * 1.5)
    ax.set_xlim(0, 1e3 / rate if rate > 0 else readouts.max() * 1.1)
    decade = [m * 10.0 ** p for p in range(-1, 5) for m in (1, 2, 5)]
    ax.yaxis.set_major_locator(FixedLocator(decade))
    ax.yaxis.set_minor_locator(NullLocator())
    ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: figure_text(value, 2)))
    ax.grid(color=PALE, linewidth=0.8)
    ax.set_xlabel("readout time in ms, if it were known (the axis ends at one frame interval)")
    ax.set_ylabel("frequency of the tone in Hz")
    y = 200
    for number, tone in enumerate(drawn):
        stroke, marker = AXIS_STROKE.get(tone["axis"], Stroke(INK)), ("o", "s", "^", "D")[number]
        f, r = np.asarray(tone["candidates_hz"], float), np.asarray(tone["readout_s"], float) * 1e3
        # a later, weaker tone may lie on an earlier one: it is drawn smaller and on top
        ax.plot(r, f, color=stroke.colour, linestyle=(0, (1, 3)), linewidth=1.0, marker=marker, markersize=10 - number,
                markeredgecolor=INK, zorder=4 + 0.1 * number)
        _swatch(figure, 1140, y + 9, 0, color=stroke.colour, marker=marker, markersize=9, markeredgecolor=INK)
        cycles = abs(_number(tone.get("cycles_per_frame")))
        size = figure_text(tone["amplitude_px"], 2)
        name = f"{tone['axis']}, {size} px, {figure_text(cycles, 2)} cycles per frame height"
        _say(figure, 1160, y, name, LABEL_PT, weight="bold")
        text = ", ".join(f"{a:.1f} Hz ({b:.1f} ms)" for a, b in list(zip(f, r))[:6])
        wrapped = textwrap.wrap(text + (f" and {len(f) - 6} more" if len(f) > 6 else ""), 48)
        _say(figure, 1160, y + 22, "\n".join(wrapped), SMALL_PT, linespacing=1.4)
        y += 46 + 20 * len(wrapped)
    _label_candidates(figure, ax, drawn)
    rest = len(tones) - len(drawn)
    if rest:
        _say(figure, 1160, y, f"{rest} weaker or slower tone{'s' * (rest != 1)}: see tones.csv", SMALL_PT)


def _label_candidates(figure: Figure, ax: Axes, tones: Sequence[dict]) -> None:
    """Name candidates beside their marks, the longest readouts of the strongest tone first, where there is room."""
    points = [sorted(zip(t["readout_s"], t["candidates_hz"]), reverse=True) for t in tones]
    place = ax.transData.transform
    marks = [place((1e3 * r, f)) for tone in points for r, f in tone]
    taken = [(x - 6, y - 6, x + 6, y + 6) for x, y in marks]
    named: list[tuple[str, float]] = []
    right = ax.bbox.x1 + 4
    for readout, frequency in (point for tone in points for point in tone[:CANDIDATES_NAMED]):
        text = f"{frequency:.1f} Hz"
        x, y = place((1e3 * readout, frequency))
        if any(text == other and abs(x - at) < 24 for other, at in named):
            continue
        width = _text_width_px(figure, text, LABEL_PT)
        for left in (x + 12, x - 12 - width):
            box = (left, y - 8, left + width, y + 8)
            if box[2] <= right and all(box[2] < t[0] or t[2] < box[0] or box[3] < t[1] or t[3] < box[1] for t in taken):
                taken.append(box)
                named.append((text, x))
                ax.annotate(text, (1e3 * readout, frequency), xytext=((left - x) * 72 / DPI, 0), va="center",
                            textcoords="offset points", fontsize=LABEL_PT, zorder=6)
                break


# --- wobble ----------------------------------------------------------------------------------------------------------

_ROWS_LEFT, _ROWS_WIDTH, _ROWS_ASIDE, _POLE_WIDTH = 96, IMAGE_COLUMNS, 1268, 290
_EXCERPT_TOP, _EXCERPT_HEIGHT = 398, 404


def wobble_figure(record: TakeRecord) -> Figure:
    """The jello as a picture: rows of the frame against time, the whole take and its worst moment, and a bent pole.

    Parameters
    ----------
    record : TakeRecord

    Returns
    -------
    matplotlib.figure.Figure
        1600 x 900 pixels. Colour is the sideways displacement of a row against the whole picture, from one frame to the
        next, native pixels.
    """
    with _house_style():
        figure = _sheet()
        _heading(figure, record, "Jello: rows displaced against each other")
        wobble = np.asarray(record.wobble_px, float)
        time = np.asarray(record.wobble_time_s, float)
        if wobble.ndim != 2 or not np.isfinite(wobble).any() or not np.isfinite(time).all():
            _apology(figure, ["There is no jello to draw: no rows were measured."])
            return figure
        width = _number(record.take.get("width_px"))
        end = end_of(time)
        excerpt = worst_excerpt(time, wobble)
        limit = colour_limit_px(wobble, wobble[(time >= excerpt[0]) & (time < excerpt[1])], width)
        whole = excerpt[1] - excerpt[0] >= end - time[0] - 1e-9
        overview = _axes(figure, _ROWS_LEFT, 158, _ROWS_WIDTH, 162)
        per_column = _rows_picture(overview, time, wobble, float(time[0]), end, limit, named=whole)
        merged = f" (each column: the strongest of about {per_column:.0f} frames)" if per_column >= 2 else ""
        _say(figure, _ROWS_LEFT, 141, f"The whole take{merged}", LABEL_PT, weight="bold", va="bottom")
        overview.set_xlabel("time in s", fontsize=SMALL_PT)
        overview.xaxis.set_label_coords(0.5, -0.17)
        detail = _axes(figure, _ROWS_LEFT, _EXCERPT_TOP, _ROWS_WIDTH, _EXCERPT_HEIGHT)
        _rows_picture(detail, time, wobble, *excerpt, limit)
        detail.set_xlabel("time in s")
        detail.set_ylabel("height in the picture")
        detail.yaxis.set_label_coords(-62 / _ROWS_WIDTH, 0.5)
        words = "The take frame by frame" if whole else f"Its worst {excerpt[1] - excerpt[0]:.1f} s, frame by frame"
        _say(figure, _ROWS_LEFT, _EXCERPT_TOP - 17, words, LABEL_PT, weight="bold", va="bottom")
        if not whole:
            _frame_excerpt(overview, excerpt)
        _pole(figure, detail, record, time, wobble, excerpt, limit)
        _wobble_facts(figure, record, limit)
        return figure


def _frame_excerpt(overview: Axes, excerpt: tuple[float, float]) -> None:
    """Show where the excerpt is: a frame, or a mark above it where a frame would hide it."""
    low, high = overview.get_xlim()
    length = excerpt[1] - excerpt[0]
    if length / (high - low) * _ROWS_WIDTH > 12:
        overview.add_patch(Rectangle((excerpt[0], 0), length, 1, fill=False, edgecolor=BLACK, linewidth=2.0, zorder=6))
        return
    middle = excerpt[0] + length / 2
    overview.plot([middle], [1.03], clip_on=False, zorder=8, **MOMENT_MARK)
    overview.axvline(middle, color=PAPER, linewidth=2.4, zorder=5)
    overview.axvline(middle, color=INK, linewidth=1.0, linestyle=(0, (3, 2)), zorder=6)


def colour_limit_px(wobble_px: np.ndarray, excerpt_px: np.ndarray, width_px: float) -> float:
    """Displacement at full colour, native pixels.

    The 99th percentile of the take and of the excerpt that is shown, whichever is more, rounded up; but not less than
    `LEAST_COLOUR_PX1920`, so that a calm take looks calm.
    """
    least = LEAST_COLOUR_PX1920 / float(to_px1920(1.0, width_px)) if width_px > 0 else LEAST_COLOUR_PX1920
    sizes = [np.abs(part[np.isfinite(part)]) for part in (wobble_px, excerpt_px)]
    return round_up(max([least] + [float(np.percentile(size, 99)) for size in sizes if size.size]))


def _colours(values: np.ndarray, limit: float) -> np.ndarray:
    """RGBA bytes of a diverging map; transparent where NaN."""
    rgba = matplotlib.colormaps["PuOr"](Normalize(-limit, limit)(np.nan_to_num(values)), bytes=True)
    rgba[~np.isfinite(values), 3] = 0
    return rgba


def _rows_picture(ax: Axes, time: np.ndarray, wobble: np.ndarray, low: float, high: float, limit: float,
                  named: bool = True) -> float:
    """Draw rows against time; returns how many frames share a column."""
    inside = int(np.count_nonzero((time >= low) & (time < high)))
    image = rows_by_time(time, wobble, low, high, _ROWS_WIDTH)
    _nothing_hatch(ax)
    ax.imshow(_colours(image, limit), extent=(low, high, 0, 1), aspect="auto", interpolation="nearest", zorder=2)
    ax.set_xlim(low, high)
    ax.set_ylim(0, 1)
    ax.xaxis.set_major_locator(MaxNLocator(12))
    ax.yaxis.set_major_locator(FixedLocator([0, 0.5, 1]))
    ax.yaxis.set_major_formatter(FixedFormatter(["bottom", "middle", "top"]))
    for first, last in runs(~np.isfinite(image).any(1)) if named else ():
        if last - first >= 3:
            ax.text((low + high) / 2, 1 - (first + last) / 2 / len(image), "not measured", ha="center", va="center",
                    fontsize=LABEL_PT, zorder=4, bbox=LABEL_BOX)
    return inside / _ROWS_WIDTH


def _pole(figure: Figure, detail: Axes, record: TakeRecord, time: np.ndarray, wobble: np.ndarray,
          excerpt: tuple[float, float], limit: float) -> None:
    """What the strongest moment does to an upright pole, and what every row does over the take."""
    power, known = _power_per_pair(wobble)
    inside = known & (time >= excerpt[0] - 1e-9) & (time < excerpt[1])
    ax = _axes(figure, _ROWS_ASIDE, _EXCERPT_TOP, _POLE_WIDTH, _EXCERPT_HEIGHT)
    bands = wobble.shape[1]
    height = 1 - (np.arange(bands) + 0.5) / bands
    have = np.isfinite(wobble)
    count = have.sum(0)
    spread = np.where(count > 0, np.sqrt((np.where(have, wobble, 0) ** 2).sum(0) / np.maximum(count, 1)), np.nan)
    strongest = int(np.flatnonzero(inside)[np.argmax(power[inside])]) if inside.any() else None
    shape = wobble[strongest] if strongest is not None else np.full(bands, np.nan)
    reach = max(limit, 1.08 * float(np.nanmax(np.abs(np.append(shape[np.isfinite(shape)], 0.0)))))
    picture_height = _number(record.take.get("height_px"))
    factor = _POLE_WIDTH / (2 * reach) / (_EXCERPT_HEIGHT / picture_height) if picture_height > 0 else np.nan
    if np.isfinite(factor):
        factor = round_down(factor)
        reach = _POLE_WIDTH / (2 * factor) / (_EXCERPT_HEIGHT / picture_height)
    ax.fill_betweenx(height, -spread, spread, zorder=1, **OVER_THE_TAKE)
    ax.axvline(0, color=GREY, linestyle=(0, (6, 4)), linewidth=1.4, zorder=2)
    ax.plot(shape, height, color=INK, linewidth=4.5, solid_capstyle="round", solid_joinstyle="round", zorder=4)
    ax.set_xlim(-reach, reach)
    ax.set_ylim(0, 1)
    ax.yaxis.set_major_locator(NullLocator())
    ax.xaxis.set_major_locator(MaxNLocator(5, symmetric=True))
    ax.set_xlabel("px from frame to frame")
    title = "An upright pole" if strongest is None else f"An upright pole at {time[strongest]:.2f} s"
    times = f"from frame to frame, drawn {figure_text(factor)} x larger" if np.isfinite(factor) \
        else "from frame to frame, not to scale"
    _say(figure, _ROWS_ASIDE, _EXCERPT_TOP - 30, title, LABEL_PT, weight="bold", va="bottom")
    _say(figure, _ROWS_ASIDE, _EXCERPT_TOP - 10, times, SMALL_PT, va="bottom")
    if strongest is not None:
        middle = time[strongest] + (end_of(time) - time[-1]) / 2
        detail.plot([middle], [1.012], clip_on=False, zorder=8, **MOMENT_MARK)
    y = 868
    _swatch(figure, _ROWS_ASIDE - 20, y, 22, color=INK, linewidth=4.5)
    x = _key_text(figure, _ROWS_ASIDE + 8, y, "pole")
    _block(figure, x - 12, y - 7, 24, 14, **OVER_THE_TAKE)
    _key_text(figure, x + 18, y, "rms over the take")


def _wobble_facts(figure: Figure, record: TakeRecord, limit: float) -> None:
    """The take's jello in figures, the colour scale, and the key."""
    take = record.take
    jello, floor = _number(take.get("jello_px1920")), _number(record.extra.get("jello_floor_px1920"))
    readout = _number(take.get("readout_ms"))
    _say(figure, _ROWS_ASIDE, 132, f"jello: {_px(jello, 'rms, 1920-wide')}", LABEL_PT, weight="bold")
    lines = [f"noise alone would show {figure_text(floor, 2)} px" if np.isfinite(floor) else "noise level not known",
             f"readout {figure_text(readout)} ms" if np.isfinite(readout) else "readout time not known"]
    _say(figure, _ROWS_ASIDE, 154, "\n".join(lines), SMALL_PT, linespacing=1.4)
    bar = _axes(figure, _ROWS_ASIDE, 240, _POLE_WIDTH, 20)
    ramp = np.linspace(-limit, limit, _POLE_WIDTH)[None]
    bar.imshow(_colours(ramp, limit), extent=(-limit, limit, 0, 1), aspect="auto", interpolation="nearest")
    bar.yaxis.set_major_locator(NullLocator())
    ticks = [-limit, -limit / 2, 0, limit / 2, limit]
    bar.xaxis.set_major_locator(FixedLocator(ticks))
    bar.xaxis.set_major_formatter(FixedFormatter([figure_text(t).replace("-", "\N{MINUS SIGN}") for t in ticks]))
    bar.set_xlabel("px from frame to frame", fontsize=SMALL_PT)
    _say(figure, _ROWS_ASIDE, 236, "to the left", SMALL_PT, va="bottom")
    _say(figure, _ROWS_ASIDE + _POLE_WIDTH, 236, "to the right", SMALL_PT, va="bottom", ha="right")
    y, x = 868, _ROWS_LEFT
    _block(figure, x, y - 7, 26, 14, **NOT_MEASURED)
    x = _key_text(figure, x + 34, y, "not measured (sky, water, nothing to follow)")
    _swatch(figure, x + 4, y, 0, **MOMENT_MARK)
    _key_text(figure, x + 18, y, "the strongest moment, drawn as a pole on the right")


# --- files -----------------------------------------------------------------------------------------------------------

FIGURES = (("motion.png", motion_figure), ("spectrum.png", spectrum_figure), ("wobble.png", wobble_figure))


def write_plots(record: TakeRecord, folder: Path) -> list[Path]:
    """Draw all plots of a take.

    Parameters
    ----------
    record : TakeRecord
    folder : Path
        Made if it is not there. Files of the same names are replaced.

    Returns
    -------
    list of Path
        `motion.png`, `spectrum.png`, `wobble.png`.

    Raises
    ------
    OSError
        If a file cannot be written.
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    paths = []
    for name, draw in FIGURES:
        with _house_style():
            figure = draw(record)
            figure.savefig(folder / name, format="png")
            figure.clear()
        paths.append(folder / name)
    return paths
