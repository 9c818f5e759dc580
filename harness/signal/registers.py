"""Shift registers with linear feedback: sequence, period, jumps to any place, and the place of a state.

A register of n stages whose stages a, b, … are added gives s[i] = s[i-a] XOR s[i-b] XOR …; its state is
written as a *window*: an int whose bit j is s[i+j], j < n. Place 0 is the first of n consecutive ONEs.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from harness.signal import polynomials
from harness.signal.bits import bits_of_int

LONGEST_REGISTER = 32  # stages; a place is found from a state in about 2^(n/2) steps


@dataclass(frozen=True)
class Register:
    """A shift register with linear feedback.

    Parameters
    ----------
    taps
        Stages that are added, ascending; the last one is the number of stages.

    Raises
    ------
    ValueError
        Where these taps make no register: repeated, out of range, or an odd number of them, which keeps
        n ONEs at ONE for ever.
    """

    taps: tuple[int, ...]

    def __post_init__(self) -> None:
        if list(self.taps) != sorted(set(self.taps)) or not self.taps or self.taps[0] < 1:
            raise ValueError("taps are different stages, counted from 1")
        if len(self.taps) % 2:
            raise ValueError("an odd number of taps turns n ONEs into ONEs for ever")
        if self.taps[-1] > LONGEST_REGISTER:
            raise ValueError(f"registers have at most {LONGEST_REGISTER} stages here")

    @property
    def stages(self) -> int:
        """Number of stages n."""
        return self.taps[-1]

    @property
    def reversed(self) -> Register:
        """The register whose sequence is this one's backwards: s[i] = s[i-n] XOR s[i-(n-a)]."""
        n = self.stages
        return Register(tuple(sorted({n - tap for tap in self.taps[:-1]} | {n})))

    @cached_property
    def polynomial(self) -> int:
        """Characteristic polynomial x^n + Σ x^(n-tap), bit i the coefficient of x^i."""
        n = self.stages
        return (1 << n) | sum(1 << (n - tap) for tap in self.taps)

    @cached_property
    def period(self) -> int:
        """Bits after which the sequence that starts with n ONEs repeats: 2^n - 1 where it is maximal."""
        stretch = bits_of_int(self.run((1 << self.stages) - 1, 2 * self.stages), 2 * self.stages)
        return polynomials.order_of_x(connection_to_characteristic(*shortest_recurrence(stretch)))

    def run(self, window: int, count: int) -> int:
        """The sequence that begins with a window, as an int whose bit i is its i-th bit.

        A squared polynomial is the polynomial in x², so the recurrence also holds with all taps doubled, any
        number of times; each step uses the largest doubling that the bits at hand allow.
        """
        bits, known = window, self.stages
        while known < count:
            scale = 1
            while 2 * scale * self.stages <= known:
                scale *= 2
            new = self.taps[0] * scale
            mask = (1 << new) - 1
            piece = 0
            for tap in self.taps:
                piece ^= (bits >> (known - tap * scale)) & mask
            bits |= piece << known
            known += new
        return bits & ((1 << count) - 1)

    def bits_from(self, window: int, count: int) -> NDArray[np.uint8]:
        """The sequence that begins with a window: 0 and 1, shape (count,)."""
        return bits_of_int(self.run(window, count), count)

    def window_at(self, place: int) -> int:
        """The window at a place, by x^place modulo the polynomial: cost grows with log(place) only."""
        return self.combine(self._jumps.power(place % self.period), self._start)

    def place_of(self, window: int) -> int | None:
        """The place of a window, or None where it is not on the cycle of n ONEs (the zero state never is)."""
        return self._logarithm.place_of(window)

    @cached_property
    def order(self) -> int:
        """Bits after which any state has returned."""
        return polynomials.order_of_x(self.polynomial)

    @cached_property
    def _jumps(self) -> _Powers:
        return _Powers(self.polynomial)

    @cached_property
    def _logarithm(self) -> _Logarithm:
        return _Logarithm(self)

    @cached_property
    def _start(self) -> int:
        return self.run((1 << self.stages) - 1, 2 * self.stages)

    def combine(self, jump: int, sequence: int) -> int:
        """The window x^k further on, from its first 2n bits and ``jump`` = x^k modulo the polynomial.

        With jump = Σ x^j over a set of j, it is the sum of the windows that begin at these j.
        """
        window = 0
        while jump:
            lowest = jump & -jump
            window ^= sequence >> (lowest.bit_length() - 1)
            jump ^= lowest
        return window & ((1 << self.stages) - 1)


