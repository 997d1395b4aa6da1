"""The grading rule: log-linear scores, one reason with its figure, usable parts, grades, and the limits file.

The rule is the project's own (there is no outside source for it), so expected figures are worked out by hand here.
"""

from __future__ import annotations

import re
import tomllib

import numpy as np
import pytest

from framegrade import grading
from framegrade.grading import (
    COMPONENTS, KEEP, RESHOOT, STABILISE, UNITS, Limit, Limits, Range, component_score, default_limits_text, grade_take,
    judge, load_limits, phrase, usable_ranges,
)
from framegrade.settings_file import SettingsError

LIMITS = Limits(
    sway=Limit(2.0, 200.0), shake=Limit(0.1, 10.0), jello=Limit(0.1, 1.0), smear=Limit(1.0, 100.0),
    cadence=Limit(1.0, 100.0),
    usable_score=50.0, shortest_s=1.0, keep_s=5.0, crop_pct=12.0, least_measured_pct=10.0,
)
CLEAN = {"sway": 1.0, "shake": 0.05, "jello": 0.02, "smear": np.nan, "cadence": 0.0}


def take(figures, crop_pct=5.0, measured_pct=80.0, ranges=(), duration_s=20.0):
    return grade_take(CLEAN | figures, crop_pct, measured_pct, list(ranges), duration_s, LIMITS)


# --- scores ----------------------------------------------------------------------------------------------------------


def test_score_is_log_linear_between_the_limits():
    limit = Limit(0.1, 10.0)  # two decades: half way, logarithmically, is 1.0; each factor of 10^(1/5) costs 10 points
    figures = 0.1 * 10 ** (np.arange(11) / 5)
    found = [component_score(float(figure), limit) for figure in figures]
    np.testing.assert_allclose(found, np.arange(100, -1, -10), atol=1e-9)


@pytest.mark.parametrize(("figure", "score"), [(0.0, 100.0), (0.1, 100.0), (10.0, 0.0), (1e6, 0.0)])
def test_score_outside_the_limits(figure, score):
    assert component_score(figure, Limit(0.1, 10.0)) == score


def test_what_was_not_measured_has_no_score():
    assert np.isnan(component_score(np.nan, Limit(0.1, 10.0)))
    verdict = judge({name: np.nan for name in COMPONENTS}, LIMITS)
    assert np.isnan(verdict.score) and verdict.component is None and np.isnan(verdict.figure)


@pytest.mark.parametrize("worst", COMPONENTS)
def test_the_worst_component_is_the_reason(worst):
    """Each component at a score of 80 but one at 20: that one, with its own figure, decides."""
    figures = {}
    for name in COMPONENTS:
        limit = getattr(LIMITS, name)
        share = 0.8 if name == worst else 0.2
        figures[name] = limit.clean * (limit.spoiled / limit.clean) ** share
    verdict = judge(figures, LIMITS)
    assert verdict.component == worst
    assert verdict.score == pytest.approx(20.0)
    assert verdict.figure == pytest.approx(figures[worst])


def test_among_components_beyond_spoiled_the_farthest_beyond_is_the_reason():
    assert judge(CLEAN | {"shake": 11.0, "jello": 30.0}, LIMITS).component == "jello"
    assert judge(CLEAN | {"shake": 1100.0, "jello": 1.1}, LIMITS).component == "shake"


def test_a_worse_figure_never_scores_higher():
    figures = np.geomspace(0.01, 100, 200)
    scores = [judge(CLEAN | {"jello": float(f)}, LIMITS).score for f in figures]
    assert (np.diff(scores) <= 1e-12).all() and scores[0] == 100.0 and scores[-1] == 0.0


@pytest.mark.parametrize("component", COMPONENTS)
def test_every_finding_states_figure_and_unit(component):
    assert re.search(r"\b1\.23 (px|%)", phrase(component, 1.2345))


# --- usable parts ----------------------------------------------------------------------------------------------------


def windows(scores, length=0.5):
    start = np.arange(len(scores)) * length
    return start, start + length, np.array(scores, float)


def test_runs_of_usable_windows():
    # the single usable window of 0.5 s is too short
    found = usable_ranges(*windows([10, 60, 80, 70, 20, 90, 10, 55, 65]), LIMITS)
    assert [(r.in_s, r.out_s) for r in found] == [(0.5, 2.0), (3.5, 4.5)]
    assert [r.score for r in found] == pytest.approx([70.0, 60.0])


def test_a_window_that_scores_exactly_the_limit_is_usable():
    assert len(usable_ranges(*windows([50, 50]), LIMITS)) == 1
    assert usable_ranges(*windows([49.999, 50]), LIMITS) == []


def test_unmeasured_windows_part_a_range():
    found = usable_ranges(*windows([60, 60, np.nan, 60, 60, 60]), LIMITS)
    assert [(r.in_s, r.out_s) for r in found] == [(0.0, 1.0), (1.5, 3.0)]


