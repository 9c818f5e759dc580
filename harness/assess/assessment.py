"""What an assessment is: frozen data that screen, JSON and report show, and nothing else does sums on."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from harness.assess import tries
from harness.assess.words import iso
from harness.record import EndedBy, Event, Note, Status, Tally, Verdict
from harness.statistics.availability import AvailabilityResult

SCHEMA = 1


@dataclass(frozen=True, slots=True)
class Bounds:
    """A confidence interval on the BER and the one-sided bound that decides."""

    method: str
    confidence: float
    lower: float
    upper: float
    side: str
    deciding_confidence: float
    value: float
    remarks: tuple[str, ...] = ()

    def to_json(self) -> dict[str, Any]:
        """JSON as the command line prints it."""
        deciding = {"side": self.side, "confidence": self.deciding_confidence, "value": self.value}
        return {
            "method": self.method,
            "confidence": self.confidence,
            "lower": self.lower,
            "upper": self.upper,
            "deciding": deciding,
        }


@dataclass(frozen=True, slots=True)
class Clustered:
    """Whether the errors come in clusters, and what may be said then."""

    clustered: bool | None  # None: not judged
    dispersion: float | None
    p_value: float | None
    events: int | None
    bounds: Mapping[str, Any] | None
    too_few_events: bool = False
    words: str = ""
    more: Mapping[str, Any] = field(default_factory=dict)

    def to_json(self) -> dict[str, Any]:
        """JSON as the command line prints it."""
        return {
            "clustered": self.clustered,
            "dispersion": self.dispersion,
            "p_value": self.p_value,
            "events": self.events,
            "bounds": self.bounds,
            "words": self.words,
            **self.more,
        }


def _not_judged(errors: int) -> Clustered:
    """Say that nothing is known of clusters; with fewer than two errors there is none."""
    few = errors < 2
    return Clustered(False if few else None, None, None, errors if few else None, None)


@dataclass(frozen=True, slots=True)
class PointAssessment:
    """Every number and sentence about one point."""

    values: Mapping[str, float]
    status: Status
    ended_by: EndedBy | None
    started: int
    ended: int | None
    seconds: float
    rate_bps: float | None
    measured_bps: float | None
    pattern: str | None
    alternatives: Sequence[str]
    inverted: bool | None
    bit_order: str | None
    bits_sent: int
    tally: Tally
    ber: float | None
    ber_half_wrong: float | None  # unaligned and lost bits taken as half wrong
    bounds: Bounds | None
    slips: Sequence[Mapping[str, Any]]
    slip_count: int
    bits_lost: int
    bits_inserted: int
    delay: Mapping[str, Any] | None
    events: Sequence[Event]
    verdict: Verdict | None
    plan: Mapping[str, Any] | None
    reasons: Sequence[str]
    after_decision: Tally
    availability: Sequence[AvailabilityResult]
    clustering: Clustered | None
    unaligned_ratio: float | None
    links_lost: int
    inversions: int = (
        0  # each counts as a slip where slips are limited; not in JSON, whose `events` list them
    )
    remarks: Sequence[str] = ()
    recent: Sequence[tuple[int, Tally]] = ()  # seconds of the last minute, for the strip; not in JSON
    facts: Mapping[str, Any] = field(default_factory=dict)

    @property
    def moved(self) -> Sequence[str]:
        """What did not stay where it was set while this was counted, in words: nothing may rest on it then."""
        return tuple(self.facts.get("moved", ()))

    def to_json(self) -> dict[str, Any]:
        """JSON of a point; the run's keys stand above it."""
        t = self.tally
        return {
            "status": self.status,
            "ended_by": self.ended_by,
            "started": iso(self.started),
            "ended": iso(self.ended),
            "seconds": self.seconds if self.timed else None,
            "rate_bps": self.rate_bps,
            "measured_bps": self.measured_bps,
            "pattern": self.pattern,
            "alternatives": list(self.alternatives),
            "inverted": self.inverted,
            "bit_order": self.bit_order,
            "bits_sent": self.bits_sent,
            "bits_received": t.received,
            "bits_compared": t.compared,
            "bits_unaligned": t.unaligned,
            "errors": t.errors,
            "ones_as_zeros": t.ones_as_zeros,
            "zeros_as_ones": t.zeros_as_ones,
            "ber": self.ber,
            "ber_half_wrong": self.ber_half_wrong,
            "unaligned_ratio": self.unaligned_ratio,
            "bounds": self.bounds.to_json() if self.bounds else None,
            "slips": [dict(slip) for slip in self.slips],
            "slip_count": self.slip_count,
            "bits_lost": self.bits_lost,
            "bits_inserted": self.bits_inserted,
            "delay": dict(self.delay) if self.delay else None,
            "links_lost": self.links_lost,
            "events": [event_json(event) for event in self.events],
            "verdict": self.verdict,
            "plan": dict(self.plan) if self.plan else None,
            "reasons": list(self.reasons),
            "remarks": list(self.remarks),
            "earlier_tries": None if tries.unknown(self.facts) else tries.count_of(self.facts),
            "after_decision": {"bits": self.after_decision.received, "errors": self.after_decision.errors},
            "availability": [availability_json(a) for a in self.availability],
            "clustering": (self.clustering or _not_judged(t.errors)).to_json(),
        }

    @property
    def timed(self) -> bool:
        """Whether its seconds are known: those of a capture without a rate are not."""
        return not self.facts.get("untimed")


