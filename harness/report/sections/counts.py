"""What was counted: tallies, slips, outages, availability, clustering."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.later import balance_of
from harness.assess.words import count, duration, iso, percent, ratio
from harness.record import Event
from harness.report.document import Block, Column, Entries, Entry, Listing, Paragraph, Section, Table
from harness.report.figures.of_spacing import bursts_of, gaps_of
from harness.report.figures.of_time import course_figures
from harness.report.material import Material, Measured
from harness.report.phrases import ber_name, digits, moment, number, point_label, point_name
from harness.report.series import Outage
from harness.statistics.availability import AvailabilityResult, nines

_ROWS = 20  # of slips and outages
_EVENTS = 40
_RULE = (
    "A stretch without evidence of under 8\u202f192 bits, after which the same place in the pattern holds, is a "
    "burst and its errors are counted; a longer one is an outage, and all of its bits are unaligned."
)


def counts_section(material: Material) -> Section:
    """Give every tally, slip and outage."""
    if not material.points:
        return Section("Counts", (Paragraph("Nothing was measured."),))
    blocks: list[Block] = []
    if not material.swept:
        blocks.append(_tallies(material))
        for m in material.points:
            blocks += _half_wrong(material, m)
    blocks += [block for m in material.points for block in (*_slips(material, m), *_outages(material, m))]
    if material.swept and not blocks:
        blocks.append(Paragraph("No slip and no outage at any point; the tallies stand under “The curve”."))
    blocks.append(Paragraph(_RULE, "aside"))
    return Section("Counts", tuple(blocks))


def _tallies(material: Material) -> Table:
    points = [m.assessed for m in material.points]
    balances = [balance_of(p) for p in points]
    cut = [b.at_a_cut if b else 0 for b in balances]
    later = [b.after_decision if b else 0 for b in balances]
    lines = (
        ("bits sent", [number(p.bits_sent) if p.bits_sent else "not sent here" for p in points]),
        ("bits received", [number(p.tally.received) for p in points]),
        *([("on their way when the run was cut", [number(n) for n in cut])] if any(cut) else []),
        *([("sent before the decision, came after it", [number(n) for n in later])] if any(later) else []),
        ("bits compared", [number(p.tally.compared) for p in points]),
        ("bits unaligned", [number(p.tally.unaligned) for p in points]),
        ("errors", [number(p.tally.errors) for p in points]),
        ("ONEs received as ZEROs", [number(p.tally.ones_as_zeros) for p in points]),
        ("ZEROs received as ONEs", [number(p.tally.zeros_as_ones) for p in points]),
        (ber_name(material), [digits(p.ber) for p in points]),
        ("slips", [number(p.slip_count) for p in points]),
        ("bits lost", [number(p.bits_lost) for p in points]),
        ("bits inserted", [number(p.bits_inserted) for p in points]),
        ("unaligned or lost", [_share(p.unaligned_ratio) for p in points]),
        ("BER, these taken as half wrong", [digits(p.ber_half_wrong) for p in points]),
        ("time measured", [duration(p.seconds) for p in points]),
    )
    names = [point_name(m) for m in material.points] if len(material.points) > 1 else ["count"]
    columns = (Column("", False), *(Column(name) for name in names))
    return Table("", columns, tuple((label, *values) for label, values in lines))


def _share(value: float | None) -> str:
    return percent(value) if value is not None else "none"


def _half_wrong(material: Material, m: Measured) -> Iterator[Block]:
    p = m.assessed
    if p.after_decision.received:
        after = p.after_decision
        yield Paragraph(
            f"{count(after.received, 'bit')} with {count(after.errors, 'error')} came after the decision; they are "
            "in no figure.",
            "aside",
        )
    if not (p.tally.unaligned or p.bits_lost):
        return
    name = f"{point_name(m)}: " if len(material.points) > 1 else ""
    yield Paragraph(
        f"{name}{count(p.tally.unaligned, 'bit')} unaligned and {count(p.bits_lost, 'bit')} lost are in no BER; "
        f"taken as half wrong they would make it {ratio(p.ber_half_wrong)}.",
        "against",
    )


def _slips(material: Material, m: Measured) -> Iterator[Table]:
    p = m.assessed
    events = [e for e in p.events if e.kind == "slip"]
    if not events:
        return
    rows = []
    for event in events[:_ROWS]:
        size = int(event.data["bits"])
        words = f"{number(abs(size))} {'lost' if size < 0 else 'inserted'}"
        modulo = event.data.get("modulo")
        rows.append(
            (iso(event.at) or "", number(event.bit or 0), words, number(modulo) if modulo else "exact")
        )
    more = f"{number(p.slip_count - len(rows))} more are not listed; all are counted"
    yield Table(
        f"Slips{_of(material, m)}",
        (Column("time (UTC)", False), Column("at received bit"), Column("bits"), Column("known modulo")),
        tuple(rows),
        more if p.slip_count > len(rows) else "",
    )


def _outages(material: Material, m: Measured) -> Iterator[Table]:
    found = m.series.outages()
    if not found:
        return
    rows = tuple(_outage(o) for o in found[:_ROWS])
    yield Table(
        f"Outages{_of(material, m)}",
        (
            Column("in the second from (UTC)", False),
            Column("what", False),
            Column("from received bit"),
            Column("bits"),
            Column("seconds touched"),
        ),
        rows,
        f"{number(len(found) - _ROWS)} more are not listed; all are counted" if len(found) > _ROWS else "",
    )


def _outage(o: Outage) -> tuple[str, ...]:
    what = "no bits came, though due" if o.silent else "unaligned"
    return iso(o.at) or "", what, number(o.bit), number(o.bits), number(o.seconds)


def _of(material: Material, m: Measured) -> str:
    return f", {point_name(m)}" if len(material.points) > 1 else ""


def availability_section(material: Material) -> Section | None:
    """Give availability by each standard that was evaluated; a sweep's points are too short for it."""
    if material.swept:
        return None
    rows, said = [], []
    for m in material.points:
        for a in m.assessed.availability:
            name = f"{a.standard}{_of(material, m)}"
            rows.append((name, a))
            said += [f"{name}: {words}" for words in _about(a)]
    if not rows:
        return None
    columns = (Column("", False), *(Column(name) for name, _a in rows))
    lines = [_line(label, [a for _n, a in rows], index) for index, label in enumerate(_LABELS)]
    blocks: list[Block] = [Table("", columns, tuple(line for line in lines if line is not None))]
    if said:
        blocks.append(Listing(tuple(said)))
    blocks.append(
        Paragraph(
            "ITU-T G.821 (12/2002): a second with an error is errored, one with a BER of 1e-3 or more severely "
            "errored; here a second with unaligned bits or a slip is errored too, one mostly unaligned or without "
            "due bits severely. Unavailable time begins with the first of ten severely errored seconds in a row "
            "and ends with the first of ten that are not; errored seconds count in available time only.",
            "aside",
        )
    )
    return Section("Availability", tuple(blocks))


