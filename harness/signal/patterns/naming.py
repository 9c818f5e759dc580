"""From a name to a pattern: spelling, suffixes, and the nearest known name for one that is unknown."""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.bits import bits_of_int
from harness.signal.patterns.base import Pattern, PatternError
from harness.signal.patterns.periodic import BytesPattern, WordPattern
from harness.signal.patterns.sequences import RegisterPattern, register_pattern
from harness.signal.patterns.sources import BernoulliPattern
from harness.signal.patterns.table import KnownPattern, known_patterns
from harness.signal.registers import LONGEST_REGISTER, Register

_NUMBERED = re.compile(r"([A-Za-z]+)([0-9]{1,4})")  # PRBS16
_EXAMPLES = "PRBS15, PRBS9-reversed, QRSS, word:1010, word:0xA5, taps:18,23, bernoulli:0.4, file:PATH"
_LONGEST_WORD = 1 << 16  # bits
_SUFFIXES = ("-reversed", "-inverted")


def parse_pattern(
    name: str, *, bit_order: BitOrder = "lsb", read: Callable[[str], bytes] | None = None
) -> Pattern:
    """Make the pattern that a name stands for.

    Parameters
    ----------
    name
        A row of the table (`known_patterns`), ``taps:a,b,…``, ``word:`` with the digits 0 and 1 or with 0x
        and hexadecimal digits, ``bernoulli:SHARE`` or ``bernoulli:SHARE:SEED``, ``file:PATH``; all but a file
        in any case and with ``-inverted``, all but a file and a Bernoulli source with ``-reversed``.
    bit_order
        How the link sends bytes; only a file's bits depend on it.
    read
        Reads the bytes of a path, for ``file:``; this room does no I/O itself.

    Raises
    ------
    PatternError
        With the nearest known name where there is one. What `read` raises passes through.
    """
    text = name.strip()
    kind, colon, rest = text.partition(":")
    kind = kind.strip().lower()
    if colon and kind == "file":
        return _file(rest.strip(), bit_order, read)
    stem, suffixes = _split_suffixes(text.lower())
    if colon:
        makers = {"word": _word, "taps": _taps, "bernoulli": _bernoulli}
        if kind not in makers:
            raise _unknown(text)
        return makers[kind](stem.partition(":")[2].strip(), suffixes)
    for row in known_patterns():
        if row.name.lower() == stem:
            return table_pattern(row, "-reversed" in suffixes, "-inverted" in suffixes)
    raise _unknown(text)


def table_pattern(row: KnownPattern, backwards: bool = False, inverted: bool = False) -> RegisterPattern:
    """A row of the table, reversed (its polynomial the other way round) and inverted as asked."""
    register = row.register.reversed if backwards else row.register
    name = row.name + "-reversed" * backwards + "-inverted" * inverted
    return register_pattern(name, register, row.sent_inverted != inverted, inverted, row.force_after_zeros)


def word_pattern(word: NDArray[np.uint8]) -> WordPattern:
    """A word of 0 and 1, shape (m,), under its name: digits, or hexadecimal where it is long."""
    digits = "".join(map(str, word.tolist()))
    if len(digits) > 16 and len(digits) % 4 == 0:
        digits = f"0x{int(digits, 2):0{len(digits) // 4}X}"
    return WordPattern(word, f"word:{digits}")


def _split_suffixes(text: str) -> tuple[str, frozenset[str]]:
    found: set[str] = set()
    while True:
        for suffix in _SUFFIXES:
            if text.endswith(suffix) and suffix not in found:
                found.add(suffix)
                text = text[: -len(suffix)]
                break
        else:
            return text, frozenset(found)


def _suffix_text(suffixes: frozenset[str]) -> str:
    return "".join(suffix for suffix in _SUFFIXES if suffix in suffixes)


def _unknown(text: str) -> PatternError:
    stems = [row.name for row in known_patterns()]
    names = [stem + end for stem in stems for end in ("", "-reversed", "-inverted", "-reversed-inverted")]
    names += ["word:1010", "taps:18,23", "bernoulli:0.4", "file:PATH"]
    by_lower = {known.lower(): known for known in names}
    if (numbered := _NUMBERED.fullmatch(text)) and (same := _numbers_of(stems, numbered[1])):
        wanted = int(numbered[2])
        number = min(same, key=lambda known: abs(known - wanted))
        return PatternError(f"there is no pattern {text!r}", f"did you mean {same[number]}?")
    near = difflib.get_close_matches(text.lower(), list(by_lower), n=1, cutoff=0.5)
    advice = f"did you mean {by_lower[near[0]]}?" if near else f"patterns are written like {_EXAMPLES}"
    return PatternError(f"there is no pattern {text!r}", advice)