class _Powers:
    """Powers of x modulo a polynomial: one table of 256 entries for each byte of the exponent."""

    def __init__(self, modulus: int) -> None:
        self._modulus = modulus
        self._tables: list[list[int]] = []

    def power(self, exponent: int) -> int:
        result = 1
        for level in range((exponent.bit_length() + 7) // 8):
            if level == len(self._tables):
                self._tables.append(self._table(level))
            digit = (exponent >> (8 * level)) & 255
            if digit:
                result = polynomials.remainder(
                    polynomials.multiply(result, self._tables[level][digit]), self._modulus
                )
        return result

    def _table(self, level: int) -> list[int]:
        step = polynomials.power(2, 256**level, self._modulus)
        table = [1]
        for _ in range(255):
            table.append(polynomials.remainder(polynomials.multiply(table[-1], step), self._modulus))
        return table


class _Logarithm:
    """The place of a window by baby-step giant-step.

    Every place is i·B + j with j < B. The windows at j < B are kept sorted (baby steps); a window is moved
    back by i·B for all i at once (giant steps), which is linear in its bits, and looked up.
    """

    def __init__(self, register: Register) -> None:
        n, period = register.stages, register.period
        self._period = period
        # Giant steps cost time at every search and memory n times over, baby steps only memory once.
        self._step = min(period, 1 << ((n + 1) // 2 + 1))
        giants = -(-period // self._step)
        windows = sliding_windows(register.bits_from((1 << n) - 1, self._step + n - 1), n)
        self._order = np.argsort(windows, kind="stable")
        self._sorted = windows[self._order]
        self._columns = _moved_back(register, self._step, giants)

    def place_of(self, window: int) -> int | None:
        columns = [column for bit, column in enumerate(self._columns) if window >> bit & 1]
        if not columns:
            return None
        moved = np.bitwise_xor.reduce(columns, axis=0)
        at = np.minimum(np.searchsorted(self._sorted, moved), len(self._sorted) - 1)
        hits = np.flatnonzero(self._sorted[at] == moved)
        if len(hits) == 0:
            return None
        giant = int(hits[0])
        return (giant * self._step + int(self._order[at[giant]])) % self._period


def sliding_windows(bits: NDArray[np.uint8], width: int) -> NDArray[np.uint32]:
    """All windows of up to 32 bits: bit j of element i is ``bits[i+j]``, shape (len - width + 1,)."""
    count = len(bits) - width + 1
    windows = np.zeros(count, dtype=np.uint32)
    for j in range(width):
        windows |= bits[j : j + count].astype(np.uint32) << np.uint32(j)
    return windows


def _moved_back(register: Register, step: int, count: int) -> NDArray[np.uint32]:
    """Row b, column i: the window with only bit b set, moved back by i·step; shape (n, count)."""
    n = register.stages
    columns = np.zeros((n, count), dtype=np.uint32)
    columns[:, 0] = np.uint32(1) << np.arange(n, dtype=np.uint32)
    ahead = [register.run(1 << b, 2 * n) for b in range(n)]
    back = polynomials.power(2, -step % register.order, register.polynomial)  # x^(-step·known)
    known = 1
    while known < count:
        new = min(known, count - known)
        images = [register.combine(back, sequence) for sequence in ahead]
        columns[:, known : known + new] = _map_windows(columns[:, :new], images)
        known += new
        back = polynomials.remainder(polynomials.multiply(back, back), register.polynomial)
    return columns


def _map_windows(windows: NDArray[np.uint32], images: list[int]) -> NDArray[np.uint32]:
    """Apply a linear map, given by the images of the single bits, to many windows, a byte at a time."""
    mapped = np.zeros_like(windows)
    for start in range(0, len(images), 8):
        table = np.zeros(1, dtype=np.uint32)
        for image in images[start : start + 8]:
            table = np.concatenate([table, table ^ np.uint32(image)])
        mapped ^= table[(windows >> np.uint32(start)) & np.uint32(len(table) - 1)]
    return mapped


def shortest_recurrence(bits: NDArray[np.uint8]) -> tuple[int, int]:
    """Berlekamp and Massey: the shortest linear recurrence that gives a clean stretch of bits.

    Parameters
    ----------
    bits
        0 and 1, shape (m,). A recurrence of length L is certain from 2L bits on.

    Returns
    -------
    tuple[int, int]
        Its length L, and the connection polynomial C with bit 0 set: s[i] is the sum of s[i-t] over all
        t > 0 for which bit t of C is set.

    Notes
    -----
    J. L. Massey, "Shift-register synthesis and BCH decoding", IEEE Trans. Inform. Theory 15 (1969).
    """
    connection, previous = 1, 1
    length, since = 0, 1
    history = 0  # bit t is s[i-t]
    for i, bit in enumerate(bits.tolist()):
        history = (history << 1) | bit
        if (history & connection).bit_count() & 1:
            before = connection
            connection ^= previous << since
            if 2 * length <= i:
                length, previous, since = i + 1 - length, before, 0
        since += 1
    return length, connection


def connection_to_characteristic(length: int, connection: int) -> int:
    """x^L · C(1/x): the polynomial whose order is the period, from `shortest_recurrence`'s result."""
    return sum(1 << (length - t) for t in range(length + 1) if connection >> t & 1)
