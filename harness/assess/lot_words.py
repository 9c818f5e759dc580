"""A lot in words: on the screen after its last unit, and the sentences that its report says too."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence

from harness.assess.lot import LotSummary, Unit
from harness.assess.words import count, percent, ratio

WIDTH = 80
_RUN = 12  # characters of a key's ending: enough to name the run
_GAP = 2


def head_words(lot: LotSummary) -> str:
    """Say which lot, and how much of it was measured."""
    measured = count(len(lot.units), "unit")
    return f"lot {lot.name or 'without a name'}: {measured} measured" + (
        f" of {lot.size}" if lot.size else ""
    )


def pass_words(lot: LotSummary) -> list[str]:
    """Say the pass rate with its bounds, and that of first tries where it differs; nothing where none is judged."""
    if not lot.judged:
        return []
    said = [f"passed {lot.passed} of {lot.judged}; {_rate(lot.pass_rate_lower, lot.pass_rate_upper, lot)}"]
    if (lot.first_passed, lot.first_judged) != (lot.passed, lot.judged) and lot.first_judged:
        said.append(
            f"at the first try {lot.first_passed} of {lot.first_judged}; "
            f"{_rate(lot.first_rate_lower, lot.first_rate_upper, lot)}"
        )
    return said


def _rate(lower: float, upper: float, lot: LotSummary) -> str:
    return (
        f"the pass rate lies between {percent(lower)} and {percent(upper)} at "
        f"{percent(lot.confidence)} confidence"
    )


def spread_words(lot: LotSummary) -> list[str]:
    """Say how far BERs and sensitivities spread."""
    said = []
    if lot.ber_spread:
        low, middle, high = lot.ber_spread
        said.append(f"BER from {ratio(low)} to {ratio(high)}, median {ratio(middle)}")
    if lot.sensitivity_spread:
        low, middle, high = lot.sensitivity_spread
        unit = f" {lot.unit}" if lot.unit else ""
        said.append(f"sensitivity from {low:.2f} to {high:.2f}{unit}, median {middle:.2f}{unit}")
    return said


def verdict_word(unit: Unit) -> str:
    """Give a unit's verdict, or what stands in its place."""
    if unit.standing == "measured":
        return unit.verdict or "-"
    return {"void": "VOID", "not completed": "not ended", "not valid": "NOT VALID"}[unit.standing]


def lines_of(lot: LotSummary) -> list[str]:
    """Say a lot in plain lines of at most 80 columns, where no serial number is uncommonly long."""
    lines = [head_words(lot), *pass_words(lot), *spread_words(lot)]
    if lot.verdict in ("FAIL", "UNDECIDED"):
        lines += [f"{lot.verdict}: {reason}" for reason in lot.reasons]
    wrapped = [part for line in lines for part in textwrap.wrap(line, WIDTH, subsequent_indent="  ")]
    if not lot.units:
        return wrapped
    return [*wrapped, "", *_table(lot), *_elsewhere(lot)]


def _table(lot: LotSummary) -> Iterator[str]:
    heads, rows = _cells(lot)
    widths = [max(len(row[k]) for row in (heads, *rows)) for k in range(len(heads))]
    left = {0, 1, len(heads) - 1}
    for number, row in enumerate((heads, *rows)):
        cells = [
            f"{text:<{width}}" if k in left else f"{text:>{width}}"
            for k, (text, width) in enumerate(zip(row, widths, strict=True))
        ]
        yield (" " * _GAP).join(cells).rstrip()
        remarks = lot.units[number - 1].remarks if number else ()
        indent = " " * (min(widths[0], 16) + _GAP)
        for remark in remarks:
            yield from textwrap.wrap(remark, WIDTH, initial_indent=indent, subsequent_indent=indent + "  ")


def _cells(lot: LotSummary) -> tuple[list[str], list[list[str]]]:
    """Give heads and rows: of counts, or of sensitivities where that is what was looked for."""
    swept = lot.sensitivity_spread is not None
    heads = ["unit", "verdict", "errors", "bits compared", "BER", "run"]
    if swept:
        unit = f", {lot.unit}" if lot.unit else ""
        heads = ["unit", "verdict", f"sensitivity{unit}", "bounds", "run"]
    rows = []
    for u in lot.units:
        about = [u.serial_number, verdict_word(u)]
        if swept:
            about += [_value(u.sensitivity), _between(u)]
        else:
            about += [number(u.errors), number(u.bits), ratio(u.ber) if u.ber is not None else "-"]
        rows.append([*about, f"…{u.run[-_RUN:]}"])
    return heads, rows


def number(value: int) -> str:
    """Write a count with its digits in threes."""
    return f"{value:,}".replace(",", "\u202f")


def _value(value: float | None) -> str:
    return "-" if value is None else f"{value:.2f}"


def _between(u: Unit) -> str:
    if u.sensitivity is None:
        return "-"
    return f"{_value(u.sensitivity_lower)} to {_value(u.sensitivity_upper)}"


def _elsewhere(lot: LotSummary) -> Sequence[str]:
    """Say what else there is, and where."""
    if not lot.tries:
        return []
    runs = count(len(lot.tries), "run")
    return [
        "",
        f"{runs} of this lot {'does' if len(lot.tries) == 1 else 'do'} not count: its report lists them",
    ]
