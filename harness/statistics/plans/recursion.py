"""The exact recursion over a staircase: how likely each outcome of a sequential plan is, at any true ratio.

Between two corners of the stairs the number of new errors is binomial, so the chances of every count still
open are carried from corner to corner by one convolution each, and nothing is approximated. A count that
reaches the rejecting stair between two corners has been rejected by the second one, whenever it did.
"""

from __future__ import annotations

import math
from bisect import bisect_left, bisect_right
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from harness.statistics.tails import logit

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Stairs:
    """Where a sequential plan accepts and rejects, in compared bits.

    With k errors so far it accepts once ``accept_at[k]`` bits are reached, k from 0 to K - 1; it rejects if
    error number k falls at or before bit ``reject_at[k]``, k from 0 to K, where 0 means never. Both grow with
    k, and ``accept_at[K - 1]`` = ``reject_at[K]`` is where it ends at the latest.
    """

    accept_at: tuple[int, ...]
    reject_at: tuple[int, ...]

    def __post_init__(self) -> None:
        accept, reject = self.accept_at, self.reject_at
        if not accept or len(reject) != len(accept) + 1 or reject[0] != 0 or reject[-1] != accept[-1]:
            raise ValueError("the stairs do not end in one corner")
        if any(b < a for line in (accept, reject) for a, b in pairwise(line)):
            raise ValueError("the stairs must climb")
        if any(a <= r for a, r in zip(accept, reject[:-1], strict=True)):
            raise ValueError("the accepting stair must lie beyond the rejecting one")

    @property
    def last(self) -> int:
        """The number of errors that can never be accepted."""
        return len(self.accept_at)

    @property
    def longest(self) -> int:
        """Bits at which it ends at the latest."""
        return self.accept_at[-1]

    def acceptable(self, bits: int) -> int:
        """The most errors with which it would accept at `bits`; -1 for none."""
        return bisect_right(self.accept_at, bits) - 1

    def rejectable(self, bits: int) -> int:
        """The fewest errors with which it would reject at `bits`."""
        return min(bisect_left(self.reject_at, bits, lo=1), self.last)


@dataclass(frozen=True, slots=True)
class Checkpoint:
    """A bit at which counts up to `accept` are accepted (-1: none) and those from `reject` on rejected."""

    bits: int
    accept: int
    reject: int


@dataclass(frozen=True, slots=True)
class Accepted:
    """One way of being accepted."""

    bits: int
    errors: int
    chance: float


@dataclass(frozen=True, slots=True, eq=False)
class Walk:
    """What came of walking the checkpoints at one true ratio.

    Attributes
    ----------
    accepted
        In the plan's order: bits ascending, then errors.
    rejected
        (checkpoints,) how likely it was rejected behind the checkpoint before and up to this one.
    lowest, open
        Chances of the counts still open at the end, ``open[i]`` belonging to ``lowest + i`` errors.
    """

    accepted: tuple[Accepted, ...]
    rejected: Floats
    lowest: int
    open: Floats

    @property
    def acceptance(self) -> float:
        """How likely it was accepted."""
        return math.fsum(way.chance for way in self.accepted)

    @property
    def rejection(self) -> float:
        """How likely it was rejected."""
        return min(1.0, max(0.0, math.fsum(self.rejected)))


class Ways:
    """One walk, from which the chances at any other true ratio follow.

    A way to k errors in n bits has the chance p^k (1 - p)^(n - k), however it went, so its chance at another
    ratio is the walk's times a likelihood ratio.

    Attributes
    ----------
    bits, errors
        (n,) where each way ends: the accepted ones in the plan's order, then the open ones by errors.
    accepted
        How many of them are accepted.
    """

    def __init__(self, checkpoints: Sequence[Checkpoint], near: float) -> None:
        self._near = min(max(near, 1e-25), 1 - 1e-12)
        way = walk(checkpoints, self._near)
        until = checkpoints[-1].bits if checkpoints else 0
        self.accepted = len(way.accepted)
        self.bits = np.array([float(a.bits) for a in way.accepted] + [float(until)] * len(way.open))
        counts = [a.errors for a in way.accepted] + [way.lowest + i for i in range(len(way.open))]
        self.errors = np.array(counts, dtype=np.float64)
        chances = np.concatenate([[a.chance for a in way.accepted], way.open])
        with np.errstate(divide="ignore"):
            self._logs = np.log(chances)

    def chances(self, ber: float) -> Floats:
        """(n,) chances at a true ratio over 0 and under 1."""
        per_error = math.log(ber) - math.log(self._near)
        per_other = math.log1p(-ber) - math.log1p(-self._near)
        result: Floats = np.exp(self._logs + self.errors * per_error + (self.bits - self.errors) * per_other)
        return result


