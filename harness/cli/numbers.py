"""Numbers on the command line, as people write them; what is none is refused in one plain line and one to mend it."""

from __future__ import annotations

import math
import re
from decimal import Decimal, InvalidOperation

from harness.cli.failure import UserError

MOST_DIGITS = 40  # of a whole number: 1e40 is beyond every count, and 1e999999 would fill the memory

_SUFFIXED = re.compile(r"([0-9_.]+)\s*([kMG])(?:bit/s|bps)?", re.IGNORECASE)
_FACTORS = {"k": 3, "m": 6, "g": 9}


def whole(text: str) -> int:
    """Read a whole number: ``1000000000``, ``1_000_000_000`` or ``1e9``, exactly.

    Raises
    ------
    UserError
        It is no whole number.
    """
    try:
        value = Decimal(text.strip())
    except InvalidOperation:
        raise UserError(f'"{text}" is no whole number', _written_out(text, "1000000000 or 1e9")) from None
    if not value.is_finite() or value != value.to_integral_value() or value.adjusted() > MOST_DIGITS:
        raise UserError(f'"{text}" is no whole number', "give a count, for example 1000000000 or 1e9")
    return int(value)


def count_of(text: str) -> int:
    """Read a whole number that cannot be negative.

    Raises
    ------
    UserError
        It is none.
    """
    value = whole(text)
    if value < 0:
        raise UserError(f"{text} is under 0, and a count never is", "give 0 or more")
    return value


def at_least_one(text: str) -> int:
    """Read a whole number of 1 or more.

    Raises
    ------
    UserError
        It is none.
    """
    value = whole(text)
    if value < 1:
        raise UserError(f"{text} is too few", "give 1 or more")
    return value


def number(text: str | float) -> float:
    """Read a finite number: ``48000``, ``48_000``, ``4.8e4``, ``1e-9``; a default, which is one, stays as it is.

    Raises
    ------
    UserError
        It is none, or not finite.
    """
    if isinstance(text, float):
        return text
    try:
        value = float(text.strip())
    except ValueError:
        raise UserError(f'"{text}" is no number', _written_out(text, "48000, 0.95 or 1e-9")) from None
    if not math.isfinite(value):
        raise UserError(
            f'"{text}" is no finite number', "write it in figures, for example 48000, 0.95 or 1e-9"
        )
    return value


def _written_out(text: str, examples: str) -> str:
    """Say how the number is to be written; what was meant by 48k or 0,95 is named."""
    if found := _SUFFIXED.fullmatch(text.strip()):
        try:
            meant = Decimal(found[1]).scaleb(_FACTORS[found[2].lower()])
            return f"write it in figures: {meant.normalize():f}"
        except InvalidOperation:
            pass
    if text.count(",") == 1 and re.fullmatch(r"[0-9]+,[0-9]+", text):
        return f"write a point for the comma: {text.replace(',', '.')}"
    return f"write it in figures, for example {examples}"
