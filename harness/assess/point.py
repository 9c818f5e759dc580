"""From the sums of one point to its assessment: bounds, clustering, verdict, remarks."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from harness.assess import tries
from harness.assess.accumulate import Accumulator, Sums
from harness.assess.assessment import Bounds, Clustered, PointAssessment
from harness.assess.requirement import Requirement
from harness.assess.verdict import Evidence, judge, unaligned_ratio
from harness.assess.words import count, duration, ratio
from harness.record import EndedBy, Event, Status, Tally, Verdict
from harness.statistics.bounds import clopper_pearson, upper_bound

DEFAULT_CONFIDENCE = 0.95
CLUSTERED_SHARE = 0.01  # independent errors are called clustered in this share of runs


@dataclass(frozen=True, slots=True)
class Facts:
    """What a point's numbers do not say by themselves."""

    values: Mapping[str, float]
    status: Status
    ended_by: EndedBy | None
    started: int
    ended: int | None
    after_decision: Tally
    pattern: str | None  # None: none was found
    bit_order: str | None
    rate_bps: float | None
    requirement: Requirement | None
    confidence: float = DEFAULT_CONFIDENCE  # of the bounds where nothing is required
    facts: Mapping[str, Any] = field(default_factory=dict)


def assess_point(acc: Accumulator, about: Facts, *, quick: bool = False) -> PointAssessment:
    """Assess what has been accumulated; `quick` leaves out what takes long (clustering), for the screen."""
    sums = acc.sums
    bits_lost = sums.bits_lost + acc.never_returned
    clustering = None if quick else _clustering(acc, about.requirement)
    availability = acc.availability() if sums.duration_ns and not about.facts.get("untimed") else ()
    verdict: Verdict | None = None
    reasons: list[str] = []
    requirement, plan = about.requirement, acc.plan
    if requirement is not None and plan is not None and about.status != "running":
        evidence = Evidence(
            sums,
            bits_lost,
            acc.links_lost,
            acc.inversions,
            acc.never_sent,
            clustering is not None and bool(clustering.clustered),
            clustering is not None and clustering.too_few_events,
            availability[0].objectives_met if availability else None,
        )
        verdict, reasons = judge(requirement, plan, acc.decision, evidence)
        if moved := about.facts.get("moved"):
            verdict, reasons = "UNDECIDED", [*moved, *reasons]
    bounds = _bounds(acc, about, quick)
    aligned = next((e for e in acc.events if e.kind == "aligned"), None)
    delay = next((dict(e.data) for e in acc.events if e.kind == "delay"), {})
    tally = sums.tally
    seconds = sums.duration_ns / 1e9
    return PointAssessment(
        values=about.values,
        status=about.status,
        ended_by=about.ended_by,
        started=about.started,
        ended=about.ended,
        seconds=seconds,
        rate_bps=about.rate_bps,
        measured_bps=None if about.facts.get("untimed") else acc.pace.bps(delay.get("seconds")),
        pattern=about.pattern,
        alternatives=tuple(about.facts.get("alternatives", ())),
        inverted=_inverted(about, aligned),
        bit_order=about.bit_order,
        bits_sent=sums.sent,
        tally=tally,
        ber=tally.errors / tally.compared if tally.compared else None,
        ber_half_wrong=_half_wrong(sums, bits_lost),
        bounds=bounds,
        slips=tuple(_slip(e) for e in acc.events if e.kind == "slip"),
        slip_count=sums.slips,
        bits_lost=bits_lost,
        bits_inserted=sums.bits_inserted,
        delay=delay or None,
        events=tuple(acc.events),
        verdict=verdict,
        plan=_plan(acc),
        reasons=tuple(reasons),
        after_decision=about.after_decision,
        availability=availability,
        clustering=clustering,
        unaligned_ratio=unaligned_ratio(sums, bits_lost),
        links_lost=acc.links_lost,
        inversions=acc.inversions,
        remarks=(
            *_tries(acc, about),
            *about.facts.get("overdue", ()),
            *about.facts.get("moved", ()),
            *bounds.remarks,
            *_remarks(acc, sums, bits_lost, clustering),
        ),
        recent=tuple(acc.recent),
        facts=about.facts,
    )


def _tries(acc: Accumulator, about: Facts) -> Sequence[str]:
    if acc.plan is None:
        return ()
    nothing_came = about.status != "running" and not acc.sums.tally.received
    return tries.remark(acc.plan.consumer_risk, about.facts, without_a_bit=nothing_came)


def _half_wrong(sums: Sums, bits_lost: int) -> float | None:
    tally = sums.tally
    whole = tally.received + bits_lost
    return (tally.errors + 0.5 * (tally.unaligned + bits_lost)) / whole if whole else None


def _inverted(about: Facts, aligned: Event | None) -> bool | None:
    """Against the pattern as its table row sends it."""
    if aligned is None:
        return None
    own = bool(about.facts.get("pattern_inverted", False))
    return own != bool(aligned.data.get("inverted", False))


def _slip(event: Event) -> dict[str, Any]:
    return {"bit": event.bit, "bits": int(event.data["bits"]), "modulo": event.data.get("modulo")}


