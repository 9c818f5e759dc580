"""Unit and order; requirement and plan in plain words; verdict, bounds and retests."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.requirement import requirement_of
from harness.assess.tries import NO_TRY, UNKNOWN, count_of, result_of, unknown, words_of
from harness.assess.tries import listed as listed_runs
from harness.assess.words import count, duration, iso, percent
from harness.report.document import Block, Column, Entries, Entry, Listing, Paragraph, Section, Table
from harness.report.figures.of_counts import stairs_of
from harness.report.material import Material, Measured
from harness.report.phrases import ber_name, digits, number, point_name, rejected_over
from harness.statistics.objectives import Objectives
from harness.statistics.plans import describe

_METHODS = {
    "Clopper-Pearson": (
        "Exact binomial bounds of Clopper and Pearson (1934) for the errors counted in the bits compared: "
        "with k errors in n bits and α = 1 − confidence, the lower bound is the α/2 quantile of the Beta "
        "distribution (k, n − k + 1), the upper one the 1 − α/2 quantile of (k + 1, n − k); a one-sided bound "
        "takes all of α."
    ),
    "order of the plan's outcomes": (
        "The plan chose the stop, so the bounds follow from its own order of outcomes, from low to high BER: "
        "acceptances by bit, then undecided ends by errors, then rejections from the latest bit to the "
        "earliest. The upper bound is the BER at which outcomes up to the one seen have the probability α/2, "
        "the lower bound the one at which outcomes from the one seen on have it, both exact."
    ),
    "bits up to the rejecting error": (
        "The run ended at the first error too many, so the bounds are those of inverse sampling: with error k "
        "at bit t, the lower bound is the α/2 quantile of the Beta distribution (k, t − k + 1), the upper one "
        "the 1 − α/2 quantile of (k, t − k)."
    ),
}

_BOUNDARIES = 200  # rows of a sequential plan's table


def unit_section(material: Material) -> Section:
    """Give every free key of the device, as the profile and its overrides state them."""
    run = material.run
    entries = [Entry(key.replace("_", " "), (value,)) for key, value in run.device.items() if value]
    users = dict.fromkeys(str(s.host.get("user", "")) for s in run.sittings)
    if "operator" not in run.device and any(users):
        entries.append(Entry("account", (f"{', '.join(u for u in users if u)} (signed in at the computer)",)))
    entries.append(Entry("run", (run.key, f"{run.command}: {run.title}" if run.title else run.command)))
    entries.append(Entry("times (UTC)", (f"{iso(run.started)} to {iso(run.ended) or 'now'}",)))
    return Section("Unit and order", (Entries(tuple(entries)),))


def requirement_section(material: Material) -> Section:
    """Say what is required and how it is decided, in plain words."""
    judged = [m for m in material.points if m.plan is not None]
    sensitivity = material.assessment.required_sensitivity
    blocks: list[Block] = []
    if sensitivity:
        blocks.append(Paragraph(f"Requirement: {sensitivity}. {_demonstrated(material)}"))
    if judged:
        plan = judged[0].plan
        assert plan is not None
        if material.swept:
            blocks.append(Paragraph(f"At {'; '.join(point_name(m) for m in judged)}:"))
        blocks += [Paragraph(text) for text in describe(plan, judged[0].assessed.rate_bps).split("\n\n")]
    elif not sensitivity:
        blocks.append(Paragraph("Nothing is required: this run measures and gives no verdict."))
    rules = tuple(_rules(material))
    if rules and (judged or sensitivity):
        blocks += [Paragraph("A pass needs all of these too:"), Listing(rules)]
    limits = _stop(material)
    if limits:
        blocks.append(Paragraph(limits))
    return Section("Requirement and plan", tuple(blocks))


def _demonstrated(material: Material) -> str:
    """Say by what a required sensitivity is demonstrated."""
    search = material.section("search")
    sure = float((search or material.section("requirement")).get("confidence") or 0.95)
    return (
        "A unit passes where the bounds on its sensitivity lie wholly on the good side of that, and fails where they "
        f"lie wholly on the other; they are two-sided, at {percent(sure)} confidence."
    )


def _rules(material: Material) -> Iterator[str]:
    r = requirement_of(material.settings)
    if r is None:
        return
    yield f"at most {count(r.max_slips, 'slip')}" if r.max_slips else "no slip"
    yield "a polarity that turns over in mid-stream counts as a slip"
    yield f"at most {percent(r.max_unaligned_ratio)} of the bits unaligned or lost"
    outcome = "a fail" if r.lost_link == "fail" else "undecided"
    yield (
        "no lost link, which is three seconds in which bits were due and none was aligned; "
        f"one makes the verdict {outcome}"
    )
    if r.count == "events":
        yield (
            f"counted are error events, not errors: errors at most {count(r.event_gap_bits, 'bit')} apart are "
            "one event, a rule fixed before the run"
        )
    elif r.clustered == "undecided":
        yield "errors that do not come in clusters; clustered ones make a pass undecided"
    if r.objectives is not None:
        yield f"by {r.standard}: {', '.join(_objectives(r.objectives))}"


def _objectives(asked: Objectives) -> Iterator[str]:
    for name in ("esr", "sesr", "bber"):
        value = getattr(asked, name)
        if value is not None:
            yield f"{name.upper()} at most {value:g}"
    if asked.availability is not None:
        yield f"availability at least {asked.availability:g}"


def _stop(material: Material) -> str:
    stop = material.section("stop")
    said = [
        f"{number(int(stop['bits']))} bits sent" if stop.get("bits") else "",
        duration(float(stop["seconds"])) if stop.get("seconds") else "",
        count(int(stop["errors"]), "error") if stop.get("errors") else "",
    ]
    said = [text for text in said if text]
    if not said:
        return ""
    each = "Each point" if material.swept else "The run"
    first = ", whichever comes first" if len(said) > 1 else ""
    return f"{each} ends after {' or '.join(said)} at the latest{first}."


def verdict_section(material: Material) -> Section:
    """Give the verdict with its reasons, and the plan's stairs with the path that was taken."""
    a = material.assessment
    blocks: list[Block] = []
    if a.verdict is None:
        blocks.append(Paragraph("No verdict was given."))
    else:
        blocks.append(
            Entries((Entry("verdict", (a.verdict,), "against" if a.verdict == "FAIL" else "plain"),))
        )
        blocks.append(Listing(tuple(a.reasons)))
    for m in material.points:
        p = m.assessed
        if p.verdict is not None and len(material.points) > 1:
            why = f": {'; '.join(p.reasons)}" if p.verdict != a.verdict else ""  # else said above
            blocks.append(Paragraph(f"{point_name(m)}: {p.verdict}{why}"))
    for m in material.points:
        figure = stairs_of(material, m)
        if figure is not None:
            blocks.append(figure)
    return Section("Verdict", tuple(blocks))


