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
from harness.cli.output import open_reading

if TYPE_CHECKING:
    from harness.report.material import Material

FORMATS = ("csv", "json", "junit")
PAPERS = {"a4": "a4", "letter": "us-letter"}


@dataclass(frozen=True, slots=True)
class Forms:
    """Which forms of a report are wanted."""

    html: Path | None = None
    pdf: Path | None = None
    text: bool = False
    paper: str = "a4"


@dataclass(frozen=True, slots=True)
class Export:
    """What is to be exported, and where to; no output: standard output."""

    format: str = "csv"
    output: Path | None = None
    points: bool = False
    schema: bool = False


def report(run: str, forms: Forms, store: str | None) -> int:
    """Write a report; without a file to write it is printed as text."""
    from harness.report.assemble import assemble

    if forms.paper not in PAPERS:
        raise UserError(f'there is no paper "{forms.paper}" here', f"choose one of {', '.join(PAPERS)}")
    if forms.pdf is not None:
        _need_typst()
    document = assemble(_material(run, store))
    if forms.html is not None or forms.pdf is not None:
        from harness.report.figures.drawing import draw_all

        drawn = draw_all(document.figures())
        if forms.html is not None:
            from harness.report.html import to_html

            _write(forms.html, to_html(document, drawn).encode("utf-8"))
        if forms.pdf is not None:
            from harness.report.pdf import to_pdf

            paper = PAPERS[forms.paper]
            _write(forms.pdf, to_pdf(document, drawn, paper))  # type: ignore[arg-type]
    if forms.text or (forms.html is None and forms.pdf is None):
        from harness.cli.view.ink import writable
        from harness.report.text import to_text

        for line in to_text(document).splitlines():
            print(writable(line, sys.stdout.encoding))
    for path in (forms.html, forms.pdf):
        if path is not None:
            print(f"wrote {path}", file=sys.stderr if forms.text else sys.stdout)
    return 0


def _material(run: str, store: str | None) -> Material:
    from harness.report.material import material_of
    from harness.store import digest_of

    with open_reading(store) as opened:
        key = opened.find(run)
        record = opened.load(key)
        kept = opened.digest(key)
    digest = digest_of(record) if kept is not None else None
    program = f"bitassay {version('bitassay')}"
    return material_of(record, kept, digest, written=time.time_ns(), program=program)


def _need_typst() -> None:
    from harness.report.pdf import NoTypst, need_typst

    try:
        need_typst()
    except NoTypst as error:
        raise UserError(error.what, error.advice) from error


def _write(path: Path, data: bytes) -> None:
    """Write a file whole or not at all."""
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_bytes(data)
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)


def export(run: str, wanted: Export, store: str | None) -> int:
    """Write a run's data, or the schema of its JSON."""
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
    _write(output, data)
    print(f"wrote {output}", file=sys.stderr)
