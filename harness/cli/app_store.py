"""The commands that have commands of their own: `profile` and `store`."""

from __future__ import annotations

from typing import Annotated

import typer

profile_app = typer.Typer(help="Profiles: their schema.", no_args_is_help=True, rich_markup_mode=None)
store_app = typer.Typer(help="The store: upgrade and copy it.", no_args_is_help=True, rich_markup_mode=None)


@profile_app.callback()
def _profile() -> None:
    """Profiles: the files that say what to do."""


@profile_app.command("schema")
def schema() -> int:
    """Print the JSON schema of a profile.

    Example: bitassay profile schema > profile.schema.json
    """
    from harness.cli.catalogue import schema as carry_out

    return carry_out()


@store_app.command("upgrade")
def upgrade(
    store: Annotated[str | None, typer.Option("--store", metavar="URL", help="The store to upgrade.")] = None,
) -> int:
    """Bring a store to this version's layout; a SQLite file is backed up first.

    Example: bitassay store upgrade
    """
    from harness.cli.records import upgrade as carry_out

    return carry_out(store)


@store_app.command("copy")
def copy(
    source: Annotated[str, typer.Argument(metavar="FROM", help="A store's URL or file.")],
    target: Annotated[str, typer.Argument(metavar="TO", help="A store's URL or file.")],
) -> int:
    """Copy records that are not there yet; doing it twice doubles nothing.

    Example: bitassay store copy results/runs.sqlite postgresql+psycopg://bench@db/lab
    """
    from harness.cli.records import copy as carry_out

    return carry_out(source, target)
