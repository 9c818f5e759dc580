"""Two runs side by side: like is compared with like, sweeps point by point, and never a sum over settings."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from harness.assess.compare import NoCommonPoint, compare, condition_differences
from harness.record import Point, Run, Second, Tally

BITS = 1_000_000


@pytest.fixture
def run():
    """Make a run of points, each (values, errors)."""

    def point(index, values, errors, **facts):
        places = np.arange(errors, dtype=np.int64) * (BITS // max(errors, 1))
        second = Second(
            index, 0, index, index * 10**9, 10**9, BITS, Tally(BITS, BITS, 0, errors, errors, 0),
            positions=places, ones_lost=np.ones(errors, dtype=bool), stretches=((BITS, True),),
        )  # fmt: skip
        about = {"rate_bps": float(BITS), "pattern": "PRBS15", "units": {"attenuator": "dB"}} | facts
        return Point(index, values, 0, 1, "bits", (second,), (), facts=about)

    def make(points, *, command="sweep", settings=None):
        made = tuple(point(n, *p) if isinstance(p, tuple) else point(n, {}, p) for n, p in enumerate(points))
        return Run(
            "key", "", command, 0, 1, "completed", "bits", None, "", (), settings or {}, {}, (), made, None
        )

    return make


def at(db):
    return {"attenuator": float(db)}


def test_two_plain_runs_are_one_pair(run):
    result = compare(run([20], command="measure"), run([80], command="measure"))
    assert result.single is not None
    assert result.single.errors.worse
    assert result.to_json()["errors"]["ratio"] == pytest.approx(4)


def test_sweeps_are_compared_point_by_point_and_never_as_a_sum(run):
    # Equal at every point that both have; B went on to where errors abound: a sum would call it worse.
    a = run([(at(56), 20), (at(58), 100)])
    b = run([(at(56), 20), (at(58), 100), (at(60), 5_000)])
    result = compare(a, b)
    assert [pair.values for pair in result.pairs] == [at(56), at(58)]
    assert not any(pair.errors.worse for pair in result.pairs)
    assert result.to_json()["errors"] is None
    assert result.warnings == ("1 point of B without a match in the other run",)


def test_points_are_matched_by_their_setting_whatever_their_order(run):
    a = run([(at(56), 10), (at(58), 200)])
    b = run([(at(58), 200), (at(56), 10)])
    assert [pair.errors.ratio for pair in compare(a, b).pairs] == pytest.approx([1, 1])


def test_a_setting_measured_twice_is_matched_in_order(run):
    a = run([(at(56), 10), (at(58), 200), (at(56), 40)])
    b = run([(at(56), 10), (at(56), 40)])
    assert [(p.a.tally.errors, p.b.tally.errors) for p in compare(a, b).pairs] == [(10, 10), (40, 40)]


def test_the_risk_is_shared_among_the_points(run):
    # 20 and 38 errors differ at 95 % by themselves (p = 0.012), not at one of eight points (0.006).
    a, b = run([(at(k), 20) for k in range(8)]), run([(at(k), 38) for k in range(8)])
    assert compare(a, b, at=at(0)).single.errors.worse
    assert not any(pair.errors.worse for pair in compare(a, b).pairs)
    assert compare(a, b, 0.9).pairs[0].errors.confidence == pytest.approx(1 - 0.1 / 8)


def test_one_setting_is_compared_where_it_is_named(run):
    a, b = run([(at(56), 20), (at(58), 100)]), run([(at(56), 80), (at(58), 100)])
    result = compare(a, b, at=at(56))
    assert result.single is not None
    assert result.single.errors.worse
    plain = run([80], command="measure")
    assert compare(a, plain, at=at(56)).single.errors.worse


def test_what_has_no_common_point_is_refused(run):
    swept = run([(at(56), 20), (at(58), 100)])
    with pytest.raises(NoCommonPoint, match="single point"):
        compare(swept, run([20], command="measure"))
    with pytest.raises(NoCommonPoint, match="in common"):
        compare(swept, run([(at(70), 20), (at(72), 100)]))
    with pytest.raises(NoCommonPoint, match="in common there"):
        compare(swept, swept, at=at(60))


def test_a_void_run_is_said_to_be_void(run):
    from harness.record import Note

    void = replace(run([20], command="measure"), notes=(Note(0, "M. Bell", "cable", True),))
    assert "B is marked void" in compare(run([20], command="measure"), void).warnings


def test_differences_name_single_keys_in_words():
    a = {"link": {"rate_bps": 48_000.0, "channel": [{"model": "independent", "ber": 2e-5}]}}
    b = {
        "link": {"rate_bps": 9_600.0, "channel": [{"model": "independent", "ber": 1e-6}]},
        "sweep": {"values": [1.0, 2.0]},
    }
    assert list(condition_differences(a, b)) == [
        "link.channel[1].ber: 2e-5 in A, 1e-6 in B",
        "link.rate_bps: 48000 in A, 9600 in B",
        "sweep.values: nothing in A, 1, 2 in B",
    ]
    assert not any("{" in line for line in condition_differences({}, b))
