"""Error performance by second against the ITU-T recommendations."""

import itertools

import numpy as np
import pytest

from harness.record import Second, Tally
from harness.statistics.availability import judge_second
from harness.statistics.blocks import RATE_CLASSES, block_length, count_blocks, rate_class


def second(bits, errors):
    return Second(0, 0, 0, 0, 1_000_000_000, bits, Tally(bits, bits, 0, errors, errors, 0))


@pytest.mark.parametrize(
    ("errors", "errored", "severe"),
    [(0, False, False), (1, True, False), (63, True, False), (64, True, True)],
)
def test_g821_definitions(errors, errored, severe):
    """ITU-T G.821 (12/2002): errored second, one or more errors; severely errored, BER of 1e-3 or more.

    On its 64 kbit/s connection that is 64 errors.
    """
    judged = judge_second(second(64_000, errors))
    assert (judged.errored, judged.severe) == (errored, severe)


def test_g826_severely_errored_at_thirty_per_cent_of_blocks():
    """ITU-T G.826 (12/2002): a severely errored second has 30 % or more errored blocks."""

    def hit(blocks):
        places = np.arange(blocks, dtype=np.int64) * 1_000
        return Second(
            0,
            0,
            0,
            0,
            1_000_000_000,
            100_000,
            Tally(100_000, 100_000, 0, blocks, blocks, 0),
            positions=places,
        )

    assert not count_blocks(hit(29), 1_000).severe
    assert count_blocks(hit(30), 1_000).severe


@pytest.mark.parametrize(
    ("rate_bps", "low", "high", "esr", "bber"),
    [
        (2_048_000, 800, 5_000, 0.04, 2e-4),
        (8_448_000, 2_000, 8_000, 0.05, 2e-4),
        (34_368_000, 4_000, 20_000, 0.075, 2e-4),
        (139_264_000, 6_000, 20_000, 0.16, 2e-4),
        (622_080_000, 15_000, 30_000, None, 1e-4),
    ],
)
def test_g826_table_1(rate_bps, low, high, esr, bber):
    """ITU-T G.826 (12/2002) Table 1, bits in a block and objectives by rate (from memory)."""
    column = rate_class(rate_bps)
    assert (column.shortest_block, column.longest_block, column.esr, column.bber) == (low, high, esr, bber)
    assert column.sesr == 0.002
    assert low <= block_length(rate_bps) <= high


def test_g826_table_1_leaves_no_hole_between_its_columns():
    edges = [(a.highest_bps, b.lowest_bps) for a, b in itertools.pairwise(RATE_CLASSES)]
    assert all(high == low for high, low in edges)