def test_the_whole_take_and_none_of_it():
    assert [(r.in_s, r.out_s) for r in usable_ranges(*windows([100] * 6), LIMITS)] == [(0.0, 3.0)]
    assert usable_ranges(*windows([0] * 6), LIMITS) == []
    assert usable_ranges(np.zeros(0), np.zeros(0), np.zeros(0), LIMITS) == []


def test_a_take_shorter_than_the_shortest_part_counts_whole_or_not_at_all():
    assert len(usable_ranges(*windows([80, 90], length=0.4), LIMITS)) == 1
    assert usable_ranges(*windows([80, 20], length=0.4), LIMITS) == []


# --- grades ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("arguments", "grade", "figures_in_reason"), [
    (dict(figures={}), KEEP, ["1 px"]),                                               # clean: its worst is the sway
    (dict(figures={"jello": 0.2}), KEEP, ["0.2 px"]),                                 # usable
    (dict(figures={"smear": 2.0}), KEEP, ["2 px"]),
    (dict(figures={"cadence": 5.0}), KEEP, ["5 %"]),
    (dict(figures={"jello": 0.9}, ranges=[Range(2.0, 8.0, 70.0)]), KEEP, ["6.0 of 20.0 s", "0.9 px"]),
    (dict(figures={"sway": 150.0}), STABILISE, ["150 px", "5 %"]),
    (dict(figures={"shake": 5.0}), STABILISE, ["5 px", "5 %"]),
    (dict(figures={"shake": 5.0}, crop_pct=25.0), RESHOOT, ["5 px", "25 %", "12 %"]),
    (dict(figures={"shake": 9.0, "jello": 0.9}), RESHOOT, ["9 px", "0.9 px"]),
    (dict(figures={"jello": 0.9}), RESHOOT, ["0.9 px"]),
    (dict(figures={"smear": 90.0}), RESHOOT, ["90 px"]),
    (dict(figures={"cadence": 60.0}), RESHOOT, ["60 %"]),
    (dict(figures={}, measured_pct=3.0), None, ["3 %", "10 %"]),
])
def test_every_branch_names_its_figures(arguments, grade, figures_in_reason):
    found, score, reason = take(**arguments)
    assert found == grade
    for figure in figures_in_reason:
        assert figure in reason, reason
    assert "nan" not in reason and "\n" not in reason and not reason.endswith(".")
    assert np.isnan(score) if grade is None else 0 <= score <= 100


def test_score_is_that_of_the_worst_component():
    # jello 10^-0.5 lies half way between 0.1 and 1.0
    assert take({"jello": 10 ** -0.5})[1] == pytest.approx(50.0)
    assert take({"shake": 1.0, "jello": 0.9})[1] == pytest.approx(100 * np.log10(1 / 0.9))


def test_shorter_usable_parts_do_not_keep_a_spoiled_take():
    parts = [Range(0.0, 3.0, 60.0), Range(5.0, 9.0, 60.0)]  # 7 s in all, but no part of 5 s
    assert take({"jello": 0.9}, ranges=parts)[0] == RESHOOT
    assert take({"jello": 0.9}, ranges=parts + [Range(10.0, 15.0, 60.0)])[0] == KEEP


def test_rounding_of_window_times_does_not_decide():
    # ten windows of half a second whose edges carry rounding errors are five seconds
    edges = 0.1 + np.arange(11) * 0.5
    edges[-1] = np.nextafter(5.1, 0)
    part = Range(float(edges[0]), float(edges[-1]), 60.0)
    assert part.out_s - part.in_s < 5.0
    assert take({"jello": 0.9}, ranges=[part])[0] == KEEP


def test_nothing_measured_cannot_be_judged():
    grade, score, reason = grade_take({name: np.nan for name in COMPONENTS}, np.nan, 60.0, [], 10.0, LIMITS)
    assert grade is None and np.isnan(score)
    assert reason.startswith("cannot be judged") and "60 %" in reason


def test_an_unknown_measured_share_cannot_be_judged():
    grade, score, reason = take({}, measured_pct=np.nan)
    assert grade is None and np.isnan(score)
    assert "nan" not in reason and "share %" not in reason


def test_an_unknown_crop_is_never_taken_for_a_small_one():
    grade, _, reason = take({"shake": 5.0}, crop_pct=np.nan)
    assert grade == RESHOOT
    assert "nan" not in reason and "share %" not in reason and "unknown" in reason


@pytest.mark.parametrize("figures", [{"sway": 1.5}, {"shake": 0.08}, {"jello": 0.09}, {"smear": 1.0}, {"cadence": 4.0}])
def test_reasons_read_as_a_sentence(figures):
    component = next(iter(figures))
    clean = {name: getattr(LIMITS, name).clean if name == component else 1e3 for name in COMPONENTS}
    limits = Limits(**{name: Limit(value, 1e4) for name, value in clean.items()},
                    usable_score=0.0, shortest_s=1.0, keep_s=5.0, crop_pct=12.0, least_measured_pct=10.0)
    reason = grade_take({name: np.nan for name in COMPONENTS} | figures, 1.0, 80.0, [], 10.0, limits)[2]
    worst = r"(that it (sways|shakes) |jello of |smear of |[\d.]+ % of frames )"
    assert re.match(r"(clean|usable): the worst is " + worst, reason)


