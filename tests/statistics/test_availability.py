"""The ten-second rules of G.821 and G.826 on hand-made seconds, each with its answer worked out in words.

A sequence is a string, one letter a second of 64 000 bits:
``.`` clean, ``e`` one error, ``s`` 63 errors (just under 1e-3), ``S`` 64 errors (1e-3 exactly),
``u`` 32 000 bits unaligned (half), ``U`` 32 001 (more than half), ``-`` no bit though bits were due,
``i`` no bit and none due, ``t`` a slip without an error, ``p`` half a second, clean, ``P`` half a second
with an error, ``|`` a new sitting, ``/`` a new point. ``X*n`` in the tests repeats.
"""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.record import Second, Tally
from harness.statistics.availability import (
    Availability,
    Period,
    assess_availability,
    judge_second,
    nines,
    outage_seconds_a_year,
)
from harness.statistics.objectives import Objectives

BITS = 64_000
WHOLE = 1_000_000_000


def tally(received=BITS, unaligned=0, errors=0):
    return Tally(received, received - unaligned, unaligned, errors, errors, 0)


LETTERS = {
    ".": {},
    "e": {"tally": tally(errors=1)},
    "s": {"tally": tally(errors=63)},
    "S": {"tally": tally(errors=64)},
    "u": {"tally": tally(unaligned=BITS // 2)},
    "U": {"tally": tally(unaligned=BITS // 2 + 1)},
    "-": {"tally": tally(received=0)},
    "i": {"tally": tally(received=0), "due": False},
    "t": {"slips": 1},
    "p": {"tally": tally(received=BITS // 2), "duration_ns": WHOLE // 2},
    "P": {"tally": tally(received=BITS // 2, errors=1), "duration_ns": WHOLE // 2},
}


def seconds_of(text):
    point = sitting = 0
    made = []
    for letter in text:
        if letter == "|":
            sitting += 1
            continue
        if letter == "/":
            point += 1
            continue
        keys = {"tally": tally(), "duration_ns": WHOLE} | LETTERS[letter]
        made.append(
            Second(point=point, sitting=sitting, index=len(made), at=len(made) * WHOLE, sent=BITS, **keys)
        )
    return made


# (sequence, available, unavailable, errored, severely errored, why)
WORKED = [
    ("", 0, 0, 0, 0, "nothing measured: nothing counted"),
    ("." * 20, 20, 0, 0, 0, "all clean"),
    ("e", 1, 0, 1, 0, "one error in 64 000 bits is 1.6e-5: errored, not severely"),
    ("s", 1, 0, 1, 0, "63 of 64 000 is 0.000984: under 1e-3"),
    ("S", 1, 0, 1, 1, "64 of 64 000 is 1e-3 exactly: severe, and a severe second is an errored one"),
    ("u", 1, 0, 1, 0, "half of the bits unaligned is not more than half: errored only"),
    ("U", 1, 0, 1, 1, "one bit more than half unaligned: severe"),
    ("-", 1, 0, 1, 1, "bits were due and none came: severe"),
    ("i", 0, 0, 0, 0, "none due, none came: left out"),
    ("t", 1, 0, 1, 0, "a slip alone makes a second errored"),
    ("p", 0, 0, 0, 0, "a partial second is no second"),
    ("S" * 9, 9, 0, 9, 9, "nine severe seconds at the start and the end: still available"),
    ("S" * 10, 0, 10, 0, 0, "ten severe seconds: unavailable from the first of them"),
    ("S" * 11, 0, 11, 0, 0, "the eleventh continues it"),
    ("." + "S" * 9, 10, 0, 9, 9, "nine at the end change nothing"),
    ("." + "S" * 10, 1, 10, 0, 0, "ten at the end do, and their severe seconds no longer count"),
    ("S" * 9 + ".", 10, 0, 9, 9, "nine, then a good one: never entered"),
    ("S" * 9 + "." + "S" * 9, 19, 0, 18, 18, "one good second between: the count of ten starts again"),
    ("S" * 9 + "e" + "S" * 9, 19, 0, 19, 18, "an errored second that is not severe breaks it too"),
    ("S" * 9 + "s" + "S", 11, 0, 11, 10, "as does one just under 1e-3"),
    ("S" * 10 + "." * 9, 0, 19, 0, 0, "nine good ones at the end do not end unavailable time"),
    ("S" * 10 + "." * 10, 10, 10, 0, 0, "ten good ones do, from the first of them"),
    ("S" * 10 + "e" * 10, 10, 10, 10, 0, "errored seconds are not severe: they end it, and count as errored"),
    ("S" * 10 + "." * 9 + "S", 0, 20, 0, 0, "nine good ones, then a severe one: all unavailable"),
    ("S" * 10 + "." * 9 + "S" + "." * 10, 10, 20, 0, 0, "the count of ten good ones starts again after it"),
    ("S" * 10 + "e" * 9 + "S", 0, 20, 0, 0, "errored seconds in unavailable time are not counted"),
    ("S" * 10 + "." * 10 + "S" * 9, 19, 10, 9, 9, "back in available time, nine severe ones are counted"),
    ("S" * 10 + "." * 10 + "S" * 10, 10, 20, 0, 0, "ten good ones exactly between two periods"),
    ("S" * 10 + "." * 9 + "S" * 10, 0, 29, 0, 0, "nine good ones between: one period of 29 s"),
    ("." * 5 + "S" * 10 + "." * 10 + "." * 5, 20, 10, 0, 0, "5 + 10 + 5 available, 10 unavailable"),
    ("eeS" + "." * 7 + "S" * 12 + "." * 10, 20, 12, 3, 1, "3 errored (1 severe) before; 12 s unavailable"),
    ("-" * 10, 0, 10, 0, 0, "a lost signal for ten seconds"),
    ("-U-S" * 3, 0, 12, 0, 0, "severe seconds of every kind make ten together"),
    ("S" * 5 + "i" * 3 + "S" * 5, 0, 10, 0, 0, "seconds left out do not break ten in a row"),
    ("S" * 10 + "." * 5 + "i" + "." * 5, 10, 10, 0, 0, "on the way back neither"),
    ("S" * 5 + "|" + "S" * 5, 10, 0, 10, 10, "a new sitting: 5 and 5 are not consecutive"),
    ("S" * 5 + "/" + "S" * 5, 10, 0, 10, 10, "a new point likewise"),
    ("S" * 10 + "|" + "." * 3, 3, 10, 0, 0, "after a gap the path counts as available again"),
    ("S" * 10 + "." * 5 + "|" + "." * 5, 5, 15, 0, 0, "5 good ones before the gap stay unavailable"),
    ("S" * 9 + "P", 9, 0, 9, 9, "a partial tenth second does not complete ten"),
    ("." * 9 + "P", 9, 0, 0, 0, "the error in the partial second is left out (and said)"),
    ("u" * 10, 10, 0, 10, 0, "ten seconds half unaligned are errored, never unavailable"),
    ("S" * 10 + "u" * 10, 10, 10, 10, 0, "half unaligned is not severe: it ends unavailable time"),
]


@pytest.mark.parametrize(("text", "available", "unavailable", "errored", "severe", "why"), WORKED)
def test_worked_sequences(text, available, unavailable, errored, severe, why):
    result = assess_availability(seconds_of(text))
    got = (result.available, result.unavailable, result.errored, result.severely_errored)
    assert got == (available, unavailable, errored, severe), why
    assert result.seconds == available + unavailable
    assert sum(p.seconds for p in result.periods) == unavailable


def test_periods_name_their_first_second_and_whether_they_ended():
    result = assess_availability(seconds_of("..." + "S" * 12 + "." * 10 + "e" + "-" * 10 + "." * 4))
    assert result.periods == (
        Period(first=3, at=3 * WHOLE, seconds=12, ended=True),
        Period(first=26, at=26 * WHOLE, seconds=14, ended=False),
    )


def test_a_period_cut_by_a_new_sitting_is_not_said_to_have_ended():
    result = assess_availability(seconds_of("S" * 10 + "." * 5 + "|" + "." * 20))
    assert result.periods == (Period(0, 0, 15, ended=False),)


def test_left_out_seconds_are_counted_and_an_error_among_them_is_said():
    result = assess_availability(seconds_of("...ii..P"))
    assert (result.idle, result.partial, result.partial_errored) == (2, 1, 1)
    assert any("partial" in text for text in result.warnings)


def by_definition(text):
    """The rule read off the recommendation, with look-ahead over the whole text: True = unavailable."""
    severe = [c in "SU-" for c in text]
    down, state, i = [False] * len(text), False, 0
    while i < len(text):
        ahead = severe[i : i + 10]
        if len(ahead) == 10 and all(ahead) and not state:
            state = True
        elif len(ahead) == 10 and not any(ahead) and state:
            state = False
        down[i] = state
        i += 1
    return down


@given(st.lists(st.tuples(st.sampled_from(".esSuU-t"), st.integers(min_value=1, max_value=13)), max_size=30))
def test_agrees_with_the_definition_by_look_ahead_at_every_moment(stretches):
    text = "".join(letter * n for letter, n in stretches)
    rule = Availability()
    for n, second in enumerate(seconds_of(text), start=1):
        rule.advance(second)
        if n % 7 == 0 or n == len(text):  # live results are those of the run cut there
            down = by_definition(text[:n])
            result = rule.result()
            assert result.unavailable == sum(down)
            assert result.errored == sum(c != "." and not d for c, d in zip(text[:n], down, strict=True))
            assert result.severely_errored == sum(
                c in "SU-" and not d for c, d in zip(text[:n], down, strict=True)
            )


def test_asking_for_the_result_changes_nothing():
    rule, asked = Availability(), Availability()
    for second in seconds_of("S" * 10 + "." * 10 + "S" * 9 + "e"):
        rule.advance(second)
        asked.advance(second)
        assert asked.result() == asked.result()
    assert rule.result() == asked.result()


def test_lost_bits_count_as_missing_ones():
    """1 000 received, 1 001 lost: more than half of what was due is missing. 1 000 lost: exactly half."""
    second = seconds_of(".")[0]
    keys = {"point": 0, "sitting": 0, "index": 0, "at": 0, "duration_ns": WHOLE, "sent": 2_001, "slips": 1}
    assert judge_second(Second(tally=tally(1_000), bits_lost=1_001, **keys)).severe
    assert not judge_second(Second(tally=tally(1_000), bits_lost=1_000, **keys)).severe
    assert not judge_second(second).errored


@pytest.mark.parametrize(("rate", "warned"), [(300, True), (1_000, True), (1_001, False), (64_000, False)])
def test_slow_rates_are_warned_of(rate, warned):
    result = assess_availability(seconds_of("..."), rate_bps=rate)
    assert any("1 kbit/s" in text for text in result.warnings) is warned


def test_slow_rate_is_noticed_without_being_told():
    slow = Second(0, 0, 0, 0, WHOLE, 300, tally(300, errors=1))
    result = assess_availability([slow])
    assert result.severely_errored == 1
    assert any("1 kbit/s" in text for text in result.warnings)


def test_objectives_are_judged_on_available_time_and_the_limit_itself_meets_them():
    """100 s available: 8 errored, of which 1 severely. ESR 0.08, SESR 0.01; 10 of 110 s unavailable."""
    text = "e" * 7 + "S" + "." * 92 + "S" * 10
    asked = Objectives(esr=0.08, sesr=0.002, availability=0.9)
    result = assess_availability(seconds_of(text), objectives=asked)
    assert [(j.name, j.met) for j in result.judged] == [
        ("esr", True),
        ("sesr", False),
        ("availability", True),
    ]
    assert result.objectives_met is False
    assert assess_availability(seconds_of(text), objectives=Objectives(esr=0.08)).objectives_met is True


def test_without_available_time_no_objective_is_met():
    result = assess_availability(seconds_of("-" * 30), objectives=Objectives(esr=0.08, availability=0.5))
    assert [(j.name, j.met) for j in result.judged] == [("esr", None), ("availability", False)]
    assert result.objectives_met is False
    silent = assess_availability([], objectives=Objectives(esr=0.08))
    assert silent.objectives_met is None


def test_objectives_outside_a_ratio_are_refused():
    with pytest.raises(ValueError, match="between 0 and 1"):
        Objectives(esr=8)


def test_six_nines_are_half_a_minute_a_year():
    """Arithmetic: 1e-6 of 31 557 600 s is 31.6 s."""
    assert nines(0.999999) == pytest.approx(6)
    assert outage_seconds_a_year(0.999999) == pytest.approx(31.5576)
    assert nines(1.0) == math.inf


def test_bounds_on_availability_hold_the_ratio_and_widen_with_fewer_periods():
    few = assess_availability(seconds_of("." * 900 + "S" * 100))
    many = assess_availability(seconds_of(("." * 90 + "S" * 10) * 10))
    for result in (few, many):
        assert result.ratio == pytest.approx(0.9)
        assert result.ratio_lower < 0.9 < result.ratio_upper
    assert few.ratio_lower < many.ratio_lower


def test_without_an_outage_the_bound_allows_for_one_of_ten_seconds():
    """No period in 1 000 s: Garwood's upper limit for none at 97.5 % is 3.689 periods of 10 s."""
    result = assess_availability(seconds_of("." * 1_000))
    assert result.ratio_upper == 1
    assert result.ratio_lower == pytest.approx(1 - 10 * -math.log(0.025) / 1_000)


def blocks_second(errors_at=(), *, listed=None, unaligned=0, stretches=(), slips=0, lost=0, bits=BITS):
    places = np.array(sorted(errors_at), dtype=np.int64) + 1_000_000
    kept = places if listed is None else places[:listed]
    return Second(
        0,
        0,
        0,
        0,
        WHOLE,
        BITS,
        tally(bits, unaligned, len(places)),
        slips=slips,
        bits_lost=lost,
        first_bit=1_000_000,
        positions=kept,
        ones_lost=np.zeros(len(kept), dtype=np.bool_),
        positions_complete=listed is None,
        stretches=stretches,
    )


def g826(*seconds):
    return assess_availability(seconds, "G.826", block_bits=6_400)


def test_blocks_are_counted_once_however_many_errors_they_hold():
    """Ten blocks of 6 400 bits; errors at 0, 1, 6 399 lie in the first, 6 400 in the second."""
    result = g826(blocks_second((0, 1, 6_399, 6_400)))
    assert (result.blocks, result.background_errors, result.errored, result.severely_errored) == (10, 2, 1, 0)
    assert result.bber == 0.2


def test_three_blocks_of_ten_are_thirty_per_cent_and_severe():
    assert g826(blocks_second((0, 6_400))).severely_errored == 0
    severe = g826(blocks_second((0, 6_400, 12_800)))
    assert severe.severely_errored == 1
    assert (severe.blocks, severe.bber) == (0, None)  # background errors lie outside severe seconds


def test_thousand_errors_in_one_block_are_severe_by_bits_and_not_by_blocks():
    second = blocks_second(range(1_000))
    assert judge_second(second).severe
    assert not judge_second(second, "G.826", 6_400).severe


def test_a_remainder_belongs_to_the_last_block():
    """64 000 bits in blocks of 6 000: ten blocks, the last one of 10 000 bits."""
    result = assess_availability([blocks_second((63_999, 54_000))], "G.826", block_bits=6_000)
    assert (result.blocks, result.background_errors) == (10, 1)


def test_fewer_bits_than_a_block_are_one_block():
    result = assess_availability([blocks_second((5,))], "G.826", block_bits=100_000)
    assert result.severely_errored == 1  # its one block of one is errored


def test_unaligned_bits_mark_the_blocks_they_touch():
    """6 399 clean, then 2 unaligned bits: they touch the first and the second block."""
    second = blocks_second(unaligned=2, stretches=((6_399, True), (2, False), (57_599, True)))
    result = g826(second)
    assert (result.background_errors, result.unplaced) == (2, 0)


def test_unaligned_bits_up_to_a_blocks_end_do_not_touch_the_next():
    """Bits 6 398 and 6 399 are the last two of the first block."""
    second = blocks_second(unaligned=2, stretches=((6_398, True), (2, False), (57_600, True)))
    assert g826(second).background_errors == 1


def test_a_slip_marks_one_block_and_lost_blocks_are_errored():
    """12 800 bits lost are two blocks; with the one where they were lost 3 of 12: 25 %, not severe."""
    result = g826(blocks_second(slips=1, lost=12_800))
    assert (result.blocks, result.background_errors, result.severely_errored) == (12, 3, 0)


def test_errors_without_position_are_counted_as_the_most_they_can_be_and_said():
    """Listed: one error in block 0. Two more lie somewhere after it: at most two more blocks, so severe."""
    result = g826(blocks_second((0, 1, 2), listed=1))
    assert result.severely_errored == 1
    assert result.unplaced == 1
    assert any("at most" in text for text in result.warnings)
    # After a last known position in the last block no other block can be errored.
    assert g826(blocks_second((63_000, 63_001, 63_002), listed=1)).background_errors == 1


def test_unaligned_bits_of_unknown_place_are_said():
    result = g826(blocks_second(unaligned=6_400))
    assert result.unplaced == 1
    assert result.background_errors == 2


def test_ten_seconds_of_severe_blocks_are_unavailable():
    severe = blocks_second((0, 6_400, 12_800))
    result = g826(*[severe] * 10, blocks_second((0,)))
    assert (result.available, result.unavailable) == (0, 11)


@pytest.mark.parametrize("rate", [None, 64_000, 1_499_999, 4e9])
def test_block_length_must_be_stated_where_the_table_has_none(rate):
    with pytest.raises(ValueError, match="state the block length"):
        Availability("G.826", rate_bps=rate)
    assert Availability("G.826", rate_bps=rate, block_bits=1_000).block_bits == 1_000


def test_a_block_length_outside_the_table_is_warned_of():
    result = assess_availability(seconds_of("."), "G.826", rate_bps=2_048_000, block_bits=100)
    assert any("800" in text for text in result.warnings)
    fine = assess_availability(seconds_of("."), "G.826", rate_bps=2_048_000)
    assert fine.block_bits == 2_048
    assert not fine.warnings
