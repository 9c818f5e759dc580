"""Sweeps, searches and instruments: which points there are, and what does not fit together."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.assess.requirement import curve_axis
from harness.profile import ProfileError, Range, Sweep, parse_profile


def sweep(**keys: object) -> Sweep:
    return Sweep.model_validate({"instrument": "a"} | keys)


def visits(**keys: object) -> list[float]:
    return [point["a"] for point in sweep(**keys).visits()]


def test_a_range_has_decimal_steps_and_its_end() -> None:
    assert Range(start=20.1, stop=20.4, step=0.1).values() == (20.1, 20.2, 20.3, 20.4)
    assert Range(start=0, stop=1, step=0.3).values() == (0.0, 0.3, 0.6, 0.9)
    assert Range(start=60, stop=20, step=20).values() == (60.0, 40.0, 20.0)
    assert Range(start=5, stop=5, step=1).values() == (5.0,)


@given(st.integers(-1000, 1000), st.integers(0, 300), st.integers(1, 50), st.integers(0, 3))
def test_a_range_equals_counting_in_whole_steps(start: int, steps: int, step: int, places: int) -> None:
    unit = Decimal(1).scaleb(-places)
    found = Range(
        start=float(start * unit), stop=float((start + steps * step) * unit), step=float(step * unit)
    ).values()
    assert found == tuple(float((start + k * step) * unit) for k in range(steps + 1))


def test_orders_visit_every_value_once() -> None:
    values = [30, 10, 20]
    assert visits(values=values) == [30, 10, 20]
    assert visits(values=values, order="ascending") == [10, 20, 30]
    assert visits(values=values, order="descending") == [30, 20, 10]
    many = list(range(20))
    shuffled = visits(values=many, order="shuffled", seed=3)
    assert shuffled != many
    assert sorted(shuffled) == many
    assert shuffled == visits(values=many, order="shuffled", seed=3)
    assert shuffled != visits(values=many, order="shuffled", seed=4)


def test_a_return_trip_and_a_reference_are_visited() -> None:
    assert visits(values=[1, 2, 3], return_trip=True) == [1, 2, 3, 3, 2, 1]
    assert visits(values=[1, 2, 3], reference=9, reference_every=2) == [9, 1, 2, 9, 3, 9]


def test_several_axes_go_through_their_grid_the_first_one_slowest() -> None:
    both = Sweep.model_validate(
        {"axes": [{"instrument": "t", "values": [-20, 60]}, {"instrument": "a", "values": [1, 2]}]}
    )
    assert [(p["t"], p["a"]) for p in both.visits()] == [(-20, 1), (-20, 2), (60, 1), (60, 2)]


@pytest.mark.parametrize(
    ("replace", "by", "words"),
    [
        ("step = 2", "step = 0", "sweep.values.step must be over 0"),
        ("step = 2", "step = -2", "sweep.values.step must be over 0, not -2"),
        ("ber = 1e-5", "ber = 1e-5\nsensitivity_at_least = 61", "only 20 to 60 is measured"),
        ("step = 2", "stp = 2", "unknown key sweep.values.stp"),
        ("step = 2", "step = 1e-6", "more than 10000"),
        ("stop = 60", "stop = 96", "outside the limits 0 to 95"),
        ("start = 20", "start = nan", "sweep.values.start must be a finite number"),
        ("values = { start = 20, stop = 60, step = 2 }", "values = []", "sweep.values"),
        (
            "values = { start = 20, stop = 60, step = 2 }",
            'values = [1, "x"]',
            "sweep.values[2] must be a number",
        ),
        ("values = { start = 20, stop = 60, step = 2 }", "", "sweep lacks its instrument or its values"),
        ('instrument = "attenuator"', 'instrument = "attenuatr"', 'names the instrument "attenuatr"'),
        ("sensitivity_ber = 1e-6", "sensitivity_ber = 0.5", "sweep.sensitivity_ber must be under 0.5"),
        ("sensitivity_ber = 1e-6", "reference = 99", "sweep.reference goes to 99"),
        ("sensitivity_ber = 1e-6", 'finish_by = "7 am"', "sweep.finish_by cannot be"),
        ("safe = 95", "safe = 96", "safe is 96 and lies outside"),
        ("safe = 95", "value = -1", "value is -1 and lies outside"),
        ("limits = [0, 95]", "limits = [95, 0]", "limits must rise"),
        ('unit = "dB"', 'unit = "dBm"', 'attenuation cannot be in "dBm"'),
        ('unit = "dB"', "", "has a quantity and no unit"),
        ('quantity = "attenuation"', 'quantity = "level"', 'level cannot be in "dB"'),
        ("ber = 1e-5", "ber = 1e-5\nat = { attenuator = 21 }", "which the sweep never visits"),
        ("ber = 1e-5", "ber = 1e-5\nat = { oven = 21 }", 'names the instrument "oven"'),
        ('driver = "step-box"', 'driver = "stp-box"', "stp-box"),
    ],
)
def test_what_does_not_fit_is_refused(sweep_text: str, replace: str, by: str, words: str) -> None:
    assert replace in sweep_text
    with pytest.raises(ProfileError) as caught:
        parse_profile(sweep_text.replace(replace, by))
    assert words in caught.value.what


def test_a_requirement_at_a_point_that_is_visited_is_accepted(sweep_text: str) -> None:
    profile = parse_profile(sweep_text.replace("ber = 1e-5", "ber = 1e-5\nat = { attenuator = 30 }"))
    assert profile.requirement is not None
    assert profile.requirement.at == {"attenuator": 30.0}


def test_sweep_and_search_exclude_one_another(sweep_text: str) -> None:
    search = '[search]\ninstrument = "attenuator"\nlow = 20\nhigh = 60\nber = 1e-6\n'
    with pytest.raises(ProfileError, match=r"a \[sweep\] and a \[search\]"):
        parse_profile(sweep_text + search)
    alone = sweep_text.split("[sweep]")[0]
    assert parse_profile(alone + search).search is not None
    with pytest.raises(ProfileError, match="outside the limits"):
        parse_profile(alone + search.replace("60", "96"))
    with pytest.raises(ProfileError, match="low at or over high"):
        parse_profile(alone + search.replace("60", "20"))
    with pytest.raises(ProfileError, match="picks a point of a sweep"):
        parse_profile(alone.replace("ber = 1e-5", "ber = 1e-5\nat = { attenuator = 30 }"))


def test_calibration_tables_must_rise_and_belong_to_an_instrument(sweep_text: str) -> None:
    table = """
