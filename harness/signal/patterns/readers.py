"""Readers: a pattern's packed bytes in sequence, near memory speed, from any bit place on."""

from __future__ import annotations

import itertools
from abc import ABC, abstractmethod

import numpy as np
from numpy.typing import NDArray

VIEW_BYTES = 65536  # a view of up to so many bytes is never a copy where the pattern lies in a table
_RING_PIECE_BYTES = 24576  # what one step of a ring should make, so that calls cost little beside the work


class Reader(ABC):
    """The bytes of a pattern from a place on.

    A subclass gives pieces; everything else is made of them. Pieces are views of memory that the reader owns
    and that is valid until its next piece is asked for.
    """

    def __init__(self, place: int) -> None:
        self.place = place

    @abstractmethod
    def _next(self, limit: int) -> NDArray[np.uint8]:
        """From 1 to `limit` bytes that follow."""

    def piece(self, limit: int) -> NDArray[np.uint8]:
        """The next bytes, at least 1 and at most `limit`, read-only, valid until the next call."""
        piece = self._next(limit)
        self.place += 8 * len(piece)
        return piece

    def read_into(self, out: NDArray[np.uint8]) -> None:
        """Fill `out` with the bytes that follow."""
        at, end = 0, len(out)
        while at < end:
            piece = self._next(end - at)
            out[at : at + len(piece)] = piece
            at += len(piece)
        self.place += 8 * end

    def xor_into(self, data: NDArray[np.uint8], out: NDArray[np.uint8]) -> None:
        """Compare: write `data` XOR the bytes that follow to `out`, of the same length; they may be one."""
        at, end = 0, len(data)
        while at < end:
            piece = self._next(end - at)
            to = at + len(piece)
            np.bitwise_xor(data[at:to], piece, out=out[at:to])
            at = to
        self.place += 8 * end

    def view(self, count: int) -> NDArray[np.uint8]:
        """The next `count` bytes: a read-only view where they lie in one piece, else a copy."""
        piece = self.piece(count)
        if len(piece) == count:
            return piece
        out = np.empty(count, dtype=np.uint8)
        out[: len(piece)] = piece
        self.read_into(out[len(piece) :])
        return out


class TableReader(Reader):
    """Reads round and round in a table that holds at least one whole cycle of bytes.

    Parameters
    ----------
    place
        Where in the pattern it begins.
    table
        The cycle, repeated so that the table goes on for at least `VIEW_BYTES` after its end.
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


class RingReader(Reader):
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
    inverted
        Whether the register's bits are sent inverted.
    """

    def __init__(self, place: int, taps: tuple[int, ...], words: NDArray[np.uint64], inverted: bool) -> None:
        super().__init__(place)
        self._taps = taps
        self._gap = min([taps[0], *(b - a for a, b in itertools.pairwise(taps))])
        n = taps[-1]
        scale = len(words) // n
        while self._gap * scale * 8 < _RING_PIECE_BYTES:
            scale *= 2
        self._scale = scale
        self._ring = np.empty(n * scale, dtype=np.uint64)
        self._ring[: len(words)] = words
        self._known = len(words)  # words in the stretch while it grows
        self._inverted = inverted
        self._turned = np.empty(0, dtype=np.uint64)  # holds a piece in the other polarity
        self._steps: list[tuple[NDArray[np.uint64], list[NDArray[np.uint64]]]] = []
        self._step = 0
        self._piece = self._as_sent(self._ring[: self._known])
        self._read = 0  # bytes of the piece that have been handed out

    def _next(self, limit: int) -> NDArray[np.uint8]:
        if self._read == len(self._piece):
            self._piece = self._as_sent(self._grow() if self._known < len(self._ring) else self._renew())
            self._read = 0
        start = self._read
        self._read = min(start + limit, len(self._piece))
        return self._piece[start : self._read]

    def _as_sent(self, words: NDArray[np.uint64]) -> NDArray[np.uint8]:
        if not self._inverted:
            return words.view(np.uint8)
        if len(self._turned) < len(words):
            self._turned = np.empty(len(words), dtype=np.uint64)
        return np.invert(words, out=self._turned[: len(words)]).view(np.uint8)

    def _grow(self) -> NDArray[np.uint64]:
        """Add as many words as the recurrence gives in one step from those at hand."""
        known = self._known
        scale = 1 << ((known // self._taps[-1]).bit_length() - 1)
        new = min(self._taps[0] * scale, len(self._ring) - known)
        out = self._ring[known : known + new]
        first, second, *others = (self._ring[known - tap * scale :][:new] for tap in self._taps)
        np.bitwise_xor(first, second, out=out)
        for other in others:
            np.bitwise_xor(out, other, out=out)
        self._known += new
        return out

    def _renew(self) -> NDArray[np.uint64]:
        """Replace the oldest words by the newest."""
        if not self._steps:
            self._steps = self._plan()
        oldest, others = self._steps[self._step]
        for other in others:
            np.bitwise_xor(oldest, other, out=oldest)
        self._step = (self._step + 1) % len(self._steps)
        return oldest

    def _plan(self) -> list[tuple[NDArray[np.uint64], list[NDArray[np.uint64]]]]:
        """Cut a round into steps whose sources neither wrap round nor overlap what is written."""
        size, unit = len(self._ring), self._scale
        cuts = set(range(0, size, self._gap * unit)) | {tap * unit for tap in self._taps}
        edges = sorted(cuts)
        steps = []
        for start, end in itertools.pairwise(edges):
            sources = [(start - tap * unit) % size for tap in self._taps[:-1]]
            others = [self._ring[source : source + end - start] for source in sources]
            steps.append((self._ring[start:end], others))
        return steps
