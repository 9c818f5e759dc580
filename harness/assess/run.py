"""From a record to its assessment: every point accumulated again, second by second."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from harness.assess.accumulate import Accumulator, accumulator_for
from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.point import DEFAULT_CONFIDENCE, Facts, assess_point
from harness.assess.requirement import (
    Requirement,
    required_sensitivity,
    requirement_at,
    requirement_of,
)
from harness.assess.words import count, iso
from harness.record import Event, Point, Run, Tally, Verdict


def assess(run: Run) -> Assessment:
    """Assess a record; pure, and the same for a run that goes on and one that has ended."""
    requirement = requirement_of(run.settings)
    points = [
        _assess_one(run, point, requirement_at(requirement, run.settings, point.values))
        for point in run.points
    ]
    sweep = run.command == "sweep"
    several = sweep or len(points) > 1
    whole = points[0] if points else _nothing(run, requirement)
    verdict, reasons = whole.verdict, list(whole.reasons)
    curves: list[Any] = []
    if several:
        verdict, reasons = _together(points)
        if verdict is None and run.status == "completed" and (named := _named_at(run)):
            verdict, reasons = "UNDECIDED", [f"the requirement holds at {named}, which was not measured"]
        whole = _summed(whole, points)
    if sweep and run.status != "running":
        from harness.assess.curve import curves_of
        from harness.assess.sensitivity import judge_sensitivity

        curves = curves_of(run.settings, points)
        least = (run.settings.get("requirement") or {}).get("sensitivity_at_least")
        if least is not None and requirement is not None:
            judged = [judge_sensitivity(c, float(least), requirement) for c in curves] or [
                judge_sensitivity(None, float(least), requirement)
            ]
            verdict, reasons = _worst([*judged, *([(verdict, reasons)] if verdict is not None else [])])
    if several:
        whole = replace(whole, remarks=(*_judges_nothing(run), *_common_remarks(points, curves)))
    sensitivities = [found for curve in curves if (found := curve.sensitivity()) is not None]
    return Assessment(
        run=run.key,
        title=run.title,
        command=run.command,
        status=run.status,
        ended_by=run.ended_by,
        started=run.started,
        ended=run.ended,
        device=run.device,
        verdict=verdict,
        reasons=reasons,
        whole=whole,
        points=points,
        sweep=several,
        sensitivity=sensitivities[0] if len(sensitivities) == 1 else None,
        curves=tuple(curves),
        more={**({"sensitivities": sensitivities} if len(sensitivities) > 1 else {}), **_notes(run)},
        required_sensitivity=required_sensitivity(run),
        notes=tuple(run.notes),
    )


def _notes(run: Run) -> dict[str, Any]:
    """Give what was noted afterwards; nothing where nothing was, as when the numbers were stated."""
    if not run.notes:
        return {}
    return {"void": any(note.void for note in run.notes), "notes": notes_json(run)}


def notes_json(run: Run) -> list[dict[str, Any]]:
    """JSON of what was noted afterwards."""
    return [{"at": iso(n.at), "who": n.who, "text": n.text, "void": n.void} for n in run.notes]


def accumulate(run: Run, point: Point, requirement: Requirement | None) -> Accumulator:
    """Run a point's seconds and events through an accumulator."""
    acc = accumulator_for(point, requirement)
    for event in point.events:
        acc.note(event)
    if run.status == "cut" and run.sittings and run.points and point.index == run.points[-1].index:
        undecided = run.sittings[-1].undecided_bits
        if undecided:
            text = f"{count(undecided, 'bit')} had come and were not decided when the run was cut"
            acc.note(Event("undecided", None, text, data={"bits": undecided}))
    for second in sorted(point.seconds, key=lambda s: s.index):
        acc.add(second)
    acc.flush()
    return acc


def facts_of(run: Run, point: Point, requirement: Requirement | None) -> Facts:
    """Collect what a record says about a point beside its numbers."""
    pattern: Mapping[str, Any] = run.settings.get("pattern") or {}
    return Facts(
        values=point.values,
        status="completed" if point.ended_by not in (None, "interrupted", "fault") else run.status,
        ended_by=point.ended_by,
        started=point.started,
        ended=point.ended,
        after_decision=point.after_decision,
        pattern=point.facts.get("pattern", pattern.get("name")),
        bit_order=point.facts.get("bit_order", pattern.get("bit_order")),
        rate_bps=point.facts.get("rate_bps"),
        requirement=requirement,
        confidence=float(run.settings.get("confidence", DEFAULT_CONFIDENCE)),
        facts=point.facts,
    )


