"""A shift register in the loop: the same bits come out, a fixed number of bits later."""

from __future__ import annotations

import numpy as np

from drivers.channel.packing import delay_bits
from drivers.channel.stage import BitOrder, Bytes


class BitDelay:
    """Gives out as many bytes as come in; the first bits out are idle ONEs.

    Parameters
    ----------
    bits
        How many bits it holds.
    order
        Which bit of a byte goes first.
    """

    def __init__(self, bits: int, order: BitOrder) -> None:
        self._order: BitOrder = order
        self._shift = bits % 8
        self._held: Bytes = np.full(bits // 8, 0xFF, dtype=np.uint8)
        self._place = 0  # of the oldest byte held
        self._last = 0xFF  # the byte whose last bits have not come out yet

    def apply(self, data: Bytes) -> Bytes:
        """Put bytes in, take as many out."""
        if self._shift and len(data):
            before, self._last = self._last, int(data[-1])
            data = delay_bits(data, before, self._shift, self._order)
        if not len(self._held) or not len(data):
            return data
        if len(data) >= len(self._held):
            whole = np.concatenate([self._held[self._place :], self._held[: self._place], data])
            self._held = whole[len(data) :].copy()
            self._place = 0
            return whole[: len(data)]
        out = np.empty_like(data)
        done = 0
        while done < len(data):
            count = min(len(data) - done, len(self._held) - self._place)
            stretch = self._held[self._place : self._place + count]
            out[done : done + count] = stretch
            stretch[:] = data[done : done + count]
            done += count
            self._place = (self._place + count) % len(self._held)
        return out

    def rest(self) -> Bytes:
        """Give the whole bytes that are still held; fewer than eight bits stay behind."""
        return np.concatenate([self._held[self._place :], self._held[: self._place]])
