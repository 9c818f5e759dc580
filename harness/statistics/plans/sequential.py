"""The sequential plan: Wald's test, truncated, that ends as soon as the count says enough.

Good and bad units alike are told apart in about half of the bits of the fixed plan with the same risks.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from harness.statistics.least_bits import as_written
from harness.statistics.plans.after_stop import ratio_where
from harness.statistics.plans.plan import (
    METHOD_ORDER,
    Boundary,
    Deciding,
    Decision,
    Ended,
    Plan,
    Risks,
    StopBounds,
    StopChance,
    settled,
)
from harness.statistics.plans.recursion import (
    Checkpoint,
    Stairs,
    Ways,
    admit,
    corners,
    mean_bits,
    schedule,
    walk,
)
from harness.statistics.plans.solve import aim_at, find_stairs
from harness.statistics.tails import log_chance_at_most

_TOLD = 1e-3  # a true risk this far under the one asked for is said


class SequentialPlan(Plan):
    """Follow the likelihood of a bad unit against a good one, error by error, between two stairs.

    Parameters
    ----------
    ber, confidence, margin, producer_risk
        See `Plan`; both risks are aimed at, and the true ones are never above them.
    stairs
        Ready-made ones, for a plan whose boundaries were stated elsewhere; found from the risks by default.
    """

    kind = "sequential"

    def __init__(
        self, ber: float, confidence: float, margin: float, producer_risk: float, stairs: Stairs | None = None
    ) -> None:
        super().__init__(ber, confidence, margin, producer_risk)
        self.stairs = (
            find_stairs(aim_at(ber, confidence, margin, producer_risk)) if stairs is None else stairs
        )
        self.longest_bits = self.stairs.longest
        self.accept_errors = None
        self.positions_needed = self.stairs.last
        self._corners = corners(self.stairs)
        self._blind: list[tuple[int, int]] = []  # stretches whose counts showed at their ends only
        self._seen_to = 0  # where the stretch began in which it was decided
        self._promised = (
            settled(walk(self._corners, ber).acceptance, self.allowed_risk),
            settled(walk(self._corners, self.good_ber).rejection, producer_risk),
        )
        self.remarks = self._say_what_is_short()

    def _say_what_is_short(self) -> tuple[str, ...]:
        consumer, producer = self._promised
        if self.asked_producer_risk - producer <= _TOLD and self.allowed_risk - consumer <= _TOLD:
            return ()
        return (
            "errors and bits come in whole numbers, so both risks cannot be met exactly here: the consumer's "
            f"risk is held at {consumer:.4f} (asked for: at most {self.allowed_risk:g}), the producer's is "
            f"{producer:.4f} (asked for: at most {self.asked_producer_risk:g})",
        )

    # -- what it promises --------------------------------------------------------------------------

    @property
    def consumer_risk(self) -> float:
        """The probability that a unit exactly at the requirement is accepted: exact."""
        return self._promised[0]

    @property
    def producer_risk(self) -> float:
        """The probability that a unit `margin` times better is rejected: exact."""
        return self._promised[1]

    @property
    def boundaries(self) -> tuple[Boundary, ...]:
        """The stairs; the last row is the count that is rejected wherever it is reached."""
        accept = (*self.stairs.accept_at, self.longest_bits)
        return tuple(Boundary(k, accept[k], reject or None) for k, reject in enumerate(self.stairs.reject_at))

    def acceptance_probability(self, ber: float) -> float:
        """The operating characteristic."""
        if ber <= 0:
            return 1.0
        return walk(self._corners, ber).acceptance if ber < 1 else 0.0

    def rejection_probability(self, ber: float) -> float:
        """One minus the operating characteristic, without cancellation."""
        if ber <= 0:
            return 0.0
        return walk(self._corners, ber).rejection if ber < 1 else 1.0

    def expected_bits(self, ber: float) -> float:
        """Mean bits until it ends; see `mean_bits`."""
        if ber <= 0:
            return float(self.stairs.accept_at[0])
        if ber >= 1:
            return float(self._rejected_at_once())
        return mean_bits(self.stairs, ber)

    def _rejected_at_once(self) -> int:
        """Bits until the rejection of a unit whose every bit is in error."""
        return next(k for k, reject in enumerate(self.stairs.reject_at) if reject >= k > 0)

    def stopping_distribution(self, ber: float, at: Sequence[int] | None = None) -> tuple[StopChance, ...]:
        """By default at all corners of the stairs."""
        bits = [c.bits for c in self._corners] if at is None else [min(b, self.longest_bits) for b in at]
        result = []
        for bit, shown in zip(bits, bits if at is None else at, strict=True):
            way = walk(schedule(self.stairs, (), bit), ber)
            result.append(StopChance(shown, way.acceptance, way.rejection))
        return tuple(result)

    def risks_for_looks(self, looks: Sequence[int]) -> Risks:
        """Decided at looks only; an acceptance that would pass the consumer's risk asked for is not given."""
        ends = sorted({int(look) for look in looks if look > 0})
        if not ends:
            return Risks(0.0, 0.0, 1.0, 1.0)
        blind = list(zip([0, *ends], ends, strict=False))
        points = self._admitted(blind, ends[-1])
        bad, good = walk(points, self.ber), walk(points, self.good_ber)
        return Risks(bad.acceptance, good.rejection, float(bad.open.sum()), float(good.open.sum()))

    def _admitted(self, blind: Sequence[tuple[int, int]], until: int) -> tuple[Checkpoint, ...]:
        points = schedule(self.stairs, blind, until)
        if not blind or blind[0][0] >= until:
            return points
        return admit(points, self.stairs, self.ber, self.allowed_risk)

    # -- a run under it ----------------------------------------------------------------------------

    def _see(self, at: NDArray[np.int64], end: int) -> Decision | None:
        self._seen_to = self.compared_bits
        errors = self.errors
        steps = iter(at[: self.stairs.last + 1].tolist())
        at_bits = self.compared_bits
        while True:
            step = next(steps, None)
            bits = end if step is None else self.compared_bits + step
            # Up to the bit before the next error (or the end), `errors` stays as it is.
            accepted = self._accept_between(errors, at_bits, bits if step is None else bits - 1)
            if accepted is not None:
                return accepted
            if step is None:
                return None
            errors += 1
            at_bits = bits - 1
            if bits <= self.longest_bits and errors >= self.stairs.rejectable(bits):
                return Decision(False, bits, errors)

    def _accept_between(self, errors: int, behind: int, end: int) -> Decision | None:
        """Accept at a bit over `behind` and up to `end`, the count there being `errors`."""
        if not self._blind:
            bit = self.stairs.accept_at[errors]
            return Decision(True, bit, errors) if bit <= end else None
        for bit in sorted({a for a in self.stairs.accept_at if behind < a <= end}):
            if errors <= self._admitted(self._blind, bit)[-1].accept:
                return Decision(True, bit, errors)
            if bit >= self.longest_bits:
                return Decision(False, bit, errors)
        return None

    def _look(self, end: int, errors: int) -> Decision | None:
        start = self._seen_to = self.compared_bits
        self._blind.append((start, end))
        if end < self.longest_bits and errors >= self.stairs.rejectable(end):
            return Decision(False, end, errors, exact=False)
        rises = self.stairs.acceptable(end) > self.stairs.acceptable(start)
        if rises and errors <= self.stairs.acceptable(end):
            limit = self._admitted(self._blind, end)[-1].accept
            if errors <= limit:
                return Decision(True, end, errors, exact=False)
        return Decision(False, end, errors, exact=False) if end >= self.longest_bits else None

    def bounds(self, confidence: float | None = None, ended: Ended = "plan") -> StopBounds:
        """By the plan's own order of outcomes; see harness/statistics/plans/after_stop.py."""
        confidence = self.confidence if confidence is None else confidence
        half = float((1 - as_written(confidence)) / 2)
        near = (self.errors + 0.5) / (self.compared_bits + 1)
        up_to, from_it = self._tails(near)
        lower = ratio_where(from_it, half, True, near)
        upper = ratio_where(up_to, half, False, near)
        deciding = None
        if self.decision is not None and self.decision.accepted:
            value = ratio_where(up_to, self.allowed_risk, False, near)
            deciding = Deciding("upper", self.confidence, self._at_most(value, self.ber))
        elif self.decision is not None:
            value = ratio_where(from_it, self.asked_producer_risk, True, near)
            if not self._blind:
                value = self._at_least(value, self.good_ber)
            deciding = Deciding("lower", float(1 - as_written(self.asked_producer_risk)), value)
        return StopBounds(METHOD_ORDER, confidence, lower, upper, deciding, self._undecided_remarks(ended))

    def _tails(self, near: float) -> tuple[Callable[[float], float], Callable[[float], float]]:
        """Chances of outcomes up to and with the one seen, and from it on, as functions of the true ratio."""
        if self.decision is None or self.decision.accepted:
            return self._tails_where_not_rejected(near)
        end = self.compared_bits
        start = end - 1 if self.decision.exact else self._seen_to
        ways = Ways(self._admitted(self._blind, start) if start else (), near)
        errors, more = self.errors, end - start

        def at_most(ber: float, count: int) -> float:
            """Accepted up to the stretch, or open then and with at most `count` errors after it."""
            chances = ways.chances(ber)
            new = count - ways.errors[ways.accepted :]
            if more == 1:
                tail = np.where(new >= 1, 1.0, np.where(new == 0, 1 - ber, 0.0))
            else:
                tail = np.exp(log_chance_at_most(new, more, ber))
            return math.fsum(chances[: ways.accepted]) + float((chances[ways.accepted :] * tail).sum())

        return lambda ber: at_most(ber, errors), lambda ber: 1 - at_most(ber, errors - 1)

    def _tails_where_not_rejected(
        self, near: float
    ) -> tuple[Callable[[float], float], Callable[[float], float]]:
        """Accepted, or still open: before it in the order come accepted ways and smaller open counts."""
        bits, errors = self.compared_bits, self.errors
        ways = Ways(self._admitted(self._blind, bits) if bits else (), near)
        accepted = np.arange(len(ways.bits)) < ways.accepted
        if self.decision is None:
            before = accepted | (ways.errors < errors)
            here = ~accepted & (ways.errors == errors)
        else:
            before = accepted & ((ways.bits < bits) | (ways.errors < errors))
            here = accepted & (ways.bits == float(bits)) & (ways.errors == errors)
        up_to = before | here
        return (
            lambda ber: math.fsum(ways.chances(ber)[up_to]),
            lambda ber: 1 - math.fsum(ways.chances(ber)[before]),
        )