[correction.tables.attenuator]
due = 2027-05-01
points = [{ value = 0, actual = 0.1 }, { value = 10, actual = 10.2, uncertainty = 0.05 }]
[[correction.losses]]
name = "cable 3"
loss_db = 1.2
due = "2027-01-31"
"""
    correction = parse_profile(sweep_text + table).correction
    assert correction is not None
    assert str(correction.losses[0].due) == "2027-01-31"
    with pytest.raises(ProfileError, match="must rise from row to row"):
        parse_profile(sweep_text + table.replace("value = 10", "value = 0"))
    with pytest.raises(ProfileError, match='names the instrument "oven"'):
        parse_profile(sweep_text + table.replace("tables.attenuator", "tables.oven"))
    with pytest.raises(ProfileError, match="must be a date"):
        parse_profile(sweep_text + table.replace('"2027-01-31"', '"soon"'))


def test_a_serial_pattern_must_be_a_regular_expression(sweep_text: str) -> None:
    assert parse_profile(sweep_text + '[lot]\nserial_pattern = "\\\\d{4}"\n').lot is not None
    with pytest.raises(ProfileError, match="no regular expression"):
        parse_profile(sweep_text + '[lot]\nserial_pattern = "("\n')


@pytest.mark.parametrize("oven_first", [True, False])
def test_the_record_knows_the_same_curve_axis_as_the_profile(oven_first: bool) -> None:
    axes = [
        "[[sweep.axes]]\ninstrument = 'oven'\nvalues = [-20, 25, 60, 80]\n",
        "[[sweep.axes]]\ninstrument = 'att'\nvalues = { start = 20, stop = 21, step = 0.5 }\n",
    ]
    text = """
[link]
driver = "loopback"
[instruments.oven]
driver = "manual"
quantity = "temperature"
unit = "degC"
limits = [-40, 90]
safe = 20
[instruments.att]
driver = "manual"
quantity = "attenuation"
unit = "dB"
limits = [0, 60]
safe = 60
[requirement]
ber = 1e-3
sensitivity_at_least = 20.5
[sweep]
sensitivity_ber = 1e-3
"""
    profile = parse_profile(text + "".join(axes if oven_first else axes[::-1]))
    assert profile.curve_axis == curve_axis(profile.resolved()) == "att"
    only = profile.resolved()
    only["sweep"]["axes"] = only["sweep"]["axes"][::-1]
    assert curve_axis(only) == "att"
    with pytest.raises(ProfileError, match="only 20 to 21 is measured"):
        parse_profile(text.replace("20.5", "22") + "".join(axes))
