"""Binomial tails and probabilities that keep their relative accuracy from one bit to 1e18 bits.

The tail is written as a value at the edge times an integral without cancellation:

    I_p(a, b) = G * R,   G = p^a q^b / B(a, b),   R = (1/q) integral exp(-a s) (1 + (p/q)(1 - e^-s))^(b-1) ds

with G from Stirling's remainder and the deviance (Loader, 2000, "Fast and accurate computation of binomial
probabilities") and R by Gauss-Legendre quadrature to where the exponent has fallen by 45. A ratio p is
carried as its logit u = ln(p / (1 - p)), so that p and 1 - p are both known to full relative accuracy.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]

_FALL = 45.0  # e^-45 is 3e-20: what is cut off lies under a double's last digit
_NODES = 64
_HALF_LOG_TWO_PI = 0.5 * math.log(2 * math.pi)


@lru_cache(maxsize=1)
def _quadrature() -> tuple[Floats, Floats]:
    """Nodes and weights of Gauss and Legendre on 0 to 1."""
    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    return (nodes + 1) / 2, weights / 2


@lru_cache(maxsize=1)
def _small_remainders() -> Floats:
    """Stirling's remainder at 0 to 15; the one at 0 is never used."""
    return np.array(
        [0.0] + [math.lgamma(x) - ((x - 0.5) * math.log(x) - x + _HALF_LOG_TWO_PI) for x in range(1, 16)]
    )


def stirling_remainder(x: ArrayLike) -> Floats:
    """What Stirling's formula leaves out of ln Gamma(x), for whole x of 1 or more."""
    x = np.asarray(x, dtype=np.float64)
    inverse = 1 / np.maximum(x, 1.0)
    square = inverse * inverse
    series = inverse * (
        1 / 12 - square * (1 / 360 - square * (1 / 1260 - square * (1 / 1680 - square * (1 / 1188))))
    )
    small = _small_remainders()[np.minimum(x, 15).astype(np.int64)]
    result: Floats = np.where(x < 16, small, series)
    return result


def deviance(x: ArrayLike, mean: ArrayLike) -> Floats:
    """``x ln(x / mean) + mean - x`` without cancellation, for x and mean over 0."""
    x, mean = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(mean, dtype=np.float64))
    difference = x - mean
    v = difference / (x + mean)
    square = v * v
    # 2 x atanh(v) - 2 x v, summed where |v| < 0.1: ten terms reach 1e-22 of the first.
    series = np.zeros_like(v)
    for power in range(21, 1, -2):
        series = (series + 1 / power) * square
    near = difference * v + 2 * x * v * series
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        far = x * np.log(x / mean) - difference
    result: Floats = np.where(np.abs(v) < 0.1, near, far)
    return result


def split_logit(u: ArrayLike) -> tuple[Floats, Floats]:
    """p and 1 - p from the logit of p, each to full relative accuracy."""
    u = np.asarray(u, dtype=np.float64)
    small = np.exp(-np.abs(u))
    minor, major = small / (1 + small), 1 / (1 + small)
    return np.where(u < 0, minor, major), np.where(u < 0, major, minor)


def logit(ratio: float) -> float:
    """``ln(ratio / (1 - ratio))`` for a ratio over 0 and under 1."""
    return math.log(ratio) - math.log1p(-ratio)


def _edge(a: Floats, b: Floats, p: Floats, q: Floats) -> Floats:
    """``ln(p^a q^b / B(a, b))``."""
    total = a + b
    return (
        0.5 * (np.log(a) + np.log(b / total)) - _HALF_LOG_TWO_PI
        + stirling_remainder(total) - stirling_remainder(a) - stirling_remainder(b)
        - deviance(a, total * p) - deviance(b, total * q)
    )  # fmt: skip


def _ratio(a: Floats, b: Floats, p: Floats, q: Floats) -> Floats:
    """The integral R, for p at or under a / (a + b)."""
    odds, rest = p / q, b - 1
    slope = rest * odds - a  # of the exponent at s = 0; the exponent is concave
    end = np.minimum(_FALL / -slope, (_FALL + rest * np.log1p(odds)) / a)
    for _ in range(30):  # Newton from the far side of a concave function: it never passes the root
        gained = odds * -np.expm1(-end)
        value = rest * np.log1p(gained) - a * end + _FALL
        step = value / (rest * odds * np.exp(-end) / (1 + gained) - a)
        end = end - step
        if np.all(np.abs(step) <= 1e-3 * end):
            break
    nodes, weights = _quadrature()
    s = end[..., np.newaxis] * nodes
    grown = np.log1p(odds[..., np.newaxis] * -np.expm1(-s))
    exponent = rest[..., np.newaxis] * grown - a[..., np.newaxis] * s
    result: Floats = end * (np.exp(exponent) @ weights) / q
    return result