def corners(stairs: Stairs) -> tuple[Checkpoint, ...]:
    """The checkpoints of a plan that sees every bit."""
    return schedule(stairs, (), stairs.longest)


def mean_bits(stairs: Stairs, ber: float) -> float:
    """Mean bits at a true ratio over 0 and under 1: by Wald's identity the mean errors at the stop over it."""
    points = corners(stairs)
    way = walk(points, ber)
    accepted = math.fsum(a.errors * a.chance for a in way.accepted)
    rejected = math.fsum(
        point.reject * chance for point, chance in zip(points, way.rejected.tolist(), strict=True)
    )
    return (accepted + rejected) / ber


def schedule(stairs: Stairs, blind: Sequence[tuple[int, int]], until: int) -> tuple[Checkpoint, ...]:
    """The checkpoints up to and with bit `until` where some stretches showed their counts at their ends only.

    Parameters
    ----------
    stairs
        The plan's.
    blind
        Stretches (behind this bit, up to and with that one), ascending, without overlap.
    until
        Where to end.

    Returns
    -------
    tuple of Checkpoint
        A count may be accepted only where the accepting stair has risen since the checkpoint before. From
        `Stairs.longest` on nothing stays open.
    """
    times = list(_times(stairs, blind, until))
    result = []
    allowed = -1
    for i, bits in enumerate(times):
        accept, reject = stairs.acceptable(bits), stairs.rejectable(bits)
        rises = accept > allowed
        last = i + 1 == len(times)
        if rises or last or stairs.rejectable(times[i + 1]) != reject:
            result.append(Checkpoint(bits, accept if rises else -1, reject))
        allowed = max(allowed, accept)
        if bits >= stairs.longest:
            break
    return tuple(result)


def _times(stairs: Stairs, blind: Sequence[tuple[int, int]], until: int) -> Iterator[int]:
    """Bits at which something may happen: corners where bits are seen, the ends of blind stretches."""
    points = sorted({t for t in (*stairs.accept_at, *stairs.reject_at) if 0 < t <= until})
    at, done = 0, 0
    for start, end in blind:
        for bits in (*points[at : bisect_right(points, start)], min(start, until)):
            if bits > done:
                yield bits
                done = bits
        if end > until:
            break
        yield end
        done = end
        at = bisect_right(points, end)
    for bits in (*points[at:], until):
        if bits > done:
            yield bits
            done = bits


def admit(
    checkpoints: Sequence[Checkpoint], stairs: Stairs, ber: float, budget: float
) -> tuple[Checkpoint, ...]:
    """Hold the chance of acceptance at `ber` to `budget`: what would pass it is not accepted.

    Looking less often rejects less often, so the consumer's risk of the same stairs may grow. Whether a count
    is admitted depends on the looks alone, never on what they showed, and so the risk is held exactly. What
    is left at the last corner is rejected.
    """
    admitted: list[Checkpoint] = []
    spent = 0.0
    open_, lowest = np.ones(1), 0
    before = 0
    for checkpoint in checkpoints:
        width = checkpoint.reject - lowest
        length = np.array([float(checkpoint.bits - before)])
        grown = _carry(open_, binomial_kernels(length, max(1, width), ber)[0], width)
        before = checkpoint.bits
        take = 0
        while take <= checkpoint.accept - lowest and take < len(grown):
            chance = float(grown[take])
            if spent + chance > budget * (1 + 1e-12):
                break
            spent += chance
            take += 1
        reject = checkpoint.reject
        if checkpoint.bits >= stairs.longest:
            reject = min(reject, lowest + take)
        admitted.append(replace(checkpoint, accept=lowest + take - 1 if take else -1, reject=reject))
        open_, lowest = grown[take : max(take, reject - lowest)], lowest + take
    return tuple(admitted)


