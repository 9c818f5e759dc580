"""Oracles for the plans: one bit at a time, straight from the words of the table of boundaries."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import mpmath
import numpy as np
import pytest

from harness.record import Segment, Tally
from harness.statistics.plans import Boundary

Outcome = tuple[bool, int, int]  # accepted, bit, errors


@dataclass(frozen=True)
class BitByBit:
    """What happens under a table of boundaries when each bit is in error with a probability of its own."""

    outcomes: dict[Outcome, float]
    open: dict[int, float]

    def chance(self, accepted: bool, by: float = float("inf")) -> float:
        return sum(c for (a, bit, _), c in self.outcomes.items() if a == accepted and bit <= by)

    @property
    def mean_bits(self) -> float:
        return sum(bit * c for (_, bit, _), c in self.outcomes.items())


@pytest.fixture
def bit_by_bit() -> Callable[..., BitByBit]:
    def go(rows: Sequence[Boundary], ber: float, bits: int | None = None) -> BitByBit:
        outcomes: dict[Outcome, float] = {}
        still = {0: 1.0}
        last = rows[-1].errors
        for bit in range(1, (bits or rows[-1].reject_at or 0) + 1):
            after: dict[int, float] = {}
            for errors, chance in still.items():
                for in_error, share in ((False, 1 - ber), (True, ber)):
                    k = errors + in_error
                    reject_at = rows[k].reject_at if k <= last else None
                    if in_error and reject_at is not None and bit <= reject_at:
                        outcomes[False, bit, k] = outcomes.get((False, bit, k), 0.0) + chance * share
                    elif bit >= rows[k].accept_at:
                        outcomes[True, bit, k] = outcomes.get((True, bit, k), 0.0) + chance * share
                    else:
                        after[k] = after.get(k, 0.0) + chance * share
            still = after
        return BitByBit(outcomes, still)

    return go


@pytest.fixture
def binomial_tail() -> Callable[[int, int, mpmath.mpf], tuple[mpmath.mpf, mpmath.mpf]]:
    """P(X <= k) and P(X = k) in 60 digits, by adding up the terms."""

    def tail(k: int, n: int, p: mpmath.mpf) -> tuple[mpmath.mpf, mpmath.mpf]:
        with mpmath.workdps(60):
            p, q = mpmath.mpf(p), 1 - mpmath.mpf(p)
            chosen = mpmath.loggamma(n + 1) - mpmath.loggamma(k + 1) - mpmath.loggamma(n - k + 1)
            top = mpmath.exp(chosen + k * mpmath.log(p) + (n - k) * mpmath.log(q))
            total = term = mpmath.mpf(1)
            for j in range(k, 0, -1):
                term = term * j * q / ((n - j + 1) * p)
                total += term
                if term < total * mpmath.mpf(10) ** -45 and j * q < (n - j + 1) * p:
                    break
            return top * total, top

    return tail


@pytest.fixture
def stretch() -> Callable[..., Segment]:
    """An aligned segment with errors at given bits of its own, counted from 1."""

    def make(start: int, bits: int, errors: Iterable[int], known: bool = True) -> Segment:
        at = np.array(sorted(errors), dtype=np.int64) + start - 1
        tally = Tally(bits, bits, 0, len(at), len(at), 0)
        shown = at if known else at[:0]
        return Segment(
            start,
            tally,
            True,
            0,
            positions=shown,
            ones_lost=np.ones(len(shown), bool),
            positions_complete=known,
        )

    return make