def _numbers_of(stems: list[str], name: str) -> dict[int, str]:
    """Give the known patterns of that name by their number, without those that have more to their name."""
    found = [match for stem in stems if (match := _NUMBERED.fullmatch(stem))]
    return {int(match[2]): match[0] for match in found if match[1].lower() == name.lower()}


def _word(digits: str, suffixes: frozenset[str]) -> Pattern:
    advice = "write digits 0 and 1, or 0x and hexadecimal digits: word:1010, word:0xA5"
    try:
        if digits.startswith("0x"):
            count = 4 * (len(digits) - 2)
            canonical = "0x" + digits[2:].upper()
            bits = bits_of_int(_hexadecimal(digits[2:]), count)[::-1] if count else bits_of_int(0, 0)
        else:
            canonical = digits
            if set(digits) - {"0", "1"}:
                raise ValueError
            bits = np.array([int(digit) for digit in digits], dtype=np.uint8)
    except ValueError:
        raise PatternError(f"{digits!r} is no word", advice) from None
    if not 1 <= len(bits) <= _LONGEST_WORD:
        raise PatternError(f"a word has 1 to {_LONGEST_WORD} bits, this one has {len(bits)}", advice)
    return WordPattern(
        _turned(bits, suffixes), f"word:{canonical}{_suffix_text(suffixes)}", "-inverted" in suffixes
    )


def _hexadecimal(digits: str) -> int:
    if set(digits) - set("0123456789abcdef"):
        raise ValueError
    return int(digits, 16)


def _turned(bits: NDArray[np.uint8], suffixes: frozenset[str]) -> NDArray[np.uint8]:
    return np.ascontiguousarray(bits[::-1] if "-reversed" in suffixes else bits)


def _taps(text: str, suffixes: frozenset[str]) -> Pattern:
    try:
        register = Register(tuple(sorted(int(tap) for tap in text.split(","))))
    except ValueError as error:
        what = str(error) if "tap" in str(error) or "register" in str(error) else "they are no numbers"
        raise PatternError(
            f"taps:{text} make no pattern: {what}",
            f"name an even number of different stages up to {LONGEST_REGISTER}, as in taps:18,23",
        ) from None
    if "-reversed" in suffixes:
        register = register.reversed
    name = "taps:" + text.replace(" ", "") + _suffix_text(suffixes)
    return register_pattern(name, register, "-inverted" in suffixes, "-inverted" in suffixes)


def _bernoulli(text: str, suffixes: frozenset[str]) -> Pattern:
    advice = "write the share of ONEs from 0 to 1, and a seed if you like: bernoulli:0.4, bernoulli:0.4:7"
    if "-reversed" in suffixes:
        raise PatternError("a Bernoulli source has no reverse", advice)
    share_text, colon, seed_text = text.partition(":")
    try:
        share = float(share_text)
        seed = int(seed_text) if colon else 0
    except ValueError:
        raise PatternError(f"{text!r} is no share of ONEs with a seed", advice) from None
    if not (math.isfinite(share) and 0 <= share <= 1 and 0 <= seed < 2**64):
        raise PatternError(f"the share or the seed of bernoulli:{text} is out of range", advice)
    name = f"bernoulli:{share_text}{colon}{seed_text}{_suffix_text(suffixes)}"
    return BernoulliPattern(share, seed, name, "-inverted" in suffixes)


def _file(path: str, bit_order: BitOrder, read: Callable[[str], bytes] | None) -> Pattern:
    if not path:
        raise PatternError("file: names no file", "write file:PATH")
    if read is None:
        raise PatternError(f"file:{path} cannot be read here", "use a pattern that needs no file")
    data = read(path)
    if not data:
        raise PatternError(f"the file {path} is empty", "a pattern needs at least one byte")
    return BytesPattern(data, f"file:{path}", bit_order)