def walk(checkpoints: Sequence[Checkpoint], ber: float) -> Walk:
    """Chances of all outcomes at a true ratio `ber`, over 0 and under 1."""
    lengths, widths = [], []
    before = lowest = 0
    for checkpoint in checkpoints:
        lengths.append(float(checkpoint.bits - before))
        widths.append(max(checkpoint.reject, checkpoint.accept + 1) - lowest)
        before, lowest = checkpoint.bits, max(lowest, checkpoint.accept + 1)
    kernels = binomial_kernels(np.array(lengths), max(widths, default=1), ber)
    accept, reject = [c.accept for c in checkpoints], [c.reject for c in checkpoints]
    taken, rejected, lowest, rest = sweep(kernels, accept, reject)
    accepted = tuple(
        Accepted(checkpoint.bits, first + j, chance)
        for checkpoint, (first, chances) in zip(checkpoints, taken, strict=True)
        for j, chance in enumerate(chances.tolist())
    )
    return Walk(accepted, rejected, lowest, rest)


def sweep(
    kernels: Floats, accept: Sequence[int], reject: Sequence[int]
) -> tuple[list[tuple[int, Floats]], Floats, int, Floats]:
    """Carry the chances of all counts from checkpoint to checkpoint.

    Parameters
    ----------
    kernels
        (n, width) chances of 0, 1, 2... new errors in each stretch.
    accept, reject
        (n,) limits at each stretch's end, as in `Checkpoint`.

    Returns
    -------
    accepted
        For each checkpoint the lowest count accepted and the chances of it and the next ones.
    rejected
        (n,) chances.
    lowest, open
        As in `Walk`.
    """
    accepted: list[tuple[int, Floats]] = []
    rejected = np.zeros(len(accept))
    open_, lowest = np.ones(1), 0
    before = 1.0
    for i, (top, bottom) in enumerate(zip(accept, reject, strict=True)):
        take = max(0, top + 1 - lowest)
        width = max(bottom - lowest, take)
        grown = _carry(open_, kernels[i], width)
        accepted.append((lowest, grown[:take]))
        left = float(grown.sum())
        rejected[i] = max(0.0, before - left)
        open_, lowest = grown[take:], lowest + take
        before = float(open_.sum())
    return accepted, rejected, lowest, open_


def _carry(open_: Floats, kernel: Floats, width: int) -> Floats:
    """The chances after a stretch, for `width` counts from the lowest on."""
    if not len(open_) or width <= 0:
        return np.zeros(max(0, width))
    return np.convolve(open_, kernel[:width])[:width]


def binomial_kernels(lengths: Floats, width: int, ber: float) -> Floats:
    """(lengths, width) chances of 0 to ``width - 1`` errors in stretches of so many bits."""
    j = np.arange(width - 1, dtype=np.float64)
    with np.errstate(divide="ignore"):
        ratios = np.log(np.maximum(lengths[:, np.newaxis] - j, 0.0) / (j + 1)) + logit(ber)
    return _exponentials(lengths * math.log1p(-ber), ratios)


def poisson_kernels(means: Floats, width: int) -> Floats:
    """(means, width) chances of 0 to ``width - 1`` errors where so many are expected."""
    with np.errstate(divide="ignore"):
        ratios = np.log(means[:, np.newaxis] / np.arange(1.0, width))
    return _exponentials(-means, ratios)


def _exponentials(first: Floats, ratios: Floats) -> Floats:
    logs = np.concatenate([first[:, np.newaxis], ratios], axis=1)
    result: Floats = np.exp(np.cumsum(logs, axis=1, out=logs), out=logs)
    return result