# --- limits file -----------------------------------------------------------------------------------------------------


def test_default_limits_are_those_of_the_file():
    """The standard library's TOML reader, beside the product's own."""
    document = tomllib.loads(default_limits_text())
    limits = load_limits(None)
    for name, unit in UNITS.items():
        assert getattr(limits, name) == Limit(document[name][f"clean_{unit}"], document[name][f"spoiled_{unit}"])
    assert (limits.usable_score, limits.shortest_s, limits.keep_s) == (
        document["usable"]["score"], document["usable"]["shortest_s"], document["usable"]["keep_s"])
    assert limits.crop_pct == document["stabilise"]["crop_pct"]
    assert limits.least_measured_pct == document["measured"]["least_pct"]


def test_a_copy_of_the_default_file_gives_the_same_limits_and_a_change_tells(tmp_path):
    copy = tmp_path / "limits.toml"
    copy.write_text(default_limits_text(), encoding="utf-8")
    assert load_limits(copy) == load_limits(None)
    text = re.sub(r"(\[jello\].*\nclean_px1920 = )\S+", r"\g<1>0.07", default_limits_text())
    copy.write_text(text, encoding="utf-8")
    assert load_limits(str(copy)).jello.clean == 0.07
    assert load_limits(copy).shake == load_limits(None).shake


def line_of(text, start):
    return next(number for number, line in enumerate(text.splitlines(), 1) if line.startswith(start))


@pytest.mark.parametrize(("table", "old", "new", "cause"), [
    ("jello", r"clean_px1920 = \S+", "claen_px1920 = 0.1", "claen_px1920"),
    ("jello", r"clean_px1920 = \S+", "clean_px = 0.1", "clean_px"),
    ("shake", r"clean_px1920 = \S+", "clean_px1920 = -0.3", "-0.3"),
    ("shake", r"clean_px1920 = \S+", "clean_px1920 = 0", "0"),
    ("shake", r"clean_px1920 = \S+", 'clean_px1920 = "small"', "small"),
    ("shake", r"clean_px1920 = \S+", "clean_px1920 = nan", "nan"),
    ("sway", r"spoiled_px1920 = \S+", "spoiled_px1920 = 0.001", "spoiled_px1920"),
    ("cadence", r"spoiled_pct = \S+", "spoiled_pct = 1.0", "spoiled_pct"),
    ("usable", r"score = \S+", "score = 150", "150"),
    ("usable", r"keep_s = \S+", "keep_s = true", "true"),
    ("measured", r"least_pct = \S+", "least_pct = -1", "-1"),
])
def test_a_mistake_is_named_with_its_line(tmp_path, table, old, new, cause):
    head, _, rest = default_limits_text().partition(f"[{table}]")
    body, comma, tail = rest.partition("\n[")
    changed, count = re.subn(f"(?m)^{old}", new, body, count=1)
    assert count == 1
    text = head + f"[{table}]" + changed + comma + tail
    path = tmp_path / "mine.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(SettingsError) as caught:
        load_limits(path)
    message = str(caught.value)
    header = line_of(text, f"[{table}]")
    expected = next(n for n, line in enumerate(text.splitlines(), 1) if n > header and line.startswith(new))
    assert f"line {expected}" in message
    assert "mine.toml" in message and cause in message and "\n" not in message


@pytest.mark.parametrize("table", [*COMPONENTS, "usable", "stabilise", "measured"])
def test_a_missing_table_is_named(tmp_path, table):
    head, _, rest = default_limits_text().partition(f"[{table}]")
    path = tmp_path / "mine.toml"
    path.write_text(head + "\n[".join([""] + rest.split("\n[")[1:]), encoding="utf-8")
    with pytest.raises(SettingsError, match=rf"mine\.toml.*\[{table}\] is missing"):
        load_limits(path)


def test_a_missing_file_is_named(tmp_path):
    with pytest.raises(SettingsError, match=r"nowhere\.toml"):
        load_limits(tmp_path / "nowhere.toml")


def test_an_unknown_table_is_named_with_its_line(tmp_path):
    path = tmp_path / "mine.toml"
    path.write_text(default_limits_text() + "\n[wobble]\nclean_px1920 = 1\n", encoding="utf-8")
    number = line_of(path.read_text(encoding="utf-8"), "[wobble]")
    with pytest.raises(SettingsError, match=rf"line {number}: .*wobble"):
        load_limits(path)


def test_clean_limits_are_above_what_the_eye_resolves_only_where_it_may():
    """Rec. ITU-R BT.500 / BT.2022: one pixel of a 1920-wide picture is about one minute of arc, which the eye resolves.
    The fast components must score clean only below it, and spoiled must be visible."""
    limits = load_limits(None)
    for name in ("shake", "jello"):
        assert getattr(limits, name).clean < 1.0 < getattr(limits, name).spoiled


def test_grades_are_the_three_promised():
    assert grading.GRADES == ("keep", "stabilise", "reshoot")
