"""The verdict: from a plan's decision, slips, unaligned bits and lost links to PASS, FAIL or UNDECIDED.

A PASS needs everything; a FAIL needs one thing that the requirement rules out; what is neither is UNDECIDED.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from harness.assess.accumulate import Sums
from harness.assess.requirement import Requirement
from harness.assess.words import count, percent, ratio
from harness.record import Verdict
from harness.statistics.plans import Decision, Plan


@dataclass(frozen=True, slots=True)
class Evidence:
    """What the verdict rests on."""

    sums: Sums
    bits_lost: int  # by slips, and never returned
    links_lost: int
    inversions: int  # polarity turned over in mid-stream
    never_sent: int  # times that more had come than was sent, and no slip shows it
    clustered: bool
    too_few_events: bool  # clustered, with under ten events: no bounds can be given
    objectives_met: bool | None


def unaligned_ratio(sums: Sums, bits_lost: int) -> float | None:
    """Compute (unaligned + lost) / (received + lost) bits; None without bits."""
    whole = sums.tally.received + bits_lost
    return (sums.tally.unaligned + bits_lost) / whole if whole else None


def judge(
    requirement: Requirement, plan: Plan, decision: Decision | None, evidence: Evidence
) -> tuple[Verdict, list[str]]:
    """Give the verdict and its reasons, the weightiest first."""
    sums = evidence.sums
    if not sums.tally.received:
        return "UNDECIDED", ["not a single bit came: nothing was measured"]
    if not sums.tally.compared:
        return "UNDECIDED", ["the received stream was never aligned to the pattern: no bit could be compared"]
    failures = _failures(requirement, plan, decision, evidence)
    if failures:
        return "FAIL", failures
    doubts = _doubts(requirement, plan, decision, evidence)
    if doubts:
        return "UNDECIDED", doubts
    assert decision is not None
    return "PASS", _accepted(plan, decision)


def ruled_out(
    requirement: Requirement, plan: Plan, decision: Decision | None, evidence: Evidence
) -> list[str]:
    """Say what already rules a PASS out while a run goes on.

    The share of unaligned and lost bits is left out: it can still come down.
    """
    settled = replace(requirement, max_unaligned_ratio=1.0)
    return _failures(settled, plan, decision, evidence)


def _failures(
    requirement: Requirement, plan: Plan, decision: Decision | None, evidence: Evidence
) -> list[str]:
    sums = evidence.sums
    reasons: list[str] = []
    if decision is not None and not decision.accepted:
        reasons += _rejected(plan, decision)
    elif decision is None and cannot_accept(plan, plan.errors):
        assert plan.accept_errors is not None
        reasons += [
            f"not demonstrated: {count(sums.tally.errors, 'error')} already in "
            f"{count(sums.tally.compared, 'bit')}, and the plan accepts at most {plan.accept_errors} "
            f"in {count(plan.longest_bits, 'bit')}",
            _good_unit(plan),
        ]
    reasons += _out_of_place(requirement, evidence)
    share = unaligned_ratio(sums, evidence.bits_lost)
    if share is not None and share > requirement.max_unaligned_ratio:
        reasons.append(
            f"{percent(share, beside=requirement.max_unaligned_ratio)} of the bits were unaligned or lost, where "
            f"at most {percent(requirement.max_unaligned_ratio)} are allowed"
        )
    if evidence.links_lost and requirement.lost_link == "fail":
        reasons.append(_links(evidence.links_lost))
    if evidence.objectives_met is False:
        reasons.append("an availability objective was not met")
    return reasons


def _out_of_place(requirement: Requirement, evidence: Evidence) -> list[str]:
    """Say what is wrong with slips and inversions: after either, every bit is wrong for who does not resynchronize."""
    sums, turned, most = evidence.sums, evidence.inversions, requirement.max_slips
    if sums.slips + turned + evidence.never_sent <= most:
        return []
    allowed = "none is allowed" if most == 0 else f"at most {most} are allowed"
    reasons = []
    if sums.slips:
        reasons.append(
            f"{count(sums.slips, 'slip')}, and {allowed} "
            f"({count(evidence.bits_lost, 'bit')} lost, {count(sums.bits_inserted, 'bit')} inserted)"
        )
    if turned:
        often = "once" if turned == 1 else f"{turned} times"
        reasons.append(
            f"the polarity turned over {often} in mid-stream, each counts as a slip, and {allowed}: every bit "
            "behind it is the wrong one"
        )
    if evidence.never_sent:
        reasons.append(f"more bits came than were sent, which counts as a slip, and {allowed}")
    return reasons


def _doubts(requirement: Requirement, plan: Plan, decision: Decision | None, evidence: Evidence) -> list[str]:
    sums = evidence.sums
    reasons = []
    if evidence.links_lost:
        reasons.append(_links(evidence.links_lost))
    if decision is None:
        reasons.append(
            f"the plan had not decided when the run ended: {count(sums.tally.errors, 'error')} in "
            f"{count(sums.tally.compared, 'bit')}, and it may need up to {count(plan.longest_bits, 'bit')}"
        )
    if evidence.clustered and (requirement.clustered == "undecided" or evidence.too_few_events):
        reasons.append(
            "the errors come in clusters, so the plan's risks do not hold"
            + ("; too few error events to bound the BER" if evidence.too_few_events else "")
        )
    if evidence.objectives_met is None and requirement.objectives is not None:
        reasons.append("the availability objectives cannot be judged from so few seconds")
    return reasons


def cannot_accept(plan: Plan, errors: int) -> bool:
    """Whether a plan that counts up to a fixed number of bits can no longer accept."""
    return (
        plan.kind in ("fixed", "curtailed") and plan.accept_errors is not None and errors > plan.accept_errors
    )


def _links(times: int) -> str:
    often = "once" if times == 1 else f"{times} times"
    return f"the link was lost {often}: for 3 s or more bits were due and none was aligned"


def _good_unit(plan: Plan) -> str:
    return (
        f"a unit {plan.margin:g} times better fails this test with probability {percent(plan.producer_risk)}"
    )


def _rejected(plan: Plan, decision: Decision) -> list[str]:
    most = "fewer" if plan.accept_errors is None else f"at most {plan.accept_errors}"
    return [
        f"not demonstrated: {count(decision.errors, 'error')} in {count(decision.compared_bits, 'bit')}, "
        f"and the {plan.kind} plan accepts {most}",
        _good_unit(plan),
    ]


def _accepted(plan: Plan, decision: Decision) -> list[str]:
    return [
        f"demonstrated: {count(decision.errors, 'error')} in {count(decision.compared_bits, 'bit')}",
        f"a unit at BER {ratio(plan.ber)} or worse passes this test with probability "
        f"{percent(plan.consumer_risk)} at most",
    ]
