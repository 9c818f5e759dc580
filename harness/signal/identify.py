"""Identification: which pattern a captured stream is, in which bit order and polarity, or what it looks like."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.acquire import Acquirer, Found
from harness.signal.bits import as_bytes, unpack
from harness.signal.evidence import CANDIDATES
from harness.signal.patterns import (
    Pattern,
    ShortRegisterPattern,
    known_patterns,
    parse_pattern,
    table_pattern,
)
from harness.signal.streams import Look, look_at

_LONG, _SHORT = 8192, 1024  # bits of a stretch that is searched in; between slips a short one may fit
_PLACES = 16  # places in a stream at which a stretch is tried
_BLOCK = 1 << 13  # bits compared at once where two patterns are told apart
_DECIDING_ODDS = 1e4
_BLOCKS = 4096  # at most so many: 32 Mbit, or 31 periods of QRSS


@dataclass(frozen=True, slots=True)
class Identification:
    """What a stream is.

    Attributes
    ----------
    pattern
        Canonical name, without regard to polarity for those found automatically; None where none fits.
    inverted
        The stream is inverted against the pattern's row in the table (for other patterns: as named).
    bit_order
        Which bit of a byte came first; None where nothing fits.
    alternatives
        Names that fit as well, by what has been seen.
    confidence
        1 minus a bound on the probability that unrelated bits would have fitted, all trials together.
    ber
        Share of mismatches among the bits on which it was accepted; None where nothing fits.
    start, place
        The stream's bit at which the stretch begins that was recognised, and its place in the pattern.
    look
        What the stream looks like instead; None where a pattern fits.
    """

    pattern: str | None
    inverted: bool = False
    bit_order: BitOrder | None = None
    alternatives: tuple[str, ...] = ()
    confidence: float = 0.0
    ber: float | None = None
    start: int = 0
    place: int = 0
    look: Look | None = None


def identify(
    data: bytes | bytearray | memoryview | NDArray[np.uint8],
    pattern: str = "auto",
    order: BitOrder | Literal["auto"] = "auto",
    *,
    read: Callable[[str], bytes] | None = None,
) -> Identification:
    """Say which pattern a stream is.

    The stream may begin with something else, hold slips and errors up to a BER of 0.2 or so: stretches all
    over it are tried. A pattern of the table is recognised upright and inverted, forwards and reversed.

    Parameters
    ----------
    data
        Received bytes.
    pattern
        A name, or ``"auto"`` for all of the table.
    order
        Which bit of a byte came first, or ``"auto"``.
    read
        Reads a file's bytes, where the pattern is a file.

    Raises
    ------
    PatternError
        Where the name is none, or the pattern cannot be looked for.
    """
    received = as_bytes(data)
    orders: tuple[BitOrder, ...] = ("lsb", "msb") if order == "auto" else (order,)
    acquirers = {each: _acquirers(pattern, each, read) for each in orders}
    trials = 0
    for start, length in stretches(8 * len(received)):
        stretch = received[start // 8 : (start + length) // 8]
        if stretch.max() == 0 or stretch.min() == 255:
            continue  # a dead line has no place in anything
        for each in orders:
            bits = unpack(stretch, each)
            for acquirer in acquirers[each]:
                trials += CANDIDATES
                found = acquirer.search(bits, near=start)
                if found is not None:
                    named = _named(acquirer.pattern, found, received, start, each, pattern == "auto")
                    chance = min(1.0, trials * math.exp(found.log_chance))
                    return Identification(
                        pattern=named[0],
                        inverted=found.inverted != acquirer.pattern.inverted,
                        bit_order=each,
                        alternatives=named[1],
                        confidence=1 - chance,
                        ber=found.mismatches / found.verified_on,
                        start=start,
                        place=found.place,
                    )
    return Identification(None, look=_best_look(received, orders))


def _acquirers(pattern: str, order: BitOrder, read: Callable[[str], bytes] | None) -> list[Acquirer]:
    """One for each register sequence that may be meant; QRSS is told from its register's own afterwards."""
    if pattern.strip().lower() != "auto":
        return [Acquirer(parse_pattern(pattern, bit_order=order, read=read))]
    rows = [row for row in known_patterns() if row.force_after_zeros is None]
    return [
        Acquirer(table_pattern(row, backwards), hasty=True) for row in rows for backwards in (False, True)
    ]


