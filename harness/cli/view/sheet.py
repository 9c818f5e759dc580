"""What stands on a page, in words and numbers, before it is drawn: from a run that goes on or from a record.

The order is that of the questions: which unit, against which requirement, what is the verdict, how sure, on
how many bits, what is still to do, what happened meanwhile.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.words import count, duration, how_it_ended, local_date, note_words, percent, rate
from harness.cli.view.directions import on_one_page
from harness.cli.view.entries import (
    ber_decided,
    ber_so_far,
    bits_words,
    detail_words,
    path_words,
    pattern_name,
    point_label,
    point_words,
    required_words,
    residual,
    risk_words,
    sensitivity_details,
    sensitivity_words,
    unit_name,
)
from harness.cli.view.forecast import STALLED_S, elapsed_s, moment, rates, still_to_do
from harness.cli.view.meanwhile import meanwhile
from harness.cli.view.ruler import Bar
from harness.record import Event, Tally

if TYPE_CHECKING:
    from harness.bench.run import Progress

SECOND_NS = 1_000_000_000
QUIET = "nothing out of the ordinary happened meanwhile"
KEY_END = 12  # characters of a run's key that tell it from any other


@dataclass(frozen=True, slots=True)
class Sheet:
    """A page before it is drawn."""

    unit: str
    title: str = ""
    corner: str = ""  # right of the heading: the time of day, or the date
    required: Sequence[str] = ()
    risks: str = ""
    verdict: str = ""
    stamped: bool = False  # a verdict, not a state
    against: bool = False  # what stands there speaks against the unit
    reasons: Sequence[str] = ()
    ber: str = ""
    sensitivities: Sequence[str] = ()  # of several curves; of one, what else is known of it
    bars: Sequence[tuple[str, Bar]] = (("", Bar(0.0, 1.0)),)
    ahead: int = 0  # bars that may be left out where room is short: the first ones
    weights: Sequence[float] = ()  # of bars of which the weightiest are kept where room is short
    point: str = ""  # which of several is measured
    path: str = ""  # what was measured
    bits: Sequence[str] = ()
    details: Sequence[str] = ()  # for a page with room to spare
    points: Sequence[str] = ()
    recent: Sequence[tuple[int, Tally]] = ()
    behind_s: int = 0  # seconds between the newest of `recent` and now
    strip_ends: tuple[str, str] = ("a minute ago", "now")
    to_do_label: str = "to do"
    to_do: Sequence[str] = ()
    remarks: Sequence[str] = ()
    events: Sequence[Event] = ()
    foot: Sequence[str] = ()


def sheet_before(title: str, device: Mapping[str, str], now_ns: int, pause: str = "") -> Sheet:
    """Fill a page before anything was measured; `pause`: what is waited for."""
    return Sheet(
        unit=unit_name(device),
        title=title,
        corner=moment(now_ns, now_ns),
        verdict=f"none yet: {pause or 'opening the link'}",
        ber="nothing is known yet: every ratio is possible",
        foot=(_foot(""),),
    )


def sheet_of_progress(
    progress: Progress, now_ns: int, *, closing: str = "", behind_s: int = 0, pause: str = ""
) -> Sheet:
    """Fill a page for a run that goes on.

    Parameters
    ----------
    closing
        Why it is being closed; empty while it is not.
    behind_s
        Whole seconds that have gone by and are not yet decided: the counter waits for what comes next.
    pause
        What is waited for while nothing is measured.
    """
    p = progress.point
    verdict, against = _state(progress, now_ns, closing)
    reasons = against_words(progress)
    looked_for = progress.sensitivity_ber
    done = [(point_label(d), _bar(d, decided=False, looked_for=looked_for)) for d in progress.done]
    foot = [_foot(progress.run, elsewhere=progress.elsewhere)]
    if progress.waiting_writes > 2:
        foot.insert(
            0, f"the store is slow: {progress.waiting_writes} seconds wait to be written; none is lost"
        )
    sheet = Sheet(
        unit=unit_name(progress.device),
        title=progress.title,
        corner=moment(now_ns, now_ns),
        required=required_words(p),
        risks=risk_words(p),
        verdict=verdict,
        against=against,
        reasons=reasons,
        ber=_labelled(ber_so_far(p), progress.device),
        point=_point_under_way(progress),
        bars=[*done, (point_label(p), _bar(p, decided=False, looked_for=progress.sensitivity_ber))],
        ahead=len(done),
        path=path_words(p),
        bits=bits_words(p),
        details=detail_words(p),
        recent=p.recent,
        behind_s=behind_s,
        to_do=[closing or pause] if closing or pause else _to_do(progress, now_ns, behind_s),
        events=p.events,
        foot=foot,
    )
    if not progress.beside:
        return sheet
    ways = (progress, *progress.beside)
    beside = [sheet_of_progress(w, now_ns, closing=closing, behind_s=behind_s) for w in progress.beside]
    names = [point_label(w.point) for w in ways]
    last = next((w for w in ways if not w.outlook.decided), progress)
    return on_one_page(
        dict(zip(names, (sheet, *beside), strict=True)),
        [point_words(w.point) for w in ways],
        to_do_of=point_label(last.point),
    )


def sheet_of_assessment(a: Assessment, where: str = "") -> Sheet:
    """Fill a page from a record."""
    p = a.whole
    decided = a.verdict in ("PASS", "FAIL")
    ended = [f"record in {where}"] if where else []
    sheet = Sheet(
        unit=unit_name(a.device),
        title=a.title,
        corner=local_date(a.started)[:16],
        required=_required(a),
        risks=risk_words(p),
        verdict=_verdict(a),
        stamped=a.verdict is not None,
        against=a.verdict == "FAIL",
        reasons=[*(note_words(note) for note in a.notes if note.void), *a.reasons],
        ber=_labelled(ber_decided(p) if decided else ber_so_far(p), a.device),
        bars=[("", _bar(p, decided=decided))],
        path=path_words(p),
        bits=bits_words(p),
        details=detail_words(p),
        recent=p.recent,
        strip_ends=_strip_ends(a),
        to_do_label="took",
        to_do=[_took(a), *_next_step(a)],
        remarks=[*p.remarks, *(f"noted: {note_words(note)}" for note in a.notes if not note.void)],
        events=p.events,
        foot=[f"run {a.run}" if a.run else "no record kept", *ended],
    )
    if len(a.points) < 2 and not a.sweep:
        return sheet
    found = [a.sensitivity] if a.sensitivity else a.more.get("sensitivities", ())
    looked_for = found[0]["ber"] if found else None
    points = sorted(a.points, key=lambda p: tuple(p.values.values()))  # a curve, however it was visited
    events = meanwhile(a.points)
    return replace(
        sheet,
        ber=sensitivity_words(a.sensitivity),
        sensitivities=[sensitivity_words(found) for found in a.more.get("sensitivities", ())]
        or sensitivity_details(a.sensitivity),
        bars=[(point_label(p), _bar(p, decided=False, looked_for=looked_for)) for p in points],
        weights=_weights(points, looked_for),
        bits=(),
        details=(),
        recent=(),
        points=_points(a),
        to_do=[_took_in_all(a), *_next_step(a), *([] if events or a.status != "completed" else [QUIET])],
        events=events,
    )


def _weights(points: Sequence[PointAssessment], looked_for: float | None) -> list[float]:
    """Say how much each point tells: the nearer to the ratio that is looked for, the more; a second visit less."""
    seen: set[tuple[float, ...]] = set()
    weights = []
    for p in points:
        weight = -100.0 if tuple(p.values.values()) in seen else 0.0
        seen.add(tuple(p.values.values()))
        if looked_for is not None and p.tally.compared:
            weight += 50 - abs(math.log((p.tally.errors + 0.5) / p.tally.compared / looked_for))
        weights.append(math.inf if p.verdict is not None else weight)
    return weights


def _required(a: Assessment) -> list[str]:
    """Say what is required of the run: a sensitivity, a BER at the points that are judged, or nothing."""
    judged = next((p for p in (a.whole, *a.points) if p.plan), None)
    said = [a.required_sensitivity] if a.required_sensitivity else []
    return said + required_words(judged or a.whole) if judged or not said else said


def _verdict(a: Assessment) -> str:
    if a.more.get("void"):
        return f"VOID (it was {a.verdict or 'without a verdict'})"
    if a.verdict:
        return a.verdict
    if a.status == "running":
        return "none yet: the run goes on"
    asked = a.required_sensitivity or any(p.plan for p in (a.whole, *a.points))
    return "none: the run has not come to one" if asked else "none: nothing was required"


def _state(progress: Progress, now_ns: int, closing: str) -> tuple[str, bool]:
    """Say where the run stands, and whether that speaks against the unit."""
    p = progress.point
    trouble = _trouble(progress, now_ns)
    if progress.outlook.against:
        return f"cannot pass any more{f'; {trouble}' if trouble else ''}", True
    if trouble:
        return f"{'none' if p.plan is None else 'none yet'}: {trouble}", True
    if p.plan is None:
        return "none: nothing is required", False
    if closing:
        return "none yet: the run is being closed", False
    errors = count(p.tally.errors, "error") if p.tally.errors else "no error"
    done = f"{int(100 * p.tally.compared / int(p.plan['longest_bits']))} % of the bits"
    if p.plan["kind"] == "sequential":
        return f"none yet: {errors} in {done} that it may take", False
    accepted = int(p.plan["accept_errors"])
    return (
        f"none yet: {errors} in {done}; {accepted or 'none'} {'are' if accepted > 1 else 'is'} accepted",
        False,
    )


def against_words(progress: Progress) -> list[str]:
    """Say why there can be no PASS any more, shortly."""
    if not progress.outlook.against:
        return []
    p = progress.point
    accepted = p.plan["accept_errors"] if p.plan else None
    if accepted is not None and p.tally.errors > int(accepted):
        return [f"{count(p.tally.errors, 'error')}, where the plan accepts {accepted or 'none'}"]
    return [progress.outlook.against[0]]


def _trouble(progress: Progress, now_ns: int) -> str:
    """Say what is amiss just now, if anything is."""
    p = progress.point
    lost = back = aligned = unaligned = None
    for number, event in enumerate(p.events):
        lost = number if event.kind == "link_lost" else lost
        back = number if event.kind == "link_back" else back
        aligned = number if event.kind == "aligned" else aligned
        unaligned = number if event.kind == "alignment_lost" else unaligned
    if lost is not None and (back is None or back < lost):
        return f"the link is lost since {moment(p.events[lost].at or 0, p.events[lost].at or 0)}"
    if not p.tally.received:
        waited_s = elapsed_s(progress, now_ns)
        return f"no bit has come in {duration(round(waited_s))}" if waited_s >= STALLED_S else ""
    if not p.tally.compared:
        return f"{count(p.tally.received, 'bit')} came, but {pattern_name(p)} is not found in them"
    if unaligned is not None and (aligned is None or aligned < unaligned):
        return f"{pattern_name(p)} is no longer found in what comes"
    return ""


def _bar(p: PointAssessment, *, decided: bool, looked_for: float | None = None) -> Bar:
    """Make a point's bar; a sweep's mark is the ratio that its sensitivity is looked for at."""
    required = None if p.plan is None else float(p.plan["ber"])
    flag = "required: at most"
    if looked_for is not None:
        required, flag = looked_for, "looked for:"
    if p.bounds is None or not p.tally.compared:
        return Bar(0.0, 1.0, None, required, flag=flag)
    b = p.bounds
    lower, upper, fades = b.lower, b.upper, None
    if decided and b.side == "lower":
        lower = b.value
    elif decided:
        upper = b.value
        if p.verdict == "PASS":  # one-sided: nothing is said of how good the unit is
            lower, fades = 0.0, b.lower
    against = required is not None and looked_for is None and lower >= required
    return Bar(lower, upper, p.ber, required, against=against, flag=flag, fades_from=fades)


def _labelled(ber: str, device: Mapping[str, str]) -> str:
    """Label the ratio of a device that corrects errors itself, so that nobody takes it for the channel's."""
    label = residual(device)
    return f"{ber}; {label}" if label else ber


