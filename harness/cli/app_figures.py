"""The commands that need no link: bytes in files, and figures."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from harness.cli.numbers import count_of, number
from harness.cli.options import JsonOption

figures_app = typer.Typer()


@figures_app.command()
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
    store: Annotated[
        str | None,
        typer.Option("--store", metavar="URL", help="Keep a record there; left out: none is kept."),
    ] = None,
    json: JsonOption = False,
) -> int:
    """Count errors in bytes captured elsewhere.

    Example: bitassay examine received.bin --rate 48000
    """
    from harness.cli.examine import examine as carry_out

    return carry_out(file, pattern, bit_order, rate, confidence, store, as_json=json)


@figures_app.command()
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


@figures_app.command(
    context_settings={"ignore_unknown_options": True}
)  # so that -1 is read, and refused, as a count
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


@figures_app.command()
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


@figures_app.command()
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
    fading: Annotated[
        str | None, typer.Option("--fading", metavar="rayleigh|rician:K", help="Flat fading; K in dB.")
    ] = None,
    json: JsonOption = False,
) -> int:
    """The textbook curve: BER for an Eb/N0, or the other way round.

    Example: bitassay theory --modulation bpsk --ebn0 9.6
    """
    from harness.cli.figures import theory as carry_out

    return carry_out(modulation, ebn0, ber, fading, as_json=json)
