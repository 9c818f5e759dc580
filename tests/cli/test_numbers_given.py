"""Numbers on the command line are read as people write them, or refused in one plain line and one to mend it."""

from __future__ import annotations

import pytest

from harness.cli.failure import UserError
from harness.cli.numbers import count_of, number, whole


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("0", 0),
        ("1000000000", 10**9),
        ("1_000_000", 10**6),
        ("1e9", 10**9),
        ("1.5e3", 1500),
        ("1E18", 10**18),
        ("123456789012345678", 123456789012345678),  # beyond what a double holds
        ("-3", -3),
    ],
)
def test_whole_numbers_are_read_exactly(text, value):
    assert whole(text) == value


@pytest.mark.parametrize("text", ["", "x", "1.5", "1e-3", "nan", "inf", "1e999999", "0x10", "3 4"])
def test_what_is_no_whole_number_is_refused(text):
    with pytest.raises(UserError, match="whole number"):
        whole(text)


def test_a_count_is_never_negative():
    with pytest.raises(UserError, match="-1 is under 0"):
        count_of("-1")


@pytest.mark.parametrize(
    ("text", "value"), [("48000", 48000.0), ("48_000", 48000.0), ("1e-9", 1e-9), ("-3", -3.0)]
)
def test_numbers_are_read(text, value):
    assert number(text) == value


@pytest.mark.parametrize(
    ("text", "advice"),
    [
        ("48k", "48000"),
        ("48kbit/s", "48000"),
        ("1.5M", "1500000"),
        ("0,95", "0.95"),
        ("fast", "1e-9"),
        ("nan", "figures"),
        ("inf", "figures"),
        ("1e999", "figures"),
    ],
)
def test_what_is_no_number_is_refused_and_says_how_to_write_it(text, advice):
    with pytest.raises(UserError, match=r"is no (finite )?number") as refused:
        number(text)
    assert advice in refused.value.advice


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["examine", "x.bin", "--rate", "48k"], ['"48k" is no number', "write it in figures: 48000"]),
        (["bounds", "-1", "10"], ["-1 is under 0"]),
        (["theory", "--modulation", "bpsk", "--ebn0", "inf", "--json"], ["no finite number"]),
        (["runs", "--limit", "0"], ["0 is too few", "1 or more"]),
        (["plan", "--ber", "1e-320"], ["beyond every test", "1e-30 or more"]),
        ([], ["no command was given", "--help"]),
    ],
)
def test_the_command_line_refuses_in_two_plain_lines(bitassay, arguments, words):
    done = bitassay(*arguments)
    assert done.status == 2
    assert len(done.err.splitlines()) == 2
    assert done.out == ""
    for word in words:
        assert word in done.err


def test_a_count_may_be_written_with_a_power_of_ten(bitassay):
    document = bitassay("bounds", "3", "1e9", "--json").json
    assert (document["errors"], document["bits"]) == (3, 10**9)


def test_a_ratio_too_small_for_a_double_is_not_called_nought(bitassay):
    done = bitassay("theory", "--modulation", "bpsk", "--ebn0", "30")
    assert "under 1e-300" in done.out
    assert bitassay("theory", "--modulation", "bpsk", "--ebn0", "30", "--json").json["ber_under"] == 1e-300


def test_a_plan_says_that_a_producer_risk_has_no_place_in_it(bitassay):
    done = bitassay("plan", "--ber", "1e-6", "--producer-risk", "0.1")
    assert done.status == 0
    assert "--producer-risk is for sequential plans" in done.err
