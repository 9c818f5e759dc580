"""A lot: many units of one kind side by side, each with its verdict, and which of them stand out.

A unit counts by its last completed run that is not void; every other run of it was a try and is listed. A unit
stands out where its errors differ from those of all the others together more than chance explains (exact
conditional test, the risk shared among the units), or where its sensitivity lies more than 3.5 robust standard
deviations from the median (Iglewicz and Hoaglin, 1993).
"""

from __future__ import annotations

import statistics
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any, Literal

from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.words import STATUS, count, iso, ratio
from harness.record import Verdict
from harness.statistics.bounds import clopper_pearson
from harness.statistics.comparing import compare_counts

OUTLIER_RISK = 0.01  # that any unit of an even lot is called an outlier by its BER
FAR = 3.5
MAD_TO_SIGMA = 0.6745
LEAST_SENSITIVITIES = 5  # under so many, no spread is known that one could lie outside of

Standing = Literal["measured", "void", "not completed", "not valid"]


@dataclass(frozen=True, slots=True)
class LotRun:
    """One run of a lot, and what takes its worth away."""

    assessment: Assessment
    requirement: Mapping[str, Any] | None  # as resolved; None: nothing was required
    void: str = ""  # why it is void; empty where it is not
    broken: tuple[str, ...] = ()  # what shows that its record does not hold

    @property
    def standing(self) -> Standing:
        """What the run is worth."""
        if self.broken:
            return "not valid"
        if self.void:
            return "void"
        return "measured" if self.assessment.status == "completed" else "not completed"


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit of a lot, by the run that counts; where none does, by its last one."""

    serial_number: str
    run: str
    standing: Standing
    verdict: Verdict | None  # None where no run counts, or nothing was required
    errors: int
    bits: int  # compared
    ber: float | None  # None in a sweep where not just one point is judged
    lower: float | None  # two-sided bounds on the BER
    upper: float | None
    sensitivity: float | None
    sensitivity_lower: float | None
    sensitivity_upper: float | None
    slips: int
    tries: int
    direction: str = ""  # that the figures are of, where both were measured
    same_requirement: bool = True  # as the rest of the lot
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Try:
    """A run of a lot that does not count."""

    serial_number: str
    run: str
    started: str
    verdict: Verdict | None
    why: str


@dataclass(frozen=True, slots=True)
class LotSummary:
    """A lot as far as it was measured."""

    name: str
    size: int | None
    verdict: Verdict | None  # of the whole; None where nothing was required
    reasons: tuple[str, ...]
    units: tuple[Unit, ...]
    tries: tuple[Try, ...]  # runs that do not count, oldest first
    passed: int
    failed: int
    judged: int
    pass_rate_lower: float
    pass_rate_upper: float
    first_passed: int  # at their first try
    first_judged: int
    first_rate_lower: float
    first_rate_upper: float
    confidence: float
    ber_spread: tuple[float, float, float] | None  # least, median, most
    sensitivity_spread: tuple[float, float, float] | None
    unit: str  # of the sensitivities

    def to_json(self) -> dict[str, Any]:
        """JSON as `lot` prints it."""
        return {"schema": 1, **asdict(self)}


def summarise(
    name: str, size: int | None, runs: Sequence[LotRun], confidence: float | None = None
) -> LotSummary:
    """Summarise the runs of a lot.

    Parameters
    ----------
    size
        How many units there are, where that is known.
    runs
        Oldest first.
    confidence
        Of the bounds on the pass rate; left out: the requirement's, else 0.95.
    """
    by_unit: dict[tuple[str, str], list[LotRun]] = {}
    for run in runs:
        by_unit.setdefault(_who(run.assessment), []).append(run)
    deciding = [_deciding(tried) for tried in by_unit.values()]
    asked = next((r.requirement for r in reversed(deciding) if r.standing == "measured"), None)
    units = [
        _unit(run, sum(_may_have_passed(one) for one in tried), same=run.requirement == asked)
        for run, tried in zip(deciding, by_unit.values(), strict=True)
    ]
    marked = tuple(replace(unit, remarks=tuple(_remarks(unit, units))) for unit in units)
    if confidence is None:
        confidence = float((asked or {}).get("confidence") or 0.95)
    judged = [u for u in marked if u.verdict is not None]
    passed = sum(u.verdict == "PASS" for u in judged)
    first = [v for v in map(_first_verdict, by_unit.values()) if v is not None]
    rate = clopper_pearson(passed, len(judged), confidence)
    first_rate = clopper_pearson(first.count("PASS"), len(first), confidence)
    verdict, reasons = _verdict(marked, size)
    sensitivities = [u.sensitivity for u in marked if u.sensitivity is not None]
    return LotSummary(
        name=name,
        size=size,
        verdict=verdict,
        reasons=tuple(reasons),
        units=marked,
        tries=tuple(_tries(runs, {run.assessment.run for run in deciding if run.standing == "measured"})),
        passed=passed,
        failed=sum(u.verdict == "FAIL" for u in judged),
        judged=len(judged),
        pass_rate_lower=rate.lower,
        pass_rate_upper=rate.upper,
        first_passed=first.count("PASS"),
        first_judged=len(first),
        first_rate_lower=first_rate.lower,
        first_rate_upper=first_rate.upper,
        confidence=confidence,
        ber_spread=_spread([u.ber for u in marked if u.ber is not None]),
        sensitivity_spread=_spread(sensitivities),
        unit=next((str(r.assessment.sensitivity["unit"]) for r in runs if r.assessment.sensitivity), ""),
    )


def serial_of(a: Assessment) -> str:
    """Name a unit by its serial number; a run without one stands for itself."""
    return a.device.get("serial_number") or f"unnamed …{(a.run or '')[-6:]}"


def _who(a: Assessment) -> tuple[str, str]:
    return a.device.get("model", ""), serial_of(a)


def _deciding(tried: Sequence[LotRun]) -> LotRun:
    """Give the run that counts; where none does, the last one."""
    return next((run for run in reversed(tried) if run.standing == "measured"), tried[-1])


def _may_have_passed(run: LotRun) -> bool:
    """Whether a run was a try: one in which not a single bit came could not have passed."""
    return run.assessment.whole.tally.received > 0


def _first_verdict(tried: Sequence[LotRun]) -> Verdict | None:
    """Give the first verdict that a unit got; a void run's counts too, lest voiding it hide a fail."""
    given = (run.assessment.verdict for run in tried if _may_have_passed(run))
    return next((verdict for verdict in given if verdict is not None), None)


