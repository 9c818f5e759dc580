"""Figures show the record's numbers, and draw whatever comes without a warning."""

from __future__ import annotations

import math
import subprocess
import sys
from xml.etree import ElementTree as ET

import numpy as np
import pytest

from harness.assess.words import ratio
from harness.report import assemble
from harness.report.document import Figure
from harness.report.figures import scales
from harness.report.figures.drawing import draw
from harness.report.figures.drawings import (
    Bar,
    Bursts,
    Course,
    Curve,
    CurvePoint,
    CurveSeries,
    Gaps,
    Ruler,
    Stairs,
)
from harness.report.figures.of_counts import ruler_of, stairs_of
from harness.report.figures.of_spacing import bursts_of, gaps_of
from harness.report.figures.of_sweep import curve_of
from harness.report.figures.of_time import course_figures
from harness.report.text import to_text

FIXED = {"ber": 1e-4, "confidence": 0.95, "plan": "fixed", "accept_errors": 12}


def test_beside_a_pass_the_bar_ends_at_the_bound_that_decides_and_under_the_mark(cases):
    material = cases["pass"]()
    ruler = ruler_of(material).drawing
    (bar,) = ruler.bars
    assert bar.upper == material.assessment.whole.bounds.value <= ruler.mark == 1e-4
    assert (bar.lower, bar.against) == (0.0, False)


def test_beside_a_fail_the_bar_is_against_the_unit_and_never_wholly_under_the_mark(cases):
    ruler = ruler_of(cases["fail"]()).drawing
    (bar,) = ruler.bars
    assert bar.against
    assert bar.upper > ruler.mark


def test_a_sequential_fail_says_what_its_lower_bound_is_held_against(records):
    material = records.make([[9, 9, 9, 9, 9, 9]], {"ber": 1e-4, "plan": "sequential", "margin": 2.0})
    p = material.assessment.whole
    assert (p.verdict, p.bounds.side) == ("FAIL", "lower")
    assert p.bounds.value >= 5e-5
    figure = ruler_of(material)
    (bar,) = figure.drawing.bars
    assert (bar.lower, bar.upper) == (p.bounds.value, p.bounds.upper)
    assert "from the one-sided lower bound that decides (95 % confidence), over 5e-5" in figure.title
    assert figure.words.endswith(f"BER {ratio(bar.lower)} to {ratio(bar.upper)}")
    text = " ".join(to_text(assemble(material)).split())
    assert "lower bound, one-sided, of the plan, over 5e-5 (the requirement by the margin): decides" in text
    assert "the plan rejects on a bound over 5e-5 (the requirement by the margin)" in text


def test_the_caption_names_the_bounds_that_the_bar_shows(cases):
    assert ruler_of(cases["pass"]()).title.endswith(
        "the one-sided upper bound that decides (95 % confidence)"
    )
    assert "two-sided" in ruler_of(cases["fail"]()).title
    assert "two-sided" in ruler_of(cases["undecided"]()).title


def test_undecided_the_bar_is_the_two_sided_interval(cases):
    material = cases["undecided"]()
    (bar,) = ruler_of(material).drawing.bars
    bounds = material.assessment.whole.bounds
    assert (bar.lower, bar.upper, bar.against) == (bounds.lower, bounds.upper, False)


def test_without_a_compared_bit_there_is_no_ruler(cases):
    assert ruler_of(cases["never aligned"]()) is None


def test_a_sweep_of_many_points_has_its_curve_and_no_ruler(records, point):
    points = [point([1], {"attenuator": float(k)}, ended_by="bits") for k in range(25)]
    material = records.make(points, command="sweep", settings={"sweep": {"instrument": "attenuator"}})
    assert ruler_of(material) is None
    assert len(curve_of(material).drawing.series[0].points) == 25


def test_a_sweeps_ruler_has_a_bar_for_each_aligned_point(cases):
    bars = ruler_of(cases["sweep"]()).drawing.bars
    assert [bar.label for bar in bars] == ["56 dB", "58 dB", "60 dB", "62 dB"]


