"""The report as plain text: for a terminal, an e-mail, a printer without anything else."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence

from harness.report.document import (
    Document,
    Entries,
    Figure,
    Listing,
    Paragraph,
    Section,
    Signatures,
    Table,
    Verbatim,
    Verdict,
)

WIDTH = 96
LABEL = 24
_GAP = 2  # columns between a table's columns


def to_text(document: Document) -> str:
    """Write a report as text, lines of at most 96 columns where nothing longer is quoted."""
    return "\n".join(line.rstrip() for line in _lines(document)) + "\n"


def _lines(document: Document) -> Iterator[str]:
    yield f"{document.subject} — {document.title}"
    what, name = document.reference
    yield document.date if name in document.subject else f"{document.date}, {what} {name}"
    for banner in document.banners:
        yield ""
        yield from textwrap.wrap(f"!! {banner}", WIDTH, subsequent_indent="   ")
    for section in document.sections:
        yield from _section(section)
    yield ""
    yield "─" * WIDTH
    for what, digest in document.digests:
        yield f"{what:<7} SHA-256 {digest}"


def _section(section: Section) -> Iterator[str]:
    yield ""
    yield f"── {section.title} {'─' * max(0, WIDTH - len(section.title) - 4)}"
    for number, block in enumerate(section.blocks):
        if number:
            yield ""
        match block:
            case Paragraph():
                yield from textwrap.wrap(block.text, WIDTH)
            case Entries():
                for entry in block.entries:
                    yield from _entry(entry.label, entry.lines)
            case Verdict():
                yield from _entry("VERDICT", [block.word, *([block.words] if block.words else [])])
            case Listing():
                for item in block.items:
                    yield from textwrap.wrap(item, WIDTH, initial_indent="- ", subsequent_indent="  ")
            case Table():
                yield from _table(block)
            case Figure():
                yield from textwrap.wrap(f"{block.title}: {block.words}", WIDTH)
            case Signatures():
                yield from _signatures(block)
            case Verbatim():
                yield from (f"    {line}" for line in block.text.split("\n"))


def _entry(label: str, lines: Sequence[str]) -> Iterator[str]:
    wide = f"{label:<{LABEL}}"
    if len(label) >= LABEL:
        yield label
        wide = " " * LABEL
    for line in lines:
        for part in textwrap.wrap(line, WIDTH - LABEL) or [""]:
            yield wide + part
            wide = " " * LABEL


def _table(table: Table) -> Iterator[str]:
    if table.title:
        yield table.title
    heads = [column.label for column in table.columns]
    widths = [max(len(row[i]) for row in [heads, *table.rows]) for i in range(len(heads))]
    if sum(widths) + _GAP * (len(widths) - 1) > WIDTH:
        yield from _tall(table)
    else:
        rows: list[Sequence[str]] = [heads] if any(heads) else []
        for row in [*rows, *table.rows]:
            cells = [
                f"{text:>{width}}" if column.number else f"{text:<{width}}"
                for text, width, column in zip(row, widths, table.columns, strict=True)
            ]
            yield (" " * _GAP).join(cells)
    if table.note:
        yield from textwrap.wrap(f"({table.note})", WIDTH)


def _tall(table: Table) -> Iterator[str]:
    """Give a table that is too wide as entries, row by row."""
    for number, row in enumerate(table.rows):
        if number:
            yield ""
        for column, text in zip(table.columns, row, strict=True):
            if text:
                yield from _entry(column.label, [text])


def _signatures(block: Signatures) -> Iterator[str]:
    for role, name in block.roles:
        yield ""
        yield f"{role:<14}{name or '.' * 34:<36} date {'.' * 12} signature {'.' * 16}"
