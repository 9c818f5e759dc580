"""Finding the stairs of a sequential plan: Wald's test, truncated, with the true risks that were asked for.

Wald (1945), Annals of Mathematical Statistics 16: the likelihood ratio of a bad unit to a good one is
followed error by error between two parallel lines. His lines are approximations; here their two intercepts
are moved, by Newton's method on the exact risks, until those are the ones asked for. First over continuous
bits (Poisson), where the risks are smooth, then on whole bits (binomial), where they are exact.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from harness.statistics.bounds import bits_needed
from harness.statistics.least_bits import risk_of
from harness.statistics.notation import ratio
from harness.statistics.plans.plan import PlanError
from harness.statistics.plans.recursion import Stairs, corners, mean_bits, poisson_kernels, sweep, walk
from harness.statistics.tails import chance_over

Floats = NDArray[np.float64]

MOST_ERRORS = 10_000  # that the equivalent fixed plan may accept: a margin of about 1.05 at risks of 0.01
_TARGET = 1 - 1e-7  # of the risks asked for: the true ones are never above them
_ROUNDING = 2e-12  # what the many sums leave in a producer's risk
LEAST_RISK = 1e-9  # a producer's risk under this would drown in it
_NEAR = 1e-6  # relative: near enough to the risks asked for
_GOOD = 1e-3  # relative: no need to try another truncation
_FAIR = 0.1  # the same for larger plans over whole bits
_SMALL = 12  # errors at the truncation: plans as small as this are tried with all truncations near
_COARSE = 1e-3  # ratios over this may be kept off the risks asked for by whole bits
_FREQUENT = 0.02
_LATTICE = 0.4  # times the ratio: how near whole bits let the risks come, relative


@dataclass(frozen=True, slots=True)
class Aim:
    """What the stairs have to do."""

    bad: float  # the required ratio
    good: float
    consumer: float
    producer: float
    fixed_accepts: int  # the least fixed plan that meets both risks
    fixed_bits: int
    shift: int = 0  # of the error count that rejects at the truncation, from where it is cheapest

    @property
    def error_step(self) -> float:
        """What an error adds to the log likelihood ratio of bad to good, beside a bit's fall."""
        return math.log(self.bad / self.good) + self.bit_fall

    @property
    def bit_fall(self) -> float:
        """What a bit without error takes off it."""
        return math.log1p(-self.good) - math.log1p(-self.bad)

    @property
    def longest(self) -> int:
        """Truncation: twice the least fixed plan."""
        return 2 * self.fixed_bits

    @property
    def last(self) -> int:
        """Errors with which it rejects at the truncation: a little beyond the middle between the two lines,
        which cost fewest bits in trials, and more than the fixed plan accepts."""
        accept, reject = self.first_guess
        middle = self.longest * self.bit_fall + 0.6 * (reject - accept)
        return max(self.fixed_accepts + 1, round(middle / self.error_step)) + self.shift

    @property
    def targets(self) -> Floats:
        """(2,) logarithms of the risks to aim at."""
        result: Floats = np.log([self.consumer * _TARGET, self.producer * _TARGET - _ROUNDING])
        return result

    @property
    def first_guess(self) -> tuple[float, float]:
        """Wald's intercepts of the accepting and the rejecting line."""
        return (
            math.log((1 - self.producer) / self.consumer),
            math.log((1 - self.consumer) / self.producer),
        )


def aim_at(ber: float, confidence: float, margin: float, producer_risk: float) -> Aim:
    """Find the least fixed plan that meets both risks.

    Raises
    ------
    PlanError
        If good and bad units are so alike that it would have to accept more than `MOST_ERRORS` errors.
    """
    good = ber / margin
    consumer = risk_of(confidence)
    if good == 0.0:
        raise PlanError(
            f"a unit {margin:g} times better than {ratio(ber)} has no errors at all", "state a smaller margin"
        )
    if consumer + producer_risk >= 1:
        raise PlanError(
            f"risks of {consumer:g} and {producer_risk:g} leave nothing to decide",
            "a coin meets them: ask for a higher confidence or a lower producer's risk",
        )

    if producer_risk < LEAST_RISK:
        raise PlanError(
            f"a producer's risk of {producer_risk:g} is less than can be computed",
            f"state at least {LEAST_RISK:g}, or use a fixed plan",
        )

    def meets(accepts: int) -> bool:
        return chance_over(accepts, bits_needed(ber, confidence, accepts), good) <= producer_risk

    low, high = -1, max(0, _poisson_guess(consumer, producer_risk, margin))
    while not meets(high):
        low, high = high, 2 * high + 1
        if low > MOST_ERRORS:
            break
    if high > MOST_ERRORS and low > MOST_ERRORS // 2:
        raise PlanError(
            f"a margin of {margin:g} at these risks takes more than {MOST_ERRORS} errors to decide",
            "state a larger margin or larger risks, or use a fixed plan",
        )
    if high - low > 1 and high >= 1 and not meets(high - 1):
        low = high - 1
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if meets(middle) else (middle, high)
    return Aim(ber, good, consumer, producer_risk, high, bits_needed(ber, confidence, high))


