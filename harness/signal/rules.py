"""The counter's stated rules: what evidence is, when trouble is looked into, what a burst and an outage are.

Evidence is a walk along the stream: every bit that agrees with the expected one takes 2 off, every bit that
does not adds 3, so a place gathers evidence where fewer than 0.4 of its bits are wrong (links up to a bit
error ratio of 0.3 on one side, chance at one half on the other). Where ONEs and ZEROs of a pattern are not
about equally many, each is weighted so that both kinds count the same: a dead line gathers no evidence.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.signal.patterns import Pattern

WORD_BITS = 64
BLOCK_WORDS = 64  # the level of errors that is usual is taken from blocks of 4096 bits
OUTAGE_BITS = 8192  # a stretch without evidence of so many bits or more is an outage

AGREES, DIFFERS = -2, 3  # steps of the walk
DECIDED_AFTER = 200  # a place that has gathered so much is not doubted further back
RESUMED_AFTER = 280  # after trouble a place that gathers so much holds again: chance 1e-20 a bit

FALSE_ALARM = 1e-12  # of a search for a new place, on bits that are independent of the pattern
FALSE_AT_SLIP = 1e-5  # of a short place more where the stream slips, if it also has a burst there
FALSE_IN_BURST = 1e-8  # of a short place, entered and left again, in a burst

RADIUS_BITS = 8192  # places up to so far from the one expected are all tried
LONGEST_WINDOW = 8192  # bits searched at once
KEPT_BITS = 1 << 20  # searches of a long outage are never further apart


@dataclass(frozen=True, slots=True)
class Level:
    """How trouble is noticed where so many errors are usual.

    Attributes
    ----------
    most
        Errors in a block of 4096 bits up to which this level stands.
    share
        Errors above this share of the bits are excess: about half way between what is usual and one half.
    careful_share
        The same where the stream is known to be in trouble.
    alarm
        So many errors in excess, over any stretch, are trouble.
    word_drift
        Errors in a word of 64 bits above which a closer look is taken; a multiple of one half, so that sums
        are exact wherever they begin.
    by_word
        Excess is counted by whole words, which is enough where only long stretches stand out.
    """

    most: int
    share: float
    careful_share: float
    alarm: float
    word_drift: float
    by_word: bool


LEVELS = (
    Level(24, 0.25, 0.18, 5.0, 5.5, False),
    Level(260, 0.275, 0.20, 7.0, 9.5, False),
    Level(530, 0.31, 0.25, 9.0, 14.5, False),
    Level(940, 0.36, 0.31, 8.0, 23.0, True),
    Level(4096, 0.40, 0.36, 14.0, 25.5, True),
)
LEVEL_MOST = np.array([level.most for level in LEVELS[:-1]])
LEVEL_DRIFT = np.array([level.word_drift for level in LEVELS])
FEW_IN_WORD = int(LEVELS[0].word_drift)  # words with no more errors are never looked at


def level_of(errors: int, bits: int) -> int:
    """The level at which so many errors in so many bits are usual."""
    if bits <= 0:
        return 0
    return int(np.searchsorted(LEVEL_MOST, errors * (BLOCK_WORDS * WORD_BITS) / bits))


@dataclass(frozen=True, slots=True)
class Weights:
    """Weights of expected ZEROs and ONEs in the walk, and the scale that they have on average."""

    zero: int = 1
    one: int = 1
    scale: int = 1


def weights_of(pattern: Pattern) -> Weights:
    """Weights that make both kinds of bit count the same; equal ones where the pattern is balanced.

    The share of ONEs is taken over one period, or the first 65 536 bits of a longer one.
    """
    count = min(pattern.period or 65536, 65536)
    share = float(pattern.bits(0, count).mean())
    if 0.45 <= share <= 0.55 or share in (0.0, 1.0):
        return Weights()
    scale = 16
    return Weights(
        zero=min(1024, round(scale / (2 * (1 - share)))),
        one=min(1024, round(scale / (2 * share))),
        scale=scale,
    )


def walk(
    mismatches: NDArray[np.uint8], expected: NDArray[np.uint8] | None, weights: Weights
) -> NDArray[np.int64]:
    """The walk of evidence over n bits, shape (n + 1,), beginning with 0; weights need `expected`."""
    steps = mismatches.astype(np.int64) * (DIFFERS - AGREES) + AGREES
    if weights.scale != 1 and expected is not None:
        steps *= np.where(expected, weights.one, weights.zero)
    out = np.zeros(len(steps) + 1, dtype=np.int64)
    np.cumsum(steps, out=out[1:])
    return out


def nearest_slip(change: int, period: int | None, unit: int) -> tuple[int, int | None]:
    """The slip nearest to zero that turns one place into another.

    Parameters
    ----------
    change
        Old place minus new place, bits: negative where bits were lost.
    period
        Of the pattern, bits; None where it does not repeat.
    unit
        Bits in which the link slips, 1 or 8.

    Returns
    -------
    tuple[int, int | None]
        Bits, and the modulus to which they are known. Where no multiple of `unit` fits, any number does.
    """
    if period is None:
        return change, None
    common = math.gcd(unit, period)
    if change % common:
        unit = 1
        common = 1
    modulus = unit // common * period
    size = change % period
    if unit > 1:
        size += period * ((-size // common) * pow(period // common, -1, unit // common) % (unit // common))
    size %= modulus
    return (size if size <= modulus // 2 else size - modulus), modulus