def stretches(count: int) -> Iterator[tuple[int, int]]:
    """Start and length in bits of the stretches of a stream to search in, whole bytes, likeliest first.

    The stream's beginning, its middle, quarters, eighths and sixteenths; long stretches first, since errors
    hide more than slips do, then short ones.
    """
    for longest in (_LONG, _SHORT):
        length = min(longest, count) // 8 * 8
        given: set[int] = set()
        parts = 1
        while parts <= _PLACES:
            for number in range(0 if parts == 1 else 1, parts, 2):
                start = (count - length) * number // parts // 8 * 8
                if start not in given and length:
                    given.add(start)
                    yield start, length
            parts *= 2
        if count <= _SHORT:
            return


def _named(
    pattern: Pattern, found: Found, received: NDArray[np.uint8], start: int, order: BitOrder, freely: bool
) -> tuple[str, tuple[str, ...]]:
    """The pattern's name, and the names that fit as well."""
    if not freely:
        return pattern.name, ()
    twin = _twin(pattern)
    if twin is None:
        return pattern.name, ()
    odds = _odds_of_forcing(twin, found, received, start, order)
    if abs(odds) >= math.log(_DECIDING_ODDS):
        return (twin.name if odds > 0 else pattern.name), ()
    first, second = sorted((pattern.name, twin.name), key=lambda name: ("reversed" in name, name))
    return first, (second,)


def _twin(pattern: Pattern) -> ShortRegisterPattern | None:
    """The pattern of the table that is this one but for a few forced bits."""
    for row in known_patterns():
        if row.force_after_zeros is not None:
            for backwards in (False, True):
                twin = table_pattern(row, backwards)
                if twin.register == pattern.register and isinstance(twin, ShortRegisterPattern):
                    return twin
    return None


def _odds_of_forcing(
    twin: ShortRegisterPattern, found: Found, received: NDArray[np.uint8], start: int, order: BitOrder
) -> float:
    """Log odds that the stream has forced bits, from those places at which the two patterns differ.

    The stream is followed block by block, onwards and then back from the stretch that was recognised; after a
    slip the place is sought again. One such bit speaks by as much as an error is unlikely.
    """
    acquirer = Acquirer(twin)
    forced, period = twin.forced_places, twin.period
    last = 8 * len(received) - _BLOCK
    onwards = range(start, last + 1, _BLOCK)
    blocks = [*onwards, *range(start - _BLOCK, -1, -_BLOCK)][:_BLOCKS]
    offset = found.place - start  # place less bit
    seen = agreeing = errors = compared = 0
    odds = 0.0
    for at in blocks:
        if at == start - _BLOCK:
            offset = found.place - start
        bits = unpack(received[at // 8 : (at + _BLOCK) // 8], order) ^ np.uint8(found.inverted)
        wrong = bits != twin.bits(at + offset, _BLOCK)
        mismatches = int(np.count_nonzero(wrong))
        if mismatches > 0.4 * _BLOCK:
            again = acquirer.search(bits[-_LONG:])
            if again is not None and not again.inverted:
                offset = again.place - (at + _BLOCK - _LONG)
            continue
        here = (forced - at - offset) % period
        here = here[here < _BLOCK]
        errors += mismatches - int(np.count_nonzero(wrong[here]))
        compared += _BLOCK - len(here)
        seen += len(here)
        agreeing += len(here) - int(np.count_nonzero(wrong[here]))
        ratio = min((errors + 3) / compared, 0.49)
        odds = (2 * agreeing - seen) * math.log((1 - ratio) / ratio)
        if abs(odds) >= math.log(_DECIDING_ODDS):
            break
    return odds


def _best_look(received: NDArray[np.uint8], orders: tuple[BitOrder, ...]) -> Look:
    """What the stream looks like, in the bit order in which it looks simplest."""
    looks = [look_at(unpack(received[: 1 << 20], order)) for order in orders]
    return min(looks, key=lambda look: look.complexity)