def test_the_path_ends_where_the_plan_decided_although_more_came(records):
    material = records.make([[1, 0, 1, 0, 0, 9, 9, "unaligned"]], FIXED)
    (m,) = material.points
    assert m.assessed.verdict == "FAIL"  # for the unaligned bits; the plan itself accepted
    figure = stairs_of(material, m)
    assert figure.drawing.decided == "accepted"
    assert figure.drawing.path_bits[-1] == m.assessed.plan["decided_at_bit"] == 194_422
    counted = int(np.count_nonzero(m.series.compared_positions() < 194_422))
    assert figure.drawing.path_errors[-1] == figure.drawing.total_errors == counted == 2
    assert "the plan accepted there" in figure.words
    (bar,) = ruler_of(material).drawing.bars
    assert not bar.against  # its BER speaks for the unit


def test_a_rejected_path_ends_at_the_error_too_many(cases):
    material = cases["fail"]()
    (m,) = material.points
    stairs = stairs_of(material, m).drawing
    assert stairs.decided == "rejected"
    assert stairs.total_errors == 13
    assert stairs.path_bits[-1] == m.series.compared_positions()[12] + 1


@pytest.mark.parametrize("kind", ["fixed", "sequential"])
def test_thousands_of_errors_make_a_path_of_few_corners_with_the_right_end(records, kind):
    asked = (
        {"ber": 1e-2, "plan": kind, "accept_errors": 5000} if kind == "fixed" else {"ber": 1e-2, "plan": kind}
    )
    material = records.make([[900] * 7], asked)
    (m,) = material.points
    stairs = stairs_of(material, m).drawing
    end = m.assessed.plan["decided_at_bit"] or m.assessed.tally.compared
    assert len(stairs.path_bits) <= 2_010
    assert stairs.path_errors[-1] == np.count_nonzero(m.series.compared_positions() < end)


@pytest.mark.parametrize("kind", ["undecided", "outages"])
def test_the_path_ends_where_the_count_ends(cases, kind):
    material = cases[kind]()
    (m,) = material.points
    stairs = stairs_of(material, m).drawing
    assert stairs.path_errors[-1] == m.assessed.tally.errors
    assert stairs.path_bits[-1] == m.assessed.tally.compared
    assert (np.diff(stairs.path_bits) >= 0).all()
    assert stairs.decided == ""


def test_the_stairs_are_the_plans(cases):
    material = cases["undecided"]()
    (m,) = material.points
    stairs = stairs_of(material, m).drawing
    assert stairs.accept_at.tolist() == [b.accept_at for b in m.plan.boundaries]
    assert stairs.reject_at.tolist() == [b.reject_at or -1 for b in m.plan.boundaries]


def test_where_events_are_counted_the_path_counts_events(records):
    asked = {**FIXED, "count": "events", "event_gap_bits": 64}
    material = records.make([["burst", 0, "burst", 1, 0]], asked)
    figure = stairs_of(material, material.points[0])
    assert figure.drawing.total_errors == 3
    assert "3 error events" in figure.words


def test_a_second_has_its_column(cases):
    (figure,) = course_figures(cases["outages"]())
    course = figure.drawing
    assert course.mean.tolist() == [1, 0, 0, 0, 0, 2]
    assert (course.unaligned > 0).tolist() == [False, True, False, False, False, False]
    assert (course.silent > 0).tolist() == [False, False, True, False, True, False]
    assert course.slips.tolist() == [3.0]


def test_a_long_run_is_drawn_in_columns_that_lose_no_error(records):
    rng = np.random.default_rng(5)
    errors = [int(n) for n in rng.poisson(1.0, 900)]
    errors[500] = 77
    (figure,) = course_figures(records.make([errors], None))
    course = figure.drawing
    assert course.column_s == 5
    seconds = np.full(len(course.mean), 5.0)
    assert float((course.mean * seconds).sum()) == pytest.approx(sum(errors))
    assert course.most.max() == 77
    assert int(np.argmax(course.most)) == 100


def test_what_lay_between_two_sittings_is_marked_as_not_measured(records):
    (figure,) = course_figures(records.make([[0, 1, 0, 1]], None, sittings=2))
    assert figure.drawing.gaps == ((2.0, 22.0),)
    assert figure.drawing.begins.tolist() == [0.0, 1.0, 22.0, 23.0]


