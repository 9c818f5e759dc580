"""The counter's ledger: decided stretches become segments, cut at marks, with tallies and positions."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder, Event, Segment, Tally
from harness.signal.bits import count_ones, positions_of_ones

_WHOLE = 0xFF


@dataclass
class _Open:
    """The segment that is being written."""

    start: int
    aligned: bool
    place: int | None
    inverted: bool
    received: int = 0
    errors: int = 0
    ones_as_zeros: int = 0
    positions: list[NDArray[np.int64]] = field(default_factory=list)
    ones_lost: list[NDArray[np.bool_]] = field(default_factory=list)
    complete: bool = True
    events: list[Event] = field(default_factory=list)


class Ledger:
    """Writes down what has been decided, in order, each bit once.

    Parameters
    ----------
    order
        Which bit of a byte comes first.
    period
        Places are given modulo this; None: as they are.
    position_limit
        Positions listed at most between two marks.
    cut_compared
        No segment straddles this count of compared bits.
    """

    def __init__(
        self, order: BitOrder, period: int | None, position_limit: int, cut_compared: int | None
    ) -> None:
        self._order: BitOrder = order
        self._period = period
        self._limit = position_limit
        self._cut_compared = cut_compared
        self._marks: deque[int] = deque()
        self._open: _Open | None = None
        self._closed: list[Segment] = []
        self._waiting: list[Event] = []  # events that belong to the next bit
        self._listed = 0  # positions since the last mark
        self._both = np.empty(0, dtype=np.uint8)
        self._both_counts = np.empty(0, dtype=np.uint8)
        self.at = 0  # bits decided so far
        self.compared = 0

    def mark(self, bit: int) -> None:
        """Let no segment straddle this count of bits, which is not yet decided or just now."""
        if bit > self.at:
            if not self._marks or self._marks[-1] != bit:
                self._marks.append(bit)
        else:
            self._listed = 0
            self._close()

    def event(self, kind: str, text: str, **data: Any) -> None:
        """Note an event at the next bit to be decided."""
        self._close()
        self._waiting.append(Event(kind, self.at, text, data=data))

    def unaligned(self, bits: int) -> None:
        """Write down bits that were compared with nothing."""
        while bits:
            segment = self._segment(False, None, False)
            count = min(bits, self._room(False))
            segment.received += count
            bits -= count
            self._advance(count, False)

    def clean(self, bits: int, place: int, inverted: bool) -> None:
        """Write down bits that all agreed with the pattern from a place on."""
        while bits:
            segment = self._segment(True, place, inverted)
            count = min(bits, self._room(True))
            segment.received += count
            bits -= count
            place += count
            self._advance(count, True)

    def compare(
        self,
        received: NDArray[np.uint8],
        differs: NDArray[np.uint8],
        first: int,
        bits: int,
        place: int,
        inverted: bool,
        counts: NDArray[np.uint8] | None = None,
        wrong: NDArray[np.intp] | None = None,
    ) -> None:
        """Write down bits that were compared with the pattern from a place on.

        Parameters
        ----------
        received, differs
            Bytes as received and their XOR with the expected ones, shape (n,).
        first, bits
            The stretch of their bits that is meant.
        place, inverted
            What the first of these bits was compared with.
        counts
            ONEs of `differs` in each word of 64 bits, if there are none outside the stretch: saves time.
        wrong
            Words of which `counts` is not 0, ascending, if they are known: saves more.
        """
        while bits:
            segment = self._segment(True, place, inverted)
            count = min(bits, self._room(True))
            if counts is not None and count == bits:
                self._count_words(segment, received, differs, counts, wrong, self.at - first)
            else:
                self._count(segment, received, differs, first, count)
                counts = None
            segment.received += count
            first += count
            bits -= count
            place += count
            self._advance(count, True)

    def take(self) -> list[Segment]:
        """All segments since the last call, contiguous and final."""
        self._close()
        closed, self._closed = self._closed, []
        return closed

    def _room(self, compared: bool) -> int:
        room = self._marks[0] - self.at if self._marks else 1 << 62
        if compared and self._cut_compared is not None and self.compared < self._cut_compared:
            room = min(room, self._cut_compared - self.compared)
        return room

    def _advance(self, bits: int, compared: bool) -> None:
        self.at += bits
        if compared:
            self.compared += bits
            if self.compared == self._cut_compared:
                self._close()
        if self._marks and self._marks[0] == self.at:
            self._marks.popleft()
            self._listed = 0
            self._close()

    def _segment(self, aligned: bool, place: int | None, inverted: bool) -> _Open:
        if place is not None and self._period is not None:
            place %= self._period
        current = self._open
        if current is not None:
            runs_on = current.place
            if runs_on is not None:
                runs_on += current.received
                if self._period is not None:
                    runs_on %= self._period
            if (current.aligned, runs_on, current.inverted) == (aligned, place, inverted):
                return current
            self._close()
        self._open = _Open(self.at, aligned, place, inverted, events=self._waiting)
        self._waiting = []
        return self._open

    def _count(
        self,
        segment: _Open,
        received: NDArray[np.uint8],
        differs: NDArray[np.uint8],
        first: int,
        bits: int,
    ) -> None:
        lo, hi = first // 8, (first + bits + 7) // 8
        received, differs = received[lo:hi], differs[lo:hi]
        head, tail = first - 8 * lo, 8 * hi - first - bits
        if head or tail:
            differs = differs.copy()
            differs[0] &= _later(head, self._order)
            differs[-1] &= _later(tail, "msb" if self._order == "lsb" else "lsb")
        errors = count_ones(differs)
        if not errors:
            return
        segment.errors += errors
        room = self._limit - self._listed
        if room >= errors:
            at = positions_of_ones(differs, self._order)
            kinds = _zeros_at(received, at, self._order)
            lost = int(np.count_nonzero(kinds))
        else:
            segment.complete = False
            lost = count_ones(differs & ~received)
            at = _first_positions(differs, self._order, room)
            kinds = _zeros_at(received, at, self._order)
        segment.ones_as_zeros += lost
        self._listed += len(at)
        if len(at):
            segment.positions.append(at + (self.at - head))
            segment.ones_lost.append(kinds)

    def _count_words(
        self,
        segment: _Open,
        received: NDArray[np.uint8],
        differs: NDArray[np.uint8],
        counts: NDArray[np.uint8],
        words: NDArray[np.intp] | None,
        offset: int,
    ) -> None:
        """The same as `_count` for whole words of which `offset` is the first bit: only those with errors."""
        # A slab has 2^22 bits, so 32 are enough for its errors, and are summed twice as fast as 64.
        errors = int((counts if words is None else counts[words]).sum(dtype=np.uint32))
        if not errors:
            return
        room = self._limit - self._listed
        segment.errors += errors
        if room < errors:
            segment.complete = False
            if room <= 0 and 16 * errors > len(counts):
                segment.ones_as_zeros += errors - self._count_both(received, differs)
                return
        if words is None:
            words = np.flatnonzero(counts != 0)
        rows = differs.reshape(-1, 8)[words].reshape(-1)
        seen = received.reshape(-1, 8)[words].reshape(-1)
        at = positions_of_ones(rows, self._order)
        kinds = _zeros_at(seen, at, self._order)
        segment.ones_as_zeros += int(np.count_nonzero(kinds))
        if room < errors:
            at, kinds = at[: max(room, 0)], kinds[: max(room, 0)]
        self._listed += len(at)
        if len(at):
            segment.positions.append(words[at >> 6] * 64 + (at & 63) + offset)
            segment.ones_lost.append(kinds)

    def _count_both(self, received: NDArray[np.uint8], differs: NDArray[np.uint8]) -> int:
        """Count the bits that are ONE in both, of whole words, without new memory."""
        if len(self._both) < len(differs):
            self._both = np.empty(len(differs) // 8, dtype=np.uint64).view(np.uint8)
            self._both_counts = np.empty(len(differs) // 8, dtype=np.uint8)
        both, counts = self._both[: len(differs)], self._both_counts[: len(differs) // 8]
        np.bitwise_and(received, differs, out=both)
        np.bitwise_count(both.view(np.uint64), out=counts)
        return int(counts.sum(dtype=np.uint32))

    def _close(self) -> None:
        segment, self._open = self._open, None
        if segment is None:
            return
        compared = segment.received if segment.aligned else 0
        tally = Tally(
            segment.received,
            compared,
            segment.received - compared,
            segment.errors,
            segment.ones_as_zeros,
            segment.errors - segment.ones_as_zeros,
        )
        self._closed.append(
            Segment(
                segment.start,
                tally,
                segment.aligned,
                segment.place,
                segment.inverted,
                np.concatenate([np.empty(0, dtype=np.int64), *segment.positions]),
                np.concatenate([np.empty(0, dtype=np.bool_), *segment.ones_lost]),
                segment.complete,
                tuple(segment.events),
            )
        )


def _later(count: int, order: BitOrder) -> int:
    """A byte with ONEs in all bits but the first `count` in that order."""
    return (_WHOLE << count) & _WHOLE if order == "lsb" else _WHOLE >> count


def _zeros_at(data: NDArray[np.uint8], at: NDArray[np.int64], order: BitOrder) -> NDArray[np.bool_]:
    """Whether the bits at these positions are ZERO."""
    shift = at & 7 if order == "lsb" else 7 - (at & 7)
    zeros: NDArray[np.bool_] = (data[at >> 3] >> shift.astype(np.uint8)) & 1 == 0
    return zeros


def _first_positions(differs: NDArray[np.uint8], order: BitOrder, count: int) -> NDArray[np.int64]:
    """The first `count` positions of ONEs."""
    if count <= 0:
        return np.empty(0, dtype=np.int64)
    size = 1024
    while True:
        at = positions_of_ones(differs[:size], order)
        if len(at) >= count or size >= len(differs):
            return at[:count]
        size *= 4
