"""Tests of independence on error positions: dispersion over blocks, short gaps, drift, bursts within drift.

All are exact conditional tests: given the number of errors, independent errors lie anywhere with equal
chance. Simulations take their numbers from a generator whose stream NumPy keeps unchanged (NEP 19), so that
a record gives the same figures again on another machine.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import bdtrc

Counts = NDArray[np.int64]
_SIMULATIONS = 1_999
_ENOUGH_BEYOND = 10  # a simulation stops once so many were at least as extreme (Besag and Clifford, 1991)
_SHORTEST_BLOCK_BITS = 8
_MOST_NUMBERS = 2_000_000  # drawn at once


@dataclass(frozen=True, slots=True)
class Dispersion:
    """Index of dispersion over equal blocks: 1 for independent errors, more when they cluster."""

    index: float
    blocks: int
    p_value: float


def dispersion_test(positions: Counts, bits: int, seed: int, blocks: int | None = None) -> Dispersion:
    """Test whether errors spread over equal blocks as independent ones do.

    The number of blocks is that of errors, 10 to 1 000 (fewer where a block would be shorter than 8 bits).
    The p-value is that of the sum of squared counts under equal chances, by seeded simulation. The
    chi-square approximation is not used: it accuses up to ten times too often with few errors in many blocks.

    Parameters
    ----------
    positions
        Shape (k,), compared bits, ascending.
    bits
        Bits compared.
    seed
        Of the simulation.
    blocks
        Another number of blocks.
    """
    errors = len(positions)
    wanted = blocks or min(max(errors, 10), 1_000)
    used = max(1, min(wanted, bits // _SHORTEST_BLOCK_BITS))
    if errors < 2 or used < 2:
        return Dispersion(1.0, used, 1.0)
    counts = np.bincount(block_of(positions, bits, used), minlength=used)
    mean = errors / used
    squares = _sum_of_squares(counts)
    index = float((squares - errors * mean) / mean / (used - 1))
    if errors > 20 * used and _far_beyond(index, used):
        # So far out that no simulation would come near: say what the full simulation would have said.
        return Dispersion(index, used, 1 / (_SIMULATIONS + 1))

    def simulate(generator: np.random.RandomState, runs: int) -> NDArray[np.float64]:
        return _sum_of_squares(_spread(generator, errors, used, runs))

    p_value = _simulated_p(simulate, squares, seed, errors if errors <= 20 * used else 20 * used)
    return Dispersion(index, used, p_value)


def gap_test(positions: Counts, bits: int) -> tuple[float, int]:
    """Test whether neighbours are close more often than chance brings them together.

    The number of gaps of 64 bits or less (of a quarter of the mean spacing, where errors are denser than one
    in 256) against the binomial of k - 1 gaps with a single gap's exact chance. Gaps between a given number
    of errors push each other apart a little, so the test errs on the side of not accusing.

    Returns
    -------
    tuple of float, int
        p-value and the gap used, bits.
    """
    errors = len(positions)
    gap = max(1, min(64, bits // (4 * max(errors, 1))))
    if errors < 2 or errors >= bits:
        return 1.0, gap
    steps = np.arange(gap, dtype=np.float64)
    # Chance that the next `gap` bits hold none of the others: choose(n - gap, k)/choose(n, k).
    with np.errstate(divide="ignore"):
        share = -math.expm1(float(np.sum(np.log1p(-np.minimum(1.0, errors / (bits - steps))))))
    close = int(np.count_nonzero(np.diff(positions) <= gap))
    if close == 0:
        return 1.0, gap
    return float(bdtrc(close - 1, errors - 1, share)), gap


def drift_test(event_starts: Counts, bits: int, seed: int) -> float:
    """Test whether the rate of error events differs between eighths of the stretch; returns the p-value."""
    return dispersion_test(event_starts, bits, seed, blocks=8).p_value


def paired_blocks_test(positions: Counts, bits: int, seed: int) -> float:
    """Test for bursts where the BER drifts: neighbouring blocks against each other.

    Given what two neighbouring blocks hold together, independent errors fall into either with chance one
    half, whatever the BER does slowly. Statistic: the sum of squared differences; by seeded simulation.
    """
    errors = len(positions)
    pairs = min(max(errors, 10), 1_000) // 2
    pairs = max(1, min(pairs, bits // (2 * _SHORTEST_BLOCK_BITS)))
    if errors < 2:
        return 1.0
    counts = np.bincount(block_of(positions, bits, 2 * pairs), minlength=2 * pairs)
    first, second = counts[0::2], counts[1::2]
    both = (first + second)[first + second > 1]
    observed = float(np.sum(((first - second) ** 2)[first + second > 1]))
    if len(both) == 0:
        return 1.0

    def simulate(generator: np.random.RandomState, runs: int) -> NDArray[np.float64]:
        left = generator.binomial(both, 0.5, size=(runs, len(both)))
        squares: NDArray[np.float64] = np.sum((2.0 * left - both) ** 2, axis=1)
        return squares

    return _simulated_p(simulate, observed, seed, len(both))


def neighbouring_gaps_test(positions: Counts) -> float:
    """Test for bursts where the BER drifts: one gap against the next.

    Of two neighbouring gaps, either is equally likely to end anywhere within both; how many of the pairs
    have one gap of under a twentieth of both, against the binomial.
    """
    gaps = np.diff(positions)
    gaps = gaps[: len(gaps) // 2 * 2]
    if len(gaps) == 0:
        return 1.0
    first, second = gaps[0::2], gaps[1::2]
    both = first + second
    close = int(np.count_nonzero(20 * np.minimum(first, second) < both))
    if close == 0:
        return 1.0
    # Lengths are whole bits, 1 to both - 1: the exact chance of each pair; their mean makes the binomial's
    # tail the larger one (Hoeffding, 1956).
    chance = float(np.mean(np.minimum(1.0, 2 * ((both - 1) // 20) / np.maximum(both - 1, 1))))
    return float(bdtrc(close - 1, len(both), chance)) if chance < 1 else 1.0


def block_of(positions: Counts, bits: int, blocks: int) -> Counts:
    """Block that each position lies in, of `blocks` equal ones; no overflow up to 1e18 bits."""
    # Floats would misplace positions beyond 2**53; products of ints would overflow.
    length, longer = divmod(bits, blocks)  # the first `longer` blocks have one bit more
    edge = longer * (length + 1)
    return np.where(
        positions < edge, positions // (length + 1), longer + (positions - edge) // max(length, 1)
    ).astype(np.int64)


def _spread(generator: np.random.RandomState, errors: int, blocks: int, runs: int) -> Counts:
    """Counts of `runs` times `errors` errors over equally likely blocks: shape (runs, blocks)."""
    if errors > 20 * blocks:
        return np.asarray(generator.multinomial(errors, np.full(blocks, 1 / blocks), size=runs))
    places = (generator.random_sample((runs, errors)) * blocks).astype(np.int64)
    places += np.arange(runs)[:, None] * blocks
    return np.bincount(places.ravel(), minlength=runs * blocks).reshape(runs, blocks)


def _sum_of_squares(counts: Counts) -> NDArray[np.float64]:
    values = counts.astype(np.float64)
    return np.asarray(np.sum(values * values, axis=-1))


def _far_beyond(index: float, blocks: int) -> bool:
    """Whether dispersion lies 30 standard deviations over 1, with many errors a block."""
    return bool(index > 1 + 30 * math.sqrt(2 / (blocks - 1)))


def _simulated_p(
    simulate: Callable[[np.random.RandomState, int], NDArray[np.float64]],
    observed: float | NDArray[np.float64],
    seed: int,
    numbers: int,
) -> float:
    """p-value of a large statistic by sequential simulation (Besag and Clifford, Biometrika 78, 1991).

    It stops at the tenth simulated value that is at least as extreme, so that what is not clustered costs
    little; otherwise after 1 999. At any level P(p <= level) is at most the level.
    """
    generator = np.random.RandomState(seed)  # its stream is frozen: see the top
    beyond = done = 0
    size = 50
    while done < _SIMULATIONS:
        runs = max(1, min(size, _SIMULATIONS - done, _MOST_NUMBERS // max(numbers, 1)))
        extreme = simulate(generator, runs) >= observed
        found = int(np.count_nonzero(extreme))
        if beyond + found >= _ENOUGH_BEYOND:
            last = int(np.flatnonzero(extreme)[_ENOUGH_BEYOND - beyond - 1])
            return _ENOUGH_BEYOND / (done + last + 1)
        beyond += found
        done += runs
        size *= 2
    return (beyond + 1) / (_SIMULATIONS + 1)