def test_gaps_are_all_counted_against_the_geometric_law(cases):
    material = cases["bursts"]()
    (m,) = material.points
    gaps = gaps_of(material, m).drawing
    errors, bits = m.assessed.tally.errors, m.assessed.tally.compared
    assert gaps.counted.sum() == errors - 1
    p = errors / bits
    for k in range(4):
        octave = sum(p * (1 - p) ** (g - 1) for g in range(2**k, 2 ** (k + 1)))
        assert gaps.expected[k] == pytest.approx((errors - 1) * octave)


def test_event_sizes_add_up_to_the_errors(records):
    material = records.make([["burst", 1, 0, 2, "burst"] * 3], None)
    (m,) = material.points
    bursts = bursts_of(material, m).drawing
    assert bursts.last_is_more
    assert bursts.counted.sum() == m.assessed.clustering.events
    assert bursts.counted[-1] == 6  # all of 30 errors


def test_a_curve_has_its_fit_and_its_sensitivity(cases):
    material = cases["sweep"]()
    curve = curve_of(material).drawing
    (series,) = curve.series
    assert [p.at for p in series.points] == [56, 58, 60, 62, 64]
    assert series.points[0].ber == 0
    assert series.points[0].lower == 0
    assert series.points[-1].ber is None
    value = material.assessment.sensitivity["value"]
    assert series.sensitivity[0] == value
    at, ber = series.fit
    assert np.interp(value, at, np.log10(ber)) == pytest.approx(-3, abs=0.01)
    assert curve.target == 1e-3


def test_a_curve_says_in_words_what_was_fitted(cases):
    from harness.report.figures.of_sweep import curve_words

    said = " ".join(curve_words(cases["sweep"]()))
    assert "fitted by maximum likelihood" in said
    assert "level at the device's port there: -90." in said


def course(**more) -> Course:
    n = more.pop("n", 3)
    zeros = np.zeros(n)
    given = {
        "begins": np.arange(n) * 1.0, "ends": np.arange(n) + 1.0, "mean": zeros, "most": zeros, "unaligned": zeros,
        "silent": zeros, "slips": np.empty(0), "gaps": (),
    }  # fmt: skip
    return Course(**(given | more))


def stairs(**more) -> Stairs:
    given = {
        "kind": "fixed", "longest_bits": 1000, "errors": np.array([0, 1]), "accept_at": np.array([1000, 1000]),
        "reject_at": np.array([-1, 1000]), "path_bits": np.array([0.0, 1000.0]), "path_errors": np.array([0.0, 0.0]),
        "decided": "accepted", "total_errors": 0,
    }  # fmt: skip
    return Stairs(**(given | more))


