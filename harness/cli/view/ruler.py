"""The ruler: bit error ratios from 1 down to 1e-15, the bounds as a bar on it, the requirement as a mark.

One decade takes the same width everywhere. The bar never lies about the mark: a bar that reaches over it by
however little shows at least one column on the other side, and one that does not shows none.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from harness.assess.words import ratio
from harness.cli.view.ink import BOXED, BOXED_RED, PLAIN, RED, STRONG, Line, Signs, Span

DECADES = 15
MOST_COLUMNS = 10  # of a decade
_LABEL = 7  # columns of the widest label, with room around it
_BEYOND = 6  # columns kept free on the right: the last label and the sign of an open end


@dataclass(frozen=True, slots=True)
class Bar:
    """What the ruler shows: where the BER lies, ``lower`` 0 and ``upper`` 1 where that side is open."""

    lower: float
    upper: float
    measured: float | None = None
    required: float | None = None
    against: bool = False  # the bar speaks against the unit
    flag: str = "required: at most"
    fades_from: float | None = None  # an open side: where the bar need not be drawn full any more


def columns_of_a_decade(width: int) -> int:
    """How many columns a decade takes where `width` columns are free; 0 where a ruler has no room."""
    return min(MOST_COLUMNS, (width - _BEYOND - 1) // DECADES)


def ruler(bars: Sequence[tuple[str, Bar]], width: int, signs: Signs) -> list[tuple[str, Line]]:
    """Draw the ruler: the flag of the requirement, the bars, the scale, its labels; nothing without room.

    Parameters
    ----------
    bars
        With the label of each: a sweep has one for each point. The first mark gets the flag.

    Returns
    -------
    lines, each with the label that belongs beside it
    """
    decade = columns_of_a_decade(width)
    if decade < 1 or not bars:
        return []
    first = next((bar for _label, bar in bars if bar.required is not None), None)
    mark = None if first is None or first.required is None else _column(first.required, decade)
    flag = [] if first is None or mark is None else [("", _flag(mark, first, decade, signs))]
    drawn = [
        (label, _bar(bar, None if bar.required is None else _column(bar.required, decade), decade, signs))
        for label, bar in bars
    ]
    return [*flag, *drawn, ("", _scale(mark, decade, signs)), ("", _labels(decade))]


def _place(value: float, decade: int) -> float:
    """Give a ratio's place in columns, a decade's tick lying in the middle of its column."""
    if value <= 0:
        return float(DECADES * decade + 1)
    return min(max(-math.log10(value), 0.0) * decade + 0.5, float(DECADES * decade + 1))


def _column(value: float, decade: int) -> int:
    return min(int(_place(value, decade)), DECADES * decade)


def _flag(mark: int, bar: Bar, decade: int, signs: Signs) -> Line:
    words = f"{bar.flag} {ratio(bar.required)}"
    before, flag = (" " * mark, PLAIN), (signs.flag, STRONG)
    if mark + 2 + len(words) <= DECADES * decade + _BEYOND:
        return (before, flag, (f" {words}", PLAIN))
    if len(words) < mark:
        return ((f"{words:>{mark - 1}} ", PLAIN), flag)
    return (before, flag)


def _bar(bar: Bar, mark: int | None, decade: int, signs: Signs) -> Line:
    length = DECADES * decade + 1
    # In half columns, rounded outwards: the bar is never shorter than the interval.
    first = 0 if bar.upper >= 1 else math.floor(2 * _place(bar.upper, decade))
    last = 2 * length if bar.lower <= 0 else math.floor(2 * _place(bar.lower, decade)) + 1
    first = min(first, 2 * length - 1)
    last = max(last, first + 1)
    if mark is not None and bar.required is not None:
        first, last = _true_to_the_mark(bar, mark, first, last)
    cells = [" "] * length
    for column in range(first // 2, min((last + 1) // 2, length)):
        left, right = 2 * column >= first, 2 * column + 2 <= last
        cells[column] = (
            signs.bar if left and right else signs.bar_to_middle if left else signs.bar_from_middle
        )
        if bar.fades_from is not None and _faded(column, _column(bar.fades_from, decade), bar):
            cells[column] = signs.fading
    inks = [RED if bar.against else STRONG] * length
    if mark is not None:
        cells[mark], inks[mark] = signs.mark, STRONG
    if bar.measured:
        column = _column(bar.measured, decade)
        boxed = BOXED_RED if bar.against else BOXED
        inks[column] = boxed if cells[column] == signs.bar else STRONG
        cells[column] = signs.measured
    spans = _joined(cells, inks)
    if bar.lower <= 0:
        spans.append((f" {signs.onwards} 0", STRONG))
    return tuple(spans)


def _faded(column: int, edge: int, bar: Bar) -> bool:
    return column > edge if bar.lower <= 0 else column < edge


def _true_to_the_mark(bar: Bar, mark: int, first: int, last: int) -> tuple[int, int]:
    """Let the bar pass the mark's column exactly where the interval passes the requirement."""
    assert bar.required is not None
    first = min(first, 2 * mark - 1) if bar.upper > bar.required and mark > 0 else first
    first = max(first, 2 * mark) if bar.upper <= bar.required else first
    last = max(last, 2 * mark + 3) if bar.lower < bar.required else last
    last = min(last, 2 * mark + 2) if bar.lower >= bar.required else last
    return max(first, 0), max(last, first + 1)


def _joined(cells: list[str], inks: list[str]) -> list[Span]:
    spans: list[Span] = []
    for cell, ink in zip(cells, inks, strict=True):
        if spans and spans[-1][1] == ink:
            spans[-1] = (spans[-1][0] + cell, ink)
        else:
            spans.append((cell, ink))
    return spans


def _scale(mark: int | None, decade: int, signs: Signs) -> Line:
    cells = [signs.tick if column % decade == 0 else signs.ruler for column in range(DECADES * decade + 1)]
    if mark is None:
        return (("".join(cells), PLAIN),)
    return (
        ("".join(cells[:mark]), PLAIN),
        (signs.mark_on_ruler, STRONG),
        ("".join(cells[mark + 1 :]), PLAIN),
    )


def _labels(decade: int) -> Line:
    step = next(step for step in (1, 3, 5, DECADES) if step * decade >= _LABEL)
    text = "1"
    for power in range(step, DECADES + 1, step):
        label = f"1e-{power}"
        text = text.ljust(power * decade - len(label) // 2 + 1) + label
    return ((text, PLAIN),)