def judged_point(a: Assessment) -> PointAssessment:
    """Give the point that a unit's BER is taken from.

    That is the only one that is judged, of two directions the one with more errors a bit, else the whole, whose BER
    is none where there are several points.
    """
    judged = [p for p in a.points if p.verdict is not None]
    if a.sweep and len(judged) == 1:
        return judged[0]
    if judged and all(p.facts.get("direction") for p in judged):
        return max(judged, key=lambda p: p.ber or 0.0)
    return a.whole


def _unit(run: LotRun, tries: int, *, same: bool) -> Unit:
    a = run.assessment
    p = judged_point(a)
    found = a.sensitivity or {}
    bounds = p.bounds if p.tally.compared else None
    counts = run.standing == "measured"
    return Unit(
        serial_number=serial_of(a),
        run=a.run or "",
        standing=run.standing,
        verdict=a.verdict if counts else None,
        errors=p.tally.errors,
        bits=p.tally.compared,
        ber=p.ber if counts else None,
        lower=bounds.lower if bounds and counts else None,
        upper=bounds.upper if bounds and counts else None,
        sensitivity=found.get("value") if counts else None,
        sensitivity_lower=found.get("lower") if counts else None,
        sensitivity_upper=found.get("upper") if counts else None,
        slips=a.whole.slip_count,
        tries=tries,
        direction=str(p.facts.get("direction") or "") if len(a.points) > 1 else "",
        same_requirement=same or not counts,
    )


