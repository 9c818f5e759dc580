"""How sure an alignment is: bounds on what unrelated bits agree by chance, and the pattern's own period.

Everything here errs on the side of caution: a bound may be larger than the probability, never smaller.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from harness.signal.patterns import BytesPattern, Pattern, WordPattern

CANDIDATES = 80  # candidates tried in one search: growing stretches, both polarities, several windows each
SEARCHES = 10_000  # searches that one run may make

_LONG_FILE_BITS = 4096  # a file longer than this is judged as bytes, a shorter one as a word
_SURE_PHASE = 2.5  # standard deviations by which a place of a short word is confirmed by itself
_OTHER_ORDER = 0.35  # share of mismatches from which a stream may be in the other bit order: it has 7/16
_REST_LIMIT = math.log(1e-9)  # for what is left without the best bit of eight
_FEW_MISMATCHES = 0.05  # share up to which a rhythm is the device's, not another word's
_LINE = 25.0  # times the level around it that a line in the spectrum stands out
_AROUND = 64  # frequencies
_UNLIKE = 5.0  # standard deviations by which chi-square may exceed its mean before places differ


def log_chance(compared: int, mismatches: int, share: float = 0.5) -> float:
    """Bound on the logarithm of the probability of so few mismatches between unrelated bits.

    Parameters
    ----------
    compared, mismatches
        Counts in bits.
    share
        Expected share of mismatches between them, over 0 and at most one half.

    Notes
    -----
    W. Hoeffding, "Probability inequalities for sums of bounded random variables", JASA 58 (1963), theorem 1:
    P(X <= m) <= exp(-n·D(m/n || share)) for m/n under the share, also where bits differ in their shares.
    """
    if compared == 0 or mismatches >= share * compared:
        return 0.0
    seen = mismatches / compared
    divergence = (1 - seen) * math.log((1 - seen) / (1 - share))
    if mismatches:
        divergence += seen * math.log(seen / share)
    return -compared * divergence


def most_mismatches(compared: int, limit: float) -> int:
    """The most mismatches whose `log_chance` is at or under a limit, -1 where there are none."""
    low, high = -1, compared // 2
    while low < high:
        middle = (low + high + 1) // 2
        if log_chance(compared, middle) <= limit:
            low = middle
        else:
            high = middle - 1
    return low


def log_limit(false_alarm: float) -> float:
    """What `log_chance` a single candidate may have, so that all of a run's stay under `false_alarm`."""
    return math.log(false_alarm / (CANDIDATES * SEARCHES))


def log_chance_of_agreement(
    pattern: Pattern, expected: NDArray[np.uint8], received: NDArray[np.uint8]
) -> float:
    """Bound on the chance that a received stretch agrees with an unrelated expected one as well as it does.

    Both are 0 and 1, shape (n,). Their shares of ONEs are taken into account, so that a dead line never
    speaks for a pattern with few ONEs; between two files they are taken for each bit of a byte, and bytes,
    not bits, count as independent, since texts have much in common.
    """
    n = len(expected)
    unit = 8 if isinstance(pattern, BytesPattern) and pattern.period > _LONG_FILE_BITS else 1
    n -= n % unit
    if n == 0:
        return 0.0
    expected, received = expected[:n], received[:n]
    mismatches = int(np.count_nonzero(expected != received))
    ones_expected = expected.reshape(-1, unit).mean(axis=0)
    ones_received = received.reshape(-1, unit).mean(axis=0)
    by_chance = ones_expected * (1 - ones_received) + ones_received * (1 - ones_expected)
    return log_chance(n, mismatches, min(0.5, float(by_chance.mean()))) / unit


