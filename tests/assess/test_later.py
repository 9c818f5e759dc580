"""Bits that came after a plan had decided are told from lost ones."""

from __future__ import annotations

from dataclasses import replace

import pytest

from harness.assess.accumulate import Accumulator
from harness.assess.later import came_later
from harness.assess.point import Facts, assess_point
from harness.assess.requirement import Requirement
from harness.record import Second, Tally


@pytest.mark.parametrize(("lost", "inserted", "expected"), [(0, 0, 4_000), (800, 0, 3_200), (0, 800, 4_800)])
def test_bits_sent_before_the_decision_are_received_lost_or_came_later(lost, inserted, expected):
    requirement = Requirement(ber=1e-4, max_slips=5)
    acc = Accumulator(requirement, 48_000.0)
    bits = requirement.make_plan().bits
    assert bits is not None
    second = Second(0, 0, 0, 0, 10**9, bits + 4_000, Tally(bits, bits), stretches=((bits, True),))
    acc.add(replace(second, slips=1, bits_lost=lost, bits_inserted=inserted))
    about = Facts({}, "completed", "plan", 0, 1, Tally(), "PRBS15", "lsb", 48_000.0, requirement)
    assert came_later(assess_point(acc, about)) == expected


def test_without_a_decision_nothing_came_later():
    acc = Accumulator(None, 48_000.0)
    acc.add(Second(0, 0, 0, 0, 10**9, 5_000, Tally(1_000, 1_000), stretches=((1_000, True),)))
    about = Facts({}, "completed", "bits", 0, 1, Tally(), "PRBS15", "lsb", 48_000.0, None)
    assert came_later(assess_point(acc, about)) == 0
