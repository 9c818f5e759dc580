"""The balance of bits: sent ones are received, lost, cut off on their way, or come after the decision."""

from __future__ import annotations

from dataclasses import replace

import pytest

from harness.assess.accumulate import Accumulator
from harness.assess.later import balance_of, balance_words
from harness.assess.point import Facts, assess_point
from harness.assess.requirement import Requirement
from harness.record import Event, Second, Tally


def assessed(*, lost=0, inserted=0, cuts=(), required=True, status="completed", bits=29_957):
    """Assess a point of which 4 000 bits more were sent than came, after these cuts."""
    requirement = Requirement(ber=1e-4, max_slips=5) if required else None
    acc = Accumulator(requirement, 48_000.0)
    second = Second(0, 0, 0, 0, 10**9, bits + 4_000, Tally(bits, bits), stretches=((bits, True),))
    acc.add(replace(second, slips=1, bits_lost=lost, bits_inserted=inserted))
    for cut in cuts:
        acc.note(Event("resumed", 0, "the run goes on", 0, {"bits": cut}))
    about = Facts({}, status, "plan", 0, 1, Tally(), "PRBS15", "lsb", 48_000.0, requirement)
    return assess_point(acc, about)


@pytest.mark.parametrize(
    ("lost", "inserted", "cuts", "at_a_cut", "later"),
    [
        (0, 0, (), 0, 4_000),
        (800, 0, (), 0, 3_200),
        (0, 800, (), 0, 4_800),
        (8, 0, (1_000,), 1_000, 2_992),
        (8, 0, (1_000, 1_600), 1_600, 2_392),  # each resumption says what all cuts have left out
        (800, 0, (4_000,), 3_200, 0),
    ],
)
def test_bits_sent_are_received_lost_on_their_way_at_a_cut_or_come_after_the_decision(
    lost, inserted, cuts, at_a_cut, later
):
    p = assessed(lost=lost, inserted=inserted, cuts=cuts)
    assert p.plan["decided_at_bit"] is not None
    balance = balance_of(p)
    assert (balance.at_a_cut, balance.after_decision) == (at_a_cut, later)
    assert balance.sent + inserted == balance.received + lost + at_a_cut + later


def test_the_balance_in_words_leaves_nothing_out():
    words = balance_words(assessed(lost=8, cuts=(1_000,)), " at 48 kbit/s").replace("\u202f", " ")
    assert words == (
        "33 957 bits sent: 29 957 bits received at 48 kbit/s, 8 bits lost, 1 000 bits on their way when the run "
        "was cut or broken off, 2 992 bits came after the decision"
    )


def test_without_a_decision_nothing_came_later():
    balance = balance_of(assessed(required=False))
    assert (balance.at_a_cut, balance.after_decision) == (0, 0)


@pytest.mark.parametrize("status", ["cut", "interrupted", "failed"])
def test_what_was_out_when_a_run_was_broken_off_was_on_its_way(status):
    assert balance_of(assessed(required=False, status=status)).at_a_cut == 4_000
