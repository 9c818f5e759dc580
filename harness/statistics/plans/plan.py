"""The contract of a plan: the rule that turns counts into a decision, with its risks stated beforehand.

A plan counts *compared* bits, those of aligned segments, and decides at one of them. Where the positions of
errors are known it decides at the very bit; where they are not (an error counter, or more errors than
positions are kept for) it decides at the end of the reading, and says that it did.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar, Literal

import numpy as np
from numpy.typing import NDArray

from harness.record import Segment
from harness.statistics.least_bits import risk_of

Ended = Literal["plan", "limit", "operator"]
_SLACK = 1e-9  # relative: what rounding may put between a bound and the ratio that it must not pass
LEAST_BER = 1e-30  # no test reaches it, and counts stay in what a double can hold


class PlanError(ValueError):
    """A plan that cannot be made: one line what is wrong, one line of advice."""

    def __init__(self, what: str, advice: str) -> None:
        super().__init__(what)
        self.what = what
        self.advice = advice


@dataclass(frozen=True, slots=True)
class Decision:
    """Where a plan came to its end, and how."""

    accepted: bool
    compared_bits: int  # the bit at which it was decided, counted from 1
    errors: int  # up to and with that bit
    exact: bool = True  # False: taken at a reading's end, since positions were not known


@dataclass(frozen=True, slots=True)
class Boundary:
    """One row of the stairs: what happens with `errors` errors so far.

    The plan accepts once `accept_at` bits are reached, and rejects if the error that made it `errors` falls
    at or before bit `reject_at` (None: never).
    """

    errors: int
    accept_at: int
    reject_at: int | None


@dataclass(frozen=True, slots=True)
class Risks:
    """What a plan does wrong: probabilities, at the requirement and at a unit `margin` times better."""

    consumer: float  # accepted at the requirement
    producer: float  # rejected although `margin` times better
    undecided_at_requirement: float = 0.0  # still open after the last look
    undecided_at_good: float = 0.0


@dataclass(frozen=True, slots=True)
class StopChance:
    """How likely a plan has come to its end by a bit."""

    bits: int
    accepted: float
    rejected: float


@dataclass(frozen=True, slots=True)
class Deciding:
    """The one-sided bound that says the same as the decision."""

    side: Literal["upper", "lower"]
    confidence: float
    value: float


@dataclass(frozen=True, slots=True)
class StopBounds:
    """Bounds on the bit error ratio after a run under a plan."""

    method: str
    confidence: float
    lower: float
    upper: float
    deciding: Deciding | None  # None: undecided
    remarks: tuple[str, ...] = ()


METHOD_COUNT = "Clopper-Pearson"
METHOD_ORDER = "order of the plan's outcomes, exact tails"
METHOD_INVERSE = "bits up to the rejecting error, exact tails"
OPERATOR_REMARK = (
    "the stop was chosen during the run: no bounds cover a stop chosen by someone who saw the count"
)


class Plan(ABC):
    """A rule that turns counts into a decision; it is advanced segment by segment and keeps its place.

    Attributes
    ----------
    ber, confidence, margin
        The requirement, the confidence (one minus the consumer's risk) that was asked for, and how many
        times better than required a good unit is.
    asked_producer_risk
        Asked for; only a sequential plan can aim at it. `producer_risk` is the true one.
    bits, longest_bits
        Compared bits at which it ends at the latest.
    accept_errors
        The most errors with which it accepts; None where that depends on the bits.
    positions_needed
        How many error positions it could ever need.
    cut_compared
        Compared bits that no segment should straddle; None where it does not matter.
    remarks
        What has to be said of the plan in words.
    """

    kind: ClassVar[str]
    longest_bits: int
    accept_errors: int | None
    positions_needed: int
    remarks: tuple[str, ...] = ()

    def __init__(self, ber: float, confidence: float, margin: float, producer_risk: float) -> None:
        self.ber = ber
        self.confidence = confidence
        self.margin = margin
        self.asked_producer_risk = producer_risk
        self.compared_bits = 0  # up to the decision, where there is one
        self.errors = 0
        self._decision: Decision | None = None
        self._looks: list[int] = []  # compared bits at which counts showed without places

    # -- what it promises --------------------------------------------------------------------------

    @property
    def bits(self) -> int:
        """Compared bits at which the plan ends at the latest."""
        return self.longest_bits

    @property
    def cut_compared(self) -> int | None:
        """Compared bits that no segment should straddle."""
        return self.longest_bits

    @property
    def good_ber(self) -> float:
        """The ratio of a unit `margin` times better than required."""
        return self.ber / self.margin

    @property
    def allowed_risk(self) -> float:
        """The consumer's risk that was asked for: one minus the confidence."""
        return risk_of(self.confidence)

    @property
    def consumer_risk(self) -> float:
        """The probability that a unit exactly at the requirement is accepted: exact."""
        return settled(self.acceptance_probability(self.ber), self.allowed_risk)

    @property
    def producer_risk(self) -> float:
        """The probability that a unit `margin` times better is rejected: exact."""
        return self.rejection_probability(self.good_ber)

    @abstractmethod
    def acceptance_probability(self, ber: float) -> float:
        """The operating characteristic: how likely a unit with the true ratio `ber` is accepted."""

    def rejection_probability(self, ber: float) -> float:
        """How likely a unit with the true ratio `ber` is rejected."""
        return 1.0 - self.acceptance_probability(ber)

    @abstractmethod
    def expected_bits(self, ber: float) -> float:
        """Mean compared bits until the plan ends, at a true ratio `ber`."""

    @abstractmethod
    def stopping_distribution(self, ber: float, at: Sequence[int] | None = None) -> tuple[StopChance, ...]:
        """How likely it has ended by each of the bits `at`; by default at all of its own corners."""

    @abstractmethod
    def risks_for_looks(self, looks: Sequence[int]) -> Risks:
        """The risks if the counts are seen at these compared bits only, ascending."""

    def risks_as_run(self) -> Risks | None:
        """The risks of the looks that this run has taken; None where every bit was seen.

        Looks not taken yet, up to the plan's end, are thought to go on at the mean length of those taken.
        """
        if not self._looks:
            return None
        looks, step = list(self._looks), max(1, self._looks[-1] // len(self._looks))
        while looks[-1] < self.longest_bits:
            looks.append(looks[-1] + step)
        return self.risks_for_looks(looks)

    @property
    @abstractmethod
    def boundaries(self) -> tuple[Boundary, ...]:
        """The stairs of a sequential plan; empty for the others."""

    # -- a run under it ----------------------------------------------------------------------------

    @property
    def decision(self) -> Decision | None:
        """The decision, once there is one."""
        return self._decision

    def advance(self, segment: Segment) -> Decision | None:
        """Take the next segment in; returns the decision if it falls within it, else None.

        Unaligned segments do not count. After a decision nothing is taken in: the caller splits the segment
        at `Decision.compared_bits`, and what lies beyond comes after the decision.
        """
        if not segment.aligned:
            return None
        tally = segment.tally
        if not segment.positions_complete:
            return self.advance_count(tally.compared, tally.errors)
        at = np.asarray(segment.positions, dtype=np.int64) - segment.start + 1
        if len(at) != tally.errors or (len(at) and not 1 <= at[0] <= at[-1] <= tally.compared):
            raise ValueError("positions and count of a segment contradict each other")
        return self._take(tally.compared, tally.errors, at)

    def advance_count(self, bits: int, errors: int) -> Decision | None:
        """Take in a reading of an error counter: so many more bits and errors, places unknown."""
        if not 0 <= errors <= bits:
            raise ValueError(f"a reading of {bits} bits cannot hold {errors} errors")
        return self._take(bits, errors, None)

    def _take(self, bits: int, errors: int, at: NDArray[np.int64] | None) -> Decision | None:
        if self._decision is not None or bits == 0:
            return None
        end, total = self.compared_bits + bits, self.errors + errors
        if at is None:
            self._looks.append(end)
        decision = self._look(end, total) if at is None else self._see(at, end)
        self._decision = decision
        self.compared_bits = end if decision is None else decision.compared_bits
        self.errors = total if decision is None else decision.errors
        return decision

    @abstractmethod
    def _see(self, at: NDArray[np.int64], end: int) -> Decision | None:
        """Decide within a stretch up to `end` compared bits; `at`: error bits behind `self.compared_bits`."""

    @abstractmethod
    def _look(self, end: int, errors: int) -> Decision | None:
        """Decide at `end` compared bits with `errors` errors in all, the last ones' places unknown."""

    @abstractmethod
    def bounds(self, confidence: float | None = None, ended: Ended = "plan") -> StopBounds:
        """Bounds on the bit error ratio as the run stands.

        Parameters
        ----------
        confidence
            Two-sided, over 0 and under 1; the plan's own by default.
        ended
            Only matters while undecided: "limit" where a limit fixed beforehand ended the run, "operator"
            where the stop was chosen during the run, which is said in the remarks.
        """

    def _undecided_remarks(self, ended: Ended) -> tuple[str, ...]:
        return (OPERATOR_REMARK,) if ended == "operator" and self._decision is None else ()

    def _at_most(self, value: float, limit: float) -> float:
        """Take a rounding error off a bound that cannot pass `limit`; more than that is a defect."""
        if value > limit * (1 + _SLACK):
            raise ArithmeticError(f"a deciding bound of {value!r} contradicts the decision at {limit!r}")
        return min(value, limit)

    def _at_least(self, value: float, limit: float) -> float:
        if value < limit * (1 - _SLACK):
            raise ArithmeticError(f"a deciding bound of {value!r} contradicts the decision at {limit!r}")
        return max(value, limit)


def settled(risk: float, limit: float) -> float:
    """Take a rounding error off a risk that lies exactly on its limit."""
    return limit if limit < risk <= limit * (1 + 1e-12) else risk


def check_requirement(ber: float, confidence: float, margin: float, producer_risk: float) -> None:
    """Refuse what no plan can be made for; raises `PlanError`."""
    if not 0 < ber < 1:
        raise PlanError(
            f"a required bit error ratio of {ber!r} is outside 0 to 1",
            "state the requirement as a ratio over 0 and under 1, for example 1e-6",
        )
    if ber < LEAST_BER:
        raise PlanError(
            f"a required bit error ratio of {ber!r} is beyond every test",
            f"state {LEAST_BER:g} or more, for example 1e-6",
        )
    if not 0 < confidence < 1:
        raise PlanError(
            f"a confidence of {confidence!r} is outside 0 to 1",
            "state it as a fraction, for example 0.95 for 95 %",
        )
    if not (margin > 1 and math.isfinite(margin)):
        raise PlanError(
            f"a margin of {margin!r} leaves good and bad units alike",
            "state how many times better than required a good unit is: more than 1, for example 2",
        )
    if not 0 < producer_risk < 1:
        raise PlanError(
            f"a producer's risk of {producer_risk!r} is outside 0 to 1",
            "state the probability with which a good unit may fail, for example 0.05",
        )
