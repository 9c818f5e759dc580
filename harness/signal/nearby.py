"""All places near an expected one, tried at once on machine words: what slips are found with.

For every shift within a radius the pattern's next 64 bits from there lie ready as one word, so a received
word is compared with all of them by one XOR and one count.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.signal import rules
from harness.signal.evidence import log_chance_of_agreement, repeats_as_the_pattern
from harness.signal.patterns import Pattern
from harness.signal.places import Place, Reference


@dataclass(frozen=True, slots=True)
class Candidate:
    """A place that agrees best with some received bits."""

    place: Place
    mismatches: int


class Nearby:
    """The pattern around an expected place.

    Parameters
    ----------
    reference
        The pattern.
    centre
        The place that is expected.
    unit
        Bits in which the link slips, 1 or 8.
    first, length
        The stretch of stream bits that will be looked at.
    """

    def __init__(self, reference: Reference, centre: Place, unit: int, first: int, length: int) -> None:
        self.reference = reference
        self._centre = centre
        self._unit = unit
        self._first = first
        self._period = reference.pattern.period
        radius = self._radius = radius_bits(reference.pattern, unit)
        bits = reference.bits(centre, first - radius, 2 * radius + length + 128)
        self._words = _words_at(bits, unit)
        self.shifts = 2 * radius // unit + 1

    def cells(self, bits: NDArray[np.uint8], at: int, size: int) -> NDArray[np.uint8]:
        """Mismatches in cells of 8, 16, 32 or 64 bits for each shift, shape (cells, shifts)."""
        cells = len(bits) // size
        kind = np.dtype(f"<u{size // 8}")
        packed = np.packbits(bits[: cells * size], bitorder="little").view(kind)
        words = self._words if size == rules.WORD_BITS else self._words.astype(kind)
        out = np.empty((cells, self.shifts), dtype=np.uint8)
        scratch = np.empty(self.shifts, dtype=kind)
        for cell in range(cells):
            index = (at + cell * size - self._first) // self._unit
            np.bitwise_xor(words[index : index + self.shifts], packed[cell], out=scratch)
            np.bitwise_count(scratch, out=out[cell])
        return out

    def place_of(self, shift: int, inverted: bool) -> Place:
        """The place that belongs to an index of shift, in or against the centre's polarity."""
        return Place(
            self._centre.anchor + shift * self._unit - self._radius, self._centre.inverted != inverted
        )

    def shift_of(self, place: Place) -> int | None:
        """The index of shift that belongs to a place, whatever its polarity; None if it is not among them."""
        change = place.anchor - self._centre.anchor + self._radius
        if self._period is not None:
            change %= self._period
            # Where the link slips by bytes, one of the next periods may be a whole number of them.
            change += self._period * next(
                (k for k in range(self._unit) if (change + k * self._period) % self._unit == 0), 0
            )
        shift, rest = divmod(change, self._unit)
        return shift if not rest and 0 <= shift < self.shifts else None

    def best(self, mismatches: NDArray[np.uint16], bits: int) -> Candidate:
        """The candidate with the fewest mismatches among so many bits, in either polarity.

        Where several are equal: the same polarity first, then the shortest shift.
        """
        low, high = int(mismatches.min()), int(mismatches.max())
        inverted = bits - high < low
        shifts = np.flatnonzero(mismatches == (high if inverted else low))
        middle = self.shifts // 2
        shift = int(shifts[np.argmin(np.abs(shifts - middle))])
        return Candidate(self.place_of(shift, inverted), bits - high if inverted else low)


def radius_bits(pattern: Pattern, unit: int) -> int:
    """How far to either side places are tried: half of what can be told apart, if that is less."""
    if pattern.period is None:
        return rules.RADIUS_BITS
    return min(rules.RADIUS_BITS, unit * (math.lcm(unit, pattern.period) // unit // 2))


def log_candidates(pattern: Pattern, unit: int) -> float:
    """Logarithm of how many places nearby are tried, in both polarities."""
    return math.log(2 * (2 * radius_bits(pattern, unit) // unit + 1))


def log_tail(bits: int, mismatches: int) -> float:
    """Upper bound on ln P(so few mismatches or fewer among so many chance bits), near the true value.

    The tail of the binomial is at most its last term times (n-m+1)/(n-2m+1), as each term before is smaller
    than the next by more than m/(n-m+1).
    """
    n, m = bits, mismatches
    if 2 * m >= n:
        return 0.0
    term = math.lgamma(n + 1) - math.lgamma(m + 1) - math.lgamma(n - m + 1) - n * math.log(2)
    return min(0.0, term + math.log((n - m + 1) / (n - 2 * m + 1)))


def _words_at(bits: NDArray[np.uint8], unit: int) -> NDArray[np.uint64]:
    """The 64 bits from every unit-th bit on as words, first bit lowest, shape (n,)."""
    count = (len(bits) - 64) // 8 * 8
    words = np.empty(count // unit, dtype=np.uint64)
    for shift in range(0, 8, unit):
        packed = np.packbits(bits[shift : shift + count + 56], bitorder="little")
        rolling = np.lib.stride_tricks.sliding_window_view(packed, 8)
        words[shift // unit :: 8 // unit] = np.ascontiguousarray(rolling).view("<u8")[: count // 8, 0]
    return words


def agrees(reference: Reference, place: Place, bits: NDArray[np.uint8], first: int, limit: float) -> bool:
    """Whether received bits from stream bit `first` on agree with a place better than chance lets them.

    Parameters
    ----------
    limit
        Logarithm of the chance that unrelated bits may have.
    """
    expected = reference.bits(place, first, len(bits))
    if log_tail(len(bits), int(np.count_nonzero(expected != bits))) > limit:
        return False
    if log_chance_of_agreement(reference.pattern, expected, bits) > limit:
        return False
    return repeats_as_the_pattern(reference.pattern, expected, bits, place.anchor + first, rules.FALSE_ALARM)
