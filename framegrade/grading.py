"""Component figures -> window scores, usable ranges, the grade of a take and its reason.

Every component has two limits, *clean* (score 100) and *spoiled* (score 0), log-linear between. The score of a window or
a take is its worst component's, so that every score has one reason in one sentence, with its figure.
"""

from __future__ import annotations

from dataclasses import dataclass
from importlib import resources
from pathlib import Path

import numpy as np

from framegrade.settings_file import Field, Table, read_settings

COMPONENTS = ("sway", "shake", "jello", "smear", "cadence")
#: Components that steadying the picture afterwards can take out.
STEADIABLE = ("sway", "shake")
UNITS = {"sway": "px1920", "shake": "px1920", "jello": "px1920", "smear": "px1920", "cadence": "pct"}
KEEP, STABILISE, RESHOOT = "keep", "stabilise", "reshoot"
GRADES = (KEEP, STABILISE, RESHOOT)
#: Rounding of window times must not decide a grade.
ROUNDING_S = 1e-6


@dataclass(frozen=True)
class Limit:
    """Figures that score 100 (`clean`) and 0 (`spoiled`)."""

    clean: float
    spoiled: float


@dataclass(frozen=True)
class Limits:
    """All limits of the grading rule; see `limits.toml` for what each means and its unit."""

    sway: Limit
    shake: Limit
    jello: Limit
    smear: Limit
    cadence: Limit
    usable_score: float
    shortest_s: float
    keep_s: float
    crop_pct: float
    least_measured_pct: float


@dataclass(frozen=True)
class Verdict:
    """Score of a window or take: its worst component and that component's figure. NaN and None: nothing measured."""

    score: float
    component: str | None
    figure: float


def default_limits_text() -> str:
    """The commented TOML of the default limits, for copying."""
    return resources.files("framegrade").joinpath("limits.toml").read_text(encoding="utf-8")


def _pair(unit: str) -> Table:
    field = Field("number", f"in {unit}", required=True, low=0, high=1e6, open_range=True)
    return Table({f"clean_{unit}": field, f"spoiled_{unit}": field}, required=True)


_SCHEMA = {name: _pair(unit) for name, unit in UNITS.items()} | {
    "usable": Table({
        "score": Field("number", "least score of a usable window", required=True, low=0, high=100),
        "shortest_s": Field("number", "shortest usable part listed, seconds", required=True, low=0, high=3600),
        "keep_s": Field("number", "usable part that keeps a take, seconds", required=True, low=0, high=3600),
    }, required=True),
    "stabilise": Table({"crop_pct": Field("number", "most of the picture steadying may cost, percent", required=True,
                                          low=0, high=100)}, required=True),
    "measured": Table({"least_pct": Field("number", "least share of the picture measured, percent", required=True,
                                          low=0, high=100)}, required=True),
}


def load_limits(path: str | Path | None) -> Limits:
    """Limits from a TOML file like `limits.toml`; None for the defaults.

    Raises
    ------
    SettingsError
        For a file that cannot be read or holds a mistake, naming the line.
    """
    if path is None:
        with resources.as_file(resources.files("framegrade").joinpath("limits.toml")) as default:
            return _limits(default)
    return _limits(Path(path))


def _limits(path: Path) -> Limits:
    settings = read_settings(path, _SCHEMA)
    tables = {name: settings.tables[name][0] for name in _SCHEMA}
    pairs = {}
    for name, unit in UNITS.items():
        clean, spoiled = tables[name][f"clean_{unit}"], tables[name][f"spoiled_{unit}"]
        if spoiled <= clean:
            raise settings.error(f"spoiled_{unit} of [{name}] is {spoiled:g}, but must be above clean_{unit} ({clean:g})",
                                 name, f"spoiled_{unit}")
        pairs[name] = Limit(clean, spoiled)
    usable = tables["usable"]
    return Limits(**pairs, usable_score=usable["score"], shortest_s=usable["shortest_s"], keep_s=usable["keep_s"],
                  crop_pct=tables["stabilise"]["crop_pct"], least_measured_pct=tables["measured"]["least_pct"])


def component_score(figure: float, limit: Limit) -> float:
    """Score of one figure, 100 at or below `clean`, 0 at or above `spoiled`, log-linear between; NaN stays NaN."""
    if not np.isfinite(figure):
        return np.nan
    if figure <= limit.clean:
        return 100.0
    if figure >= limit.spoiled:
        return 0.0
    return float(100 * np.log(limit.spoiled / figure) / np.log(limit.spoiled / limit.clean))


