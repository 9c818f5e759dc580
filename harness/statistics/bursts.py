"""Error events: errors that belong together, and bounds on BER that count events instead of errors.

An error event is a maximal set of errors whose neighbours are at most a gap of so many bits apart.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import bdtrc, chdtri, gammaincinv

FEWEST_EVENTS = 10  # under so many the bounds of Fay and Feuer do not cover well enough: none are given
FIRST_GAP_BITS = 64
_CHANCE = 0.05  # the gap doubles while the gaps just above it are more than chance explains


@dataclass(frozen=True, slots=True)
class EventBounds:
    """Bounds on BER from error events; one-sided ones have the whole risk on their side."""

    confidence: float
    lower: float
    upper: float
    lower_one_sided: float
    upper_one_sided: float


def event_sizes(positions: NDArray[np.int64], gap_bits: int) -> NDArray[np.int64]:
    """Errors in each event, in order: shape (events,), sum = errors.

    Parameters
    ----------
    positions
        Shape (k,), bits, ascending.
    gap_bits
        Neighbours at most this far apart belong to the same event.
    """
    if len(positions) == 0:
        return np.empty(0, dtype=np.int64)
    starts = np.flatnonzero(np.diff(positions) > gap_bits) + 1
    edges = np.concatenate(([0], starts, [len(positions)]))
    return np.diff(edges).astype(np.int64)


def event_starts(positions: NDArray[np.int64], gap_bits: int) -> NDArray[np.int64]:
    """Position of each event's first error: shape (events,)."""
    if len(positions) == 0:
        return positions
    return positions[np.concatenate(([True], np.diff(positions) > gap_bits))]


def event_gap_bits(positions: NDArray[np.int64], bits: int) -> int:
    """Find the gap that tells events apart.

    It starts at 64 bits (less where errors are so dense that 64 bits would join strangers), doubles while
    the gaps between g and 4g are more than chance explains at 5 %, and stops when 8g exceeds the mean
    spacing of events.
    """
    errors = len(positions)
    if errors < 2:
        return FIRST_GAP_BITS
    spacings = np.sort(np.diff(positions))
    gap = FIRST_GAP_BITS
    while gap > 1 and 8 * gap * errors > bits:
        gap //= 2
    while True:
        beyond = spacings[int(np.searchsorted(spacings, gap, side="right")) :]
        if len(beyond) == 0 or 8 * gap * (len(beyond) + 1) > bits:
            return gap
        near = int(np.searchsorted(beyond, 4 * gap, side="right"))
        # Between independent events spacings have no memory: what goes beyond g is as long as any, and
        # gives their rate without a bias from events that g has joined.
        rate = len(beyond) / float(np.sum(beyond - gap))
        share = -math.expm1(3 * gap * math.log1p(-min(rate, 0.999)))
        if near == 0 or float(bdtrc(near - 1, len(beyond), share)) >= _CHANCE:
            return gap
        gap *= 2


def fay_feuer(sizes: NDArray[np.int64], bits: int, confidence: float) -> EventBounds | None:
    """Bounds on BER from the sizes of independent error events.

    With unit sizes they are Garwood's. None under ten events, where they do not cover.

    Parameters
    ----------
    sizes
        Shape (events,), errors in each.
    bits
        Bits compared.
    confidence
        Within 0 to 1.

    References
    ----------
    Fay and Feuer, "Confidence intervals for directly standardized rates: a method based on the gamma
    distribution", Statistics in Medicine 16 (1997).
    """
    if not 0 < confidence < 1:
        raise ValueError("the confidence lies between 0 and 1")
    if len(sizes) < FEWEST_EVENTS:
        return None
    risk = 1 - confidence
    return EventBounds(
        confidence,
        lower=gamma_lower(sizes, risk / 2) / bits,
        upper=min(1.0, gamma_upper(sizes, risk / 2) / bits),
        lower_one_sided=gamma_lower(sizes, risk) / bits,
        upper_one_sided=min(1.0, gamma_upper(sizes, risk) / bits),
    )


def gamma_lower(sizes: NDArray[np.int64], risk: float) -> float:
    """Lower limit of the expected total of event sizes at a one-sided risk (Fay and Feuer, 1997)."""
    total, square = _moments(sizes)
    if total == 0:
        return 0.0
    return square / total * float(gammaincinv(total * total / square, risk))


def gamma_upper(sizes: NDArray[np.int64], risk: float, largest: float = 0.0) -> float:
    """Upper limit of the expected total of event sizes at a one-sided risk (Fay and Feuer, 1997).

    `largest` is the least size that the unseen event is taken to have; without any event it has to be
    stated.
    """
    total, square = _moments(sizes)
    weight = max(largest, float(sizes.max()) if len(sizes) else 0.0)
    if square > total:
        # The largest event seen understates what a burst can bring; single errors alone need no allowance.
        weight = max(weight, 2 * square / total)
    if weight <= 0:
        raise ValueError("without any event the size of the unseen one has to be stated")
    mean, variance = total + weight, square + weight * weight
    return variance / (2 * mean) * float(chdtri(2 * mean * mean / variance, risk))


def _moments(sizes: NDArray[np.int64]) -> tuple[float, float]:
    values = sizes.astype(np.float64)
    return float(values.sum()), float((values * values).sum())