def _bounds(acc: Accumulator, about: Facts, quick: bool) -> Bounds:
    """Give the bounds that go with the way the run was stopped; while it goes on, those of the count."""
    tally = acc.sums.tally
    confidence = about.requirement.confidence if about.requirement else about.confidence
    upper = upper_bound(tally.errors, tally.compared, confidence)
    if acc.plan is not None and tally.compared and not quick:
        stop = acc.plan.bounds(confidence, "operator" if about.ended_by == "interrupted" else "limit")
        side, sure, value = "upper", confidence, upper
        if stop.deciding is not None:
            side, sure, value = stop.deciding.side, stop.deciding.confidence, stop.deciding.value
        method = stop.method
        if about.requirement is not None and about.requirement.count == "events":
            method += ", on error events"
        return Bounds(method, stop.confidence, stop.lower, stop.upper, side, sure, value, tuple(stop.remarks))
    interval = clopper_pearson(tally.errors, tally.compared, confidence)
    return Bounds("Clopper-Pearson", confidence, interval.lower, interval.upper, "upper", confidence, upper)


def _plan(acc: Accumulator) -> dict[str, Any] | None:
    plan, decision = acc.plan, acc.decision
    if plan is None:
        return None
    risks = plan.risks_as_run()  # None where every bit was seen
    return {
        "kind": plan.kind,
        "ber": plan.ber,
        "confidence": plan.confidence,
        "margin": plan.margin,
        "consumer_risk": plan.consumer_risk if risks is None else risks.consumer,
        "producer_risk": plan.producer_risk if risks is None else risks.producer,
        "looks_without_positions": acc.looks,
        "bits": plan.bits,
        "accept_errors": plan.accept_errors,
        "decided_at_bit": decision.compared_bits if decision else None,
        "longest_bits": plan.longest_bits,
    }


def _clustering(acc: Accumulator, requirement: Requirement | None) -> Clustered | None:
    positions = acc.positions()
    if len(positions) < 2:
        return None
    from harness.statistics.clustering import assess_clustering

    confidence = requirement.confidence if requirement else DEFAULT_CONFIDENCE
    found = assess_clustering(positions, acc.known_compared, share=CLUSTERED_SHARE, confidence=confidence)
    bounds = None
    if found.bounds is not None:
        bounds = {
            "method": "Fay-Feuer on error events",
            "confidence": confidence,
            "lower": found.bounds.lower,
            "upper": found.bounds.upper,
        }
    more = {
        "trend": found.trend,
        "event_gap_bits": found.event_gap_bits,
        "mean_burst_bits": found.mean_burst_bits,
        "ber_inside": found.ber_inside,
        "ber_outside": found.ber_outside,
    }
    return Clustered(
        found.clustered,
        found.dispersion,
        found.p_value,
        found.events,
        bounds,
        found.too_few_events,
        found.words,
        more,
    )


def _remarks(acc: Accumulator, sums: Sums, bits_lost: int, clustering: Clustered | None) -> Sequence[str]:
    remarks = []
    overruns = [e for e in acc.events if e.kind == "host_overrun"]
    if overruns:
        lost = sum(int(e.data.get("bits", 0)) for e in overruns)
        remarks.append(
            f"this computer could not keep up {len(overruns)} times: {count(lost, 'bit')} counted as "
            "unaligned, not the device's fault"
        )
    stalls = [float(e.data.get("seconds", 0.0)) for e in acc.events if e.kind == "host_stalled"]
    if stalls:
        often = "once" if len(stalls) == 1 else f"{len(stalls)} times"
        remarks.append(f"this computer stood still {often}, for {duration(sum(stalls))}: no bit was due then")
    if (sums.tally.unaligned or bits_lost) and sums.tally.compared:
        half = _half_wrong(sums, bits_lost)
        parts = [(sums.tally.unaligned, "not aligned"), (bits_lost, "lost")]
        missing = " and ".join(f"{count(bits, 'bit')} {what}" for bits, what in parts if bits)
        remarks.append(f"{missing} are in no BER; taken as half wrong they would make it {ratio(half)}")
        if sums.tally.unaligned:
            remarks.append(
                "a stretch without evidence of under 8 192 bits, after which the same place holds, is a burst and "
                "is counted; a longer one is an outage and is not aligned"
            )
    if clustering is not None and clustering.clustered and clustering.words:
        remarks.append(clustering.words)
    if not sums.positions_complete:
        remarks.append(
            "not every error position was kept: counts are exact; whether errors cluster is judged by the first "
            f"{count(acc.known_compared, 'compared bit')}"
        )
    if acc.events_cut:
        remarks.append(f"{count(acc.events_cut, 'further event')} not listed; counts are exact")
    if acc.plan is not None:
        remarks.extend(acc.plan.remarks)
        if acc.looks and acc.plan.kind != "fixed":
            remarks.append(
                f"error positions were not known at {count(acc.looks, 'look')}: the plan could only decide at the ends "
                "of these seconds, and its risks are those of the looks taken"
            )
    return remarks
