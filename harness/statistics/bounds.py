"""Confidence bounds on a bit error ratio from a count, and the bits that a demonstration needs.

Bounds assume independent errors; where errors cluster, bounds from error events stand beside these.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from statistics import NormalDist

from harness.statistics.least_bits import as_written, least_bits, risk_of
from harness.statistics.tails import log_beta_tail, log_chance_at_most, split_logit

_STEPS = 100
_LONGEST_STEP = 4.0  # in logits: Newton may leap from the flat side of the tail


@dataclass(frozen=True, slots=True)
class Interval:
    """Two ratios between which the true one lies, 0 to 1."""

    lower: float
    upper: float


def _check_count(errors: int, bits: int) -> None:
    for name, value in (("errors", errors), ("bits", bits)):
        if isinstance(value, bool) or int(value) != value:
            raise ValueError(f"{name} must be a whole number, not {value!r}")
    if bits < 0 or errors < 0:
        raise ValueError("errors and bits cannot be negative")
    if errors > bits:
        raise ValueError(f"{errors} errors cannot lie in {bits} bits")


def _check_confidence(confidence: float) -> None:
    if not 0 < confidence < 1:  # NaN fails too
        raise ValueError(f"confidence must lie between 0 and 1 (0.95 for 95 %), not {confidence!r}")


def _solve_logit(a: int, b: int, risk: float) -> float:
    """The logit of p with I_p(a, b) = risk.

    Newton on the logarithm of the tail, which is concave in the logit: once left of the root it climbs
    monotonically.
    """
    target = math.log(risk)
    u = math.log(a) - math.log(b) + NormalDist().inv_cdf(risk) * math.sqrt(1 / a + 1 / b)
    for _ in range(_STEPS):
        tail, slope = log_beta_tail(u, a, b)
        step = (target - float(tail)) / max(float(slope), 1e-300)
        step = max(-_LONGEST_STEP, min(_LONGEST_STEP, step))
        u += step
        if abs(step) <= 1e-14 * max(1.0, abs(u)) or abs(step) * float(slope) < 1e-13:
            break
    return u


def lower_at_risk(errors: int, bits: int, risk: float) -> float:
    """The ratio at which as many errors or more have the probability `risk`; counts are not checked."""
    if errors == 0:
        return 0.0
    if errors == bits:
        return math.exp(math.log(risk) / bits)
    return float(split_logit(_solve_logit(errors, bits - errors + 1, risk))[0])


def upper_at_risk(errors: int, bits: int, risk: float) -> float:
    """The ratio at which as many errors or fewer have the probability `risk`; counts are not checked."""
    if errors == bits:
        return 1.0
    if errors == 0:
        return -math.expm1(math.log(risk) / bits)
    return float(split_logit(_solve_logit(bits - errors, errors + 1, risk))[1])


def lower_bound(errors: int, bits: int, confidence: float) -> float:
    """One-sided lower bound of Clopper and Pearson.

    Parameters
    ----------
    errors, bits
        Counts; no bits at all give 0.
    confidence
        Over 0 and under 1.

    Returns
    -------
    float
        The ratio at which as many errors or more have the probability ``1 - confidence``; 0 for no errors.

    Raises
    ------
    ValueError
        For counts or a confidence that cannot be.

    References
    ----------
    Clopper and Pearson (1934), Biometrika 26.
    """
    _check_count(errors, bits)
    _check_confidence(confidence)
    return lower_at_risk(int(errors), int(bits), risk_of(confidence))


def upper_bound(errors: int, bits: int, confidence: float) -> float:
    """One-sided upper bound of Clopper and Pearson; see `lower_bound`.

    Returns
    -------
    float
        The ratio at which as many errors or fewer have the probability ``1 - confidence``; 1 where every bit
        is in error, or where there are none.

    Examples
    --------
    >>> round(upper_bound(0, 3_000_000, 0.95), 12)
    9.98577e-07
    """
    _check_count(errors, bits)
    _check_confidence(confidence)
    return upper_at_risk(int(errors), int(bits), risk_of(confidence))


def clopper_pearson(errors: int, bits: int, confidence: float) -> Interval:
    """Two-sided bounds of Clopper and Pearson, half of the risk on either side; see `lower_bound`.

    Examples
    --------
    >>> interval = clopper_pearson(4, 20, 0.90)
    >>> round(interval.lower, 5), round(interval.upper, 5)
    (0.07135, 0.40103)
    """
    _check_count(errors, bits)
    _check_confidence(confidence)
    half = float((1 - as_written(confidence)) / 2)
    return Interval(lower_at_risk(int(errors), int(bits), half), upper_at_risk(int(errors), int(bits), half))


def garwood(errors: int, bits: int, confidence: float) -> Interval:
    """Two-sided bounds of Garwood: the errors taken as Poisson, the limit for small ratios.

    Returns
    -------
    Interval
        ``chi2(risk/2; 2k) / 2n`` and ``chi2(1 - risk/2; 2k + 2) / 2n``, cut at 1.

    Raises
    ------
    ValueError
        For counts or a confidence that cannot be.

    References
    ----------
    Garwood (1936), Biometrika 28.
    """
    from scipy.special import gammainccinv, gammaincinv

    _check_count(errors, bits)
    _check_confidence(confidence)
    if bits == 0:
        return Interval(0.0, 1.0)
    half = float((1 - as_written(confidence)) / 2)
    lower = float(gammaincinv(errors, half)) / bits if errors else 0.0
    return Interval(min(1.0, lower), min(1.0, float(gammainccinv(errors + 1, half)) / bits))


def bits_needed(ber: float, confidence: float, accept_errors: int = 0) -> int:
    """The least number of bits in which at most `accept_errors` errors demonstrate `ber`.

    Parameters
    ----------
    ber
        The ratio to demonstrate, over 0 and under 1.
    confidence
        Over 0 and under 1.
    accept_errors
        How many errors may occur.

    Returns
    -------
    int
        The least n with ``P(X <= accept_errors | n bits, ber) <= 1 - confidence``: exact binomial, both
        numbers read as they are written (0.95 is 95/100).

    Raises
    ------
    ValueError
        For a ratio, a confidence or a count that cannot be.

    Examples
    --------
    >>> bits_needed(1e-6, 0.95)
    2995731
    """
    if not 0 < ber < 1:
        raise ValueError(f"the ratio to demonstrate must lie between 0 and 1, not {ber!r}")
    _check_confidence(confidence)
    if isinstance(accept_errors, bool) or int(accept_errors) != accept_errors or accept_errors < 0:
        raise ValueError(f"errors to accept must be a whole number of 0 or more, not {accept_errors!r}")
    errors = int(accept_errors)
    risk = 1 - as_written(confidence)
    if risk == 0:
        raise ValueError("no number of bits gives certainty: ask for a confidence under 1")
    return least_bits(ber, risk, errors, _guess_bits(ber, math.log(risk), errors))


def _guess_bits(ber: float, log_risk: float, errors: int) -> int:
    """Bits needed to a double's precision, by bisection on the tail."""
    low, high = errors, errors + 1 + int((errors + 1 - log_risk) / ber)
    while float(log_chance_at_most(errors, high, ber)) > log_risk:
        low, high = high, 2 * high
    while high - low > max(1, high >> 34):
        middle = (low + high) // 2
        if float(log_chance_at_most(errors, middle, ber)) > log_risk:
            low = middle
        else:
            high = middle
    return high