@dataclass(frozen=True, slots=True)
class Assessment:
    """A run's assessment: its points, and what holds for the whole."""

    run: str | None
    title: str
    command: str
    status: Status
    ended_by: EndedBy | None
    started: int
    ended: int | None
    device: Mapping[str, str]
    verdict: Verdict | None
    reasons: Sequence[str]
    whole: PointAssessment  # the only point, or the sums over all of a sweep's
    points: Sequence[PointAssessment]
    sweep: bool = False
    sensitivity: Mapping[str, Any] | None = None
    curves: Sequence[Any] = ()  # harness.assess.curve.Curve, one for each setting of a sweep's other axes
    more: Mapping[str, Any] = field(default_factory=dict)
    required_sensitivity: str = ""  # in words; not in JSON, whose `reasons` say it
    notes: Sequence[Note] = ()  # added afterwards; in JSON they are part of `more`

    def to_json(self) -> dict[str, Any]:
        """JSON as `measure`, `examine`, `sweep` and `show` print it; never NaN."""
        document: dict[str, Any] = {
            "schema": SCHEMA,
            "run": self.run,
            "title": self.title,
            "command": self.command,
            "device": dict(self.device),
            **self.whole.to_json(),
            "status": self.status,
            "ended_by": self.ended_by,
            "started": iso(self.started),
            "ended": iso(self.ended),
            "verdict": self.verdict,
            "reasons": list(self.reasons),
        }
        if self.sweep:
            document["points"] = [{"values": dict(p.values), **p.to_json()} for p in self.points]
            document["sensitivity"] = dict(self.sensitivity) if self.sensitivity else None
            document["curve_remarks"] = [remark for curve in self.curves for remark in curve.remarks]
        document.update(self.more)
        return document


def event_json(event: Event) -> dict[str, Any]:
    """JSON of an event."""
    return {"kind": event.kind, "bit": event.bit, "at": iso(event.at), "text": event.text}


def availability_json(result: AvailabilityResult) -> dict[str, Any]:
    """JSON of an availability result."""
    return {
        "standard": result.standard,
        "seconds": result.seconds,
        "available": result.available,
        "unavailable": result.unavailable,
        "errored": result.errored,
        "severely_errored": result.severely_errored,
        "esr": result.esr,
        "sesr": result.sesr,
        "partial": result.partial,
        "warnings": list(result.warnings),
    }
