"""A run in plain lines, for a pipe, a file or an e-mail, in the same order as on the terminal's page."""

from __future__ import annotations

import sys
from collections.abc import Iterator, Sequence
from typing import TextIO

from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.words import count, duration, local_date, local_time, percent, rate, ratio
from harness.cli.view.happenings import bit_words, first_and_last, joined
from harness.cli.view.ink import signs_for, writable
from harness.cli.view.ruler import ruler
from harness.cli.view.sheet import Sheet, sheet_of_assessment
from harness.record import Event

EVENTS_SHOWN = 12
LABEL = 12  # columns
WIDTH = 100


def print_page(a: Assessment, where: str, drawn_on: TextIO | None = None) -> None:
    """Print a run: as a drawn page on a terminal, in plain lines elsewhere.

    Parameters
    ----------
    drawn_on
        The terminal that showed the run while it went on: its last page is left standing there, also where
        standard output is no terminal.
    """
    from harness.cli.watch import terminal_among

    terminal = terminal_among(sys.stdout)
    if terminal is None:
        print_lines(page(a, where))
    terminal = terminal or drawn_on
    if terminal is not None:
        from harness.cli.view import terminal as drawing

        sys.stdout.flush()
        failed = a.status == "failed" or not a.whole.tally.received
        drawing.print_page(sheet_of_assessment(a, where), terminal, lines_below=3 if failed else 0)


def print_lines(lines: Iterator[str] | Sequence[str]) -> None:
    """Print lines, free of what a terminal would obey and of what the output cannot carry."""
    for line in lines:
        print(writable(line, sys.stdout.encoding))


def page(a: Assessment, where: str = "") -> Iterator[str]:
    """Give the lines of a run's page."""
    sheet = sheet_of_assessment(a)
    yield f"{sheet.unit} — {sheet.title}" if sheet.title else sheet.unit
    yield f"run {a.run}" if a.run else "no record kept"
    yield ""
    yield from _entry("required", [*sheet.required, *([sheet.risks] if sheet.risks else [])])
    yield from _entry("verdict", [sheet.verdict, *sheet.reasons])
    yield from _entry("took", sheet.to_do)
    yield ""
    if sheet.points:
        yield from _entry("BER", [*([sheet.ber] if sheet.ber else []), *sheet.sensitivities])
        yield from _entry("remarks", list(sheet.remarks))
        yield from _told(sheet.events)
        yield ""
        yield from _ruler(sheet)
        yield from _entry("points", sheet.points)
    else:
        yield from _numbers(a.whole, sheet)
        yield from _happened(a.whole)
    if where:
        yield ""
        yield f"record in {where}"


def _told(events: Sequence[Event]) -> Iterator[str]:
    """Give what happened during a sweep; what there is no room for is counted."""
    lines = _lines_of(events, "", "")
    yield from _entry("meanwhile", list(lines))


def _entry(label: str, lines: Sequence[str]) -> Iterator[str]:
    for number, line in enumerate(lines):
        yield f"{label if number == 0 else '':<{LABEL}}{line}"


def _ruler(sheet: Sheet) -> Iterator[str]:
    for label, line in ruler(sheet.bars, WIDTH - LABEL, signs_for(sys.stdout.encoding)):
        yield f"{label:>{LABEL - 2}}  {''.join(text for text, _ink in line)}".rstrip()


def _numbers(p: PointAssessment, sheet: Sheet) -> Iterator[str]:
    yield from _entry("BER", [sheet.ber])
    yield from _ruler(sheet)
    if p.bounds is not None and p.tally.compared:
        b = p.bounds
        yield from _entry(
            "bounds",
            [
                f"{ratio(b.lower)} to {ratio(b.upper)}, two-sided, {percent(b.confidence)} confidence",
                f"{b.side} bound {ratio(b.value)}, one-sided, {percent(b.deciding_confidence)} confidence",
                f"method: {b.method}",
            ],
        )
    clustering = p.clustering
    if clustering is not None and clustering.clustered and clustering.bounds:
        lower, upper = ratio(clustering.bounds["lower"]), ratio(clustering.bounds["upper"])
        sure = percent(clustering.bounds["confidence"])
        yield from _entry(
            "in bursts", [f"{lower} to {upper}, two-sided, {sure} confidence, from error events"]
        )
    yield from _entry("bits", [*sheet.bits, *sheet.details])
    yield from _entry("link", [sheet.path] if sheet.path else [])
    if p.pattern:
        order = f", {p.bit_order} first" if p.bit_order else ""
        inverted = ", received inverted" if p.inverted else ""
        also = f"; fits as well: {', '.join(p.alternatives)}" if p.alternatives else ""
        yield from _entry("pattern", [f"{p.pattern}{order}{inverted}{also}"])
    nominal = f"; nominal rate {rate(p.rate_bps)}" if p.rate_bps else ""
    label = "examined" if "untimed" in p.facts else "began"  # when bytes in a file came, nobody knows
    yield from _entry(label, [f"{local_date(p.started)}{nominal}"])
    yield from _entry("loop delay", _delay(p))
    if p.after_decision.received:
        after = p.after_decision
        words = f"{count(after.received, 'bit')} with {count(after.errors, 'error')} came after the decision"
        yield from _entry("afterwards", [f"{words} and are in no figure"])
    yield from _entry("remarks", list(sheet.remarks))


def _delay(p: PointAssessment) -> list[str]:
    if not p.delay or p.delay.get("bits") is None:
        return []
    words = count(int(p.delay["bits"]), "bit")
    if p.delay.get("seconds") is not None:
        words += f", {duration(float(p.delay['seconds']))}"
    if p.delay.get("modulo"):
        words += f", or longer by any multiple of {count(int(p.delay['modulo']), 'bit')}"
    return [words]


def _happened(p: PointAssessment) -> Iterator[str]:
    if not p.events:
        return
    yield ""
    yield "what happened"
    yield from _lines_of(p.events, "  ", "        ")


def _lines_of(events: Sequence[Event], lead: str, no_time: str) -> Iterator[str]:
    """Give a line for each thing that happened; the grave ones are never among what is left out."""
    for line in first_and_last(list(joined(events)), EVENTS_SHOWN):
        if isinstance(line, int):
            yield f"{lead}… {count(line, 'further event')}; `bitassay show --json` lists them"
            continue
        event = line.event
        at = local_time(event.at) or no_time
        often = f" ({line.times} times in a row)" if line.times > 1 else ""
        bit = "" if event.bit is None else f"  ({bit_words(event.bit)})"
        yield f"{lead}{at}  {event.text}{often}{bit}"
