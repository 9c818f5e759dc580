"""The rate at which bits came is that between the first and the last bit, not that of the whole run."""

from __future__ import annotations

import pytest

from harness.assess.pace import Pace
from harness.record import Second, Tally

RATE = 48_000


def paced(*seconds: tuple[float, int]) -> Pace:
    """Take seconds: how long, and how many bits came."""
    pace = Pace()
    for index, (duration_s, bits) in enumerate(seconds):
        pace.take(Second(0, 0, index, 0, round(duration_s * 1e9), bits, Tally(bits, bits)))
    return pace


def test_the_wait_for_the_first_bit_is_not_part_of_it():
    assert paced((1, 36_000), (1, RATE), (1, RATE), (0.9, 12_000)).bps(0.25) == pytest.approx(RATE)
    assert paced((1, 0), (1, 24_000), (1, RATE), (1, RATE), (0.1, 0)).bps(1.5) == pytest.approx(RATE)
    assert paced((0.75, 24_000)).bps(0.25) == pytest.approx(RATE)


def test_the_wait_after_the_last_bit_is_not_part_of_it():
    whole = [(1.0, RATE)] * 5
    assert paced(*whole, (1, 100), (1, 0), (1, 0), (0.7, 0)).bps(None) == pytest.approx(RATE)


def test_a_silence_between_bits_is_part_of_it():
    assert paced((1, RATE), (1, 0), (1, RATE), (1, RATE), (1, 8)).bps(0.0) == pytest.approx(3 * RATE / 4)


def test_where_nothing_came_or_all_was_waiting_there_is_no_rate():
    assert paced().bps(None) is None
    assert paced((1, 0), (1, 0)).bps(0.5) is None
    assert paced((0.5, 800_000)).bps(0.499) is None
    assert paced((0.5, 800_000)).bps(0.6) is None
