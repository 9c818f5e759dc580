"""What a stream looks like where no pattern is known to fit: constant, a word over and over, a register, noise."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.signal import polynomials
from harness.signal.acquire import Acquirer
from harness.signal.patterns import WordPattern, word_pattern
from harness.signal.registers import LONGEST_REGISTER, Register, shortest_recurrence

_LOOKED_AT = 1 << 16  # bits of a stream that a period is looked for in
_LONGEST_PERIOD = 1 << 13  # bits
_LEAST_LIKENESS = 0.3  # correlation with itself, one period later: a word at BER 0.2 has 0.36
_SHORT_WORD = 64  # bits: a longer word may be better described by a register
_STRETCH = 512  # bits on which a recurrence is sought
_PROOF = 96  # bits of it that the recurrence must predict beyond the 2L that determine it
_STRETCHES = 48
_NEARLY_ALL = 0.98


@dataclass(frozen=True, slots=True)
class Recurrence:
    """The shortest linear recurrence of a stream.

    Attributes
    ----------
    taps
        Stages that are added, ascending; the last one is the number of stages.
    inverted
        The stream is the complement of what the register gives.
    pattern
        The name under which it can be used as a pattern, None where it cannot.
    start
        The stream's bit from which on it was clean enough to see.
    """

    taps: tuple[int, ...]
    inverted: bool
    pattern: str | None
    start: int

    @property
    def stages(self) -> int:
        """Number of stages."""
        return self.taps[-1]


@dataclass(frozen=True, slots=True)
class Look:
    """A stream in a few words.

    Attributes
    ----------
    text
        In words, for a person.
    ones_share
        ONEs among all bits, 0 to 1; 0 for an empty stream.
    constant
        Not a single bit differs from the others.
    period
        Bits after which a word repeats, None where none is found.
    word
        The name of that word as a pattern.
    recurrence
        Of an unknown register's sequence.
    """

    text: str
    ones_share: float
    constant: bool = False
    period: int | None = None
    word: str | None = None
    recurrence: Recurrence | None = None

    @property
    def complexity(self) -> float:
        """How much it takes to describe it: bits of a word, stages of a register; infinite for noise."""
        if self.recurrence is not None:
            return self.recurrence.stages
        return math.inf if self.period is None else self.period


def look_at(bits: NDArray[np.uint8]) -> Look:
    """Describe a stream.

    Parameters
    ----------
    bits
        0 and 1, shape (n,), in the order in which they travelled.
    """
    if len(bits) == 0:
        return Look("no bits at all", 0.0)
    share = float(np.count_nonzero(bits)) / len(bits)
    if share in (0.0, 1.0):
        return Look(f"constant: only {'ONEs' if share else 'ZEROs'}", share, constant=True, period=1)
    word = repeated_word(bits)
    recurrence = register_behind(bits) if word is None or word.period > _SHORT_WORD else None
    if word is not None and recurrence is None:
        return Look(
            f"a word of {word.period} bits over and over: {word.name}",
            share,
            period=word.period,
            word=word.name,
        )
    if recurrence is not None:
        return Look(_register_text(recurrence), share, recurrence=recurrence)
    percent = f"{100 * share:.2f} % ONEs"
    if not 1 - _NEARLY_ALL < share < _NEARLY_ALL:
        return Look(f"nearly all {'ONEs' if share > 0.5 else 'ZEROs'}: {percent}", share)
    return Look(f"no period and no register found: {percent}", share)


def _register_text(recurrence: Recurrence) -> str:
    taps = ", ".join(str(tap) for tap in recurrence.taps)
    text = f"a register of {recurrence.stages} stages, of which {taps} are added"
    if recurrence.inverted:
        text += ", sent inverted"
    return text + (f": {recurrence.pattern}" if recurrence.pattern else "")


def repeated_word(bits: NDArray[np.uint8]) -> WordPattern | None:
    """The word that a stream repeats, also through errors up to a BER of about 0.2, or None.

    Several periods of it must be there. Of a word's rotations the one is named that reads highest.
    """
    parts = (bits[:_LOOKED_AT], bits[len(bits) // 2 :][:_LOOKED_AT])
    for stretch in parts:
        period = _likely_period(stretch)
        if period is None:
            continue
        seen = np.bincount(np.arange(len(stretch)) % period, minlength=period)
        ones = np.bincount(np.arange(len(stretch)) % period, weights=stretch, minlength=period)
        pattern = word_pattern(_highest_rotation((2 * ones > seen).astype(np.uint8)))
        if not pattern.constant and all(Acquirer(pattern).search(part) is not None for part in parts):
            return pattern
    return None


def _likely_period(bits: NDArray[np.uint8]) -> int | None:
    """The shortest lag at which a stream is about as much like itself as at any."""
    count = len(bits)
    longest = min(_LONGEST_PERIOD, count // 4)
    if longest < 2 or bits.max() == bits.min():
        return None
    signs = 1 - 2 * bits.astype(np.float64)
    signs -= signs.mean()
    spectrum = np.fft.rfft(signs, 1 << (2 * count - 1).bit_length())
    likeness = np.fft.irfft(np.abs(spectrum) ** 2)[: longest + 1]
    likeness /= likeness[0] * (count - np.arange(longest + 1)) / count
    best = float(likeness[1:].max())
    if best < _LEAST_LIKENESS:
        return None
    return 1 + int(np.argmax(likeness[1:] > best - 5 / count**0.5))


def _highest_rotation(word: NDArray[np.uint8]) -> NDArray[np.uint8]:
    text = "".join(map(str, word.tolist()))
    doubled = text + text
    best = max(range(len(text)), key=lambda start: doubled[start : start + len(text)])
    return np.roll(word, -best)


def register_behind(bits: NDArray[np.uint8]) -> Recurrence | None:
    """The shortest register that gives a clean stretch of a stream, by Berlekamp and Massey, or None.

    Stretches of 512 bits all over the stream are tried; up to 208 stages are found.
    """
    last = max(len(bits) - _STRETCH, 0)
    for start in sorted({round(i * last / (_STRETCHES - 1)) for i in range(_STRETCHES)}):
        stretch = bits[start : start + _STRETCH]
        length, connection = shortest_recurrence(stretch)
        if length < 2 or 2 * length + _PROOF > len(stretch):
            continue
        inverted = False
        if connection.bit_count() % 2 == 0:
            # x + 1 divides it: so has the complement of a register's sequence, and some registers too.
            shorter = polynomials.quotient(connection, 0b11)
            inverted = _gives(shorter, length - 1, 1 - stretch)
            if inverted:
                length, connection = length - 1, shorter
        taps = tuple(tap for tap in range(1, length + 1) if connection >> tap & 1)
        if taps and taps[-1] == length:
            return Recurrence(taps, inverted, _usable(taps, inverted, stretch, length), start)
    return None


def _gives(connection: int, length: int, bits: NDArray[np.uint8]) -> bool:
    total = np.zeros(len(bits) - length, dtype=np.uint8)
    for tap in range(length + 1):
        if connection >> tap & 1:
            total ^= bits[length - tap : len(bits) - tap]
    return not total.any()


def _usable(taps: tuple[int, ...], inverted: bool, stretch: NDArray[np.uint8], length: int) -> str | None:
    """The pattern's name, if n ONEs lead to this sequence."""
    if length > LONGEST_REGISTER or len(taps) % 2:
        return None
    window = sum(int(bit ^ inverted) << i for i, bit in enumerate(stretch[:length].tolist()))
    if Register(taps).place_of(window) is None:
        return None
    return "taps:" + ",".join(map(str, taps)) + "-inverted" * inverted