def _took(a: Assessment) -> str:
    p = a.whole
    if not p.timed:  # bytes in a file, of which nobody said how fast they came
        return f"no time is known without a rate; {_why(a)}"
    speed = rates(p.recent, None).received_bps if p.measured_bps is None else p.measured_bps
    words = duration(p.seconds if p.seconds < 10 else round(p.seconds)) + (
        f" at {rate(speed)}" if speed else ""
    )
    # The seconds of a file are read, and not waited for.
    played = a.ended is not None and a.ended - a.started < (p.seconds - 1) * SECOND_NS
    if a.ended is not None and a.command != "examine" and not played:
        words += f", until {local_date(a.ended)[11:19]}"
    return f"{words}; {_why(a)}" if _why(a) else words


def _next_step(a: Assessment) -> list[str]:
    """Say how a run that was cut is gone on with."""
    return [f"`bitassay resume {a.run[-KEY_END:]}` goes on with it"] if a.status == "cut" and a.run else []


def _why(a: Assessment) -> str:
    """Say why a run ended, with the fault's own words where there was one."""
    fault = next((e.text for e in reversed(a.whole.events) if e.kind == "fault"), "")
    if a.status == "failed" and fault:
        return fault
    if a.status in ("cut", "running"):
        return how_it_ended(a.status, None)
    if found := next((e.text for e in reversed(a.whole.events) if e.kind == "search"), ""):
        return found
    return how_it_ended(a.status, a.ended_by)