def _spread(values: Sequence[float]) -> tuple[float, float, float] | None:
    return (min(values), statistics.median(values), max(values)) if values else None


def _tries(runs: Sequence[LotRun], counting: set[str | None]) -> Iterator[Try]:
    for run in runs:
        a = run.assessment
        if a.run in counting:
            continue
        if run.broken:
            why = f"its record does not hold: {'; '.join(run.broken)}"
        elif run.void:
            why = f"void: {run.void}"
        elif a.status != "completed":
            why = STATUS[a.status]
        else:
            why = "measured again later"
        if not _may_have_passed(run):
            why += "; not a single bit came, so it was no try"
        yield Try(serial_of(a), a.run or "", iso(a.started) or "", a.verdict, why)


def _verdict(units: Sequence[Unit], size: int | None) -> tuple[Verdict | None, list[str]]:
    """Judge a lot: it passes where every unit of it has passed, against one requirement."""
    failed = [u for u in units if u.verdict == "FAIL"]
    if failed:
        return "FAIL", [f"{count(len(failed), 'unit')} failed: {_named(failed)}"]
    reasons = [
        f"{count(len(some), 'unit')} {words}: {_named(some)}"
        for words, some in (
            ("undecided", [u for u in units if u.verdict == "UNDECIDED"]),
            ("with a record that does not hold", [u for u in units if u.standing == "not valid"]),
            ("void and not measured again", [u for u in units if u.standing == "void"]),
            ("not measured to the end", [u for u in units if u.standing == "not completed"]),
            ("measured against another requirement", [u for u in units if not u.same_requirement]),
        )
        if some
    ]
    required = any(u.verdict is not None for u in units)
    if required and size is not None and len(units) < size:
        reasons.append(f"{count(size - len(units), 'unit')} of {size} still to be measured")
    if size is not None and len(units) > size:
        reasons.append(f"{count(len(units), 'unit')} measured, more than the lot's {size}")
    if reasons or not units:
        return "UNDECIDED", reasons or ["no unit was measured"]
    if not required:
        return None, []
    if len(units) == 1:
        return "PASS", ["its only unit passed"]
    return "PASS", [f"all {count(len(units), 'unit')} passed"]


def _named(units: Sequence[Unit]) -> str:
    names = [u.serial_number for u in units]
    more = f" and {len(names) - 12} more" if len(names) > 12 else ""
    return ", ".join(names[:12]) + more


def _remarks(unit: Unit, units: Sequence[Unit]) -> Iterator[str]:
    """Say what stands out about a unit."""
    if unit.standing == "not valid":
        yield "its record does not hold: no figure of it counts"
    elif unit.standing == "void":
        yield "its only run is void" if unit.tries <= 1 else "all its runs are void or were not completed"
    elif unit.standing == "not completed":
        yield "no run of it was completed"
    if not unit.same_requirement:
        yield "measured against another requirement than the other units"
    if unit.tries > 1:
        yield f"measured {unit.tries} times; each was a try"
    others = [u for u in units if u is not unit and u.ber is not None]
    errors, bits = sum(u.errors for u in others), sum(u.bits for u in others)
    if unit.ber is not None and len(others) >= 2 and bits and unit.bits:
        sure = 1 - OUTLIER_RISK / (2 * len(units))
        compared = compare_counts(errors, bits, unit.errors, unit.bits, sure)
        if compared.worse or compared.better:
            way = "worse" if compared.worse else "better"
            yield f"BER {ratio(unit.ber)} is {way} than the others' {ratio(errors / bits)}"
    known = [u.sensitivity for u in units if u.sensitivity is not None]
    if unit.sensitivity is not None and len(known) >= LEAST_SENSITIVITIES:
        middle = statistics.median(known)
        away = statistics.median(abs(value - middle) for value in known)
        if away and abs(unit.sensitivity - middle) * MAD_TO_SIGMA / away > FAR:
            yield f"sensitivity {unit.sensitivity:.2f} is far from the median {middle:.2f}"
