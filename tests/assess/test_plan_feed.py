"""Plans that count error events instead of errors: the same however the stream is cut."""

from __future__ import annotations

import numpy as np
import pytest

from harness.assess.feed import PlanFeed
from harness.assess.requirement import Requirement
from harness.record import Segment, Tally


def segment(
    start: int, bits: int, at: list[int], *, complete: bool = True, errors: int | None = None
) -> Segment:
    n = len(at) if errors is None else errors
    return Segment(
        start,
        Tally(bits, bits, 0, n, n, 0),
        aligned=True,
        positions=np.array(at, dtype=np.int64),
        ones_lost=np.ones(len(at), dtype=np.bool_),
        positions_complete=complete,
    )


REQUIREMENT = Requirement(ber=1e-4, accept_errors=2, count="events", event_gap_bits=64)


def feed_in_pieces(cuts: list[int], at: list[int], bits: int = 100_000):
    feed = PlanFeed(REQUIREMENT.make_plan(), REQUIREMENT)
    decision = None
    for begin, end in zip([0, *cuts], [*cuts, bits], strict=True):
        inside = [p for p in at if begin <= p < end]
        decision = decision or feed.advance(segment(begin, end - begin, inside))
    return feed.plan, decision


BURSTS = [100, 130, 190, 191, 40_000, 40_064, 40_128]


@pytest.mark.parametrize("cuts", [[], [120], [150, 191, 40_010], list(range(50, 100_000, 97))])
def test_two_bursts_are_two_events_however_they_are_cut(cuts):
    plan, decision = feed_in_pieces(cuts, BURSTS)
    assert plan.errors == 2
    assert decision is not None
    assert decision.accepted


def test_the_same_errors_counted_one_by_one_are_refused():
    requirement = Requirement(ber=1e-4, accept_errors=2)
    feed = PlanFeed(requirement.make_plan(), requirement)
    decision = feed.advance(segment(0, 100_000, BURSTS))
    assert decision is not None
    assert not decision.accepted


def test_errors_one_bit_further_apart_are_events_of_their_own():
    plan, _ = feed_in_pieces([], [100, 164, 229])
    assert plan.errors == 2


def test_without_positions_every_error_is_an_event():
    feed = PlanFeed(REQUIREMENT.make_plan(), REQUIREMENT)
    feed.advance(segment(0, 1000, [5], complete=False, errors=7))
    assert feed.plan.errors == 7
