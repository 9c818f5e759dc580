"""Figures of a lot: the units' BERs on the ruler, and their sensitivities, each with its bounds."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

from harness.assess.lot import LotSummary, Unit
from harness.assess.words import count, percent, ratio
from harness.report.document import Figure
from harness.report.figures.drawings import Bar, Ruler, Span, Spans

_ROWS = 32  # of a figure: more than a page's height holds none
_SAID = 8  # units whose numbers a caption says one by one
_LEAST_DECADES = 3
_SMALLEST = 1e-15


def bers_of(lot: LotSummary, required: float | None) -> Iterator[Figure]:
    """Lay the units' BERs with their bounds on a ruler that is as wide as they need, one row a unit."""
    units = [u for u in lot.units if u.ber is not None]
    if not units:
        return
    first, last = _decades(units, required)
    for part, words in _parts(units):
        bars = tuple(_bar(u) for u in part)
        drawing = Ruler(bars, required, "required: at most", first, last)
        title = f"The units' BERs and their bounds (two-sided, {percent(lot.confidence)} confidence){words}"
        yield Figure(title, _bers_words(part), drawing)


def _parts(units: Sequence[Unit]) -> Iterator[tuple[Sequence[Unit], str]]:
    """Share units out among figures of about the same height."""
    figures = -(-len(units) // _ROWS)
    rows = -(-len(units) // figures)
    for start in range(0, len(units), rows):
        part = units[start : start + rows]
        many = f", units {start + 1} to {start + len(part)} of {len(units)}" if figures > 1 else ""
        yield part, many


def _decades(units: Sequence[Unit], required: float | None) -> tuple[int, int]:
    """Give the decades that hold every bound and the requirement; 0 lies beyond the right end."""
    shown = [u.upper for u in units if u.upper] + [u.lower for u in units if u.lower]
    shown += [u.ber / 10 for u in units if u.ber] + ([required] if required else [])
    shown = [max(value, _SMALLEST) for value in shown] or [1.0, _SMALLEST]
    first = math.floor(-math.log10(max(shown)) + 1e-9)
    last = math.ceil(-math.log10(min(shown)) - 1e-9)
    if any(not u.lower for u in units):
        last += 1  # a bar without a lower bound needs room to thin out
    return max(first, 0), max(last, first + _LEAST_DECADES)


def _bar(u: Unit) -> Bar:
    lower, upper = u.lower or 0.0, 1.0 if u.upper is None else u.upper
    against = u.verdict == "FAIL"
    fades = upper / 10 if not lower else None
    return Bar(u.serial_number, lower, upper, u.ber or None, fades, against)


def _bers_words(part: Sequence[Unit]) -> str:
    """Say the bounds of few units, and of many how far they reach."""
    uppers = [u for u in part if u.upper is not None]
    if len(part) <= _SAID or not uppers:
        return "; ".join(_ber_words(u) for u in part)
    least, most = min(uppers, key=_upper), max(uppers, key=_upper)
    return (
        f"{count(len(part), 'unit')}; upper bounds from {ratio(least.upper)} ({least.serial_number}) to "
        f"{ratio(most.upper)} ({most.serial_number}); all of them stand under “Units”"
    )


def _upper(u: Unit) -> float:
    return 1.0 if u.upper is None else u.upper


def _ber_words(u: Unit) -> str:
    if u.lower is None or u.upper is None:
        return f"{u.serial_number} without bounds"
    return f"{u.serial_number} {ratio(u.lower)} to {ratio(u.upper)}"


def sensitivities_of(lot: LotSummary, required: float | None) -> Iterator[Figure]:
    """Lay the units' sensitivities with their bounds on a scale, one row a unit."""
    units = [u for u in lot.units if u.sensitivity is not None]
    if not units or lot.sensitivity_spread is None:
        return
    known = [v for u in units for v in (u.sensitivity, u.sensitivity_lower, u.sensitivity_upper)]
    shown = [v for v in (*known, required) if v is not None]
    room = max(0.06 * (max(shown) - min(shown)), 0.05)
    edges = (min(shown) - room, max(shown) + room)
    unit = f" {lot.unit}" if lot.unit else ""
    middle = lot.sensitivity_spread[1]
    for part, words in _parts(units):
        spans = tuple(
            Span(
                u.serial_number,
                u.sensitivity or 0.0,
                u.sensitivity_lower,
                u.sensitivity_upper,
                u.verdict == "FAIL",
            )
            for u in part
        )
        axis = f"sensitivity, {lot.unit}" if lot.unit else "sensitivity"
        drawing = Spans(
            axis, spans, required, "required: at least", middle if len(units) > 2 else None, edges
        )
        title = f"The units' sensitivities and their bounds ({percent(lot.confidence)} confidence){words}"
        median = f"median {middle:.2f}{unit} (dashed); " if len(units) > 2 else ""
        said = "; ".join(f"{u.serial_number} {u.sensitivity:.2f}{_sides(u)}" for u in part)
        if len(part) > _SAID:
            said = "all bounds stand under “Units”"
        yield Figure(title, f"{count(len(part), 'unit')}; {median}{said}", drawing)


def _sides(u: Unit) -> str:
    lower, upper = u.sensitivity_lower, u.sensitivity_upper
    if lower is None and upper is None:
        return " without bounds"
    if lower is None:
        return f" (at most {upper:.2f})"
    if upper is None:
        return f" (at least {lower:.2f})"
    return f" ({lower:.2f} to {upper:.2f})"