_LABELS = (
    "whole seconds",
    "available",
    "unavailable",
    "errored (available time)",
    "severely errored (available time)",
    "errored second ratio",
    "severely errored second ratio",
    "background block error ratio",
    "block length, bits",
)


def _line(label: str, results: list[AvailabilityResult], index: int) -> tuple[str, ...] | None:
    def value(a: AvailabilityResult) -> str:
        return (
            number(a.seconds),
            number(a.available),
            number(a.unavailable),
            number(a.errored),
            number(a.severely_errored),
            digits(a.esr),
            digits(a.sesr),
            digits(a.bber) if a.block_bits else "",
            number(a.block_bits) if a.block_bits else "",
        )[index]

    values = [value(a) for a in results]
    return (label, *values) if any(values) else None


def _about(a: AvailabilityResult) -> Iterator[str]:
    yield from (judged.words for judged in a.judged)
    for period in a.periods[:_ROWS]:
        ended = "" if period.ended else ", until the sitting ended at least"
        yield f"unavailable for {count(period.seconds, 'second')} from {iso(period.at)}{ended}"
    if len(a.periods) > _ROWS:
        yield f"{len(a.periods) - _ROWS} more unavailable periods are not listed"
    if a.ratio is not None and a.ratio_lower is not None and a.ratio_upper is not None and a.seconds:
        reach = "" if a.ratio >= 1 else f", {nines(a.ratio):.2g} nines"
        yield (
            f"available {percent(a.ratio)} of the time{reach}; {percent(a.ratio_lower)} to "
            f"{percent(a.ratio_upper)} at {percent(a.confidence)} confidence"
        )
    if a.idle:
        yield f"{count(a.idle, 'second')} in which nothing was due are left out"
    if a.partial and not any("partial second" in warning for warning in a.warnings):
        yield f"{count(a.partial, 'partial second')} left out"
    yield from a.warnings


