"""The commands on what the store holds, and on what there is to choose from."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from harness.cli.numbers import at_least_one, number
from harness.cli.options import HtmlOption, JsonOption, PaperOption, PdfOption, RunArgument, StoreOption

records_app = typer.Typer()


@records_app.command()
def runs(
    store: StoreOption = None,
    limit: Annotated[
        int | None, typer.Option("--limit", parser=at_least_one, metavar="N", help="Only the newest N.")
    ] = None,
    json: JsonOption = False,
) -> int:
    """List the runs in the store, newest first.

    Example: bitassay runs --limit 10
    """
    from harness.cli.records import runs as carry_out

    return carry_out(store, limit, as_json=json)


@records_app.command()
def show(run: RunArgument = "last", store: StoreOption = None, json: JsonOption = False) -> int:
    """Show a run's assessment, derived from its record.

    Ends with 0 when that worked, whatever the verdict.

    Example: bitassay show last
    """
    from harness.cli.records import show as carry_out

    return carry_out(run, store, as_json=json)


@records_app.command()
def report(
    run: Annotated[
        str | None,
        typer.Argument(metavar="RUN", help="A run's key, any unique ending of it, or `last` (the default)."),
    ] = None,
    lot: Annotated[
        str | None,
        typer.Option(
            "--lot", metavar="NAME", help="Report a whole lot instead, by its name; `last`: the newest."
        ),
    ] = None,
    html: HtmlOption = None,
    pdf: PdfOption = None,
    text: Annotated[
        bool, typer.Option("--text", help="Print it as text; so without --html and --pdf.")
    ] = False,
    paper: PaperOption = "a4",
    store: StoreOption = None,
) -> int:
    """Write the report of a run or a lot: a page, a PDF, or text.

    An earlier report is replaced; any other file that stands there is left alone.

    Ends with 0 when that worked, whatever the verdict.

    Example: bitassay report last --html report.html --pdf report.pdf
    """
    from harness.cli.report import Forms
    from harness.cli.report import report as carry_out

    return carry_out(run, Forms(html, pdf, text, paper), store, lot)


@records_app.command()
def export(
    run: RunArgument = "last",
    format_: Annotated[
        str, typer.Option("--format", metavar="csv|json|junit", help="csv: one row for each second.")
    ] = "csv",
    output: Annotated[
        Path | None, typer.Option("--output", metavar="FILE", help="Left out: standard output.")
    ] = None,
    points: Annotated[
        bool, typer.Option("--points", help="csv: one row for each point, with bounds and verdict.")
    ] = False,
    schema_: Annotated[
        bool, typer.Option("--schema", help="Print the JSON Schema of `--format json` instead.")
    ] = False,
    store: StoreOption = None,
) -> int:
    """Write a run's data: CSV, JSON, or JUnit XML.

    Ends with 0 when that worked, whatever the verdict.

    Example: bitassay export last --format junit --output result.xml
    """
    from harness.cli.report import Export
    from harness.cli.report import export as carry_out

    return carry_out(run, Export(format_, output, points, schema_), store)


@records_app.command()
def follow(run: RunArgument = "last", store: StoreOption = None, json: JsonOption = False) -> int:
    """Watch a run that is measured elsewhere, until it ends.

    It reads nothing but the store: from another terminal, or from another computer.

    Ends with 0 when that worked, whatever the verdict.

    Example: bitassay follow last
    """
    from harness.cli.follow import follow as carry_out

    return carry_out(run, store, as_json=json)


@records_app.command()
def verify(run: RunArgument = "last", store: StoreOption = None, json: JsonOption = False) -> int:
    """Derive every number of a run again from its record and compare.

    Example: bitassay verify last
    """
    from harness.cli.records import verify as carry_out

    return carry_out(run, store, as_json=json)


@records_app.command()
def compare(
    a: Annotated[str, typer.Argument(metavar="A", help="A run: its key, a unique ending of it, or `last`.")],
    b: Annotated[str, typer.Argument(metavar="B", help="Another run.")],
    at: Annotated[
        list[str] | None,
        typer.Option(
            "--at", metavar="INSTRUMENT=VALUE", help="Sweeps: at this setting only; may be repeated."
        ),
    ] = None,
    store: StoreOption = None,
    confidence: Annotated[
        float, typer.Option("--confidence", parser=number, metavar="C", help="Between 0 and 1.")
    ] = 0.95,
    json: JsonOption = False,
) -> int:
    """Say whether run B is worse than run A.

    An exact test on the two counts, and the ratio of the BERs with bounds.

    Two sweeps are compared point by point, where their settings are the same.

    Example: bitassay compare 5f2c last
    """
    from harness.cli.compare import compare as carry_out

    return carry_out(a, b, store, confidence, at or [], as_json=json)


@records_app.command()
def note(
    run: RunArgument,
    text: Annotated[str, typer.Argument(metavar="TEXT", help="Why, in words.")],
    void: Annotated[
        bool, typer.Option("--void", help="Mark the run as void; it stays and still counts.")
    ] = False,
    store: StoreOption = None,
) -> int:
    """Add words to a run's record, or mark it as void.

    They are kept with your name and the time; nothing in the record is ever changed.

    Example: bitassay note last "antenna cable was loose" --void
    """
    from harness.cli.records import note as carry_out

    return carry_out(run, text, store, void=void)


@records_app.command()
def patterns(json: JsonOption = False) -> int:
    """List the patterns.

    Example: bitassay patterns
    """
    from harness.cli.catalogue import patterns as carry_out

    return carry_out(as_json=json)


@records_app.command()
def drivers(
    name: Annotated[str | None, typer.Argument(metavar="[NAME]", help="Show this driver's keys.")] = None,
    json: JsonOption = False,
) -> int:
    """List the drivers, or show one's keys with their defaults.

    Example: bitassay drivers tcp
    """
    from harness.cli.catalogue import drivers as carry_out

    return carry_out(name, as_json=json)
