"""Patterns that repeat after a stretch short enough to be kept: fixed words, files, short registers."""

from __future__ import annotations

import math
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.bits import pack, swap_order, unpack
from harness.signal.patterns.base import Pattern
from harness.signal.patterns.readers import TAIL_BYTES, TableReader
from harness.signal.polynomials import prime_factors

LONGEST_CYCLE = 1 << 20  # bits: registers up to here are kept as a table, of so many bytes in each bit order


class PeriodicPattern(Pattern):
    """A cycle of bits, over and over.

    The bytes of a pattern of P bits repeat after lcm(8, P) bits. Where P is odd one table of P bytes serves
    every place, since 8 has an inverse modulo P; else there is one for each place modulo gcd(8, P).
    """

    period: int

    @cached_property
    def cycle(self) -> NDArray[np.uint8]:
        """One period as sent: 0 and 1, shape (period,)."""
        raise NotImplementedError

    @cached_property
    def _tables(self) -> dict[tuple[BitOrder, int], NDArray[np.uint8]]:
        return {}

    def bits(self, place: int, count: int) -> NDArray[np.uint8]:
        """`count` bits from a place on."""
        start = place % self.period
        end = start + count
        if end <= self.period:
            return self.cycle[start:end].copy()
        parts = [self.cycle[start:]]
        left = end - self.period
        parts.extend([self.cycle] * (left // self.period))
        parts.append(self.cycle[: left % self.period])
        return np.concatenate(parts)

    def reader(self, place: int, order: BitOrder) -> TableReader:
        """Packed bytes from a place on."""
        start = place % self.period
        shared = math.gcd(8, self.period)
        residue = start % shared
        cycle_bytes = self.period // shared
        steps = (start - residue) // shared
        offset = steps * pow(8 // shared, -1, cycle_bytes) % cycle_bytes if cycle_bytes > 1 else 0
        return TableReader(place, self._table(order, residue), cycle_bytes, offset)

    def _table(self, order: BitOrder, residue: int) -> NDArray[np.uint8]:
        key = (order, residue)
        if key not in self._tables:
            self._tables[key] = self._make_table(order, residue)
        return self._tables[key]

    def _make_table(self, order: BitOrder, residue: int) -> NDArray[np.uint8]:
        cycle_bytes = self.period // math.gcd(8, self.period)
        table = pack(self.bits(residue, 8 * cycle_bytes), order)
        return _repeated(table)


class WordPattern(PeriodicPattern):
    """A fixed word, over and over.

    Parameters
    ----------
    word
        Its bits in the order in which they travel, shape (m,). The period is that of the sequence, which may
        be shorter: 1010 repeats after 2 bits.
    name
        As the user wrote it.
    """

    def __init__(self, word: NDArray[np.uint8], name: str, inverted: bool = False) -> None:
        self.name = name
        self.inverted = inverted
        self._word = word
        self.period = least_period(word)

    @cached_property
    def cycle(self) -> NDArray[np.uint8]:
        """One period as sent."""
        return self._word[: self.period] ^ np.uint8(self.inverted)

    def opposite(self) -> WordPattern:
        """The word's complement."""
        return WordPattern(self._word, toggled(self.name), not self.inverted)


class BytesPattern(PeriodicPattern):
    """The bytes of a file, over and over, from its first one.

    Parameters
    ----------
    data
        Its bytes, at least one.
    name
        ``file:`` and where they came from.
    order
        The bit order in which the link sends bytes: it says which bit of the file is bit 0. Packed in that
        order, the pattern is the file.
    """

    def __init__(self, data: bytes, name: str, order: BitOrder = "lsb", inverted: bool = False) -> None:
        self.name = name
        self.inverted = inverted
        self._order = order
        self._data = np.frombuffer(data, dtype=np.uint8)
        bytes_in_cycle = least_period(self._data)
        self._cycle_data = self._data[:bytes_in_cycle]
        self.period = 8 * bytes_in_cycle
        if bytes_in_cycle <= LONGEST_CYCLE:
            self.period = least_period(unpack(self._cycle_data, order))

    @cached_property
    def cycle(self) -> NDArray[np.uint8]:
        """One period as sent."""
        return unpack(self._cycle_data, self._order)[: self.period] ^ np.uint8(self.inverted)

    def _make_table(self, order: BitOrder, residue: int) -> NDArray[np.uint8]:
        if residue or self.period % 8:
            return super()._make_table(order, residue)
        data = self._cycle_data if order == self._order else swap_order(self._cycle_data)
        return _repeated(data ^ np.uint8(255 * self.inverted))

    def opposite(self) -> BytesPattern:
        """The complement of every bit."""
        return BytesPattern(self._data.tobytes(), toggled(self.name), self._order, not self.inverted)


def _repeated(cycle: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """A table that goes on for `TAIL_BYTES` after the cycle's end, read-only."""
    length = len(cycle) + TAIL_BYTES
    table = np.tile(cycle, -(-length // len(cycle)))[:length]
    table.flags.writeable = False
    return table


def least_period(sequence: NDArray[np.uint8]) -> int:
    """The least period of the endless repetition of a sequence of m elements; it divides m."""
    period = len(sequence)
    for prime in prime_factors(period):
        while period % prime == 0 and np.array_equal(
            sequence[: period - period // prime], sequence[period // prime : period]
        ):
            period //= prime
    return period


def toggled(name: str) -> str:
    """The name of the same pattern in the other polarity."""
    suffix = "-inverted"
    return name[: -len(suffix)] if name.endswith(suffix) else name + suffix
