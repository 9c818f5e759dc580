"""Blocks of ITU-T G.826: how long they are at a rate, and how many of a second's blocks were errored.

Blocks are laid end to end over the received bits of a second, from its first bit; what is left over at
the second's end belongs to its last block, so every bit lies in exactly one block and a second with bits
has at least one. A block is errored by an error, by an unaligned bit, or by a slip in it; whole blocks
that were lost are errored blocks too.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.record import Second


@dataclass(frozen=True, slots=True)
class RateClass:
    """One column of G.826 (12/2002) Table 1; bits in a block and objectives end to end (from memory)."""

    lowest_bps: float
    highest_bps: float
    shortest_block: int
    longest_block: int
    blocks_a_second: int  # customary, used to choose a length within the range
    esr: float | None
    sesr: float
    bber: float


RATE_CLASSES: tuple[RateClass, ...] = (
    RateClass(1.5e6, 5e6, 800, 5_000, 1_000, 0.04, 0.002, 2e-4),
    RateClass(5e6, 15e6, 2_000, 8_000, 2_000, 0.05, 0.002, 2e-4),
    RateClass(15e6, 55e6, 4_000, 20_000, 8_000, 0.075, 0.002, 2e-4),
    RateClass(55e6, 160e6, 6_000, 20_000, 8_000, 0.16, 0.002, 2e-4),
    RateClass(160e6, 3.5e9, 15_000, 30_000, 8_000, None, 0.002, 1e-4),
)


@dataclass(frozen=True, slots=True)
class BlockCount:
    """Blocks of one second."""

    blocks: int
    errored: int  # at most, where `exact` is False
    exact: bool  # False: not all error positions were known
    severe: bool  # 30 % or more of the blocks were errored


def rate_class(rate_bps: float) -> RateClass | None:
    """Return the column of Table 1 for a payload rate in bit/s; None where the table has none."""
    for column in RATE_CLASSES:
        if column.lowest_bps <= rate_bps <= column.highest_bps:
            return column
    return None


def block_length(rate_bps: float | None) -> int:
    """Bits in a block at a rate, within the range of G.826 Table 1.

    The table gives ranges; this takes the rate over the customary number of blocks a second
    (1 000, 2 000, then 8 000), cut to the range.

    Raises
    ------
    ValueError
        Where the table has no range (under 1.5 Mbit/s, over 3.5 Gbit/s, rate unknown): the length has to
        be stated.
    """
    column = None if rate_bps is None else rate_class(rate_bps)
    if rate_bps is None or column is None:
        raise ValueError("G.826 gives no block length at this rate: state the block length in bits")
    customary = round(rate_bps / column.blocks_a_second)
    return min(max(customary, column.shortest_block), column.longest_block)


def count_blocks(second: Second, block_bits: int) -> BlockCount:
    """Count a second's blocks and the errored ones among them.

    Where not all error positions are known, the errors without position are taken as one errored block
    each, as far as there are blocks after the last known position: the most that is possible.

    Parameters
    ----------
    second
        Its positions and stretches say which blocks were hit.
    block_bits
        Length of a block in bits, at least 1.
    """
    if block_bits < 1:
        raise ValueError("a block has at least one bit")
    received = second.tally.received
    blocks = max(1, received // block_bits) if received else 0
    hit = np.zeros(blocks, dtype=np.bool_)
    exact = True
    if blocks:
        places = second.positions - second.first_bit
        hit[_block_of(places, block_bits, blocks)] = True
        exact = _mark_unaligned(second, block_bits, hit)
        exact = _mark_unplaced(second, places, block_bits, hit) and exact
    errored = max(int(np.count_nonzero(hit)), min(second.slips, blocks))
    lost = second.bits_lost // block_bits
    total, errored = blocks + lost, errored + lost
    return BlockCount(total, errored, exact, total > 0 and 10 * errored >= 3 * total)


def _block_of(places: NDArray[np.int64], block_bits: int, blocks: int) -> NDArray[np.int64]:
    return np.minimum(places // block_bits, blocks - 1)


def _mark_unaligned(second: Second, block_bits: int, hit: NDArray[np.bool_]) -> bool:
    """Mark the blocks that unaligned bits touch; False where it is not known which."""
    unaligned = second.tally.unaligned
    if not unaligned:
        return True
    if sum(bits for bits, _ in second.stretches) != second.tally.received:
        # Where they lie was not kept: take as many whole blocks as they can touch if they lie together.
        free = np.flatnonzero(~hit)
        hit[free[: -(-unaligned // block_bits) + 1]] = True
        return False
    place = 0
    for bits, aligned in second.stretches:
        if not aligned and bits:
            ends = _block_of(np.array([place, place + bits - 1]), block_bits, len(hit))
            hit[ends[0] : ends[1] + 1] = True
        place += bits
    return True


def _mark_unplaced(
    second: Second, places: NDArray[np.int64], block_bits: int, hit: NDArray[np.bool_]
) -> bool:
    """Mark a block for each error without position; False where there were any."""
    unplaced = second.tally.errors - len(places)
    if unplaced <= 0:
        return True
    # Positions are kept from a second's beginning up to the limit: the others lie after the last one.
    first = int(_block_of(places[-1:], block_bits, len(hit))[0]) if len(places) else 0
    free = first + np.flatnonzero(~hit[first:])
    hit[free[:unplaced]] = True
    return False
