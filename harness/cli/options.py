"""Options and arguments that several commands share: names, metavars and help said once."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

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
