"""Likelihood of the counts of a sweep: a Q-shaped curve with a level that scatters from point to point.

BER at quality y (dB; more is better): Q(sqrt(2) * 10^((y - y0) * s / 20)) + floor. The level at each point
is off by a normal error of its own, the scatter; the chance of a count is its mean over that error. Near a
BER of 1e-6, 0.1 dB of level moves the BER by a third: bounds from counts alone would be far too narrow.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.polynomial.hermite import hermgauss
from numpy.typing import NDArray
from scipy.special import log_ndtr, ndtr, ndtri

from harness.statistics.gaussian import inverse_q

Array = NDArray[np.float64]
PER_DB = math.log(10) / 20
LEAST_STRETCH, MOST_STRETCH = 0.25, 4.0
_NODES, _GAUSS = hermgauss(12)
_LOG_WEIGHTS = np.log(_GAUSS) + _NODES**2
_STEPS = 3  # of scoring, from a good start to where a point's integrand is largest
_TELLING = 200.0  # per dB squared
_SOFT_DB = 0.1  # of a point that says only "worse than": keeps its edge differentiable


@dataclass(frozen=True, slots=True)
class Counts:
    """Points that enter the fit; `worse` are those that say only that the BER was `worse_ber` or more."""

    level: Array  # (m,) dB, more is better
    bits: Array
    errors: Array
    worse: Array  # (c,) dB
    worse_ber: float
    log_argument: Array = field(init=False)  # ln of Q's argument that each count suggests by itself

    def __post_init__(self) -> None:
        ratio = np.minimum((self.errors + 0.3) / (self.bits + 0.6), 0.49)
        object.__setattr__(self, "log_argument", np.log(-ndtri(ratio)))


@dataclass(frozen=True, slots=True)
class Shape:
    """Parameters: a BER of `anchor_ber` (floor included) is reached at `anchor` dB.

    With `anchor_ber` None the anchor is y0, where the curve without its floor is Q(sqrt 2).
    """

    anchor: float
    stretch: float
    scatter_db: float
    floor: float = 0.0
    anchor_ber: float | None = None
    bend: float = 0.0  # per dB: how the stretch changes along the curve, for the test of the family

    @property
    def argument(self) -> float:
        """Argument of Q at the anchor."""
        return math.sqrt(2) if self.anchor_ber is None else inverse_q(self.anchor_ber - self.floor)

    @property
    def y0(self) -> float:
        """Level at which the curve without its floor is Q(sqrt 2)."""
        return self.anchor - math.log(self.argument / math.sqrt(2)) / PER_DB / self.stretch

    def ber(self, level: Array) -> Array:
        """BER at levels without scatter, floor included."""
        off = level - self.anchor
        return np.asarray(ndtr(-self.argument * np.exp(_exponent(self, off))) + self.floor)


def _exponent(shape: Shape, off: Array) -> Array:
    return np.clip(PER_DB * shape.stretch * off * (1 + shape.bend * off), -40, 40)


def log_likelihood(counts: Counts, shape: Shape) -> tuple[float, Array]:
    """Log-likelihood over that of the observed ratios, and its gradient.

    The gradient is with respect to anchor, ln stretch, scatter, floor, bend: shape (5,).
    """
    total, gradient = _of_counts(counts, shape)
    if len(counts.worse):
        more, slope = _of_worse(counts, shape)
        total += more
        gradient += slope
    return total, gradient


def telling_points(counts: Counts, shape: Shape) -> int:
    """How many points fix their own level well enough (to 0.07 dB) to say something of the scatter.

    Points without errors and points on the floor do not.
    """
    off = counts.level - shape.anchor
    _, ber, fall = _curve(shape, off)
    slope = PER_DB * shape.stretch * fall * np.abs(1 + 2 * shape.bend * off)
    information = counts.bits * slope * slope / np.maximum(ber * (1 - ber), 1e-300)
    return int(np.count_nonzero(information >= _TELLING))


def _curve(shape: Shape, off: Array) -> tuple[Array, Array, Array]:
    """Return ln BER, BER, and z * density(z), the fall of BER with the logarithm of Q's argument."""
    log_z = math.log(shape.argument) + _exponent(shape, off)
    z = np.exp(log_z)
    log_q = log_ndtr(-z)
    ber = np.exp(log_q) + shape.floor
    log_ber = np.log(ber) if shape.floor > 0 else log_q
    fall = np.exp(log_z - 0.5 * z * z) / math.sqrt(2 * math.pi)
    return log_ber, ber, fall


def _log_ratio(errors: Array, bits: Array, log_ber: Array, ber: Array) -> Array:
    """Log-likelihood of a count, relative to its own ratio."""
    good = bits - errors
    with np.errstate(divide="ignore", invalid="ignore"):
        own = np.where(errors > 0, errors * np.log(errors / bits), 0.0)
        own += np.where(good > 0, good * np.log1p(-errors / bits), 0.0)
    return np.asarray(errors * log_ber + good * np.log1p(-np.minimum(ber, 1 - 1e-15)) - own)


