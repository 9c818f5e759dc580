"""Searching for the place after trouble or at the start: growing windows first, then ever sparser ones.

Where to look next depends on the stream's bits alone, never on how it was cut into chunks.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.signal import rules
from harness.signal.acquire import Acquirer
from harness.signal.nearby import Nearby, agrees, log_candidates
from harness.signal.places import Place, Reference
from harness.signal.stream import Undecided

_LEAST_BLIND = 128  # bits from which on a place can be acquired
_NEARBY_FOR = 5 * rules.LONGEST_WINDOW  # bits after trouble in which places nearby are tried
_FIRST_NEARBY = 1024
_LEAST_AFTER_TROUBLE = 512  # bits from which on a place far from the old one is thought of
_HALF = rules.LONGEST_WINDOW // 2
_FEW_WRONG = 0.02  # with so few wrong no other place can be right


@dataclass(frozen=True, slots=True)
class Hit:
    """A place that was found, and the stretch of stream bits that proves it."""

    place: Place
    begin: int
    end: int


class Search:
    """One search, from where trouble begins.

    Parameters
    ----------
    reference, acquirer
        The pattern.
    old
        The place held before; None at the start of a stream.
    begin
        The stream's bit at which the search begins.
    unit
        Bits in which the link slips.
    """

    def __init__(
        self,
        reference: Reference,
        acquirer: Acquirer,
        old: Place | None,
        begin: int,
        unit: int,
        weights: rules.Weights,
    ) -> None:
        self.old = old
        self.begin = begin
        self._reference = reference
        self._acquirer = acquirer
        self._unit = unit
        self._weights = weights
        self._looked = begin  # the end of the last look
        self._near: Nearby | None = None
        self._near_end = begin
        self._half: NDArray[np.uint16] | None = None  # mismatches of places nearby in the half before
        self._half_bits = 0

    @property
    def last_end(self) -> int:
        """The stream's bit up to which the last look went."""
        return self._looked

    @property
    def next_end(self) -> int:
        """The stream's bit up to which the next look goes."""
        done = self._looked - self.begin
        if done < rules.LONGEST_WINDOW:
            return self.begin + max(rules.WORD_BITS, 2 * done)
        return self._looked + self.spacing

    @property
    def spacing(self) -> int:
        """Bits between looks once the longest window has been reached; it grows with the outage."""
        return min(max((self._looked - self.begin) // 16 // _HALF * _HALF, _HALF), rules.KEPT_BITS)

    def look(self, stream: Undecided, end: int) -> Hit | None:
        """Look for a place in the bits up to `end`; later ones are not touched."""
        before, self._looked = self._looked, end
        if self.old is not None:
            hit = self._resumed(stream, self.old, before, end)
            if hit is None and end - self.begin <= _NEARBY_FOR:
                hit = self._nearby(stream, self.old, before, end)
            if hit is not None:
                return hit
        done = end - self.begin
        longest = max(self.begin, end - rules.LONGEST_WINDOW)
        windows = [longest]
        often = self.spacing == _HALF and done > rules.LONGEST_WINDOW
        if self.old is not None and (done < _LEAST_AFTER_TROUBLE or (often and done // _HALF % 2)):
            windows = []  # places nearby are tried anyway, and the longest windows need not overlap
        elif longest < before and 2 * _LEAST_AFTER_TROUBLE <= done <= rules.LONGEST_WINDOW:
            windows.append(before)
        for begin in windows:
            hit = self._anywhere(stream, begin, end)
            if hit is not None:
                return hit
        return None

    def last_look(self, stream: Undecided) -> Hit | None:
        """Look for a place in any part of a stream that ends without one."""
        earliest = max(self.begin, 8 * stream.first, stream.end - 2 * rules.LONGEST_WINDOW)
        size = min(stream.end - earliest, rules.LONGEST_WINDOW)
        for _ in range(3):
            size //= 2
            if size < _LEAST_BLIND:
                break
            for end in range(stream.end, earliest + size - 1, -(size // 2)):
                hit = self._anywhere(stream, end - size, end)
                if hit is not None:
                    return hit
        return None

    def _resumed(self, stream: Undecided, old: Place, before: int, end: int) -> Hit | None:
        """Whether the old place gathers evidence again in what is new since the last look."""
        begin = max(self.begin, before - 2 * _FIRST_NEARBY)
        if end - begin > 2 * rules.LONGEST_WINDOW:
            begin = self._likely_from(stream, old, begin, end)
        if begin >= end:
            return None
        bits = stream.bits(begin, end)
        expected = self._reference.bits(old, begin, end - begin)
        height = rules.walk(bits ^ expected, expected, self._weights)
        rise = np.maximum.accumulate(height) - height
        enough = rise >= rules.RESUMED_AFTER * self._weights.scale
        if not enough.any():
            return None
        to = int(np.argmax(enough))
        first = int(np.argmax(height[: to + 1]))
        # A dead line agrees with a stretch of the pattern that is nearly all ONEs or ZEROs: that is nothing.
        if not agrees(self._reference, old, bits[first:to], begin + first, math.log(rules.FALSE_ALARM)):
            return None
        return Hit(old, begin + first, end)

    def _likely_from(self, stream: Undecided, old: Place, begin: int, end: int) -> int:
        """A bit from which on the old place may hold again, found by whole words; the end if there is none."""
        first = -(-begin // rules.WORD_BITS) * rules.WORD_BITS
        received = stream.bytes(first, end - (end - first) % rules.WORD_BITS)
        differs = np.empty(len(received) // 8, dtype=np.uint64)
        self._reference.reader(old, first).compare(received, differs.view(np.uint8))
        steps = rules.AGREES * rules.WORD_BITS + (rules.DIFFERS - rules.AGREES) * np.bitwise_count(
            differs
        ).astype(np.int64)
        height = np.cumsum(steps)
        enough = np.maximum.accumulate(height) - height >= rules.RESUMED_AFTER // 2
        if not enough.any():
            return end
        return max(begin, first + rules.WORD_BITS * int(np.argmax(height[: int(np.argmax(enough)) + 1])) - 64)

    def _nearby(self, stream: Undecided, old: Place, before: int, end: int) -> Hit | None:
        """Try all places near the old one on what is new, and on that together with the half before."""
        words = (end - before) // rules.WORD_BITS
        if not words:
            return None
        words = min(words, _HALF // rules.WORD_BITS)
        first = end - (end - before) % rules.WORD_BITS - words * rules.WORD_BITS
        if self._unit > 1:
            first -= (first - self.begin) % self._unit
        if self._near is None or first + words * rules.WORD_BITS > self._near_end:
            length = _FIRST_NEARBY if end - self.begin <= _FIRST_NEARBY else _NEARBY_FOR
            self._near = Nearby(self._reference, old, self._unit, self.begin, length)
            self._near_end = self.begin + length
        near = self._near
        stretch = words * rules.WORD_BITS
        cells = near.cells(stream.bits(first, first + stretch), first, rules.WORD_BITS)
        new = cells.sum(axis=0, dtype=np.uint16)
        limit = math.log(rules.FALSE_ALARM) - log_candidates(self._reference.pattern, self._unit)
        previous, previous_bits = self._half, self._half_bits
        self._half, self._half_bits = new, stretch
        tries = [(new, stretch, first)]
        if previous is not None and first == before:
            tries.insert(0, (previous + new, previous_bits + stretch, before - previous_bits))
            if end - self.begin < rules.LONGEST_WINDOW:
                self._half, self._half_bits = tries[0][:2]
        for mismatches, count, begin in tries:
            place = near.best(mismatches, count).place
            received = stream.bits(begin, begin + count)
            if agrees(self._reference, place, received, begin, limit):
                return Hit(self._reference.normal(place), begin, end)
        return None

    def _anywhere(self, stream: Undecided, begin: int, end: int) -> Hit | None:
        """Acquire from nothing."""
        hit = self._acquired(stream, begin, end)
        if hit is None:
            return None
        # Two places of a register may agree for some hundred bits more often than chance has it; the one
        # that is found first need not be the right one, so the newest bits have their say.
        size = end - begin
        while size >= 4 * _LEAST_BLIND and self._wrong(stream, hit.place, begin, end) > _FEW_WRONG:
            size //= 2
            other = self._acquired(stream, end - size, end)
            if other is not None and other.place != hit.place:
                newest = end - size // 2
                if self._wrong(stream, other.place, newest, end) < self._wrong(
                    stream, hit.place, newest, end
                ):
                    hit = other
        return hit

    def _acquired(self, stream: Undecided, begin: int, end: int) -> Hit | None:
        if end - begin < _LEAST_BLIND:
            return None
        near = begin if self.old is None else self.old.anchor + begin
        found = self._acquirer.search(stream.bits(begin, end), near=near)
        if found is None:
            return None
        return Hit(self._reference.normal(Place(found.place - begin, found.inverted)), begin, end)

    def _wrong(self, stream: Undecided, place: Place, begin: int, end: int) -> float:
        """The share of bits that differ."""
        differs = stream.bits(begin, end) ^ self._reference.bits(place, begin, end - begin)
        return float(differs.mean())