def _summed(first: PointAssessment, points: list[PointAssessment]) -> PointAssessment:
    """Sum up counts over all points; a BER, bounds or clustering over all of them would mean nothing."""
    tally, after = Tally(), Tally()
    for point in points:
        tally += point.tally
        after += point.after_decision
    return replace(
        first,
        values={},
        seconds=sum(p.seconds for p in points),
        measured_bps=None,
        bits_sent=sum(p.bits_sent for p in points),
        tally=tally,
        ber=None,
        ber_half_wrong=None,
        unaligned_ratio=None,
        bounds=None,
        slips=(),
        slip_count=sum(p.slip_count for p in points),
        bits_lost=sum(p.bits_lost for p in points),
        bits_inserted=sum(p.bits_inserted for p in points),
        links_lost=sum(p.links_lost for p in points),
        events=tuple(event for p in points for event in p.events),
        plan=next((p.plan for p in points if p.plan), None),
        after_decision=after,
        availability=(),
        clustering=None,
        remarks=(),
    )


def _named_at(run: Run) -> str:
    """Name the point at which the requirement holds; empty where it names none."""
    at = (run.settings.get("requirement") or {}).get("at") or {}
    return ", ".join(f"{name} {value:g}" for name, value in at.items())


def _judges_nothing(run: Run) -> list[str]:
    """Say of a sweep that its requirement stands for no point of it: the run has no verdict then."""
    asked = run.settings.get("requirement")
    if (
        run.command != "sweep"
        or not asked
        or asked.get("at")
        or asked.get("sensitivity_at_least") is not None
    ):
        return []
    return ["the requirement names no point and no sensitivity: nothing was judged"]


def _common_remarks(points: list[PointAssessment], curves: list[Any]) -> tuple[str, ...]:
    """Collect what has to be said of a sweep as a whole: calibrations, what moved, the fit, drift, hysteresis."""
    overdue = dict.fromkeys(words for point in points for words in point.facts.get("overdue", ()))
    unsafe = [e.text for point in points for e in point.events if "NOT be made safe" in e.text]
    moved = [f"{_name(point)}: {words}" for point in points for words in point.moved]
    return (*unsafe, *overdue, *moved, *_of_curves(curves))


def _of_curves(curves: list[Any]) -> list[str]:
    """Give what each curve's fit and its points bring to be said, with its own setting where there are several."""
    said = []
    for curve in curves:
        words = [] if curve.fit is None else [_beyond_the_value(curve.fit)]
        at = ", ".join(f"{name} {value:g}" for name, value in curve.at.items())
        said += [f"{at}: {text}" if at else text for text in (*words, *curve.remarks) if text]
    return said


def _beyond_the_value(fit: Any) -> str:
    """Give a fit's words, without the sentence with the value, which stands elsewhere."""
    words = str(fit.words)
    return words if fit.value is None else words.partition(" %).")[2].strip()


def _together(points: list[PointAssessment]) -> tuple[Verdict | None, list[str]]:
    """Join the verdicts of points that carry one: all must pass."""
    judged: list[tuple[Verdict | None, list[str]]] = [
        (p.verdict, [f"{_name(p)}: {reason}" for reason in p.reasons])
        for p in points
        if p.verdict is not None
    ]
    return _worst(judged) if judged else (None, [])


def _worst(judged: list[tuple[Verdict | None, list[str]]]) -> tuple[Verdict | None, list[str]]:
    ranks: list[Verdict] = ["FAIL", "UNDECIDED", "PASS"]
    worst = next(rank for rank in ranks if any(verdict == rank for verdict, _ in judged))
    return worst, [reason for verdict, reasons in judged if verdict == worst for reason in reasons]


def _name(point: PointAssessment) -> str:
    direction = point.facts.get("direction")
    if direction:
        return f"{direction} direction"
    return ", ".join(f"{name} {value:g}" for name, value in point.values.items()) or "point"


def _assess_one(run: Run, point: Point, requirement: Requirement | None) -> PointAssessment:
    return assess_point(accumulate(run, point, requirement), facts_of(run, point, requirement))


def _nothing(run: Run, requirement: Requirement | None) -> PointAssessment:
    empty = Point(0, {}, run.started, run.ended, run.ended_by, (), ())
    return _assess_one(run, empty, requirement)
