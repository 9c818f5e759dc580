"""The command line: all commands in their order. What they do is imported when they run."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Annotated

import typer

from harness.cli.app_bench import bench_app
from harness.cli.app_figures import figures_app
from harness.cli.app_records import records_app
from harness.cli.app_store import profile_app, store_app

app = typer.Typer(
    name="bitassay",
    help="Measure bit error ratios through real links: exact counts, stated risks, kept records.",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)
for part in (bench_app, figures_app, records_app):
    app.registered_commands.extend(part.registered_commands)
app.add_typer(profile_app, name="profile")
app.add_typer(store_app, name="store")


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