def judge(figures: dict[str, float], limits: Limits) -> Verdict:
    """Worst component of a window or take.

    Parameters
    ----------
    figures : dict
        Figure per component of `COMPONENTS`; NaN where not measured, which takes no part.
    """
    scores = {name: component_score(figures.get(name, np.nan), getattr(limits, name)) for name in COMPONENTS}
    known = {name: score for name, score in scores.items() if np.isfinite(score)}
    if not known:
        return Verdict(np.nan, None, np.nan)
    # among equals the one nearest its spoiled limit is the reason
    worst = min(known, key=lambda name: (known[name], -figures[name] / getattr(limits, name).clean))
    return Verdict(known[worst], worst, float(figures[worst]))


_PHRASE = {
    "sway": "sways slowly by {figure} px (rms, 1920-wide, 0.5 to 3 Hz)",
    "shake": "shakes by {figure} px (rms, 1920-wide, above 3 Hz)",
    "jello": "jello of {figure} px (rms, 1920-wide): rows displaced against each other",
    "smear": "smear of {figure} px during the exposure (1920-wide)",
    "cadence": "{figure} % of frames repeated or dropped",
}


def phrase(component: str, figure: float) -> str:
    """One component's finding in words, with its figure."""
    return _PHRASE[component].format(figure=f"{figure:.3g}")


@dataclass(frozen=True)
class Range:
    """A usable part: start and end in seconds, and the mean score of its windows."""

    in_s: float
    out_s: float
    score: float


def usable_ranges(start_s: np.ndarray, end_s: np.ndarray, score: np.ndarray, limits: Limits) -> list[Range]:
    """Runs of neighbouring windows that score at least the usable limit, at least `shortest_s` long.

    A take shorter than `shortest_s` is usable as a whole if all its windows are.
    """
    good = np.nan_to_num(score, nan=-1.0) >= limits.usable_score
    edges = np.flatnonzero(np.diff(np.concatenate([[0], good.astype(int), [0]])))
    ranges = []
    whole = end_s[-1] - start_s[0] if len(start_s) else 0.0
    for first, last in zip(edges[::2], edges[1::2]):
        length = end_s[last - 1] - start_s[first]
        if length >= min(limits.shortest_s, whole) - ROUNDING_S:
            ranges.append(Range(float(start_s[first]), float(end_s[last - 1]), float(np.mean(score[first:last]))))
    return ranges


def grade_take(figures: dict[str, float], crop_needed_pct: float, measured_pct: float, ranges: list[Range],
               duration_s: float, limits: Limits) -> tuple[str | None, float, str]:
    """Grade, score and reason of a take.

    Parameters
    ----------
    figures : dict
        Take-wide figures per component (rms over the take).
    crop_needed_pct : float
        Share of the picture that steadying would cost; NaN if unknown.
    measured_pct : float
        Share of the picture that was measured.
    ranges : list of Range
        Usable parts.

    Returns
    -------
    grade : str or None
        keep, stabilise or reshoot; None when the take cannot be judged.
    score : float
        0 to 100, NaN when it cannot be judged.
    reason : str
        One sentence with a figure.
    """
    if not measured_pct >= limits.least_measured_pct:
        return None, np.nan, (f"cannot be judged: only {_share(measured_pct)} of the picture could be measured "
                              f"(needs {limits.least_measured_pct:g} %)")
    verdict = judge(figures, limits)
    if verdict.component is None:
        return None, np.nan, (f"cannot be judged: no component could be measured in {_share(measured_pct)} "
                              "of the picture")
    finding = phrase(verdict.component, verdict.figure)
    if verdict.score >= limits.usable_score:
        lead = "clean" if verdict.score >= 100 else "usable"
        return KEEP, verdict.score, f"{lead}: the worst is that it {finding}" if finding.startswith(("sways", "shakes")) \
            else f"{lead}: the worst is {finding}"
    longest = max((r.out_s - r.in_s for r in ranges), default=0.0)
    usable = sum(r.out_s - r.in_s for r in ranges)
    if longest >= limits.keep_s - ROUNDING_S:
        return KEEP, verdict.score, f"usable for {usable:.1f} of {duration_s:.1f} s; elsewhere {finding}"
    others = {name: figures.get(name, np.nan) for name in COMPONENTS if name not in STEADIABLE}
    lasting = judge(others, limits)
    lasting_ok = lasting.component is None or lasting.score >= limits.usable_score
    if verdict.component in STEADIABLE and lasting_ok:
        if crop_needed_pct <= limits.crop_pct:
            return STABILISE, verdict.score, f"{finding}; steadying costs {_share(crop_needed_pct)} of the picture"
        return RESHOOT, verdict.score, (f"{finding}; steadying would cost {_share(crop_needed_pct)} of the picture "
                                        f"(limit {limits.crop_pct:g} %)")
    if verdict.component in STEADIABLE:
        return RESHOOT, verdict.score, f"{finding}, and {phrase(lasting.component, lasting.figure)} stays after steadying"
    return RESHOOT, verdict.score, f"{finding}; steadying does not cure it"


def _share(value_pct: float) -> str:
    return f"{value_pct:.3g} %" if np.isfinite(value_pct) else "an unknown share"
