"""All commands in one place: their names and options. What they do is imported when they run."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Annotated

import typer

from harness.cli.app_store import profile_app, store_app
from harness.cli.numbers import count_of, number

app = typer.Typer(
    name="bitassay",
    help="Measure bit error ratios through real links: exact counts, stated risks, kept records.",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)
app.add_typer(profile_app, name="profile")
app.add_typer(store_app, name="store")

StoreOption = Annotated[
    str | None,
    typer.Option("--store", metavar="URL", help="The store; else BITASSAY_STORE, else results/runs.sqlite."),
]
JsonOption = Annotated[bool, typer.Option("--json", help="One JSON object on standard output, nothing else.")]
SetOption = Annotated[
    list[str] | None,
    typer.Option(
        "--set", metavar="SECTION.KEY=VALUE", help="Override a key of the profile; may be repeated."
    ),
]
QuietOption = Annotated[bool, typer.Option("--quiet", "-q", help="Print the result only.")]
LogOption = Annotated[
    Path | None, typer.Option("--log", metavar="FILE", help="Append every event, with its time, to a file.")
]
ProfileArgument = Annotated[
    str, typer.Argument(metavar="PROFILE", help="A TOML file, or a ready profile's name.")
]
HtmlOption = Annotated[
    Path | None, typer.Option("--html", metavar="FILE", help="Write the report as a page.")
]
PdfOption = Annotated[
    Path | None,
    typer.Option("--pdf", metavar="FILE", help="Write the report as a PDF (needs the extra `pdf`)."),
]
PaperOption = Annotated[str, typer.Option("--paper", metavar="a4|letter", help="Of the PDF.")]
RunArgument = Annotated[
    str, typer.Argument(metavar="RUN", help="A run's key, any unique ending of it, or `last`.")
]


def run_app(arguments: Sequence[str]) -> int:
    """Run the command line; returns the exit status."""
    try:
        result = app(args=list(arguments), standalone_mode=False, prog_name="bitassay")
    except SystemExit as error:
        if error.code == 1:  # how typer answers a reader that has gone (`| head`); here 1 means FAIL
            return 0
        raise
    return result if isinstance(result, int) else 0


def _version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        typer.echo(f"bitassay {version('bitassay')}")
        raise typer.Exit


@app.callback()
def _whole(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    """Measure bit error ratios through real links: exact counts, stated risks, kept records.

    A defect's details are shown with --debug.
    """


@app.command()
def measure(
    profile: ProfileArgument,
    set_: SetOption = None,
    store: StoreOption = None,
    json: JsonOption = False,
    quiet: QuietOption = False,
    log: LogOption = None,
) -> int:
    """Carry out one run: send the pattern, count, decide, keep the record.

    Example: bitassay measure profiles/loopback.toml --set device.serial_number=0031
    """
    from harness.cli.measure import Manner
    from harness.cli.measure import measure as carry_out

    return carry_out(profile, set_ or [], Manner(store, json, quiet, log))


@app.command()
def sweep(
    profile: ProfileArgument,
    set_: SetOption = None,
    store: StoreOption = None,
    json: JsonOption = False,
    quiet: QuietOption = False,
    log: LogOption = None,
) -> int:
    """Carry out a run with several points: a sweep steps through them, a search chooses them.

    Example: bitassay sweep profiles/sweep-loopback.toml
    """
    from harness.cli.measure import Manner
    from harness.cli.measure import sweep as carry_out

    return carry_out(profile, set_ or [], Manner(store, json, quiet, log))


@app.command()
def lot(
    profile: ProfileArgument,
    set_: SetOption = None,
    html: HtmlOption = None,
    pdf: PdfOption = None,
    text: Annotated[
        bool, typer.Option("--text", help="Print the lot's report as text, in place of the lot at a glance.")
    ] = False,
    paper: PaperOption = "a4",
    store: StoreOption = None,
    json: JsonOption = False,
    log: LogOption = None,
) -> int:
    """Measure many units, one after another: asks for each serial number; ends with the lot at a glance.

    An empty line ends it; the lot goes on another day, and `bitassay report --lot NAME` reports it again
    without measuring.

    Example: bitassay lot my-lot.toml --pdf lot.pdf
    """
    from harness.cli.lot import lot as carry_out
    from harness.cli.measure import Manner
    from harness.cli.report import Forms

    return carry_out(profile, set_ or [], Manner(store, json, False, log), Forms(html, pdf, text, paper))


@app.command()
def resume(
    run: RunArgument = "last",
    store: StoreOption = None,
    json: JsonOption = False,
    quiet: QuietOption = False,
    log: LogOption = None,
) -> int:
    """Go on with a run that was cut; a completed one is printed again.

    Example: bitassay resume last
    """
    from harness.cli.measure import Manner
    from harness.cli.measure import resume as carry_out

    return carry_out(run, Manner(store, json, quiet, log))


@app.command()
def check(
    profile: ProfileArgument, set_: SetOption = None, store: StoreOption = None, json: JsonOption = False
) -> int:
    """Before a run: prove the path, the instruments and the counting; forecast time and disk.

    Example: bitassay check profiles/loopback.toml
    """
    from harness.cli.check import check as carry_out

    return carry_out(profile, set_ or [], store, as_json=json)


@app.command()
def examine(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="Bytes captured elsewhere.")],
    pattern: Annotated[str, typer.Option("--pattern", metavar="NAME|auto", help="What was sent.")] = "auto",
    bit_order: Annotated[
        str, typer.Option("--bit-order", metavar="lsb|msb|auto", help="Which bit of a byte came first.")
    ] = "auto",
    rate: Annotated[
        float | None,
        typer.Option(
            "--rate", parser=number, metavar="BIT/S", help="Payload rate, for seconds and availability."
        ),
    ] = None,
    confidence: Annotated[
        float, typer.Option("--confidence", parser=number, metavar="C", help="Of the bounds.")
    ] = 0.95,
    store: StoreOption = None,
    json: JsonOption = False,
) -> int:
    """Count errors in bytes captured elsewhere; keeps a record only where --store is given.

    Example: bitassay examine received.bin --rate 48000
    """
    from harness.cli.examine import examine as carry_out

    return carry_out(file, pattern, bit_order, rate, confidence, store, as_json=json)


@app.command()
def emit(
    pattern: Annotated[
        str, typer.Option("--pattern", metavar="NAME", help="`bitassay patterns` lists them.")
    ],
    number: Annotated[int, typer.Option("--bytes", parser=count_of, metavar="N", help="Bytes to write.")],
    bit_order: Annotated[
        str, typer.Option("--bit-order", metavar="lsb|msb", help="Which bit of a byte comes first.")
    ] = "lsb",
    output: Annotated[
        Path | None, typer.Option("--output", metavar="FILE", help="Left out: standard output.")
    ] = None,
) -> int:
    """Write a pattern's bytes, from its beginning.

    Example: bitassay emit --pattern PRBS23 --bytes 1000000 --output sent.bin
    """
    from harness.cli.examine import emit as carry_out

    return carry_out(pattern, number, bit_order, output)


@app.command(context_settings={"ignore_unknown_options": True})  # so that -1 is read, and refused, as a count
def bounds(
    errors: Annotated[int, typer.Argument(parser=count_of, metavar="ERRORS", help="Errors counted.")],
    bits: Annotated[int, typer.Argument(parser=count_of, metavar="BITS", help="Bits compared.")],
    confidence: Annotated[
        float, typer.Option("--confidence", parser=number, metavar="C", help="Between 0 and 1.")
    ] = 0.95,
    json: JsonOption = False,
) -> int:
    """Bounds on the BER for a count, exact (Clopper and Pearson).

    Example: bitassay bounds 3 1000000000 --confidence 0.99
    """
    from harness.cli.figures import bounds as carry_out

    return carry_out(errors, bits, confidence, as_json=json)


@app.command()
def plan(
    ber: Annotated[float, typer.Option("--ber", parser=number, metavar="P", help="The required BER.")],
    confidence: Annotated[
        float, typer.Option("--confidence", parser=number, metavar="C", help="1 - consumer's risk.")
    ] = 0.95,
    accept_errors: Annotated[
        int | None,
        typer.Option(
            "--accept-errors", parser=count_of, metavar="E", help="fixed, curtailed: accept at most E errors."
        ),
    ] = None,
    kind: Annotated[
        str, typer.Option("--kind", metavar="fixed|curtailed|sequential", help="The rule that decides.")
    ] = "fixed",
    margin: Annotated[
        float,
        typer.Option(
            "--margin", parser=number, metavar="D", help="Good units are D times better than required."
        ),
    ] = 2.0,
    producer_risk: Annotated[
        float | None,
        typer.Option(
            "--producer-risk",
            parser=number,
            metavar="A",
            help="sequential: probability that a good unit fails (default 0.05).",
        ),
    ] = None,
    rate: Annotated[
        float | None, typer.Option("--rate", parser=number, metavar="BIT/S", help="For the time needed.")
    ] = None,
    json: JsonOption = False,
) -> int:
    """Bits and time that a test needs, and its risks.

    Example: bitassay plan --ber 1e-9 --kind sequential --margin 3 --rate 10e6
    """
    from harness.cli.figures import plan as carry_out

    return carry_out(ber, confidence, accept_errors, kind, margin, producer_risk, rate, as_json=json)


@app.command()
def theory(
    modulation: Annotated[
        str, typer.Option("--modulation", metavar="M", help="`--modulation list` lists them.")
    ],
    ebn0: Annotated[
        float | None, typer.Option("--ebn0", parser=number, metavar="DB", help="Eb/N0, dB.")
    ] = None,
    ber: Annotated[
        float | None, typer.Option("--ber", parser=number, metavar="P", help="A BER; gives the Eb/N0 for it.")
    ] = None,
    fading: Annotated[str | None, typer.Option("--fading", metavar="rayleigh", help="Flat fading.")] = None,
    json: JsonOption = False,
) -> int:
    """The textbook curve: BER for an Eb/N0, or the other way round.

    Example: bitassay theory --modulation bpsk --ebn0 9.6
    """
    from harness.cli.figures import theory as carry_out

    return carry_out(modulation, ebn0, ber, fading, as_json=json)


@app.command()
def runs(
    store: StoreOption = None,
    limit: Annotated[
        int | None, typer.Option("--limit", metavar="N", min=1, help="Only the newest N.")
    ] = None,
    json: JsonOption = False,
) -> int:
    """List the runs in the store, newest first.

    Example: bitassay runs --limit 10
    """
    from harness.cli.records import runs as carry_out

    return carry_out(store, limit, as_json=json)


@app.command()
def show(run: RunArgument = "last", store: StoreOption = None, json: JsonOption = False) -> int:
    """Show a run's assessment, derived from its record.

    Example: bitassay show last
    """
    from harness.cli.records import show as carry_out

    return carry_out(run, store, as_json=json)


@app.command()
def report(
    run: Annotated[
        str | None,
        typer.Argument(
            metavar="[RUN]", help="A run's key, any unique ending of it, or `last` (the default)."
        ),
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
    """Write the report of a run, or of a lot with all its units: a page, a PDF, or text.

    An earlier report is replaced; any other file that stands there is left alone.

    Example: bitassay report last --html report.html --pdf report.pdf
    """
    from harness.cli.report import Forms
    from harness.cli.report import report as carry_out

    return carry_out(run, Forms(html, pdf, text, paper), store, lot)


@app.command()
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
    """Write a run's data for other programs: CSV, JSON, or JUnit XML for test automation.

    Example: bitassay export last --format junit --output result.xml
    """
    from harness.cli.report import Export
    from harness.cli.report import export as carry_out

    return carry_out(run, Export(format_, output, points, schema_), store)


@app.command()
def follow(run: RunArgument = "last", store: StoreOption = None, json: JsonOption = False) -> int:
    """Watch a run that another terminal or computer measures, until it ends; reads only the store.

    Example: bitassay follow last
    """
    from harness.cli.follow import follow as carry_out

    return carry_out(run, store, as_json=json)


@app.command()
def verify(run: RunArgument = "last", store: StoreOption = None, json: JsonOption = False) -> int:
    """Derive every number of a run again from its record and compare.

    Example: bitassay verify last
    """
    from harness.cli.records import verify as carry_out

    return carry_out(run, store, as_json=json)


@app.command()
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
    """Is B worse than A? An exact test on the two counts, and the ratio of the BERs with bounds.

    Two sweeps are compared point by point, where their settings are the same.

    Example: bitassay compare 5f2c last
    """
    from harness.cli.compare import compare as carry_out

    return carry_out(a, b, store, confidence, at or [], as_json=json)


@app.command()
def note(
    run: RunArgument,
    text: Annotated[str, typer.Argument(metavar="TEXT", help="Why, in words.")],
    void: Annotated[
        bool, typer.Option("--void", help="Mark the run as void; it stays and still counts.")
    ] = False,
    store: StoreOption = None,
) -> int:
    """Add words to a run's record, with your name and the time; nothing in it is ever changed.

    Example: bitassay note last "antenna cable was loose" --void
    """
    from harness.cli.records import note as carry_out

    return carry_out(run, text, store, void=void)


@app.command()
def patterns(json: JsonOption = False) -> int:
    """List the patterns.

    Example: bitassay patterns
    """
    from harness.cli.catalogue import patterns as carry_out

    return carry_out(as_json=json)


@app.command()
def drivers(
    name: Annotated[str | None, typer.Argument(metavar="[NAME]", help="Show this driver's keys.")] = None,
    json: JsonOption = False,
) -> int:
    """List the drivers, or show one's keys with their defaults.

    Example: bitassay drivers tcp
    """
    from harness.cli.catalogue import drivers as carry_out

    return carry_out(name, as_json=json)