def bounds_section(material: Material) -> Section:
    """Give the bounds and say how they were got."""
    measured = [m for m in material.points if m.assessed.bounds is not None and m.assessed.tally.compared]
    if not measured:
        return Section("Bounds", (Paragraph("No bit was compared: nothing bounds the BER."),))
    blocks: list[Block] = []
    if not material.swept:
        blocks += [_bounds_of(material, m) for m in measured]
    methods = dict.fromkeys(m.assessed.bounds.method for m in measured if m.assessed.bounds)
    for method in methods:
        known = next((words for start, words in _METHODS.items() if method.startswith(start)), "")
        blocks.append(Paragraph(f"Method: {method}. {known}".rstrip()))
    blocks.append(
        Paragraph(
            "Bounds speak of compared bits and take errors as independent of one another; what clustering does "
            "to them stands under “Clustering”."
        )
    )
    blocks += _again(measured)
    remarks = dict.fromkeys(r for m in measured if m.assessed.bounds for r in m.assessed.bounds.remarks)
    if remarks:
        blocks.append(Listing(tuple(remarks), "against"))
    return Section("Bounds", tuple(blocks))


def _again(measured: list[Measured]) -> list[Block]:
    """Say by which command anyone gets the same bounds, where a count alone gives them."""
    m = measured[0]
    b, t = m.assessed.bounds, m.assessed.tally
    if b is None or b.method != "Clopper-Pearson" or len(measured) > 1:
        return []
    command = f"bitassay bounds {t.errors} {t.compared} --confidence {b.confidence:g}"
    return [Paragraph(f"To compute them again: {command}", "aside")]


