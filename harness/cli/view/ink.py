"""What a page is drawn with: signs, for terminals that know them and for those that do not, and three inks.

The page is written in the terminal's own colour. One red pencil marks what speaks against the unit, and
never says anything that a sign or a word does not say too.
"""

from __future__ import annotations

import unicodedata
from dataclasses import dataclass

PLAIN, STRONG, RED, BOXED, BOXED_RED = "", "bold", "bold red", "bold reverse", "bold red reverse"

Span = tuple[str, str]  # text and ink
Line = tuple[Span, ...]


@dataclass(frozen=True, slots=True)
class Signs:
    """The signs of a page."""

    margin: str
    rule: str
    crossing: str
    tick: str
    ruler: str
    flag: str
    mark: str
    mark_on_ruler: str
    bar: str
    bar_from_middle: str
    bar_to_middle: str
    fading: str
    onwards: str
    measured: str
    clean: str
    heights: str
    unaligned: str
    silent: str


LINES = Signs(
    margin="│",
    rule="─",
    crossing="┬",
    tick="┴",
    ruler="─",
    flag="▼",
    mark="┃",
    mark_on_ruler="┸",
    bar="█",
    bar_from_middle="▐",
    bar_to_middle="▌",
    fading="░",
    onwards="→",
    measured="◆",
    clean=".",
    heights="▁▂▃▄▅▆▇█",
    unaligned="?",
    silent="-",
)
LETTERS = Signs(
    margin="|",
    rule="-",
    crossing="+",
    tick="+",
    ruler="-",
    flag="v",
    mark="!",
    mark_on_ruler="!",
    bar="=",
    bar_from_middle="=",
    bar_to_middle="=",
    fading="-",
    onwards=">",
    measured="o",
    clean=".",
    heights="#",
    unaligned="?",
    silent="-",
)
_IN_LETTERS = str.maketrans({"\u202f": " ", "—": "-", "–": "-", "·": ";", "…": "...", "→": "->", "−": "-"})


def signs_for(encoding: str | None) -> Signs:
    """Choose the signs that an output's encoding can carry."""
    try:
        "".join((*_all_signs(), "\u202f…—")).encode(encoding or "ascii")
    except (UnicodeEncodeError, LookupError):
        return LETTERS
    return LINES


def _all_signs() -> list[str]:
    return [getattr(LINES, name) for name in LINES.__dataclass_fields__]


def clean(text: str) -> str:
    """Take out what a terminal would obey instead of show: words of devices and profiles end up on it."""
    if text.isascii() and text.isprintable():
        return text
    return "".join("\ufffd" if unicodedata.category(c)[0] == "C" else c for c in text.replace("\t", " "))


def writable(text: str, encoding: str | None) -> str:
    """Make text fit for an output: no control characters, and nothing that its encoding cannot carry."""
    text = clean(text)
    try:
        text.encode(encoding or "ascii")
    except UnicodeEncodeError:
        return text.translate(_IN_LETTERS).encode(encoding or "ascii", "replace").decode(encoding or "ascii")
    except LookupError:
        return text.translate(_IN_LETTERS).encode("ascii", "replace").decode("ascii")
    return text
