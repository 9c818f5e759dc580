"""What a report consists of, before it takes a form: sections of paragraphs, entries, tables and figures.

One document is assembled from a record; page, PDF and text are made of it, so that they say the same.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields, is_dataclass, replace
from typing import Any, Literal, TypeVar

from harness.report.figures.drawings import Drawing
from harness.report.harmless import plain

Tone = Literal["plain", "against", "aside"]  # against: it speaks against the unit or against the record
Made = TypeVar("Made")


@dataclass(frozen=True, slots=True)
class Paragraph:
    """Running text."""

    text: str
    tone: Tone = "plain"


@dataclass(frozen=True, slots=True)
class Entry:
    """A label and what stands beside it, line by line."""

    label: str
    lines: tuple[str, ...]
    tone: Tone = "plain"


@dataclass(frozen=True, slots=True)
class Entries:
    """Labels with what stands beside them."""

    entries: tuple[Entry, ...]


@dataclass(frozen=True, slots=True)
class Column:
    """A column's head; numbers stand to the right."""

    label: str
    number: bool = True


@dataclass(frozen=True, slots=True)
class Table:
    """Rows under heads, all of the same length."""

    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""


@dataclass(frozen=True, slots=True)
class Listing:
    """Items, each a sentence or a few."""

    items: tuple[str, ...]
    tone: Tone = "plain"


@dataclass(frozen=True, slots=True)
class Figure:
    """A drawing, and the same in words for whoever does not see it."""

    title: str
    words: str
    drawing: Drawing


@dataclass(frozen=True, slots=True)
class Verdict:
    """The verdict, or what stands in its place."""

    word: str
    words: str
    kind: Literal["pass", "fail", "open", "none"]


@dataclass(frozen=True, slots=True)
class Verbatim:
    """Text as it was given, line by line."""

    text: str


@dataclass(frozen=True, slots=True)
class Signatures:
    """Lines to sign on: (role, name as far as it is known)."""

    roles: tuple[tuple[str, str], ...]


Block = Paragraph | Entries | Table | Listing | Figure | Verdict | Verbatim | Signatures


@dataclass(frozen=True, slots=True)
class Section:
    """A heading and what stands under it."""

    title: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True, slots=True)
class Document:
    """A report."""

    kind: str  # what paper it is
    title: str
    subject: str  # the unit or the lot
    date: str
    reference: tuple[str, str]  # what it reports on: ("run", its key)
    banners: tuple[str, ...]  # what nobody may overlook
    sections: tuple[Section, ...]
    digests: tuple[tuple[str, str], ...]  # (of what, SHA-256 in hexadecimal, or why there is none)
    program: str  # name and version

    def figures(self) -> tuple[Figure, ...]:
        """Give all figures, in order."""
        return tuple(block for s in self.sections for block in s.blocks if isinstance(block, Figure))


def harmless(value: Made) -> Made:
    """Give a document whose every text is free of control characters, wherever it came from."""
    return _harmless(value, False)  # type: ignore[no-any-return]


def _harmless(value: Any, lines: bool) -> Any:
    if isinstance(value, str):
        text = plain(value, keep_lines=lines)
        return text if lines else text.replace(" %", "\u00a0%")  # a number keeps its sign on its line
    if isinstance(value, tuple):
        return tuple(_harmless(v, lines) for v in value)
    if isinstance(value, Mapping):
        return {plain(str(k)): _harmless(v, lines) for k, v in value.items()}
    if is_dataclass(value) and not isinstance(value, type):
        keep = isinstance(value, Verbatim)
        return replace(value, **{f.name: _harmless(getattr(value, f.name), keep) for f in fields(value)})
    return value