def log_beta_tail(u: ArrayLike, a: ArrayLike, b: ArrayLike) -> tuple[Floats, Floats]:
    """ln I_p(a, b) and its derivative in u, for whole a and b of 1 or more.

    Parameters
    ----------
    u
        Logit of p, any shape that broadcasts with `a` and `b`.
    a, b
        Whole numbers of 1 or more (as float64: over 2^53 they are rounded, 1e-16 relative).

    Returns
    -------
    ln I, d ln I / d u
        Each of the broadcast shape. ln I is accurate to about 1e-14 relative to I while the tail's condition
        number sqrt(a) allows.
    """
    u, a, b = np.broadcast_arrays(*(np.asarray(x, dtype=np.float64) for x in (u, a, b)))
    p, q = split_logit(u)
    low = p * b <= q * a  # p at or under a / (a + b): the tail itself, else the other side's
    edge = _edge(a, b, p, q)
    ratio = _ratio(np.where(low, a, b), np.where(low, b, a), np.where(low, p, q), np.where(low, q, p))
    tail = edge + np.log(ratio)
    with np.errstate(divide="ignore", over="ignore"):
        other = np.log1p(-np.minimum(np.exp(np.where(low, -1.0, tail)), 1.0))
        result = np.where(low, tail, other)
        return result, np.exp(edge - result)


def log_chance_at_most(errors: ArrayLike, bits: ArrayLike, ber: float) -> Floats:
    """``ln P(X <= errors)`` for X errors in `bits` bits at a true ratio `ber`, over 0 and under 1.

    `errors` and `bits` are whole numbers and broadcast; a negative count of errors has no chance, and one of
    `bits` or more is certain.
    """
    errors, bits = np.broadcast_arrays(
        np.asarray(errors, dtype=np.float64), np.asarray(bits, dtype=np.float64)
    )
    inside = (errors >= 0) & (errors < bits)
    a, b = np.where(inside, bits - errors, 1.0), np.where(inside, errors + 1, 1.0)
    value, _ = log_beta_tail(-logit(ber), a, b)
    return np.where(inside, value, np.where(errors < 0, -np.inf, 0.0))


def log_chance_over(errors: ArrayLike, bits: ArrayLike, ber: float) -> Floats:
    """``ln P(X > errors)``; see `log_chance_at_most`."""
    errors, bits = np.broadcast_arrays(
        np.asarray(errors, dtype=np.float64), np.asarray(bits, dtype=np.float64)
    )
    inside = (errors >= 0) & (errors < bits)
    a, b = np.where(inside, errors + 1, 1.0), np.where(inside, bits - errors, 1.0)
    value, _ = log_beta_tail(logit(ber), a, b)
    return np.where(inside, value, np.where(errors < 0, 0.0, -np.inf))


def chance_at_most(errors: int, bits: int, ber: float) -> float:
    """``P(X <= errors)`` for X errors in `bits` bits at a true ratio `ber` (0 and 1 included)."""
    if ber <= 0 or errors >= bits:
        return 1.0 if errors >= 0 else 0.0
    if ber >= 1:
        return 0.0
    return math.exp(float(log_chance_at_most(errors, bits, ber)))


def chance_over(errors: int, bits: int, ber: float) -> float:
    """``P(X > errors)``; see `chance_at_most`."""
    if ber <= 0 or errors >= bits:
        return 0.0 if errors >= 0 else 1.0
    if ber >= 1:
        return 1.0
    return math.exp(float(log_chance_over(errors, bits, ber)))


def log_chance_exactly(errors: ArrayLike, bits: ArrayLike, ber: float) -> Floats:
    """``ln P(X = errors)`` in `bits` bits at a ratio over 0 and under 1; -inf outside 0 to `bits`."""
    errors, bits = np.broadcast_arrays(
        np.asarray(errors, dtype=np.float64), np.asarray(bits, dtype=np.float64)
    )
    middle = (errors > 0) & (errors < bits)
    k, rest = np.where(middle, errors, 1.0), np.where(middle, bits - errors, 1.0)
    total = k + rest
    p, q = split_logit(logit(ber))
    inner = (
        0.5 * (np.log(total / k) - np.log(rest)) - _HALF_LOG_TWO_PI
        + stirling_remainder(total) - stirling_remainder(k) - stirling_remainder(rest)
        - deviance(k, total * p) - deviance(rest, total * q)
    )  # fmt: skip
    value = np.where(errors == 0, bits * math.log1p(-ber), inner)
    value = np.where((errors == bits) & (bits > 0), bits * math.log(ber), value)
    return np.where((errors < 0) | (errors > bits), -np.inf, value)
