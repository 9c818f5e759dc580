"""What stands on a page, in words and numbers, before it is drawn: from a run that goes on or from a record.

The order is that of the questions: which unit, against which requirement, what is the verdict, how sure, on
how many bits, what is still to do, what happened meanwhile.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.words import count, duration, local_date, percent, rate, ratio
from harness.cli.view.forecast import moment, rates, still_to_do
from harness.cli.view.ruler import Bar
from harness.record import Event, Tally

if TYPE_CHECKING:
    from harness.bench.run import Progress

SECOND_NS = 1_000_000_000
ENDED_BY = {
    "plan": "its plan decided",
    "bits": "the profile's limit of bits was reached",
    "seconds": "the profile's limit of time was reached",
    "errors": "the profile's limit of errors was reached",
    "end_of_data": "the data came to their end",
    "interrupted": "it was interrupted",
    "fault": "something failed",
}
NOT_ENDED = {
    "running": "it goes on",
    "cut": "it was cut: the process that measured is gone",
    "failed": "something failed",
    "interrupted": "it was interrupted",
    "completed": "",
}


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
    bar: Bar | None = field(default_factory=lambda: Bar(0.0, 1.0))
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


def unit_name(device: Mapping[str, str]) -> str:
    """Name the unit: model and serial number as far as they are known."""
    words = [device.get("model", ""), device.get("serial_number", "")]
    return " ".join(word for word in words if word) or "unnamed unit"


def sheet_before(title: str, device: Mapping[str, str], now_ns: int) -> Sheet:
    """Fill a page before anything was measured."""
    return Sheet(
        unit=unit_name(device),
        title=title,
        corner=moment(now_ns, now_ns),
        verdict="none yet: opening the link",
        ber="nothing is known yet: every ratio is possible",
        foot=(_foot(""),),
    )


def sheet_of_progress(progress: Progress, now_ns: int, *, closing: str = "", behind_s: int = 0) -> Sheet:
    """Fill a page for a run that goes on.

    Parameters
    ----------
    closing
        Why it is being closed; empty while it is not.
    behind_s
        Whole seconds that have gone by and are not yet decided: the counter waits for what comes next.
    """
    p = progress.point
    verdict, against = _state(progress, closing)
    reasons = _against(progress)
    foot = [_foot(progress.run)]
    if progress.waiting_writes > 2:
        foot.insert(
            0, f"the store is slow: {progress.waiting_writes} seconds wait to be written; none is lost"
        )
    return Sheet(
        unit=unit_name(progress.device),
        title=progress.title,
        corner=moment(now_ns, now_ns),
        required=required_words(p),
        risks=risk_words(p),
        verdict=verdict,
        against=against,
        reasons=reasons,
        ber=_ber_so_far(p),
        bar=_bar(p, decided=False),
        bits=bits_words(p),
        details=detail_words(p),
        recent=p.recent,
        behind_s=behind_s,
        to_do=[closing] if closing else still_to_do(progress, now_ns, behind_s=behind_s),
        events=p.events,
        foot=foot,
    )


def sheet_of_assessment(a: Assessment, where: str = "") -> Sheet:
    """Fill a page from a record."""
    p = a.whole
    decided = a.verdict in ("PASS", "FAIL")
    verdict = a.verdict or ("none: nothing was required" if p.plan is None else "none yet: the run goes on")
    ended = [f"record in {where}"] if where else []
    sheet = Sheet(
        unit=unit_name(a.device),
        title=a.title,
        corner=local_date(a.started)[:16],
        required=required_words(p),
        risks=risk_words(p),
        verdict=verdict,
        stamped=a.verdict is not None,
        against=a.verdict == "FAIL",
        reasons=a.reasons,
        ber=_ber_decided(p) if decided else _ber_so_far(p),
        bar=_bar(p, decided=decided),
        bits=bits_words(p),
        details=detail_words(p),
        recent=p.recent,
        strip_ends=_strip_ends(a),
        to_do_label="took",
        to_do=[_took(a)],
        remarks=p.remarks,
        events=p.events,
        foot=[f"run {a.run}" if a.run else "no record kept", *ended],
    )
    if len(a.points) < 2:
        return sheet
    return replace(sheet, ber="", bar=None, bits=(), recent=(), points=[point_words(p) for p in a.points])


# -- the words of each entry


def required_words(p: PointAssessment) -> list[str]:
    """Say what is required and how it is decided."""
    plan = p.plan
    if plan is None:
        return ["nothing: measured only"]
    longest = count(int(plan["longest_bits"]), "bit")
    if plan["kind"] == "sequential":
        how = f"a sequential plan decides, within {longest}"
    elif plan["accept_errors"] == 0:
        how = f"a {plan['kind']} plan accepts no error in {longest}"
    else:
        how = (
            f"a {plan['kind']} plan accepts at most {count(int(plan['accept_errors']), 'error')} in {longest}"
        )
    return [f"BER under {ratio(plan['ber'])} with {percent(plan['confidence'])} confidence", how]


def _state(progress: Progress, closing: str) -> tuple[str, bool]:
    """Say where the run stands, and whether that speaks against the unit."""
    p = progress.point
    trouble = _trouble(progress)
    if progress.outlook.against:
        return f"no PASS any more{f'; {trouble}' if trouble else ''}", True
    if trouble:
        return f"none yet: {trouble}", p.tally.received > 0 or progress.elapsed_s > 3
    if p.plan is None:
        return "none: nothing is required", False
    if closing:
        return "none yet: the run is being closed", False
    done = f"{int(100 * p.tally.compared / int(p.plan['longest_bits']))} % of the bits"
    if p.plan["kind"] == "sequential":
        return f"none yet: {done} that it may take at most", False
    accepted = int(p.plan["accept_errors"])
    errors = count(p.tally.errors, "error") if p.tally.errors else "no error"
    return f"none yet: {done}, {errors} where {accepted or 'none'} may be", False


def _against(progress: Progress) -> list[str]:
    """Say why there can be no PASS any more, shortly."""
    if not progress.outlook.against:
        return []
    p = progress.point
    accepted = p.plan["accept_errors"] if p.plan else None
    if accepted is not None and p.tally.errors > int(accepted):
        return [f"because of {count(p.tally.errors, 'error')}, where the plan accepts {accepted or 'none'}"]
    return [f"because of {progress.outlook.against[0]}"]


def _trouble(progress: Progress) -> str:
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
        return f"no bit has come in {duration(round(progress.elapsed_s))}"
    if not p.tally.compared:
        return f"{count(p.tally.received, 'bit')} came, but {p.pattern} is not found in them"
    if unaligned is not None and (aligned is None or aligned < unaligned):
        return f"{p.pattern} is no longer found in what comes"
    return ""


def _bar(p: PointAssessment, *, decided: bool) -> Bar:
    required = None if p.plan is None else float(p.plan["ber"])
    if p.bounds is None or not p.tally.compared:
        return Bar(0.0, 1.0, None, required)
    b = p.bounds
    lower, upper, fades = b.lower, b.upper, None
    if decided and b.side == "lower":
        lower = b.value
    elif decided:
        upper = b.value
        if p.verdict == "PASS":  # one-sided: nothing is said of how good the unit is
            lower, fades = 0.0, b.lower
    against = required is not None and lower >= required
    return Bar(lower, upper, p.ber, required, against=against, fades_from=fades)


def _ber_so_far(p: PointAssessment) -> str:
    """Say the ratio and the two-sided bounds, which the bar shows."""
    if p.bounds is None or not p.tally.compared:
        return "no bit was compared: every ratio is possible"
    b = p.bounds
    sure = f"at {percent(b.confidence)} confidence"
    if not p.tally.errors:
        return f"no error measured; under {ratio(b.upper)} {sure}"
    return f"{ratio(p.ber)} measured; between {ratio(b.lower)} and {ratio(b.upper)} {sure}"


def _ber_decided(p: PointAssessment) -> str:
    """Say the ratio and the bound that decides, which the bar shows beside a verdict."""
    if p.bounds is None or not p.tally.compared:
        return _ber_so_far(p)
    b = p.bounds
    side = "under" if b.side == "upper" else "over"
    measured = f"{ratio(p.ber)} measured" if p.tally.errors else "no error measured"
    return f"{measured}; {side} {ratio(b.value)} with {percent(b.deciding_confidence)} confidence"


def bits_words(p: PointAssessment) -> list[str]:
    """Say on how many bits it all rests."""
    t = p.tally
    if not t.received:
        return ["none received" + (f", {count(p.bits_sent, 'bit')} sent" if p.bits_sent else "")]
    errors = "no error" if not t.errors else count(t.errors, "error")
    lines = [f"{count(t.compared, 'bit')} compared with {p.pattern}, {errors}"]
    more = []
    if not t.compared:
        lines = [f"none compared: {p.pattern} is not found in the {count(t.received, 'bit')} that came"]
    elif t.unaligned:
        more.append(f"{count(t.unaligned, 'bit')} not aligned")
    if p.slip_count:
        more.append(count(p.slip_count, "slip"))
    if p.bits_lost:
        more.append(f"{count(p.bits_lost, 'bit')} lost")
    if p.bits_inserted:
        more.append(f"{count(p.bits_inserted, 'bit')} inserted")
    if more:
        lines.append(", ".join(more))
    return lines


def detail_words(p: PointAssessment) -> list[str]:
    """Say what is good to know where there is room for it."""
    t = p.tally
    lines = []
    if t.errors:
        ones, zeros = count(t.ones_as_zeros, "ONE"), count(t.zeros_as_ones, "ZERO")
        lines.append(f"{ones} received as ZERO, {zeros} received as ONE")
    if t.received:
        sent = f"{count(p.bits_sent, 'bit')} sent, " if p.bits_sent else ""
        speed = f" at {rate(p.measured_bps)}" if p.measured_bps else ""
        lines.append(f"{sent}{count(t.received, 'bit')} received{speed}")
    for a in p.availability:
        if a.seconds:
            lines.append(
                f"{a.standard}: {count(a.seconds, 'second')}, {a.errored} errored, "
                f"{a.severely_errored} severely errored, {a.unavailable} unavailable"
            )
    return lines


def risk_words(p: PointAssessment) -> str:
    """Say how often the plan is wrong about a unit."""
    if p.plan is None:
        return ""
    plan = p.plan
    return (
        f"risks: {percent(plan['consumer_risk'])} that a unit with just this BER passes, "
        f"{percent(plan['producer_risk'])} that one {plan['margin']:g} times better fails"
    )


def _took(a: Assessment) -> str:
    p = a.whole
    speed = rates(p.recent, None).received_bps if p.measured_bps is None else p.measured_bps
    words = duration(p.seconds if p.seconds < 10 else round(p.seconds)) + (
        f" at {rate(speed)}" if speed else ""
    )
    if a.ended is not None:
        words += f", until {local_date(a.ended)[11:19]}"
    return f"{words}; {_why(a)}" if _why(a) else words


def _why(a: Assessment) -> str:
    """Say why a run ended, with the fault's own words where there was one."""
    fault = next((e.text for e in reversed(a.whole.events) if e.kind == "fault"), "")
    if a.status == "failed" and fault:
        return fault
    if a.status in ("cut", "running"):
        return NOT_ENDED[a.status]
    return ENDED_BY.get(a.ended_by or "", "") or NOT_ENDED.get(a.status, "")


def _strip_ends(a: Assessment) -> tuple[str, str]:
    if a.ended is None:
        return "a minute before", "the latest"
    return moment(a.ended - 60 * SECOND_NS, a.ended), moment(a.ended, a.ended)


def _foot(run: str) -> str:
    key = f"run {run}; " if run else ""
    return f"{key}Ctrl-C ends and keeps it"


def point_words(p: PointAssessment) -> str:
    """Say one of several points in a line."""
    direction = p.facts.get("direction")
    values = ", ".join(f"{name} {value:g}" for name, value in p.values.items())
    name = f"{direction} direction" if direction else values or "point"
    verdict = f"{p.verdict}, " if p.verdict else ""
    return f"{name}: {verdict}{_ber_so_far(p)} ({bits_words(p)[0]})"
