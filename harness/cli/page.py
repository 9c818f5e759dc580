"""A run in plain lines: which unit, what was required, verdict, how sure, on how many bits, what happened."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.words import count, duration, local_date, local_time, percent, rate, ratio

EVENTS_SHOWN = 12
SLIPS_SHOWN = 8


def unit_name(device: dict[str, str]) -> str:
    """Name the unit: model and serial number as far as they are known."""
    words = [device.get("model", ""), device.get("serial_number", "")]
    return " ".join(word for word in words if word) or "unnamed unit"


def page(a: Assessment, where: str = "") -> Iterator[str]:
    """Give the lines of a run's page."""
    yield f"{unit_name(dict(a.device))} — {a.title}" if a.title else unit_name(dict(a.device))
    yield f"run {a.run}" if a.run else "no record kept"
    yield ""
    yield from _requirement(a.whole)
    yield from verdict_lines(a)
    yield ""
    yield from _numbers(a.whole)
    yield from _happened(a.whole)
    if where:
        yield ""
        yield f"record in {where}"


def verdict_lines(a: Assessment) -> Iterator[str]:
    """Give the verdict and its reasons."""
    if a.verdict is None:
        word = "nothing required" if a.status != "running" else "going on"
        yield f"verdict     {word}"
    else:
        yield f"verdict     {a.verdict}"
    for reason in a.reasons:
        yield f"            {reason}"
    if a.status not in ("completed", "running"):
        yield f"            the run was {a.status}"


def _requirement(p: PointAssessment) -> Iterator[str]:
    if p.plan is None:
        yield "required    nothing: measured only"
        return
    plan = p.plan
    accepts = "" if plan["accept_errors"] is None else f", at most {count(plan['accept_errors'], 'error')}"
    yield f"required    BER under {ratio(plan['ber'])} with {percent(plan['confidence'])} confidence"
    yield (
        f"plan        {plan['kind']}, {count(plan['longest_bits'], 'bit')} at most{accepts}; risks: "
        f"{percent(plan['consumer_risk'])} that a unit at the limit passes, "
        f"{percent(plan['producer_risk'])} that one {plan['margin']:g} times better fails"
    )


def _numbers(p: PointAssessment) -> Iterator[str]:
    t = p.tally
    yield f"BER         {ratio(p.ber)}   ({count(t.errors, 'error')} in {count(t.compared, 'bit')} compared)"
    if p.bounds is not None:
        b = p.bounds
        yield (
            f"bounds      {ratio(b.lower)} to {ratio(b.upper)} at {percent(b.confidence)}, two-sided; "
            f"{b.side} bound {ratio(b.value)} at {percent(b.deciding_confidence)}, one-sided ({b.method})"
        )
    if t.errors:
        yield (
            f"errors      {t.ones_as_zeros} ONEs received as ZEROs, {t.zeros_as_ones} ZEROs received as ONEs"
        )
    yield (
        f"bits        {t.received:,} received = {t.compared:,} compared + {t.unaligned:,} unaligned"
        f"; {p.bits_sent:,} sent".replace(",", "\u202f")
    )
    pattern = p.pattern + (" inverted" if p.inverted else "")
    also = f" (fits as well: {', '.join(p.alternatives)})" if p.alternatives else ""
    yield f"pattern     {pattern}, {p.bit_order} first{also}"
    speed = f" at {rate(p.rate_bps)}" if p.rate_bps else ""
    ended = f", ended by {p.ended_by}" if p.ended_by else ""
    yield f"time        {local_date(p.started)}, {duration(p.seconds)}{speed}{ended}"
    if p.delay:
        seconds = "" if p.delay.get("seconds") is None else f", {duration(float(p.delay['seconds']))}"
        modulo = f" (modulo {p.delay['modulo']:,} bits)" if p.delay.get("modulo") else ""
        yield f"loop delay  {count(int(p.delay['bits']), 'bit')}{seconds}{modulo}"
    for a in p.availability:
        if a.seconds:
            yield (
                f"{a.standard:<11} {count(a.seconds, 'second')}: {a.available} available, "
                f"{a.errored} errored, {a.severely_errored} severely errored, {a.unavailable} unavailable"
            )
    if p.after_decision.received:
        after = p.after_decision
        yield f"afterwards  {count(after.received, 'bit')} with {count(after.errors, 'error')}: not counted"
    for remark in p.remarks:
        yield f"remark      {remark}"


def _happened(p: PointAssessment) -> Iterator[str]:
    if not p.events:
        return
    yield ""
    yield "what happened"
    shown = [e for e in p.events if e.kind != "delay"]
    skipped = len(shown) - EVENTS_SHOWN
    half = EVENTS_SHOWN // 2
    for number, event in enumerate(shown):
        if skipped > 0 and number == half:
            yield f"  … {count(skipped, 'further event')}; `bitassay show --json` lists them"
        if skipped > 0 and half <= number < half + skipped:
            continue
        at = local_time(event.at) or "        "
        bit = "" if event.bit is None else f"  (bit {event.bit})"
        yield f"  {at}  {event.text}{bit}"