ODD = {
    "nothing known": Ruler((Bar("", 0.0, 1.0),), None, ""),
    "all wrong": Ruler((Bar("", 0.9, 1.0, 1.0, None, True),), 1e-9, "required: at most"),
    "beyond the scale": Ruler((Bar("", 0.0, 1e-17, None, 1e-19),), 1e-16, "required: at most"),
    "no width": Ruler((Bar("", 1e-6, 1e-6, 1e-6),), 1e-6, "required: at most"),
    "many bars": Ruler(tuple(Bar(f"{k} dB", 1e-7, 1e-6, 3e-7) for k in range(60)), 1e-6, "looked for"),
    "a long label": Ruler((Bar("x" * 200, 1e-7, 1e-6), Bar("", 0.0, 1e-6)), None, ""),
    "letters of another script": Ruler((Bar("測試 مرحبا", 1e-7, 1e-6), Bar("b", 0.0, 1e-6)), None, ""),
    "no errors": course(),
    "a moment": course(n=1, ends=np.array([1e-3])),
    "a flood": course(mean=np.array([1e9, 0, 1]), most=np.array([1e9, 0, 1])),
    "months": course(begins=np.array([0.0, 1e6, 8e6]), ends=np.array([1e4, 1.1e6, 9e6]), column_s=1e4),
    "everything amiss": course(
        unaligned=np.array([1.0, 0, 0]), silent=np.array([0, 1.0, 0]), slips=np.array([0.5, 2.5]),
        gaps=((1.0, 2.0),), marks=tuple((k / 14, f"{k} dB") for k in range(40)),
    ),
    "no error accepted": stairs(),
    "off the sheet": stairs(path_errors=np.array([0.0, 1e6]), total_errors=10**6, decided="rejected"),
    "not begun": stairs(path_bits=np.array([0.0, 0.0]), decided=""),
    "at the first bit": stairs(
        kind="sequential", errors=np.arange(3), accept_at=np.array([10, 20, 20]), reject_at=np.array([-1, 3, 20]),
        longest_bits=20, path_bits=np.array([0.0, 1.0, 2.0]), path_errors=np.array([0.0, 1.0, 2.0]), decided="rejected",
    ),
    "a long test": stairs(longest_bits=10**18, path_bits=np.array([0.0, 1e18])),
    "one octave": Gaps(np.array([1.0, 2.0]), np.array([12]), np.array([0.1]), None),
    "forty octaves": Gaps(np.exp2(np.arange(41.0)), np.arange(40), np.arange(40.0), 64),
    "two sizes": Bursts(np.array([1, 2]), np.array([5, 1]), False),
    "many of a size": Bursts(np.arange(1, 21), np.full(20, 10**6), True),
    "one point": Curve("attenuator, dB", (CurveSeries("", (CurvePoint(3.0, 1e-3, 1e-4, 1e-2, 4),)),)),
    "no error anywhere": Curve("dB", (CurveSeries("", (CurvePoint(3.0, 0.0, 0.0, 1e-9, 0),)),), target=1e-12),
    "nothing aligned": Curve("dB", (CurveSeries("", (CurvePoint(3.0, None, 0.0, 1.0, 0),)),)),
    "several curves": Curve(
        "dB",
        tuple(
            CurveSeries(
                f"temperature {t} °C", (CurvePoint(1.0, 1e-3, 1e-4, 1e-2, 4), CurvePoint(2.0, 0.0, 0.0, 1e-5, 0)),
                sensitivity=(1.5, None, 1.8) if t else (None, None, None),
            )
            for t in range(9)
        ),
        target=1e-4,
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", ODD)
def test_whatever_comes_is_drawn_without_a_warning_and_within_its_sheet(name):
    svg = draw(Figure(name, name, ODD[name]), "odd")
    tree = ET.fromstring(svg)
    assert "nan" not in svg.lower()
    _x, _y, width, height = (float(v) for v in tree.get("viewBox").split())
    for text in tree.iter("{http://www.w3.org/2000/svg}text"):
        x, y = text.get("x"), text.get("y")
        if x is not None and y is not None and "rotate(-0" in text.get("transform", "rotate(-0"):
            assert -1 <= float(x) <= width + 1
            assert -1 <= float(y) <= height + 1


def test_the_same_figure_is_drawn_the_same_twice():
    figure = Figure("a", "a", ODD["everything amiss"])
    assert draw(figure, "one") == draw(figure, "one")


def test_counts_and_octaves_are_written_shortly():
    assert [scales.short_count(v) for v in (0, 3, 1200, 2_995_732, 10**12)] == [
        "0",
        "3",
        "1.2k",
        "2.996M",
        "1T",
    ]
    assert [scales.octave(k) for k in (0, 6, 10, 16, 20, 30)] == ["1", "64", "1k", "64k", "1M", "1G"]


@pytest.mark.parametrize("whole", [0.01, 1, 59, 240, 241, 3600, 14_401, 43_200, 10**6, 10**8])
def test_time_has_few_ticks_in_a_fitting_unit(whole):
    places, labels, unit = scales.time_ticks(whole)
    assert 1 <= len(places) <= 10
    assert len(labels) == len(places)
    assert places[-1] <= whole * (1 + 1e-9)
    assert unit == ("s" if whole <= 240 else "min" if whole <= 14_400 else "h")
    assert not math.isnan(sum(places))


def test_text_and_data_are_made_without_matplotlib():
    code = (
        "import sys, harness.cli.report, harness.report.text, harness.report.exports.tables, "
        "harness.report.exports.testcases, harness.report.exports.data; "
        "assert not {'matplotlib', 'typst', 'jinja2', 'drivers'} & set(sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)
