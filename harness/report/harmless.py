"""Text from devices, instruments and profiles, made harmless: it is shown and never obeyed.

Pages escape markup and the PDF takes text as data; here is what is left: characters that a terminal, a
reader or XML would act on, and cells that a spreadsheet would run.
"""

from __future__ import annotations

import unicodedata

_RUNS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")  # wide forms are read alike by some
REPLACEMENT = "\ufffd"


def plain(text: str, *, keep_lines: bool = False) -> str:
    """Replace control, direction-changing and unassigned characters; line ends and tabs become spaces.

    Parameters
    ----------
    keep_lines
        Leave line feeds and tabs as they are.
    """
    if keep_lines:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    if text.isascii() and text.isprintable():
        return text
    return "".join(_plain(c, keep_lines) for c in text)


def _plain(character: str, keep_lines: bool) -> str:
    if character in "\n\t\r\x0b\x0c\x1c\x1d\x1e\x85\u2028\u2029":
        return character if keep_lines and character in "\n\t" else " "
    return REPLACEMENT if unicodedata.category(character)[0] == "C" else character


def cell(value: object) -> object:
    """Give a spreadsheet cell: text that would be run as a formula is led by an apostrophe.

    Numbers stay numbers, negative ones too.
    """
    if isinstance(value, bool) or value is None:
        return {True: "yes", False: "no", None: ""}[value]
    if not isinstance(value, str):
        return value
    text = plain(value.strip("\r\n"))
    return f"'{text}" if value.lstrip(" ").startswith(_RUNS) or text.lstrip(" ").startswith(_RUNS) else text
