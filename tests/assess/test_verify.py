"""`verify` names every number that no longer follows from the record."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from harness.assess.run import assess
from harness.assess.verify import differences
from harness.record import Event, Tally


@pytest.fixture
def good(record, second):
    run = record([second(0, (3, 77)), second(1), second(2, (25_000,), unaligned=2_000)], ended_by="bits")
    return replace(run, stated=assess(run).to_json())


def change(run, index, **values):
    rows = list(run.points[0].seconds)
    rows[index] = replace(rows[index], **values)
    return replace(run, points=(replace(run.points[0], seconds=tuple(rows)),))


def test_a_good_record_has_no_differences(good):
    assert differences(good) == []


def test_a_stated_number_that_was_changed_is_named(good):
    stated = {**good.stated, "errors": good.stated["errors"] - 1}
    assert differences(replace(good, stated=stated)) == ["errors: 2 was stated, 3 follows from the record"]


def test_a_stated_bound_that_was_changed_is_named(good):
    bounds = {**good.stated["bounds"], "upper": good.stated["bounds"]["upper"] * 0.999}
    found = differences(replace(good, stated={**good.stated, "bounds": bounds}))
    assert len(found) == 1
    assert found[0].startswith("bounds.upper")


@pytest.mark.parametrize(
    ("values", "word"),
    [
        ({"tally": Tally(10_000, 10_000, 0, 1, 1, 0)}, "positions"),
        ({"tally": Tally(10_000, 9_999, 0, 2, 2, 0)}, "received"),
        ({"tally": Tally(10_000, 10_000, 0, 2, 1, 0)}, "ones_as_zeros"),
        ({"positions": np.array([3, 78])}, "errors"),
        ({"positions": np.array([3, 12_000])}, "outside"),
        ({"positions": np.array([77, 3])}, "out of order"),
        ({"ones_lost": np.array([True, False])}, "ones_as_zeros"),
        ({"first_bit": 8}, "does not begin where"),
        ({"stretches": ((9_000, True), (1_000, False))}, "stretches"),
        ({"slips": 1}, "slips"),
    ],
)
def test_a_second_that_was_changed_is_named(good, values, word):
    found = differences(change(good, 0, **values))
    if word == "errors":  # a moved position changes no count: only the digest tells
        assert found == [] or all("clustering" in line for line in found)
    else:
        assert any(word in line for line in found), found


def test_a_missing_second_is_named(good):
    point = good.points[0]
    run = replace(good, points=(replace(point, seconds=(point.seconds[0], point.seconds[2])),))
    assert any("seconds 1 to 1 are missing" in line for line in differences(run))


def test_a_doubled_second_is_named(good):
    point = good.points[0]
    run = replace(good, points=(replace(point, seconds=(*point.seconds, point.seconds[2])),))
    assert any("is there twice" in line for line in differences(run))


def test_a_slip_event_without_its_second_is_named(good):
    point = good.points[0]
    slip = Event("slip", 5, "one byte lost", 0, {"bits": -8, "modulo": None})
    run = replace(good, points=(replace(point, events=(*point.events, slip)),))
    assert any("slips" in line for line in differences(run))


def test_what_an_earlier_version_stated_as_null_for_clusters_not_judged_is_no_difference(record, second):
    run = record([second(0, (3,)), second(1)], ended_by="bits")
    stated = assess(run).to_json()
    assert stated["clustering"]["clustered"] is False
    assert differences(replace(run, stated={**stated, "clustering": None})) == []


def test_clusters_that_were_judged_cannot_be_stated_as_null(record, second):
    burst = record([second(0, tuple(range(100, 160))), second(1)], ended_by="bits")
    stated = {**assess(burst).to_json(), "clustering": None}
    assert any("clustering" in line for line in differences(replace(burst, stated=stated)))
