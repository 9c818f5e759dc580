"""Patterns that a shift register makes: from a table of one period, or word-parallel where it is long."""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.bits import bits_of_int, swap_order, unpack
from harness.signal.patterns.base import Pattern
from harness.signal.patterns.periodic import LONGEST_CYCLE, PeriodicPattern, toggled
from harness.signal.patterns.readers import TAIL_BYTES, Reader, RecurrenceReader, TableReader
from harness.signal.registers import Register

_FIRST_SCALE = 16  # a long register's reader starts from n·16 words, which come from small tables
_LONGEST_TABLE = 1 << 23  # bytes: a table from the processor's outer cache still beats a recurrence
_FEW_BITS = 4096  # up to here Python's own ints make bits faster than a reader does


class RegisterPattern(Pattern):
    """A register's sequence, from the first of n consecutive ONEs on.

    Parameters
    ----------
    name
        Canonical name.
    register
        What makes it.
    sent_inverted
        The register's bits are sent inverted.
    inverted
        That polarity is the opposite of the one in the pattern's row in the table.
    """

    register: Register
    period: int

    def __init__(self, name: str, register: Register, sent_inverted: bool, inverted: bool = False) -> None:
        self.name = name
        self.register = register
        self.sent_inverted = sent_inverted
        self.inverted = inverted
        self.period = register.period

    def opposite(self) -> RegisterPattern:
        """The same register, sent in the other polarity."""
        return type(self)(toggled(self.name), self.register, not self.sent_inverted, not self.inverted)


class ShortRegisterPattern(RegisterPattern, PeriodicPattern):
    """A register whose period is short enough to be kept as a table; with forced ONEs for QRSS.

    Parameters
    ----------
    force_after_zeros
        A ONE is forced, before inversion, where so many bits that follow would all be ZERO.
    """

    def __init__(
        self,
        name: str,
        register: Register,
        sent_inverted: bool,
        inverted: bool = False,
        force_after_zeros: int | None = None,
    ) -> None:
        super().__init__(name, register, sent_inverted, inverted)
        self.force_after_zeros = force_after_zeros

    def opposite(self) -> ShortRegisterPattern:
        """The same register, sent in the other polarity."""
        return ShortRegisterPattern(
            toggled(self.name),
            self.register,
            not self.sent_inverted,
            not self.inverted,
            self.force_after_zeros,
        )

    @cached_property
    def cycle(self) -> NDArray[np.uint8]:
        """One period as sent."""
        bits = self.register.bits_from((1 << self.register.stages) - 1, self.period)
        bits[self.forced_places] = 1
        return bits ^ np.uint8(self.sent_inverted)

    @cached_property
    def forced_places(self) -> NDArray[np.int64]:
        """Places at which the bit sent differs from the register's, ascending; empty without forcing."""
        if self.force_after_zeros is None:
            return np.empty(0, dtype=np.int64)
        width = self.force_after_zeros + 1
        bits = self.register.bits_from((1 << self.register.stages) - 1, self.period + width)
        ones = np.concatenate([[0], np.cumsum(bits, dtype=np.int64)])
        return np.flatnonzero(ones[width : self.period + width] == ones[: self.period])


class LongRegisterPattern(RegisterPattern):
    """A register whose period is too long to be kept as bits: its recurrence runs on machine words."""

    def bits(self, place: int, count: int) -> NDArray[np.uint8]:
        """`count` bits from a place on."""
        if count > _FEW_BITS:
            return unpack(self.packed(place, (count + 7) // 8, "lsb"), "lsb")[:count]
        bits = self.register.bits_from(self.register.window_at(place), count)
        if self.sent_inverted:
            np.bitwise_xor(bits, 1, out=bits)
        return bits

    def reader(self, place: int, order: BitOrder) -> Reader:
        """Packed bytes from a place on."""
        if self.period <= _LONGEST_TABLE:
            offset = place * pow(8, -1, self.period) % self.period
            return TableReader(place, self._table(order), self.period, offset)
        return self._run_from(place, order)

    def _table(self, order: BitOrder) -> NDArray[np.uint8]:
        """One cycle of bytes and a little more, as sent."""
        if order not in self._tables:
            table = np.empty(self.period + TAIL_BYTES, dtype=np.uint8)
            self._run_from(0, order).read_into(table)
            table.flags.writeable = False
            self._tables[order] = table
        return self._tables[order]

    @cached_property
    def _tables(self) -> dict[BitOrder, NDArray[np.uint8]]:
        return {}

    def _run_from(self, place: int, order: BitOrder) -> RecurrenceReader:
        window = self.register.window_at(place)
        words = np.bitwise_xor.reduce(
            [table[window >> (8 * i) & 255] for i, table in enumerate(self._first_words[order])], axis=0
        )
        return RecurrenceReader(place, self.register.taps, words, self.sent_inverted)

    @cached_property
    def _first_words(self) -> dict[BitOrder, list[NDArray[np.uint64]]]:
        """For each byte of a window and each of its values: the first n·16 words that it adds."""
        n = self.register.stages
        count = n * _FIRST_SCALE * 64
        columns = np.stack(
            [
                np.packbits(bits_of_int(self.register.run(1 << b, count), count), bitorder="little")
                for b in range(n)
            ]
        )
        return {"lsb": _byte_tables(columns), "msb": _byte_tables(np.stack([swap_order(c) for c in columns]))}


def _byte_tables(columns: NDArray[np.uint8]) -> list[NDArray[np.uint64]]:
    """Sums of all subsets of up to 8 neighbouring rows: a list of arrays (256, words)."""
    words = np.ascontiguousarray(columns).view(np.uint64)
    tables = []
    for start in range(0, len(words), 8):
        table = np.zeros((256, words.shape[1]), dtype=np.uint64)
        for bit, word in enumerate(words[start : start + 8]):
            table[1 << bit : 2 << bit] = table[: 1 << bit] ^ word
        tables.append(table)
    return tables


def register_pattern(
    name: str,
    register: Register,
    sent_inverted: bool,
    inverted: bool,
    force_after_zeros: int | None = None,
) -> RegisterPattern:
    """The kind of pattern that suits the register's period."""
    if register.period <= LONGEST_CYCLE:
        return ShortRegisterPattern(name, register, sent_inverted, inverted, force_after_zeros)
    return LongRegisterPattern(name, register, sent_inverted, inverted)