def _strip_ends(a: Assessment) -> tuple[str, str]:
    if a.ended is None:
        return "a minute before", "the latest"
    return moment(a.ended - 60 * SECOND_NS, a.ended), moment(a.ended, a.ended)


def _foot(run: str, *, elsewhere: bool = False) -> str:
    key = f"run {run}; " if run else ""
    return (
        f"{key}Ctrl-C ends the watching; the run goes on" if elsewhere else f"{key}Ctrl-C ends and keeps it"
    )


def _point_under_way(progress: Progress) -> str:
    if progress.visits == 1:
        return ""
    p = progress.point
    units = progress.units
    values = ", ".join(f"{name} {value:g} {units.get(name, '')}".strip() for name, value in p.values.items())
    place = f"{progress.number + 1} of {progress.visits}" if progress.visits else f"{progress.number + 1}"
    if 0 < progress.visits <= progress.number:
        place = "once more"
    return f"{place}: {values}" if values else place


def _to_do(progress: Progress, now_ns: int, behind_s: int) -> list[str]:
    lines = still_to_do(progress, now_ns, behind_s=behind_s)
    if progress.visits == 1:
        return lines
    if not progress.visits:
        return [*lines[:1], progress.seeking]
    left = progress.visits - progress.number - 1
    words = f"then {count(left, 'more point')}" if left > 0 else "this is the last point"
    if left < 0:
        words = progress.seeking
    if progress.until is not None:
        words += f"; the whole until about {moment(progress.until * 1e9, now_ns)}"
    return [*lines[:1], words]


def _points(a: Assessment) -> list[str]:
    sure = next((percent(p.bounds.confidence) for p in a.points if p.bounds), None)
    words = [point_words(p) for p in a.points]
    return [f"bounds at {sure} confidence", *words] if sure else words


def _took_in_all(a: Assessment) -> str:
    words = count(len(a.points), "point")
    if a.ended is not None:
        words += f" in {duration(round((a.ended - a.started) / 1e9))}, until {local_date(a.ended)[11:19]}"
    return f"{words}; {_why(a)}" if _why(a) else words
