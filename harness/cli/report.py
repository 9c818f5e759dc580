"""`bitassay report` and `export`: paper and data from a record."""

from __future__ import annotations

import io
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from harness.cli.failure import UserError, warn
from harness.cli.files import may_write, write_whole
from harness.cli.output import open_reading

if TYPE_CHECKING:
    from harness.report.document import Document
    from harness.report.lot import LotMaterial
    from harness.report.material import Material
    from harness.store import Store

FORMATS = ("csv", "json", "junit")
PAPERS = {"a4": "a4", "letter": "us-letter"}


@dataclass(frozen=True, slots=True)
class Forms:
    """Which forms of a report are wanted."""

    html: Path | None = None
    pdf: Path | None = None
    text: bool = False
    paper: str = "a4"

    @property
    def any(self) -> bool:
        """Whether a report is asked for at all."""
        return self.text or self.html is not None or self.pdf is not None


@dataclass(frozen=True, slots=True)
class Export:
    """What is to be exported, and where to; no output: standard output."""

    format: str = "csv"
    output: Path | None = None
    points: bool = False
    schema: bool = False


def report(run: str | None, forms: Forms, store: str | None, lot: str | None = None) -> int:
    """Write the report of a run or of a lot; without a file to write it is printed as text."""
    ready(forms)
    if lot is not None:
        if run is not None:
            raise UserError("a report is of a run or of a lot", "leave out RUN or --lot")
        write_lot(_lot_named(lot, store), forms)
        return 0
    from harness.report.assemble import assemble

    _write_forms(assemble(_material(run or "last", store)), forms)
    return 0


def ready(forms: Forms) -> None:
    """See that all forms can be written, before anything else is done.

    Raises
    ------
    UserError
    """
    if forms.paper not in PAPERS:
        raise UserError(f'there is no paper "{forms.paper}" here', f"choose one of {', '.join(PAPERS)}")
    if forms.html is not None and forms.pdf is not None and forms.html.absolute() == forms.pdf.absolute():
        raise UserError(f"--html and --pdf both name {forms.html}", "give them different names")
    for path in (forms.html, forms.pdf):
        if path is not None:
            may_write(path)
    if forms.pdf is not None:
        _need_typst()


def write_lot(material: LotMaterial, forms: Forms, *, aside: bool = False) -> None:
    """Write a lot's report; `aside` keeps standard output free."""
    from harness.report.lot import assemble_lot

    _write_forms(assemble_lot(material), forms, aside=aside)


def _write_forms(document: Document, forms: Forms, *, aside: bool = False) -> None:
    said = []
    if forms.html is not None or forms.pdf is not None:
        from harness.report.figures.drawing import draw_all

        drawn = draw_all(document.figures())
        if forms.html is not None:
            from harness.report.html import to_html

            said.append(write_whole(forms.html, to_html(document, drawn).encode("utf-8")))
        if forms.pdf is not None:
            from harness.report.pdf import to_pdf

            paper = PAPERS[forms.paper]
            said.append(write_whole(forms.pdf, to_pdf(document, drawn, paper)))  # type: ignore[arg-type]
    if forms.text or not forms.any:
        from harness.cli.page import print_lines
        from harness.report.text import to_text

        print_lines(to_text(document).splitlines())
    for words in said:
        print(words, file=sys.stderr if forms.text or aside else sys.stdout)


def _material(run: str, store: str | None) -> Material:
    with open_reading(store) as opened:
        return _load(opened, opened.find(run))


def _load(opened: Store, key: str) -> Material:
    from harness.report.material import material_of
    from harness.store import digest_of

    record = opened.load(key)
    kept = opened.digest(key)
    digest = digest_of(record) if kept is not None else None
    return material_of(record, kept, digest, written=time.time_ns(), program=_program())


def _program() -> str:
    return f"bitassay {version('bitassay')}"


def lot_material(name: str, store: str | None) -> LotMaterial | None:
    """Gather a lot from the store; None where it holds no run of it."""
    from harness.report.lot import gather

    with open_reading(store) as opened:
        materials = (_load(opened, key) for key in opened.in_lot(name))
        return gather(name, materials, written=time.time_ns(), program=_program())


def _lot_named(name: str, store: str | None) -> LotMaterial:
    """Find a lot by its name, or the newest by `last`."""
    with open_reading(store) as opened:
        known = opened.lots()
    if name not in known and name == "last" and known:
        name = known[0]
    material = lot_material(name, store) if name in known else None
    if material is None:
        some = ", ".join(known[:5]) + (" and others" if len(known) > 5 else "")
        raise UserError(
            f'there is no lot "{name}" in the store',
            f"it holds {some}" if known else "`bitassay lot PROFILE` measures one",
        )
    return material


def _need_typst() -> None:
    from harness.report.pdf import NoTypst, need_typst

    try:
        need_typst()
    except NoTypst as error:
        raise UserError(error.what, error.advice) from error


def export(run: str, wanted: Export, store: str | None) -> int:
    """Write a run's data, or the schema of its JSON."""
    if wanted.output is not None:
        may_write(wanted.output)
    if wanted.schema:
        from harness.report.exports.data import schema_text

        _deliver(wanted.output, lambda to: _put(to, schema_text()))
        return 0
    if wanted.format not in FORMATS:
        raise UserError(f'there is no format "{wanted.format}"', f"choose one of {', '.join(FORMATS)}")
    if wanted.points and wanted.format != "csv":
        raise UserError("--points is for CSV", f"leave it out: {wanted.format} holds every point anyway")
    material = _material(run, store)
    for what in material.broken:
        warn(f"the record does not hold: {what}")
    _deliver(wanted.output, lambda to: _writer(wanted)(material, to))
    return 0


def _writer(wanted: Export) -> Callable[[Material, TextIO], None]:
    if wanted.format == "csv":
        from harness.report.exports.tables import write_points, write_seconds

        return write_points if wanted.points else write_seconds
    if wanted.format == "json":
        from harness.report.exports.data import write_json

        return write_json
    from harness.report.exports.testcases import write_junit

    return write_junit


def _put(to: TextIO, text: str) -> None:
    to.write(text)


def _deliver(output: Path | None, write: Callable[[TextIO], None]) -> None:
    """Write UTF-8 to a file, whole or not at all, or to standard output; line ends as they are written."""
    text = io.StringIO(newline="")
    write(text)
    data = text.getvalue().encode("utf-8", "replace")
    if output is None:
        sys.stdout.flush()
        sys.stdout.buffer.write(data)
        sys.stdout.buffer.flush()
        return
    print(write_whole(output, data), file=sys.stderr)
