"""A Bernoulli source: independent bits with a chosen share of ONEs, computable at any place from a seed."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.bits import pack
from harness.signal.patterns.base import Pattern
from harness.signal.patterns.periodic import toggled
from harness.signal.patterns.readers import Reader

_BITS_PER_COUNT = 8  # one count of the generator gives four 64-bit words, of which each bit takes half a one
_BATCH_BYTES = 8192


class BernoulliPattern(Pattern):
    """Independent bits that are ONE with a given probability.

    Parameters
    ----------
    share
        Probability of a ONE, 0 to 1, kept to 2^-32.
    seed
        Any int from 0 to 2^64 - 1; the same one gives the same bits everywhere.

    Notes
    -----
    Bit i is ONE where the i-th 32-bit half word of Philox4x64-10 is under share·2^32: a counter-based
    generator (Salmon, Moraes, Dror and Shaw, "Parallel random numbers: as easy as 1, 2, 3", SC'11), so any
    place is reached at once. Its first word is that of count 1, as numpy's `Philox` has it.
    """

    period = None

    def __init__(self, share: float, seed: int, name: str, inverted: bool = False) -> None:
        self.share = share
        self.seed = seed
        self.name = name
        self.inverted = inverted
        self._threshold = round(share * 2**32)

    def bits(self, place: int, count: int) -> NDArray[np.uint8]:
        """`count` bits from a place on."""
        first = place // _BITS_PER_COUNT
        skip = place - first * _BITS_PER_COUNT
        blocks = (skip + count + _BITS_PER_COUNT - 1) // _BITS_PER_COUNT
        generator = np.random.Philox(counter=first % 2**256, key=self.seed)
        halves = np.asarray(generator.random_raw(4 * blocks), dtype="<u8").view("<u4")
        ones = halves[skip : skip + count] < self._threshold
        return (ones ^ self.inverted).view(np.uint8)

    def reader(self, place: int, order: BitOrder) -> Reader:
        """Packed bytes from a place on."""
        return _SourceReader(self, place, order)

    def opposite(self) -> BernoulliPattern:
        """The complement of every bit."""
        return BernoulliPattern(self.share, self.seed, toggled(self.name), not self.inverted)

    @property
    def constant(self) -> bool:
        """Whether the share leaves no choice."""
        return self._threshold in (0, 2**32)


class _SourceReader(Reader):
    """Makes a source's bits batch by batch."""

    def __init__(self, pattern: BernoulliPattern, place: int, order: BitOrder) -> None:
        super().__init__(place)
        self._pattern = pattern
        self._order: BitOrder = order
        self._ahead = place  # where the next batch begins
        self._batch = np.empty(0, dtype=np.uint8)

    def _next(self, limit: int) -> NDArray[np.uint8]:
        if len(self._batch) == 0:
            count = min(limit, _BATCH_BYTES)
            self._batch = pack(self._pattern.bits(self._ahead, 8 * count), self._order)
            self._ahead += 8 * count
        piece, self._batch = self._batch[:limit], self._batch[limit:]
        return piece
