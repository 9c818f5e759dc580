"""The curtailed plan: the fixed plan, ended at the first error too many.

Its risks are the fixed plan's, bit for bit: a run that would fail in the end fails at once.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from harness.statistics.bounds import lower_at_risk, upper_at_risk
from harness.statistics.least_bits import as_written
from harness.statistics.plans.after_stop import ratio_where
from harness.statistics.plans.fixed import FixedPlan
from harness.statistics.plans.plan import (
    METHOD_INVERSE,
    METHOD_ORDER,
    Deciding,
    Decision,
    Ended,
    Risks,
    StopBounds,
    StopChance,
)
from harness.statistics.tails import (
    chance_at_most,
    chance_over,
    log_chance_at_most,
    log_chance_exactly,
    log_chance_over,
)

_CORNERS = 20


class CurtailedPlan(FixedPlan):
    """Reject at the bit of error ``accept_errors + 1``, accept at the end; see `FixedPlan`."""

    kind = "curtailed"

    def __init__(
        self, ber: float, confidence: float, margin: float, producer_risk: float, accept_errors: int
    ) -> None:
        super().__init__(ber, confidence, margin, producer_risk, accept_errors)
        self.positions_needed = self.accepts + 1
        self._rejected_after: int | None = None  # the bit behind which the rejecting error fell

    def expected_bits(self, ber: float) -> float:
        """Mean bits: the mean errors at the stop over `ber`."""
        if ber <= 0:
            return float(self.longest_bits)
        if ber >= 1:
            return float(self.accepts + 1)
        whole = self.longest_bits * chance_at_most(self.accepts - 1, self.longest_bits - 1, ber)
        return whole + (self.accepts + 1) / ber * self.rejection_probability(ber)

    def stopping_distribution(self, ber: float, at: Sequence[int] | None = None) -> tuple[StopChance, ...]:
        """Rejections come in as errors do; acceptances all fall on the last bit."""
        n = self.longest_bits
        if at is None:
            at = sorted({max(1, n * i // _CORNERS) for i in range(1, _CORNERS + 1)})
        return tuple(
            StopChance(
                bit,
                self.acceptance_probability(ber) if bit >= n else 0.0,
                chance_over(self.accepts, min(bit, n), ber),
            )
            for bit in at
        )

    def risks_for_looks(self, looks: Sequence[int]) -> Risks:
        """Rejected at the first look with too many errors, accepted at the first at or after its length."""
        if not looks or looks[-1] >= self.longest_bits:
            return super().risks_for_looks(looks)
        return Risks(
            0.0,
            chance_over(self.accepts, looks[-1], self.good_ber),
            chance_at_most(self.accepts, looks[-1], self.ber),
            chance_at_most(self.accepts, looks[-1], self.good_ber),
        )

    def _see(self, at: NDArray[np.int64], end: int) -> Decision | None:
        spare = self.accepts - self.errors  # errors that may still come
        if len(at) > spare:
            bit = self.compared_bits + int(at[spare])
            if bit <= self.longest_bits:
                self._rejected_after = bit - 1
                return Decision(False, bit, self.accepts + 1)
        return super()._see(at, end)

    def _look(self, end: int, errors: int) -> Decision | None:
        if errors > self.accepts:
            self._rejected_after = self.compared_bits
            return Decision(False, end, errors, exact=False)
        return super()._look(end, errors)

    def bounds(self, confidence: float | None = None, ended: Ended = "plan") -> StopBounds:
        """Clopper and Pearson's where it was accepted or is open, else by the bit of the rejecting error.

        Rejected at bit t on error E + 1, the bounds are those of inverse sampling: lower from E + 1 errors
        in t bits, upper from E errors in the t - 1 bits before it.
        """
        if self._rejected_after is None:
            return super().bounds(confidence, ended)
        confidence = self.confidence if confidence is None else confidence
        half = float((1 - as_written(confidence)) / 2)
        value = self._upper(self.allowed_risk)
        if self.compared_bits <= self.longest_bits:
            value = self._at_least(value, self.ber)
        deciding = Deciding("upper", self.confidence, value)
        exact = self.decision is not None and self.decision.exact
        method = METHOD_INVERSE if exact else METHOD_ORDER
        return StopBounds(method, confidence, self._lower(half), self._upper(half), deciding)

    def _lower(self, risk: float) -> float:
        """Where rejections at this bit or before it have the probability `risk`."""
        if self.decision is not None and self.decision.exact:
            return lower_at_risk(self.errors, self.compared_bits, risk)
        return ratio_where(
            lambda p: self._earlier(p) + self._at_the_look(p, over=True), risk, True, self._guess()
        )

    def _upper(self, risk: float) -> float:
        """Where rejections at this bit or behind it, and acceptances, have the probability `risk`."""
        if self.decision is not None and self.decision.exact:
            return upper_at_risk(self.accepts, self.compared_bits - 1, risk)
        return ratio_where(lambda p: self._at_the_look(p, over=False), risk, False, self._guess())

    def _guess(self) -> float:
        return (self.errors + 0.5) / (self.compared_bits + 1)

    def _earlier(self, ber: float) -> float:
        """How likely it had been rejected before the look that rejected it."""
        return chance_over(self.accepts, self._rejected_after or 0, ber)

    def _at_the_look(self, ber: float, over: bool) -> float:
        """Open until then, and at the look as many errors as seen or more (`over`), or as many or fewer."""
        before = self._rejected_after or 0
        more = self.compared_bits - before
        open_with = np.arange(self.accepts + 1, dtype=np.float64)
        weight = log_chance_exactly(open_with, before, ber)
        keep = weight > weight.max() - 60  # the rest cannot show in a double
        new = self.errors - open_with[keep]
        tail = log_chance_over(new - 1, more, ber) if over else log_chance_at_most(new, more, ber)
        return float(np.exp(weight[keep] + tail).sum())