def _poisson_guess(consumer: float, producer: float, margin: float) -> int:
    """What the least fixed plan accepts where the ratio is small."""
    from scipy.special import gammainc, gammainccinv

    accepts = np.arange(0, 2 * MOST_ERRORS)
    risks = gammainc(accepts + 1, gammainccinv(accepts + 1, consumer) / margin)
    fit = np.flatnonzero(risks <= producer)
    return int(fit[0]) if len(fit) else 2 * MOST_ERRORS


def find_stairs(aim: Aim) -> Stairs:
    """Whole-bit stairs whose true risks are never above those asked for, and meet them where they can be met.

    Where the fixed plan accepts no error at all, rejecting at the first error keeps the producer's risk under
    the one asked for, and nothing can be quicker.
    """
    if aim.fixed_accepts == 0:
        return as_curtailed(aim)
    near = max(_GOOD, _LATTICE * aim.bad)
    found: list[tuple[float, float, Stairs]] = []  # whether it misses, what it costs
    for shift in (0, 1, 2, -1, 3):
        if aim.last + shift <= aim.fixed_accepts:
            continue
        stairs, miss = _solve(replace(aim, shift=aim.shift + shift))
        if stairs is not None:
            found.append((max(0.0, miss - near), _cost(stairs, aim), stairs))
            if aim.last > _SMALL and miss < max(near, _FAIR if aim.bad > _COARSE else 0.0):
                break
    return min(found, key=lambda one: one[:2])[2] if found else as_curtailed(aim)


def _cost(stairs: Stairs, aim: Aim) -> float:
    """Mean bits of a bad and a good unit together."""
    return mean_bits(stairs, aim.bad) + mean_bits(stairs, aim.good)


def _solve(aim: Aim) -> tuple[Stairs | None, float]:
    """Stairs that end at a given number of errors, and how far their risks stay under those asked for."""
    if aim.bad > _FREQUENT:  # far from Poisson: Wald's own lines, and his slopes, are nearer
        smooth, slopes = np.array(aim.first_guess), -np.eye(2)
    else:
        smooth, slopes = _newton(lambda x: _misses(_poisson_risks(aim, x), aim), np.array(aim.first_guess))
    best: Stairs | None = None
    best_miss = math.inf
    x, targets = smooth, aim.targets
    asked = np.log([aim.consumer, aim.producer - _ROUNDING / 2])
    idle = 0
    for _ in range(14):
        stairs = _whole(aim, x)
        if stairs is None:
            break
        risks = np.log(np.maximum(exact_risks(stairs, aim), 1e-300))
        over = risks - asked
        miss = _shortfall(np.exp(risks), aim)
        if miss < math.inf:
            idle += 1
            if miss < best_miss:
                best, best_miss, idle = stairs, miss, 0
            if idle == 4:
                break
            if miss < max(_NEAR, _LATTICE / 8 * aim.bad):
                break
        else:  # whole bits are a lattice: where it overshoots, aim lower by as much
            targets = targets - np.where(over > 0, 0.7 * over, 0.0)
        x = x - np.clip(np.linalg.lstsq(slopes, risks - targets, rcond=None)[0], -0.5, 0.5)
    return best, best_miss


def _shortfall(risks: Floats, aim: Aim) -> float:
    """How far risks lie under those asked for, in logarithms; infinite where one is above."""
    over = np.log(np.maximum(risks, 1e-300)) - np.log([aim.consumer, aim.producer - _ROUNDING / 2])
    return float(-over.sum()) if np.all(over <= 0) else math.inf


def exact_risks(stairs: Stairs, aim: Aim) -> Floats:
    """(2,) consumer's and producer's risk on whole bits: one walk at the bad ratio gives both.

    The chance of a way at the good ratio is that at the bad one times the likelihood ratio at its end.
    """
    accepted = walk(corners(stairs), aim.bad).accepted
    chances = np.array([way.chance for way in accepted])
    errors = np.array([way.errors for way in accepted], dtype=np.float64)
    bits = np.array([float(way.bits) for way in accepted])
    favour = bits * aim.bit_fall - errors * aim.error_step
    return np.array([chances.sum(), 1 - (chances * np.exp(favour)).sum()])


