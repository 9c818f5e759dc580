"""The fixed plan: count over a length fixed beforehand, accept if there are few enough errors.

It decides at exactly its own number of compared bits and never earlier, so Clopper and Pearson's bounds hold.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from harness.statistics.bounds import bits_needed, clopper_pearson, upper_bound
from harness.statistics.plans.plan import (
    METHOD_COUNT,
    Boundary,
    Deciding,
    Decision,
    Ended,
    Plan,
    PlanError,
    Risks,
    StopBounds,
    StopChance,
)
from harness.statistics.tails import chance_at_most, chance_over

MOST_ACCEPTED = 10_000_000


class FixedPlan(Plan):
    """Accept at the end of the fewest bits that demonstrate the requirement with `accept_errors` errors.

    Parameters
    ----------
    ber, confidence, margin, producer_risk
        See `Plan`; a fixed plan takes its producer's risk as it comes.
    accept_errors
        The most errors with which it accepts.

    Raises
    ------
    PlanError
        If `accept_errors` is negative or beyond reason.
    """

    kind = "fixed"

    def __init__(
        self, ber: float, confidence: float, margin: float, producer_risk: float, accept_errors: int
    ) -> None:
        super().__init__(ber, confidence, margin, producer_risk)
        if int(accept_errors) != accept_errors or not 0 <= accept_errors <= MOST_ACCEPTED:
            raise PlanError(
                f"a plan cannot accept {accept_errors!r} errors",
                f"state a whole number from 0 to {MOST_ACCEPTED}",
            )
        self.accepts = int(accept_errors)
        self.accept_errors = self.accepts
        self.longest_bits = bits_needed(ber, confidence, self.accepts)
        self.positions_needed = 0  # the cut at `cut_compared` gives the count there

    def acceptance_probability(self, ber: float) -> float:
        """``P(X <= accept_errors)`` in all bits."""
        return chance_at_most(self.accepts, self.longest_bits, ber)

    def rejection_probability(self, ber: float) -> float:
        """``P(X > accept_errors)`` in all bits."""
        return chance_over(self.accepts, self.longest_bits, ber)

    def expected_bits(self, ber: float) -> float:  # noqa: ARG002
        """Always the whole length."""
        return float(self.longest_bits)

    def stopping_distribution(self, ber: float, at: Sequence[int] | None = None) -> tuple[StopChance, ...]:
        """All of it falls on the last bit."""
        accepted, rejected = self.acceptance_probability(ber), self.rejection_probability(ber)
        return tuple(
            StopChance(bit, accepted, rejected) if bit >= self.longest_bits else StopChance(bit, 0.0, 0.0)
            for bit in (at if at is not None else (self.longest_bits,))
        )

    def risks_for_looks(self, looks: Sequence[int]) -> Risks:
        """Decided at the first look at or after its length."""
        ends = [look for look in looks if look >= self.longest_bits]
        if not ends:
            return Risks(0.0, 0.0, 1.0, 1.0)
        return Risks(
            chance_at_most(self.accepts, ends[0], self.ber), chance_over(self.accepts, ends[0], self.good_ber)
        )

    @property
    def boundaries(self) -> tuple[Boundary, ...]:
        """None: there is one corner only."""
        return ()

    def _see(self, at: NDArray[np.int64], end: int) -> Decision | None:
        if end < self.longest_bits:
            return None
        inside = int(np.searchsorted(at, self.longest_bits - self.compared_bits, side="right"))
        errors = self.errors + inside
        return Decision(errors <= self.accepts, self.longest_bits, errors)

    def _look(self, end: int, errors: int) -> Decision | None:
        if end < self.longest_bits:
            return None
        return Decision(errors <= self.accepts, end, errors, exact=end == self.longest_bits)

    def bounds(self, confidence: float | None = None, ended: Ended = "plan") -> StopBounds:
        """Clopper and Pearson's, over the bits up to the decision or so far."""
        confidence = self.confidence if confidence is None else confidence
        interval = clopper_pearson(self.errors, self.compared_bits, confidence)
        deciding = None
        if self.decision is not None:
            value = upper_bound(self.errors, self.compared_bits, self.confidence)
            if self.decision.accepted:
                value = self._at_most(value, self.ber)
            deciding = Deciding("upper", self.confidence, value)
        return StopBounds(
            METHOD_COUNT, confidence, interval.lower, interval.upper, deciding, self._undecided_remarks(ended)
        )
