"""Payload in characters of fewer than eight bits: regrouping bits, least significant bit first."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


class Regrouper:
    """Turns groups of so many bits, one group a byte, into groups of another size; the rest waits for more.

    Parameters
    ----------
    bits_in, bits_out
        Bits in a group, 1 to 8. The first bit of a group is its least significant one, as a UART sends it.
    """

    def __init__(self, bits_in: int, bits_out: int) -> None:
        self._in, self._out = bits_in, bits_out
        self._rest: NDArray[np.uint8] = np.empty(0, dtype=np.uint8)

    @property
    def waiting_bits(self) -> int:
        """Bits that do not make a whole group yet."""
        return len(self._rest)

    def regroup(self, groups: bytes | bytearray | memoryview) -> bytes:
        """Take further groups, give back those that are whole; bits above a group's size are ignored."""
        taken = np.frombuffer(groups, dtype=np.uint8)
        bits = np.unpackbits(taken[:, np.newaxis], axis=1, count=self._in, bitorder="little").ravel()
        bits = np.concatenate((self._rest, bits))
        whole = len(bits) // self._out * self._out
        self._rest = bits[whole:].copy()
        return np.packbits(bits[:whole].reshape(-1, self._out), axis=1, bitorder="little").tobytes()
