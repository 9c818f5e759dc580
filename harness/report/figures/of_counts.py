"""Figures of counts: the ruler with the bounds, and the plan's stairs with the path that was taken."""

from __future__ import annotations

from typing import Literal

import numpy as np

from harness.assess.assessment import PointAssessment
from harness.assess.words import count, percent, ratio
from harness.report.document import Figure
from harness.report.figures.drawings import Bar, Floats, Ruler, Stairs
from harness.report.material import Material, Measured
from harness.report.phrases import number, on_bits, point_label, point_name, rejected_over
from harness.report.series import Ints, thinned
from harness.statistics.plans import Plan

_PATH = 2_000  # corners drawn, at most
_BARS = 24  # of a ruler; a sweep with more points has its curve


def ruler_of(material: Material) -> Figure | None:
    """Lay the bounds on the ruler: one bar for each point; none without a compared bit, or for many points."""
    points = [m for m in material.points if m.assessed.tally.compared]
    if not points or len(points) > _BARS:
        return None
    target, flag = _mark(material)
    several = len(points) > 1
    bars = tuple(
        _bar(m.assessed, point_label(m) if several else "", target, judged=not material.swept) for m in points
    )
    said = [_words(m, several, judged=not material.swept) for m in points]
    words = f"{count(len(points), 'point')}, from {said[0]}; to {said[-1]}"
    if len(points) < 3:
        words = "; ".join(said)
    return Figure(_title(material, points), words, Ruler(bars, target, flag))


def _mark(material: Material) -> tuple[float | None, str]:
    if material.swept:
        target = material.section("sweep").get("sensitivity_ber") or material.section("search").get("ber")
        return (float(target), "looked for") if target else (None, "")
    plan = next((m.assessed.plan for m in material.points if m.assessed.plan), None)
    return (float(plan["ber"]), "required: at most") if plan else (None, "")


def _title(material: Material, points: list[Measured]) -> str:
    first = points[0].assessed
    b = first.bounds
    if b is None:
        return "The BER and its bounds"
    drawn = {_drawn(m.assessed, judged=not material.swept) for m in points}
    one_sided = percent(b.deciding_confidence)
    if drawn == {"upper"}:
        return f"The BER measured, and the one-sided upper bound that decides ({one_sided} confidence)"
    if drawn == {"lower"}:
        over = rejected_over(first)
        return (
            f"The BER measured, from the one-sided lower bound that decides ({one_sided} confidence)"
            f"{f', over {over},' if over else ''} to the upper of its two-sided bounds "
            f"({percent(b.confidence)} confidence)"
        )
    return f"The BER measured, and its bounds (two-sided, {percent(b.confidence)} confidence)"


def _drawn(p: PointAssessment, *, judged: bool) -> Literal["upper", "lower", "both"]:
    """Which bounds a point's bar shows: the one that decides, as far as it does, else both two-sided ones."""
    b = p.bounds
    if b is None or p.plan is None or not judged or p.verdict not in ("PASS", "FAIL"):
        return "both"
    if b.side == "lower":
        return "lower"
    return "upper" if b.value <= float(p.plan["ber"]) else "both"


def _words(m: Measured, several: bool, *, judged: bool) -> str:
    p = m.assessed
    name = f"{point_name(m)}: " if several else ""
    if p.bounds is None:
        return f"{name}{on_bits(p)}"
    drawn, b = _drawn(p, judged=judged), p.bounds
    if drawn == "upper":
        return f"{name}{on_bits(p)}, BER at or under {ratio(b.value)}"
    lower = b.value if drawn == "lower" else b.lower
    return f"{name}{on_bits(p)}, BER {ratio(lower)} to {ratio(b.upper)}"


def _bar(p: PointAssessment, label: str, target: float | None, *, judged: bool) -> Bar:
    b = p.bounds
    if b is None:
        return Bar(label, 0.0, 1.0)
    lower, upper, fades = b.lower, b.upper, None
    decided, drawn = judged and p.verdict in ("PASS", "FAIL"), _drawn(p, judged=judged)
    if drawn == "lower":
        lower = b.value
    elif drawn == "upper":
        # Demonstrated, whatever else may have failed: one-sided, nothing is said of how good the unit is.
        lower, upper, fades = 0.0, b.value, b.lower or b.value / 100
    against = decided and target is not None and upper > target
    return Bar(label, lower, upper, p.ber if p.tally.errors else None, fades, against)


def stairs_of(material: Material, m: Measured) -> Figure | None:
    """Draw the plan's stairs with the run's path; none where no plan was followed."""
    plan, p = m.plan, m.assessed
    if plan is None or p.plan is None:
        return None
    if plan.boundaries:
        rows = [(b.errors, b.accept_at, -1 if b.reject_at is None else b.reject_at) for b in plan.boundaries]
    else:
        last = (plan.accept_errors or 0) + 1
        shown = range(last) if last <= 400 else (*range(0, last, last // 200), last - 1)
        # A fixed plan rejects at its end; an error too many is one wherever it falls.
        rows = [*((k, plan.longest_bits, -1) for k in shown), (last, plan.longest_bits, plan.longest_bits)]
    errors, accept, reject = np.array(rows, dtype=np.int64).T
    decided = p.plan.get("decided_at_bit")
    end = int(decided) if decided is not None else p.tally.compared
    bits, so_far = _path(m, end)
    total = int(so_far[-1])
    outcome: Literal["accepted", "rejected", ""] = ""
    if decided is not None:
        outcome = "accepted" if _accepted(plan, int(decided), total) else "rejected"
    counted = "error events" if _events(m) else "errors"
    drawing = Stairs(plan.kind, plan.longest_bits, errors, accept, reject, bits, so_far, outcome, total)
    words = (
        f"{count(total, counted[:-1])} in {count(end, 'compared bit')}; "
        + (f"the plan {outcome} there" if outcome else "the plan had not decided")
        + f"; it ends at {number(plan.longest_bits)} bits at the latest"
    )
    name = f", {point_name(m)}" if len(material.points) > 1 else ""
    title = f"The {plan.kind} plan and the path of this run{name} ({counted} against compared bits)"
    return Figure(title, words, drawing)


def _accepted(plan: Plan, bits: int, errors: int) -> bool:
    """Whether a plan that decided at so many bits accepted: a FAIL may have another reason."""
    if plan.boundaries:
        return errors < len(plan.boundaries) and bits >= plan.boundaries[errors].accept_at
    return errors <= (plan.accept_errors or 0)


def _events(m: Measured) -> bool:
    return m.requirement is not None and m.requirement.count == "events"


def _places(m: Measured) -> Ints | None:
    """Give the compared bits, counted from 1, at which the count of the plan rose; None where not all are known."""
    places = m.series.compared_positions()
    if places is None:
        return None
    if _events(m):
        gap = (m.requirement.event_gap_bits if m.requirement is not None else 0) or 0
        places = places[np.diff(places, prepend=-gap - 1) > gap]
    return np.asarray(places + 1)


def _path(m: Measured, end: int) -> tuple[Floats, Floats]:
    """Give the path's corners, beginning at nothing and ending at so many compared bits."""
    places = _places(m)
    if places is None:
        bits, errors = m.series.path(_PATH)
        kept = bits <= end
        bits, errors = bits[kept], errors[kept]
    else:
        places = places[places <= end]
        bits, errors = thinned(places, np.arange(1, len(places) + 1), _PATH)
    last = errors[-1] if len(errors) else 0
    return (
        np.concatenate(([0], bits, [end])).astype(np.float64),
        np.concatenate(([0], errors, [last])).astype(np.float64),
    )