def _bounds_of(material: Material, m: Measured) -> Table:
    p = m.assessed
    b, t = p.bounds, p.tally
    assert b is not None
    name = ber_name(material)
    over = rejected_over(p)
    decides = (
        f"{f', of the plan, over {over}' if over else ''}: decides" if p.verdict in ("PASS", "FAIL") else ""
    )
    rows = [
        (f"{name} measured", f"{digits(p.ber)}", f"{number(t.errors)} / {number(t.compared)} bits"),
        ("lower bound, two-sided", digits(b.lower), percent(b.confidence)),
        ("upper bound, two-sided", digits(b.upper), percent(b.confidence)),
        (f"{b.side} bound, one-sided{decides}", digits(b.value), percent(b.deciding_confidence)),
    ]
    if p.plan is not None:
        rows.append(("required, at most", digits(p.plan["ber"]), percent(p.plan["confidence"])))
    title = point_name(m) if len(material.points) > 1 else ""
    return Table(title, (Column("", False), Column(name), Column("from, or confidence")), tuple(rows))


def boundaries_section(material: Material) -> Section | None:
    """Give a sequential plan's table of boundaries; none for the other plans."""
    m = next((m for m in material.points if m.plan is not None and m.plan.boundaries), None)
    if m is None or m.plan is None:
        return None
    shown = m.plan.boundaries[:_BOUNDARIES]
    rows = tuple(
        (number(b.errors), number(b.accept_at), number(b.reject_at) if b.reject_at is not None else "never")
        for b in shown
    )
    left = len(m.plan.boundaries) - len(shown)
    columns = (
        Column("errors so far"),
        Column("passes from so many bits on"),
        Column("fails if it comes at or before bit"),
    )
    note = f"{number(left)} more rows: `bitassay plan --json` gives all of them" if left else ""
    return Section("Table of boundaries", (Table("", columns, rows, note),))


def retest_section(material: Material) -> Section | None:
    """Tell of earlier tries; none where nothing was required."""
    m = next((m for m in material.points if m.plan is not None), None)
    if m is None or m.plan is None:
        return None
    if unknown(m.facts):
        return Section("Retests", (Paragraph(f"{UNKNOWN[0].upper()}{UNKNOWN[1:]}.", "against"),))
    tries, listed = count_of(m.facts), listed_runs(m.facts)
    if not listed:
        serial = material.run.device.get("serial_number")
        text = (
            "This is the first test of this unit against this requirement in this store."
            if serial
            else "The unit has no serial number, so whether it was tested before cannot be told."
        )
        return Section("Retests", (Paragraph(text),))
    rows = tuple((str(run.get("run", "")), result_of(run)) for run in listed)
    nothing_came = m.assessed.status != "running" and not m.assessed.tally.received
    words = words_of(m.plan.consumer_risk, m.facts, without_a_bit=nothing_came)
    blocks: list[Block] = [
        Paragraph(words, "against") if words else Paragraph("No earlier run of this unit could have passed."),
        Paragraph(f"Every earlier run counts, also void, interrupted and undecided ones; but {NO_TRY}."),
    ]
    left = tries - sum(not run.get("without_a_bit") for run in listed)
    more = f"{left} earlier ones are not listed" if left > 0 else ""
    columns = (Column("run", False), Column("verdict or status", False))
    blocks.append(Table("", columns, rows, more))
    return Section("Retests", tuple(blocks))
