"""The commands that carry out a profile, or prove that it can be."""

from __future__ import annotations

from typing import Annotated

import typer

from harness.cli.options import (
    HtmlOption,
    JsonOption,
    LogOption,
    PaperOption,
    PdfOption,
    ProfileArgument,
    QuietOption,
    RunArgument,
    SetOption,
    StoreOption,
)

bench_app = typer.Typer()


@bench_app.command()
def measure(
    profile: ProfileArgument,
    set_: SetOption = None,
    store: StoreOption = None,
    json: JsonOption = False,
    quiet: QuietOption = False,
    log: LogOption = None,
) -> int:
    """Carry out one run: send, count, decide, keep the record.

    Example: bitassay measure profiles/loopback.toml --set device.serial_number=0031
    """
    from harness.cli.measure import Manner
    from harness.cli.measure import measure as carry_out

    return carry_out(profile, set_ or [], Manner(store, json, quiet, log))


@bench_app.command()
def sweep(
    profile: ProfileArgument,
    set_: SetOption = None,
    store: StoreOption = None,
    json: JsonOption = False,
    quiet: QuietOption = False,
    log: LogOption = None,
) -> int:
    """Carry out a run with several points: a sweep, or a search.

    A sweep steps through its points, a search chooses them.

    Example: bitassay sweep profiles/sweep-loopback.toml
    """
    from harness.cli.measure import Manner
    from harness.cli.measure import sweep as carry_out

    return carry_out(profile, set_ or [], Manner(store, json, quiet, log))


@bench_app.command()
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
    """Measure many units, one after another, by serial number.

    It asks for each number, and ends with the lot at a glance. An empty line ends it; the lot goes on another
    day, and `bitassay report --lot NAME` reports it again without measuring.

    Example: bitassay lot my-lot.toml --pdf lot.pdf
    """
    from harness.cli.lot import lot as carry_out
    from harness.cli.measure import Manner
    from harness.cli.report import Forms

    return carry_out(profile, set_ or [], Manner(store, json, False, log), Forms(html, pdf, text, paper))


@bench_app.command()
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


@bench_app.command()
def check(
    profile: ProfileArgument, set_: SetOption = None, store: StoreOption = None, json: JsonOption = False
) -> int:
    """Before a run: prove the path, forecast time and disk.

    Proves the path, the instruments and the counting; ends with 0 only when an unattended run may start.

    Example: bitassay check profiles/loopback.toml
    """
    from harness.cli.check import check as carry_out

    return carry_out(profile, set_ or [], store, as_json=json)
