"""The outlook of a run that goes on: what already rules a PASS out, and when its plan may decide."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from harness.assess.accumulate import Accumulator
from harness.assess.requirement import Requirement
from harness.assess.verdict import Evidence, ruled_out
from harness.statistics.plans import Plan


@dataclass(frozen=True, slots=True)
class Outlook:
    """What may be said before the end, and nothing that the verdict would not say too.

    Attributes
    ----------
    accept_at
        Compared bits at which the plan accepts if no further error comes; None where it cannot any more, or
        where there is no plan.
    on_average
        Compared bits that a unit ``margin`` times better than required needs on average; None where every
        unit needs the same.
    against
        Why there can be no PASS any more, in words; empty while there can.
    decided
        The plan has decided; what still comes is no longer counted.
    """

    accept_at: int | None = None
    on_average: float | None = None
    against: Sequence[str] = ()
    decided: bool = False


def outlook_of(acc: Accumulator, requirement: Requirement | None) -> Outlook:
    """Give the outlook for what has been accumulated so far."""
    plan = acc.plan
    if plan is None or requirement is None:
        return Outlook()
    sums = acc.sums
    evidence = Evidence(
        sums,
        sums.bits_lost + acc.never_returned,
        acc.links_lost,
        acc.inversions,
        acc.never_sent,
        clustered=False,
        too_few_events=False,
        objectives_met=None,
    )
    return Outlook(
        accept_at=_accept_at(plan),
        on_average=plan.expected_bits(plan.good_ber) if plan.kind == "sequential" else None,
        against=tuple(ruled_out(requirement, plan, acc.decision, evidence)),
        decided=acc.decision is not None,
    )


def _accept_at(plan: Plan) -> int | None:
    if plan.accept_errors is not None and plan.errors > plan.accept_errors:
        return None
    stairs = plan.boundaries
    if not stairs:
        return plan.longest_bits
    return stairs[plan.errors].accept_at if plan.errors < len(stairs) else None
