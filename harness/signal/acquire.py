"""Acquisition: find the place in a pattern at which a received stretch lies, or say that there is none.

A place is proposed by a finder from one part of the stretch and accepted only on bits that were not used to
find it, at a stated probability of a false alignment.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.signal.evidence import (
    log_chance_of_agreement,
    log_limit,
    repeats_as_the_pattern,
    rests_on_one_bit_of_eight,
)
from harness.signal.finders import make_finder
from harness.signal.patterns import Pattern, PatternError


@dataclass(frozen=True, slots=True)
class Found:
    """An alignment.

    Attributes
    ----------
    place
        The pattern's place of the first bit of the stretch, from 0 up to the period where there is one.
    inverted
        The stream is the complement of the pattern given.
    found_on, verified_on
        Bits that it was found on, and bits that it was then accepted on.
    mismatches
        Errors among the latter.
    log_chance
        Bound on the logarithm of the probability that unrelated bits agree so well.
    """

    place: int
    inverted: bool
    found_on: int
    verified_on: int
    mismatches: int
    log_chance: float


class Acquirer:
    """Searches for one pattern.

    Parameters
    ----------
    pattern
        What is expected, in either polarity.
    false_alarm
        Probability that any of 10 000 searches on unrelated bits accepts a place.

    hasty
        Give up sooner on long registers: eight times faster on noise, but blind to a BER over 0.3 or so.

    Raises
    ------
    PatternError
        For a constant pattern, which cannot be told from a dead line.
    """

    def __init__(self, pattern: Pattern, false_alarm: float = 1e-12, *, hasty: bool = False) -> None:
        if pattern.constant:
            raise PatternError(
                f"{pattern.name} never changes, so it cannot be told from a dead line",
                "choose a pattern with both ONEs and ZEROs, PRBS15 for one",
            )
        self.pattern = pattern
        self._false_alarm = false_alarm
        self._limit = log_limit(false_alarm)
        self._finder = make_finder(pattern, self._limit, hasty)

    def search(self, bits: NDArray[np.uint8], near: int = 0) -> Found | None:
        """Find the place of a received stretch.

        Parameters
        ----------
        bits
            0 and 1 as received, shape (n,); from 128 bits on a place can be found, from 8 192 on nearly
            always at BER 0.3.
        near
            A place near which it is likely to be. Only patterns without register and without a short period
            make use of it: they are searched for up to a quarter of `finders.REACH` on either side.

        Returns
        -------
        Found | None
            None where the evidence does not suffice.
        """
        cut = self._finder.cut(len(bits))
        searched, fresh = bits[:cut], bits[cut:]
        if len(searched) == 0:
            return None
        for place, inverted in self._finder.places(searched, fresh, near):
            found = self._judge(bits, cut, place, inverted)
            if found is not None:
                return found
        return None

    def _judge(self, bits: NDArray[np.uint8], cut: int, place: int, inverted: bool) -> Found | None:
        expected = self.pattern.bits(place, len(bits)) ^ np.uint8(inverted)
        fresh, fresh_expected = bits[cut:], expected[cut:]
        chance = log_chance_of_agreement(self.pattern, fresh_expected, fresh)
        if chance > self._limit:
            return None
        if rests_on_one_bit_of_eight(self.pattern, fresh_expected, fresh):
            return None
        if not repeats_as_the_pattern(self.pattern, expected, bits, place, self._false_alarm):
            return None
        mismatches = int(np.count_nonzero(fresh_expected != fresh))
        period = self.pattern.period
        return Found(
            place if period is None else place % period, inverted, cut, len(fresh), mismatches, chance
        )