def _of_counts(counts: Counts, shape: Shape) -> tuple[float, Array]:
    k, n = counts.errors[:, None], counts.bits[:, None]
    off0 = counts.level[:, None] - shape.anchor
    sigma = shape.scatter_db
    centre, width = _centres(counts, off0, shape) if sigma > 0 else (np.zeros_like(off0), np.ones_like(off0))
    error = centre + math.sqrt(2) * width * _NODES if sigma > 0 else centre  # in scatters
    off = off0 + sigma * error
    log_ber, ber, fall = _curve(shape, off)
    log_l = _log_ratio(k, n, log_ber, ber)
    if sigma > 0:
        log_l = log_l + _LOG_WEIGHTS - 0.5 * error**2 + np.log(width / math.sqrt(math.pi))
    top = log_l.max(axis=1, keepdims=True)
    weight = np.exp(log_l - top)
    whole = weight.sum(axis=1, keepdims=True)
    value = float(np.sum(top + np.log(whole)))
    weight /= whole
    by_ber = np.where(ber > 0, k / np.maximum(ber, 1e-300), 0.0) - (n - k) / np.maximum(1 - ber, 1e-15)
    by_log_z = -by_ber * fall  # change of the log-likelihood with the logarithm of Q's argument
    straight = PER_DB * shape.stretch
    by_off = straight * (1 + 2 * shape.bend * off)
    along = by_log_z * weight
    gradient = np.array(
        [
            -np.sum(along * by_off),
            np.sum(along * straight * off * (1 + shape.bend * off)),
            np.sum(along * by_off * error),
            _by_floor(shape, by_ber, by_log_z, weight),
            np.sum(along * straight * off * off),
        ]
    )
    return value, gradient


def _by_floor(shape: Shape, by_ber: Array, by_log_z: Array, weight: Array) -> float:
    direct = float(np.sum(by_ber * weight))
    if shape.anchor_ber is None:
        return direct
    z = shape.argument  # moves with the floor, so that the anchor keeps its BER
    return direct + float(np.sum(by_log_z * weight)) / (z * _density(z))


def _centres(counts: Counts, off0: Array, shape: Shape) -> tuple[Array, Array]:
    """Where each point's integrand over the level error is largest, and how wide it is, in scatters."""
    k, n = counts.errors[:, None], counts.bits[:, None]
    sigma, straight = shape.scatter_db, PER_DB * shape.stretch
    own = (counts.log_argument[:, None] - math.log(shape.argument)) / straight
    if shape.bend:
        own = (np.sqrt(np.maximum(1 + 4 * shape.bend * own, 1e-6)) - 1) / (2 * shape.bend)
    # Between the level that the count suggests and no error at all, by their weights.
    share = sigma**2 / (sigma**2 + 1 / np.maximum(k * (6 * straight) ** 2, 1e-6))
    error = np.clip(share * (own - off0) / sigma, -8.0, 8.0)
    for _ in range(_STEPS):
        off = off0 + sigma * error
        _, ber, fall = _curve(shape, off)
        slope = sigma * straight * fall * np.abs(1 + 2 * shape.bend * off)
        spread = np.maximum(ber * (1 - ber), 1e-300)
        information = slope * slope * n / spread
        error = error + np.clip((-slope * (k - n * ber) / spread - error) / (information + 1), -1.0, 1.0)
    return error, 1 / np.sqrt(1 + information)


def _of_worse(counts: Counts, shape: Shape) -> tuple[float, Array]:
    """Points that say only that the BER was at least so much: a normal tail in dB (bends are left out)."""
    width = math.hypot(shape.scatter_db, _SOFT_DB)
    straight = PER_DB * shape.stretch
    z = inverse_q(min(max(counts.worse_ber - shape.floor, 1e-300), 0.49))
    edge = shape.anchor + math.log(z / shape.argument) / straight  # the curve is worse below it
    u = (edge - counts.worse) / width
    log_p = log_ndtr(u)
    by_edge = float(np.sum(_hazard(u, log_p))) / width
    gradient = np.zeros(5)
    gradient[0] = by_edge
    gradient[1] = -by_edge * (edge - shape.anchor)
    gradient[2] = -float(np.sum(_hazard(u, log_p) * u)) / width**2 * shape.scatter_db
    moves = 1 / (z * _density(z))
    if shape.anchor_ber is not None:
        moves -= 1 / (shape.argument * _density(shape.argument))
    gradient[3] = by_edge / straight * moves
    return float(np.sum(log_p)), gradient


def _hazard(u: Array, log_p: Array) -> Array:
    return np.exp(-0.5 * u * u - 0.5 * math.log(2 * math.pi) - log_p)


def _density(z: float) -> float:
    return math.exp(-0.5 * z * z) / math.sqrt(2 * math.pi)
