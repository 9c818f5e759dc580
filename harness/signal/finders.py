"""Finders: where in a pattern a received stretch may be. They propose places; `acquire` judges them.

Three kinds. Patterns with a short period: the stretch is folded over the period and correlated with every
phase. Long registers: the received bits are a codeword of the register's code seen through the channel, and
each squared polynomial is one more parity check. Everything else: correlation with a stated reach.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from harness.signal.bits import int_of_bits
from harness.signal.evidence import most_mismatches
from harness.signal.patterns import Pattern, RegisterPattern
from harness.signal.polynomials import prime_factors

LONGEST_FOLD = 1 << 16  # bits of period up to which all phases are tried by one correlation
_LONGEST_HASTY_FOLD = 1 << 12
REACH = 1 << 20  # bits of the pattern, about the place asked for, that correlation searches

_LARGEST_FACTOR = 200  # of a transform's length
_ASSUMED_BER = 0.3  # what the parity checks start from; the true one need not be known
_MOST_ROUNDS = 32
_ROUNDS_BETWEEN_LOOKS = 4
_LEAST_FRESH = 80  # bits


class Finder(Protocol):
    """Proposes places of a stretch's first bit, each with a polarity, the likeliest first."""

    def cut(self, count: int) -> int:
        """How many bits of a stretch of `count` to search in; the rest stays fresh for the judgement."""

    def places(
        self, searched: NDArray[np.uint8], fresh: NDArray[np.uint8], near: int
    ) -> Iterator[tuple[int, bool]]:
        """Places and polarities, from the bits to search in; `fresh` only spares hopeless ones."""


def make_finder(pattern: Pattern, limit: float, hasty: bool) -> Finder:
    """The finder that suits a pattern; `limit` is what `log_chance` a candidate may have.

    A hasty one gives up where the parity checks of a long register look like chance; that misses a BER over
    0.3 or so.
    """
    light = isinstance(pattern, RegisterPattern) and len(pattern.register.taps) == 2
    longest_fold = _LONGEST_HASTY_FOLD if hasty and light else LONGEST_FOLD
    if pattern.period is not None and pattern.period <= longest_fold:
        return FoldFinder(pattern)
    if isinstance(pattern, RegisterPattern) and (light or pattern.period > REACH):
        return ParityFinder(pattern, limit, hasty)
    return BlockFinder(pattern)