def clustering_section(material: Material) -> Section | None:
    """Say in words whether errors come in bursts, with gaps and bursts drawn."""
    blocks: list[Block] = []
    for m in material.points:
        blocks += _clustering(material, m)
    if not blocks and not material.swept:
        errors = sum(m.assessed.tally.errors for m in material.points)
        blocks.append(Paragraph(_not_judged(errors)))
    return Section("Clustering", tuple(blocks)) if blocks else None


def _not_judged(errors: int) -> str:
    if errors < 2:
        return "With fewer than two errors nothing can be said about clustering."
    return "Not every error's place was kept, so clustering is not judged; counts are exact."


def _clustering(material: Material, m: Measured) -> Iterator[Block]:
    c = m.assessed.clustering
    if c is None or (material.swept and not c.clustered):
        return
    name = f"{point_name(m)}: " if len(material.points) > 1 else ""
    yield Paragraph(f"{name}{c.words}", "against" if c.clustered else "plain")
    if material.swept:
        return
    figures = []
    if c.p_value is not None:
        words = "1 for independent errors"
        figures.append(
            Entry("dispersion", (f"{c.dispersion:.4g} ({words})" if c.dispersion is not None else "none",))
        )
        p_value = f"{c.p_value:.4g}" if c.p_value > 1e-16 else "under 1e-16"
        figures.append(Entry("p-value", (f"{p_value}; under 0.01 errors are called clustered",)))
    if c.events is not None:
        gap = c.more.get("event_gap_bits")
        rule = f"; errors at most {count(int(gap), 'bit')} apart are one event" if gap else ""
        figures.append(Entry("error events", (f"{number(c.events)}{rule}",)))
    if c.bounds is not None:
        b = c.bounds
        words = f"{digits(b['lower'])} to {digits(b['upper'])} at {percent(b['confidence'])} confidence"
        figures.append(Entry("bounds from events", (words, f"on the BER, {b['method']}")))
    elif c.too_few_events:
        figures.append(Entry("bounds from events", ("none: under ten events",)))
    if figures:
        yield Entries(tuple(figures))
    for figure in (gaps_of(material, m), bursts_of(material, m)):
        if figure is not None:
            yield figure


def course_section(material: Material) -> Section:
    """Show errors over time, and what happened in words."""
    blocks: list[Block] = [*course_figures(material)]
    table = _events(material)
    blocks.append(table if table is not None else Paragraph("No event was recorded."))
    return Section("Course of the run", tuple(blocks))


def _events(material: Material) -> Table | None:
    several = len(material.points) > 1
    every = [(m, event) for m in material.points for event in m.assessed.events]
    found = [(m, event) for m, event in every if not (material.swept and _ordinary(event))]
    found.sort(key=lambda pair: pair[1].at or 0)
    if not found:
        return None
    shown = found
    if len(found) > _EVENTS:
        shown = [*found[: _EVENTS // 2], *found[-_EVENTS // 2 :]]
    rows = tuple(
        (
            moment(event.at)[11:19] if event.at else "",
            *((point_label(m),) if several else ()),
            event.text,
            number(event.bit) if event.bit is not None else "",
        )
        for m, event in shown
    )
    columns = (
        Column("local time", False),
        *((Column("at", False),) if several else ()),
        Column("what happened", False),
        Column("received bit"),
    )
    left = len(found) - len(shown)
    notes = [f"{number(left)} events between the first and the last ones are not listed"] if left else []
    if len(found) < len(every):
        notes.append(
            "what every point begins with is left out: its setting, finding the pattern, the loop delay"
        )
    return Table("", columns, rows, "; ".join(notes))


def _ordinary(event: Event) -> bool:
    """Whether an event is of those with which each point of a sweep begins."""
    if event.kind == "aligned":
        return event.bit == 0
    return event.kind == "delay" or (event.kind == "instrument" and " set to " in event.text)
