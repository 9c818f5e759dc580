"""Along which of several conditions a curve runs."""

import pytest

from harness.statistics.conditions import Condition, curve_along, rises_with

OVEN = Condition("oven", "temperature", 5)
ATTENUATOR = Condition("attenuator", "attenuation", 3)
PAD = Condition("pad", "attenuation", 2)
SUPPLY = Condition("supply", "voltage", 7)


@pytest.mark.parametrize(
    ("axes", "along"),
    [
        ((), ""),
        ((OVEN,), "oven"),
        ((OVEN, ATTENUATOR), "attenuator"),
        ((ATTENUATOR, OVEN), "attenuator"),
        ((PAD, ATTENUATOR), "attenuator"),
        ((OVEN, SUPPLY), "supply"),
        ((PAD, Condition("other", "level", 2)), "pad"),
    ],
)
def test_a_curve_runs_along_decibels_and_where_most_values_are(axes, along):
    assert curve_along(axes) == along


def test_what_makes_things_worse_is_known_of_levels_and_attenuations_only():
    assert [rises_with(q) for q in ("attenuation", "loss")] == [True, True]
    assert [rises_with(q) for q in ("level", "power", "gain", "ebn0", "snr")] == [False] * 5
    assert [rises_with(q) for q in ("temperature", "", "other")] == [None] * 3