def as_curtailed(aim: Aim) -> Stairs:
    """The least fixed plan that meets both risks, ended at the first error too many: always within them."""
    count = aim.fixed_accepts + 1
    return Stairs((aim.fixed_bits,) * count, (*(0,) * count, aim.fixed_bits))


def _lines(aim: Aim, intercepts: Floats) -> tuple[Floats, Floats]:
    """Accepting line for 0 to K - 1 errors and rejecting line for 1 to K, in bits, cut at the truncation."""
    k = np.arange(aim.last + 1, dtype=np.float64)
    longest = float(aim.longest)
    accept = np.clip((k[:-1] * aim.error_step + intercepts[0]) / aim.bit_fall, 0.0, longest)
    reject = np.clip((k[1:] * aim.error_step - intercepts[1]) / aim.bit_fall, 0.0, longest)
    accept[-1] = reject[-1] = longest
    return accept, reject


def _poisson_risks(aim: Aim, intercepts: Floats) -> Floats:
    """(2,) consumer's and producer's risk over continuous bits."""
    accept, reject = _lines(aim, intercepts)
    accept, reject = accept * aim.bad, reject * aim.bad  # in errors expected of a bad unit
    times = np.unique(np.concatenate([accept, reject[reject > 0]]))
    top = np.searchsorted(accept, times, side="right") - 1
    bottom = np.searchsorted(reject, times, side="left") + 1
    lowest = np.concatenate([[0], np.maximum.accumulate(top)[:-1] + 1])
    kernels = poisson_kernels(np.diff(times, prepend=0.0), int((bottom - lowest).max()))
    taken, _, _, _ = sweep(kernels, top.tolist(), bottom.tolist())
    consumer = good = 0.0
    share = 1 - aim.good / aim.bad
    for time, (first, chances) in zip(times, taken, strict=True):
        if len(chances):
            errors = first + np.arange(len(chances))
            consumer += float(chances.sum())
            good += float((chances * np.exp(time * share - errors * math.log(aim.bad / aim.good))).sum())
    return np.array([consumer, 1 - good])


def _misses(risks: Floats, aim: Aim) -> Floats:
    """How far risks are from those asked for, in logarithms."""
    floor = np.maximum(risks, 1e-300)
    result: Floats = np.log(floor) - aim.targets
    return result


def _newton(function: Callable[[Floats], Floats], start: Floats) -> tuple[Floats, Floats]:
    """A root in two unknowns, or the nearest point found; with the slopes there.

    Slopes are measured once and then corrected by Broyden's rule.
    """
    x, value = start, function(start)
    slopes = _slopes(function, x, value)
    best, best_size = x, float(np.abs(value).max())
    for turn in range(40):
        if best_size < 1e-9:
            break
        if turn % 8 == 7:
            slopes = _slopes(function, x, value)
        step = -np.clip(np.linalg.lstsq(slopes, value, rcond=None)[0], -0.7, 0.7)
        if not step.any():  # no slope leads anywhere from here
            break
        new_value = function(x + step)
        slopes = slopes + np.outer(new_value - value - slopes @ step, step) / float(step @ step)
        x, value = x + step, new_value
        size = float(np.abs(value).max())
        if size < best_size:
            best, best_size = x, size
    return best, _slopes(function, best, function(best))


def _slopes(function: Callable[[Floats], Floats], x: Floats, value: Floats) -> Floats:
    width = 1e-5
    columns = [(function(x + width * axis) - value) / width for axis in np.eye(2)]
    return np.stack(columns, axis=1)


def _whole(aim: Aim, intercepts: Floats) -> Stairs | None:
    """The lines on whole bits, ended where they meet; None where they meet at once."""
    accept_line, reject_line = _lines(aim, intercepts)
    accept = [min(math.ceil(a), aim.longest) for a in accept_line]
    reject = [0] + [math.floor(r) if r >= 1 else 0 for r in reject_line]
    accept[-1] = reject[-1] = aim.longest
    reject = [r if r >= k else 0 for k, r in enumerate(reject)]  # k errors take k bits
    for k in range(1, len(reject)):
        if reject[k] >= accept[k - 1]:
            accept, reject = accept[:k], [*reject[:k], accept[k - 1]]
            break
    if accept[0] < 1 or any(a <= r for a, r in zip(accept, reject[:-1], strict=True)):
        return None
    return Stairs(tuple(accept), tuple(reject))
