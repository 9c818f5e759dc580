"""The strip: the errors of each second of the last minute, one column a second or more."""

from __future__ import annotations

import math
from collections.abc import Sequence

from harness.assess.words import count
from harness.cli.view.ink import PLAIN, RED, Line, Signs
from harness.record import Tally

SECONDS = 60
_LEAST_TOP = 10  # errors at the strip's top, so that a single error does not fill it


def strip(
    recent: Sequence[tuple[int, Tally]], width: int, rows: int, signs: Signs, *, behind_s: int = 0
) -> list[Line]:
    """Draw the strip, the newest second on the right.

    Parameters
    ----------
    recent
        (index, tally) of seconds, ascending; an index that is missing was no second of the run.
    width, rows
        Room in columns and rows; the height of a column grows with the logarithm of its errors.
    behind_s
        Seconds between the newest and now, which stay empty.
    """
    each = max(1, min(width // SECONDS, 3))
    seconds = _by_second(recent, min(SECONDS, width // each), behind_s)
    top = max(_LEAST_TOP, *(t.errors for t in seconds if t is not None), 0)
    columns = [_column(tally, top, rows, signs) for tally in seconds]
    lines: list[Line] = []
    for row in range(rows):
        spans = [
            (column[row] * each, RED if _wrong(t) else PLAIN)
            for column, t in zip(columns, seconds, strict=True)
        ]
        lines.append(_merge(spans))
    return lines


def strip_width(width: int) -> int:
    """How many columns the strip takes of `width`."""
    each = max(1, min(width // SECONDS, 3))
    return each * min(SECONDS, width // each)


def strip_words(recent: Sequence[tuple[int, Tally]], signs: Signs, *, behind_s: int = 0) -> str:
    """Say in words what the strip shows."""
    seconds = [t for t in _by_second(recent, SECONDS, behind_s) if t is not None]
    waiting = f"{behind_s} s not decided yet" if behind_s else ""
    if not seconds:
        return waiting or "no second is complete yet"
    errors = sum(t.errors for t in seconds)
    compared = sum(1 for t in seconds if t.compared)
    span = count(compared, "second")
    if not compared:
        parts = [f"none compared in {count(len(seconds), 'second')}"]
    elif not errors:
        parts = [f"no error in {span}"]
    else:
        worst = f"{max(t.errors for t in seconds):,}".replace(",", "\u202f")
        parts = [f"{count(errors, 'error')} in {span}, at most {worst} in one"]
    if any(t.received and _mostly_unaligned(t) for t in seconds):
        parts.append(f"{signs.unaligned} not aligned")
    if not all(t.received for t in seconds):
        parts.append(f"{signs.silent} nothing came")
    return "   ".join([*parts, waiting] if waiting else parts)


def _by_second(recent: Sequence[tuple[int, Tally]], length: int, behind_s: int) -> list[Tally | None]:
    """Lay the seconds out by their index, the newest `behind_s` from the end."""
    row: list[Tally | None] = [None] * length
    if recent:
        newest = recent[-1][0] + behind_s
        for index, tally in recent:
            if newest - index < length:
                row[length - 1 - (newest - index)] = tally
    return row


def _mostly_unaligned(tally: Tally) -> bool:
    return 2 * tally.unaligned >= tally.received


def _wrong(tally: Tally | None) -> bool:
    return tally is not None and bool(tally.errors or tally.unaligned or not tally.received)


def _column(tally: Tally | None, top: int, rows: int, signs: Signs) -> str:
    """Give a second's column from top to bottom."""
    if tally is None:
        return " " * rows
    if not tally.received:
        return " " * (rows - 1) + signs.silent
    if _mostly_unaligned(tally):
        return " " * (rows - 1) + signs.unaligned
    if not tally.errors:
        return " " * (rows - 1) + signs.clean
    steps = len(signs.heights)
    least = max(1, steps // 2)  # a single error is seen at a glance
    level = least + round((steps * rows - least) * math.log(tally.errors) / math.log(top))
    full, rest = divmod(level, steps)
    column = (signs.heights[rest - 1] if rest else "") + signs.heights[-1] * full
    return column.rjust(rows)


def _merge(spans: Sequence[tuple[str, str]]) -> Line:
    merged: list[tuple[str, str]] = []
    for text, ink in spans:
        if merged and merged[-1][1] == ink:
            merged[-1] = (merged[-1][0] + text, ink)
        else:
            merged.append((text, ink))
    return tuple(merged)
