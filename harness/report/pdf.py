"""The report as a PDF, set by Typst; the document goes to it as data, so that no text is read as markup."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any, Literal

from harness.report.document import Block, Document, Figure, Table, Verdict
from harness.report.figures.drawing import draw_all

Paper = Literal["a4", "us-letter"]
_TOGETHER = 16  # rows of a table that is not broken over pages
_ROOMY = 72  # characters that a row may have in letters of the usual size
_LONG = 26  # characters: text that may need more than one line


class NoTypst(Exception):
    """The extra that sets PDFs is not installed."""

    def __init__(self) -> None:
        super().__init__("a PDF needs Typst, which is not installed")
        self.what = "a PDF needs Typst, which is not installed"
        self.advice = "install it with `pip install 'bitassay[pdf]'`, or take --html and print that"


def need_typst() -> None:
    """Find Typst, before anything else is done.

    Raises
    ------
    NoTypst
    """
    try:
        import typst  # noqa: F401
    except ImportError as error:
        raise NoTypst from error


def to_pdf(document: Document, drawn: Sequence[str] | None = None, paper: Paper = "a4") -> bytes:
    """Set a report as a PDF.

    Parameters
    ----------
    drawn
        The document's figures as `draw_all` gives them, where they are drawn already.
    paper
        Its size.

    Raises
    ------
    NoTypst
    """
    need_typst()
    import matplotlib
    import typst

    from harness.report.figures.canvas import ON_PAPER, coloured

    drawn = draw_all(document.figures()) if drawn is None else drawn
    pictures = iter([coloured(svg, ON_PAPER) for svg in drawn])
    data = {
        "kind": document.kind,
        "title": document.title,
        "subject": document.subject,
        "date": document.date,
        "reference": list(document.reference),
        "banners": list(document.banners),
        "digests": [list(pair) for pair in document.digests],
        "program": document.program,
        "sections": [
            {"title": s.title, "blocks": [_block(block, pictures) for block in s.blocks]}
            for s in document.sections
        ],
    }
    template = Path(__file__).parent / "templates" / "report.typ"
    # The letters that figures were laid out with come with matplotlib: the same on every computer.
    letters = Path(matplotlib.get_data_path()) / "fonts" / "ttf"
    made = typst.compile(
        template,
        root=template.parent,
        font_paths=[letters],
        sys_inputs={"document": json.dumps(data, ensure_ascii=False), "paper": paper},
        format="pdf",
    )
    assert isinstance(made, bytes)
    return made


def _block(block: Block, pictures: Any) -> dict[str, Any]:
    """Give a block as data, with its kind, and a figure with its drawing."""
    kind = type(block).__name__
    if isinstance(block, Figure):
        return {"kind": kind, "title": block.title, "words": block.words, "svg": next(pictures)}
    if isinstance(block, Verdict):
        return {"kind": kind, "word": block.word, "words": block.words, "mood": block.kind}
    data = {"kind": kind, **asdict(block)}
    if isinstance(block, Table):
        widest = _widest(block)
        for number, about in enumerate(data["columns"]):
            about["stretch"] = number == widest
        data["crowded"] = _letters(block) > _ROOMY
        data["together"] = len(block.rows) <= _TOGETHER
    return data


def _letters(table: Table) -> int:
    """Give how many characters wide a table is, with the room between its columns."""
    rows = (tuple(column.label for column in table.columns), *table.rows)
    return sum(max(len(row[k]) for row in rows) + 2 for k in range(len(table.columns)))


def _widest(table: Table) -> int | None:
    """Give the column whose text is to be broken into lines; None where all are short."""
    lengths = [
        0 if column.number else max((len(row[k]) for row in table.rows), default=0)
        for k, column in enumerate(table.columns)
    ]
    longest = max(lengths, default=0)
    return lengths.index(longest) if longest > _LONG and len(table.columns) > 2 else None
