"""Commands to an instrument as text: one command at a time, and only a finite number ever put into it."""

from __future__ import annotations

import math
import re
from string import Formatter

_NUMERIC = re.compile(r"\+?0?\d{0,2}(\.(?P<decimals>\d{1,2}))?(?P<kind>[eEfFgG]?)")
_NUMBER = re.compile(r"\s*(?P<number>[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?)\s*(?P<rest>.*?)\s*", re.DOTALL)
_NO_NUMBER = 9.9e37  # SCPI-1999, 7.2.1.4 and 7.2.1.5: infinity is 9.9E37, not a number is 9.91E37


def one_line(text: str) -> str:
    """Check that a command has no control characters in it: it would be more than one.

    Raises
    ------
    ValueError
        If it has, or is empty.
    """
    if not text.strip():
        raise ValueError("a command cannot be empty: leave the key out")
    if not text.isprintable():
        raise ValueError(f"the command {text!r} holds a control character; its end is added by `termination`")
    return text


class SetCommand:
    """A command with the place for one number: ``ATT {value:.1f}``.

    Raises
    ------
    ValueError
        Unless there is exactly one place, named ``value``, with the format of a number.
    """

    def __init__(self, template: str) -> None:
        self.template = one_line(template)
        try:
            fields = [part[1:] for part in Formatter().parse(template) if part[1] is not None]
        except ValueError as error:
            raise ValueError(f"{template!r}: {error}") from error
        if len(fields) != 1 or fields[0][0] != "value" or fields[0][2]:
            raise ValueError(f"{template!r} needs exactly one place {{value}}, as in 'ATT {{value:.1f}}'")
        self._format = fields[0][1] or ""
        shape = _NUMERIC.fullmatch(self._format)
        if shape is None:
            raise ValueError(f"{template!r}: {self._format!r} is no format of a number, as .1f is")
        fixed = shape["kind"] in ("f", "F") and shape["decimals"] is not None
        self._decimals = int(shape["decimals"]) if fixed else None

    def sent(self, value: float) -> float:
        """Return the number that the command would carry for `value`, rounded as its format says."""
        return float(self._number(value))

    def text(self, value: float) -> str:
        """Format the command."""
        self._number(value)
        return self.template.format(value=float(value))

    def resolution(self, value: float) -> float:
        """Half of the last place that the format shows, or one part in a million."""
        if self._decimals is not None:
            return 0.5000001 * 10.0**-self._decimals
        return max(abs(value), 1.0) * 1e-6

    def _number(self, value: float) -> str:
        if not math.isfinite(value):
            raise ValueError("only finite numbers go into a command")
        return format(float(value), self._format)


def parse_number(answer: str, unit: str) -> float | None:
    """Read the number in an answer, with its unit behind it or without; None where it is none."""
    found = _NUMBER.fullmatch(answer)
    if found is None or found["rest"].casefold() not in ("", unit.casefold()):
        return None
    number = float(found["number"])
    return number if math.isfinite(number) and abs(number) < _NO_NUMBER else None


def error_text(answer: str) -> str | None:
    """Text of an entry of the error queue; None where the queue is empty (code 0)."""
    code = answer.strip().split(",", 1)[0].strip()
    if re.fullmatch(r"[+-]?0+", code):
        return None
    return answer.strip() or "an empty answer"


def shown(answer: str) -> str:
    """Make an answer fit to be quoted in a message."""
    plain = "".join(c if c.isprintable() else "·" for c in answer.strip())
    return plain if len(plain) <= 60 else plain[:57] + "..."