def _cut(count: int, parts: int) -> int:
    """All but one of so many parts, but leave at least what can prove a place."""
    return max(count - max(count // parts, _LEAST_FRESH), 0)


def signs(bits: NDArray[np.uint8]) -> NDArray[np.float32]:
    """+1 for a ZERO, -1 for a ONE."""
    return 1 - 2 * bits.astype(np.float32)


class FoldFinder:
    """Correlates a stretch, folded over the period, with all phases at once."""

    def __init__(self, pattern: Pattern) -> None:
        assert pattern.period is not None
        self._period = pattern.period
        # A transform of the period's own length is slow where that has a large prime factor; then two periods
        # in a row are used, in the next power of two.
        smooth = prime_factors(self._period)[-1] <= _LARGEST_FACTOR if self._period > 1 else True
        self._size = self._period if smooth else 1 << (2 * self._period - 2).bit_length()
        cycle = signs(pattern.bits(0, self._period if smooth else 2 * self._period - 1))
        self._spectrum = np.fft.rfft(cycle - cycle[: self._period].mean(), self._size)

    def cut(self, count: int) -> int:
        """Half of them."""
        return _cut(count, 2)

    def places(
        self,
        searched: NDArray[np.uint8],
        fresh: NDArray[np.uint8],  # noqa: ARG002
        near: int,  # noqa: ARG002
    ) -> Iterator[tuple[int, bool]]:
        """The best phase, in the polarity that it has."""
        received = signs(searched)
        folded = np.zeros(-(-len(received) // self._period) * self._period, dtype=np.float32)
        folded[: len(received)] = received
        folded = folded.reshape(-1, self._period).sum(axis=0)
        spectrum = np.conj(np.fft.rfft(folded, self._size))
        agreement = np.fft.irfft(self._spectrum * spectrum, self._size)[: self._period]
        upright, turned = int(np.argmax(agreement)), int(np.argmin(agreement))
        # A word may be its own complement, shifted: then both are as good, and it is not called inverted.
        if agreement[upright] >= -agreement[turned] - 1e-3 * len(received):
            yield upright, False
        else:
            yield turned, True


class ParityFinder:
    """Recovers a long register's state by iterated parity checks.

    Over GF(2) a squared polynomial is one with all lags doubled, so every received bit stands in three checks
    for each doubling that fits into the stretch. Each round turns the bits into soft values, adds to every
    bit what the other bits of its checks say of it, and goes on until the checks hold.

    Notes
    -----
    W. Meier and O. Staffelbach, "Fast correlation attacks on certain stream ciphers", J. Cryptology 1 (1989);
    here with all soft values passed on, as in belief propagation. QRSS's forced ONEs are rare errors.
    A register with more than two taps has heavier checks, which bear fewer errors.
    """

    def __init__(self, pattern: RegisterPattern, limit: float, hasty: bool) -> None:
        self._pattern = pattern
        self._hasty = hasty and len(pattern.register.taps) == 2
        self._register = pattern.register
        self._limit = limit

    def cut(self, count: int) -> int:
        """Three quarters."""
        return _cut(count, 4)

    def places(
        self,
        searched: NDArray[np.uint8],
        fresh: NDArray[np.uint8],
        near: int,  # noqa: ARG002
    ) -> Iterator[tuple[int, bool]]:
        """Places of states that the fresh bits bear out."""
        stages = self._register.stages
        if len(searched) < stages:
            return
        allowed = most_mismatches(len(fresh), self._limit)
        for inverted, bits in self._polarities(searched):
            soft = self._recover(signs(bits))
            hard = (soft < 0).view(np.uint8)
            for at in _surest_windows(soft, stages):
                window = int_of_bits(hard[at : at + stages])
                if window == 0:
                    continue  # what constant, sparse and periodic streams converge to; it has no place either
                follow = self._register.bits_from(window, len(searched) - at + len(fresh))
                turned = np.uint8(inverted != self._pattern.sent_inverted)
                wrong = int(np.count_nonzero(follow[len(searched) - at :] ^ turned != fresh))
                if wrong > allowed:
                    continue
                place = self._register.place_of(window)
                if place is not None:
                    yield (place - at) % self._register.period, inverted
                    break

    def _polarities(self, searched: NDArray[np.uint8]) -> Iterator[tuple[bool, NDArray[np.uint8]]]:
        """Register bits if the stream is upright, and if it is turned over, the likelier one first.

        Checks of three bits fail where all three are turned over, so their balance tells the polarity,
        wherever it is so clear that the other one need not be tried.
        """
        plain = searched ^ np.uint8(self._pattern.sent_inverted)
        balance, checks = 0, 0
        for lags in self._lags(len(plain)):
            parity = plain[lags[-1] :].copy()
            for lag in lags:
                parity ^= plain[lags[-1] - lag : len(plain) - lag]
            balance += len(parity) - 2 * int(np.count_nonzero(parity))
            checks += len(parity)
        if self._hasty and abs(balance) < 4 * checks**0.5:
            return
        likelier = balance < 0
        yield likelier, plain ^ np.uint8(likelier)
        if abs(balance) <= 6 * checks**0.5:
            yield not likelier, plain ^ np.uint8(not likelier)

    def _lags(self, count: int) -> list[tuple[int, ...]]:
        """The taps, doubled as often as leaves at least a few checks in a stretch."""
        taps = self._register.taps
        lags = []
        scale = 1
        while scale * taps[-1] + taps[-1] <= count:
            lags.append(tuple(scale * tap for tap in taps))
            scale *= 2
        return lags

    def _recover(self, received: NDArray[np.float32]) -> NDArray[np.float32]:
        """Half log-likelihood ratios of the register's bits, positive for ZERO, shape (n,)."""
        own = np.float32(np.arctanh(1 - 2 * _ASSUMED_BER)) * received
        lags = self._lags(len(received))
        if not lags:
            return own
        soft = own
        held = 0.0
        for number in range(1, _MOST_ROUNDS + 1):
            soft = _one_round(own, np.tanh(soft), lags)
            if number % _ROUNDS_BETWEEN_LOOKS == 0:
                now = _share_held(soft, lags[0])
                stuck = number > _ROUNDS_BETWEEN_LOOKS and now < held + 0.02
                if now == 1 or stuck:
                    break
                held = now
        return soft


def _one_round(
    own: NDArray[np.float32], values: NDArray[np.float32], lags: list[tuple[int, ...]]
) -> NDArray[np.float32]:
    """What each bit says of itself plus what its checks say: the product of the other bits' soft values."""
    count = len(own)
    total = own.copy()
    for check in lags:
        longest = check[-1]
        spans = [slice(longest - lag, count - lag) for lag in (0, *check)]
        parts = [values[span] for span in spans]
        if len(parts) == 3:
            a, b, c = parts
            total[spans[0]] += b * c
            total[spans[1]] += a * c
            total[spans[2]] += a * b
            continue
        before = [np.ones_like(parts[0])]
        for part in parts[:-1]:
            before.append(before[-1] * part)
        after = np.ones_like(parts[0])
        for span, part, head in zip(reversed(spans), reversed(parts), reversed(before), strict=True):
            total[span] += head * after
            after = after * part
    return total


def _share_held(soft: NDArray[np.float32], check: tuple[int, ...]) -> float:
    """Share of the checks with the shortest lags that hold for the bits as they look now."""
    ones = soft < 0
    longest = check[-1]
    parity = ones[longest:].copy()
    for lag in check:
        parity ^= ones[longest - lag : len(ones) - lag]
    return 1 - float(parity.mean())


def _surest_windows(soft: NDArray[np.float32], width: int) -> list[int]:
    """Where to read a state: the surest window of all, and the surest of the last quarter.

    The second one serves a stretch in which the place changes: what comes last is what goes on.
    """
    surety = np.concatenate([[0.0], np.cumsum(np.minimum(np.abs(soft), 8), dtype=np.float64)])
    sums = surety[width:] - surety[:-width]
    best = int(np.argmax(sums))
    late = len(sums) - max(len(sums) // 4, 1)
    last = late + int(np.argmax(sums[late:]))
    return [best] if best == last else [best, last]


class BlockFinder:
    """Correlates a stretch with a pattern's bits, block by block, up to `REACH` bits.

    Up to 16 384 bits of a stretch are used. The reach lies around the place asked for, at least a quarter of
    it on either side, or at the pattern's beginning; a pattern whose period is shorter is searched all round.
    """

    _BLOCK = 1 << 16
    _MOST_USED = 1 << 14

    def __init__(self, pattern: Pattern) -> None:
        self._pattern = pattern
        self._first: int | None = None  # the place at which the kept spectra begin
        self._spectra = np.empty((0, 0), dtype=np.complex64)

    def cut(self, count: int) -> int:
        """Half of them."""
        return _cut(count, 2)

    def places(
        self,
        searched: NDArray[np.uint8],
        fresh: NDArray[np.uint8],  # noqa: ARG002
        near: int,
    ) -> Iterator[tuple[int, bool]]:
        """The best place within reach, in the polarity that it has."""
        used = searched[-self._MOST_USED :]
        skipped = len(searched) - len(used)
        received = signs(used)
        received -= received.mean()
        self._prepare(near)
        assert self._first is not None
        spectrum = np.conj(np.fft.rfft(received, self._BLOCK))
        usable = self._BLOCK - self._MOST_USED
        best, place, inverted = 0.0, 0, False
        for number, block in enumerate(self._spectra):
            agreement = np.fft.irfft(block * spectrum, self._BLOCK)[:usable]
            at = int(np.argmax(np.abs(agreement)))
            if abs(agreement[at]) > best:
                best = abs(float(agreement[at]))
                place, inverted = self._first + number * usable + at, bool(agreement[at] < 0)
        if best:
            yield place - skipped, inverted

    def _prepare(self, near: int) -> None:
        """Keep the spectra of the reach around a place; they are made again only when it has moved."""
        reach, period = REACH, self._pattern.period
        first = max(near - reach // 2, 0)
        if period is not None and period <= reach:
            reach, first = period, 0
        if self._first is not None and (
            self._first == first
            or self._first <= max(near - REACH // 4, 0) <= near + REACH // 4 <= self._first + reach
        ):
            return
        usable = self._BLOCK - self._MOST_USED
        blocks = -(-reach // usable)
        values = signs(self._pattern.bits(first, (blocks - 1) * usable + self._BLOCK))
        values -= values.mean()
        self._spectra = np.stack(
            [
                np.fft.rfft(values[i * usable : i * usable + self._BLOCK]).astype(np.complex64)
                for i in range(blocks)
            ]
        )
        self._first = first
