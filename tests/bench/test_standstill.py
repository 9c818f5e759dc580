"""Time in which this computer stood still is told from time in which the link was silent."""

from __future__ import annotations

from harness.bench.standstill import LEAST_NS, standstill_ns
from harness.bench.watch import LOST_NS, LinkWatch

SECOND_NS = 10**9


def test_a_wait_that_took_much_longer_than_asked_for_is_a_standstill():
    assert standstill_ns(0, 5 * SECOND_NS, 0.05) == 5 * SECOND_NS - 50_000_000
    assert standstill_ns(0, SECOND_NS // 2, 0.05) == 0
    assert standstill_ns(0, 50_000_000 + LEAST_NS, 0.05) == LEAST_NS


def watched() -> LinkWatch:
    """A link on which bits are due and were aligned up to 10 s."""
    watch = LinkWatch(0)
    watch.due(True, 0, 0, True)
    watch.aligned(0, 10 * SECOND_NS)
    return watch


def test_an_excused_silence_is_no_lost_link_but_a_longer_one_is():
    watch = watched()
    watch.excuse(60 * SECOND_NS)
    assert not watch.silent_until(70 * SECOND_NS + LOST_NS - 1)
    assert watch.silent_until(70 * SECOND_NS + LOST_NS)
    assert watched().silent_until(10 * SECOND_NS + LOST_NS)


def test_old_bits_that_are_decided_after_the_standstill_do_not_undo_the_excuse():
    watch = watched()
    watch.excuse(60 * SECOND_NS)
    assert watch.aligned(10 * SECOND_NS, 10 * SECOND_NS + 1) == (False, False)
    assert watch.aligned(70 * SECOND_NS, 71 * SECOND_NS) == (False, False)
    assert watch.aligned(75 * SECOND_NS, 76 * SECOND_NS) == (True, True)
