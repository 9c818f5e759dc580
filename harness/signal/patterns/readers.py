"""Readers: a pattern's packed bytes in sequence, near memory speed, from any bit place on."""

from __future__ import annotations

import itertools
from abc import ABC, abstractmethod

import numpy as np
from numpy.typing import NDArray

ROW_BYTES = 8192  # a comparison says where something differs by rows of so many bytes
TAIL_BYTES = 1 << 18  # a table goes on for so many bytes after its cycle, so that pieces are long
_STEP_BYTES = 65536  # what one step of a recurrence should make, so that calls cost little beside the work
_SLAB_BYTES = 1 << 20  # compared at once: long enough to make calls cheap, and still in a cache


class Reader(ABC):
    """The bytes of a pattern from a place on.

    A subclass gives pieces, views of memory that it owns and that is valid until it is asked for the next.

    Parameters
    ----------
    place
        Where in the pattern it begins.
    complemented
        The subclass's pieces are the complement of what is sent; it is put right where it costs least.
    """

    def __init__(self, place: int, complemented: bool = False) -> None:
        self.place = place
        self._complemented = complemented

    @abstractmethod
    def _next(self, limit: int) -> NDArray[np.uint8]:
        """From 1 to `limit` bytes that follow."""

    def read_into(self, out: NDArray[np.uint8]) -> None:
        """Fill `out` with the bytes that follow."""
        at, end = 0, len(out)
        while at < end:
            piece = self._next(end - at)
            to = at + len(piece)
            if self._complemented:
                np.invert(piece, out=out[at:to])
            else:
                out[at:to] = piece
            at = to
        self.place += 8 * end

    def compare(self, data: NDArray[np.uint8], out: NDArray[np.uint8]) -> NDArray[np.intp]:
        """Write `data` XOR the bytes that follow to `out`, and say where they differ.

        Parameters
        ----------
        data
            n bytes, at any address.
        out
            n bytes, contiguous; quickest where 8-byte aligned. May be `data`.

        Returns
        -------
        NDArray[np.intp]
            The rows of `ROW_BYTES` bytes of `out`, counted from 0, that are not all ZERO, ascending; the last
            row may be a partial one. Whoever counts need look at these alone.
        """
        if len(data) <= _SLAB_BYTES:
            return self._compare_slab(data, out)
        touched = []
        for start in range(0, len(data), _SLAB_BYTES):
            end = start + _SLAB_BYTES
            touched.append(self._compare_slab(data[start:end], out[start:end]) + start // ROW_BYTES)
        return np.concatenate(touched)

    def _compare_slab(self, data: NDArray[np.uint8], out: NDArray[np.uint8]) -> NDArray[np.intp]:
        at, end = 0, len(data)
        self.place += 8 * end
        while at < end:
            piece = self._next(end - at)
            to = at + len(piece)
            np.bitwise_xor(data[at:to], piece, out=out[at:to])
            at = to
        if self._complemented:
            np.invert(out, out=out)
        return _rows_touched(out)

    def xor_into(self, data: NDArray[np.uint8], out: NDArray[np.uint8]) -> None:
        """As `compare`, for whoever wants the difference alone."""
        self.compare(data, out)


def _rows_touched(data: NDArray[np.uint8]) -> NDArray[np.intp]:
    """Rows that are not all ZERO."""
    whole = len(data) // ROW_BYTES * ROW_BYTES
    rows = data[:whole].view(np.uint64).reshape(-1, ROW_BYTES // 8)
    touched: NDArray[np.intp] = np.bitwise_or.reduce(rows, axis=1).nonzero()[0]
    if whole < len(data) and data[whole:].any():
        return np.append(touched, len(rows))
    return touched


class TableReader(Reader):
    """Reads round and round in a table that holds at least one whole cycle of bytes.

    Parameters
    ----------
    place
        Where in the pattern it begins.
    table
        The cycle, repeated so that the table goes on for at least `TAIL_BYTES` after its end.
    cycle
        Bytes in one cycle.
    offset
        The byte of the cycle at which reading begins.
    """

    def __init__(self, place: int, table: NDArray[np.uint8], cycle: int, offset: int) -> None:
        super().__init__(place)
        self._table = table
        self._cycle = cycle
        self._offset = offset

    def _next(self, limit: int) -> NDArray[np.uint8]:
        start = self._offset
        end = min(start + limit, len(self._table))
        self._offset = end % self._cycle
        return self._table[start:end]


class RecurrenceReader(Reader):
    """Runs a recurrence on 64-bit words: w[i] is the sum of w[i - tap·u], u a power of two.

    Over GF(2) a polynomial squared six times or more is a recurrence on whole words. The words known so far
    lie in one stretch, which first grows, with u doubling as it does, and is then rewritten in place, round
    and round: exactly n·u words of history, so the oldest one is the one that the newest replaces.

    Parameters
    ----------
    place
        Where in the pattern it begins.
    taps
        Stages that are added, ascending; the last one is n.
    words
        The register's first words from there on, n times a power of two of them.
    complemented
        Whether the register's bits are sent inverted.
    """

    def __init__(
        self, place: int, taps: tuple[int, ...], words: NDArray[np.uint64], complemented: bool
    ) -> None:
        super().__init__(place, complemented)
        self._taps = taps
        self._gap = min([taps[0], *(b - a for a, b in itertools.pairwise(taps))])
        n = taps[-1]
        scale = len(words) // n
        while self._gap * scale * 8 < _STEP_BYTES:
            scale *= 2
        self._scale = scale
        self._words = np.empty(n * scale, dtype=np.uint64)
        self._words[: len(words)] = words
        self._bytes = self._words.view(np.uint8)
        self._known = len(words)  # while the stretch grows; then all of it
        self._read = 0  # bytes handed out in this round
        self._steps: list[tuple[NDArray[np.uint64], list[NDArray[np.uint64]]]] = []

    def _next(self, limit: int) -> NDArray[np.uint8]:
        if self._read == 8 * self._known:
            if self._known < len(self._words):
                self._grow()
            else:
                self._renew()
        start = self._read
        self._read = min(start + limit, 8 * self._known)
        return self._bytes[start : self._read]

    def _grow(self) -> None:
        """Add as many words as the recurrence gives in one step from those at hand."""
        known = self._known
        scale = 1 << ((known // self._taps[-1]).bit_length() - 1)
        new = min(self._taps[0] * scale, len(self._words) - known)
        out = self._words[known : known + new]
        first, second, *others = (self._words[known - tap * scale :][:new] for tap in self._taps)
        np.bitwise_xor(first, second, out=out)
        for other in others:
            np.bitwise_xor(out, other, out=out)
        self._known += new

    def _renew(self) -> None:
        """Replace all words by those that follow, the oldest first."""
        if not self._steps:
            self._steps = self._plan()
        for oldest, others in self._steps:
            for other in others:
                np.bitwise_xor(oldest, other, out=oldest)
        self._read = 0

    def _plan(self) -> list[tuple[NDArray[np.uint64], list[NDArray[np.uint64]]]]:
        """Cut a round into steps whose sources neither wrap round nor overlap what is written."""
        size, unit = len(self._words), self._scale
        edges = sorted({*range(0, size, self._gap * unit), *(tap * unit for tap in self._taps)})
        steps = []
        for start, end in itertools.pairwise(edges):
            sources = [(start - tap * unit) % size for tap in self._taps[:-1]]
            others = [self._words[source : source + end - start] for source in sources]
            steps.append((self._words[start:end], others))
        return steps