def rests_on_one_bit_of_eight(
    pattern: Pattern, expected: NDArray[np.uint8], received: NDArray[np.uint8]
) -> bool:
    """Whether the agreement of a stretch is that of a stream whose bytes came in the other bit order.

    Such a stream agrees with its own pattern in one bit of every eight wherever the place is right for that
    bit, and by chance in the others: 7/16 of its bits are mismatches, for ever. What is left without the
    best of the eight must still be evidence. Words are not meant: eight of their bits may be all there is.
    """
    wrong = expected != received
    if isinstance(pattern, WordPattern) or wrong.mean() < _OTHER_ORDER:
        return False
    kinds = np.arange(len(wrong)) % 8
    best = int(np.argmin(np.bincount(kinds, weights=wrong) / np.bincount(kinds)))
    rest = kinds != best
    return log_chance_of_agreement(pattern, expected[rest], received[rest]) > _REST_LIMIT


def repeats_as_the_pattern(
    pattern: Pattern, expected: NDArray[np.uint8], received: NDArray[np.uint8], place: int, false_alarm: float
) -> bool:
    """Whether a stretch longer than the pattern's period is the pattern, not another word of that period.

    A random word of the pattern's own period agrees with it here and there, and does so again in every
    period, on fresh bits too. So each place of the period counts once, by the majority of its bits. Either
    the places that agree are too many for the best of all phases and polarities of a random word; or, in a
    short word, all of them agree, each is confirmed by itself or errs about as often as the others, and the
    mismatches have no rhythm of their own: a stream of some other word or of text has one.

    Parameters
    ----------
    expected, received
        0 and 1, shape (n,).
    place
        The pattern's place of their first bit.
    false_alarm
        Probability with which a random word of that period may pass.
    """
    period = pattern.period
    if period is None or len(received) <= period:
        return True
    phases = np.arange(place % period, place % period + len(received)) % period
    seen = np.bincount(phases, minlength=period)
    wrong = np.bincount(phases[expected != received], minlength=period)
    margin = seen - 2 * wrong
    undecided, outvoted = int(np.count_nonzero(margin == 0)), int(np.count_nonzero(margin < 0))
    if log_chance(period - undecided, outvoted) + math.log(2 * period) <= math.log(false_alarm):
        return True
    if undecided or outvoted:
        return False
    sure = bool(np.all(margin >= np.maximum(_SURE_PHASE * np.sqrt(seen), 6)))
    alike = sure or _err_alike(seen, wrong, pattern.bits(0, period))
    return alike and not has_a_rhythm(expected != received)


def _err_alike(seen: NDArray[np.int64], wrong: NDArray[np.int64], cycle: NDArray[np.uint8]) -> bool:
    """Whether the places of a period err equally often, up to chance, for ONEs and for ZEROs."""
    excess, free = 0.0, 0
    for value in (0, 1):
        those = cycle == value
        bits, errors = seen[those], wrong[those]
        if errors.sum() == 0:
            continue
        ratio = errors.sum() / bits.sum()
        excess += float(np.sum((errors - bits * ratio) ** 2 / (bits * ratio * (1 - ratio))))
        free += len(bits)
    return excess <= free + _UNLIKE * math.sqrt(2 * free)


def has_a_rhythm(wrong: NDArray[np.bool_]) -> bool:
    """Whether mismatches repeat with some period, which independent errors and bursts do not.

    A period gives sharp lines in the spectrum; bursts only raise it broadly. A line must stand out above the
    median of the 64 frequencies around it, which happens by chance in 4 096 of them with probability 1e-7.
    """
    if wrong.mean() <= _FEW_MISMATCHES or len(wrong) < 4 * _AROUND:
        return False
    centred = (wrong - wrong.mean()) * np.hanning(len(wrong))
    power = np.abs(np.fft.rfft(centred)) ** 2
    around = np.lib.stride_tricks.sliding_window_view(
        np.pad(power, _AROUND // 2, mode="reflect"), _AROUND + 1
    )
    level = np.median(around, axis=1) / math.log(2)
    return bool(np.any(power > _LINE * level + 1e-9 * power.sum()))
