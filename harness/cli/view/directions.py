"""Both directions of a duplex run on one page: each has its bar and its words, and neither hides the other."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from harness.record import Tally

if TYPE_CHECKING:
    from harness.cli.view.sheet import Sheet


def on_one_page(sheets: Mapping[str, Sheet], points: Sequence[str], to_do_of: str) -> Sheet:
    """Put the sheets of directions measured at once on one.

    Parameters
    ----------
    sheets
        By the direction's name, the first one first.
    points
        Ratio and counts of each in a line.
    to_do_of
        The direction that ends last.
    """
    first = next(iter(sheets.values()))
    against = {name: sheet for name, sheet in sheets.items() if sheet.against}
    shown = against or sheets
    verdicts = {sheet.verdict for sheet in shown.values()}
    verdict = first.verdict if not against and len(verdicts) == 1 else "; ".join(_named(shown, "verdict"))
    return replace(
        first,
        verdict=verdict,
        against=bool(against),
        reasons=[f"{name}: {reason}" for name, sheet in sheets.items() for reason in sheet.reasons],
        ber="",
        bars=[bar for sheet in sheets.values() for bar in sheet.bars],
        points=points,
        bits=[f"{name}: {line}" for name, sheet in sheets.items() for line in sheet.bits[1:]],
        details=(),
        recent=_together([sheet.recent for sheet in sheets.values()]),
        to_do=sheets[to_do_of].to_do,
        events=sorted(
            (
                replace(event, text=f"{name}: {event.text}")
                for name, sheet in sheets.items()
                for event in sheet.events
            ),
            key=lambda event: event.at or 0,
        ),
    )


def _named(sheets: Mapping[str, Sheet], what: str) -> list[str]:
    return [f"{name}: {getattr(sheet, what)}" for name, sheet in sheets.items()]


def _together(strips: Sequence[Sequence[tuple[int, Tally]]]) -> list[tuple[int, Tally]]:
    """Sum the seconds of all directions: an error in either shows in the strip."""
    sums: dict[int, Tally] = {}
    for strip in strips:
        for index, tally in strip:
            sums[index] = sums.get(index, Tally()) + tally
    return sorted(sums.items())[-60:]
