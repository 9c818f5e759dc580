"""The part of a received stream that is not decided yet, addressed by stream bits."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.bits import unpack


class Undecided:
    """Bytes from some byte of the stream on.

    Parameters
    ----------
    order
        Which bit of a byte comes first.
    """

    def __init__(self, order: BitOrder) -> None:
        self._order: BitOrder = order
        self._memory = np.empty(1 << 12, dtype=np.uint8)
        self._begin = 0  # in memory
        self._end = 0
        self.first = 0  # the stream's byte that is first

    def __len__(self) -> int:
        return self._end - self._begin

    @property
    def end(self) -> int:
        """The stream's bit that comes next."""
        return 8 * (self.first + len(self))

    @property
    def data(self) -> NDArray[np.uint8]:
        """All of them, valid until the next call of anything."""
        return self._memory[self._begin : self._end]

    def append(self, data: NDArray[np.uint8]) -> None:
        """Add bytes at the end."""
        if self._end + len(data) > len(self._memory):
            held = len(self)
            memory = self._memory
            if 2 * (held + len(data)) > len(memory):
                memory = np.empty(2 * (held + len(data)), dtype=np.uint8)
            memory[:held] = self.data  # numpy copies overlapping memory as if by way of a third place
            self._memory, self._begin, self._end = memory, 0, held
        self._memory[self._end : self._end + len(data)] = data
        self._end += len(data)

    def drop_until(self, bit: int) -> None:
        """Forget whole bytes before a bit."""
        count = min(max(bit // 8 - self.first, 0), len(self))
        self._begin += count
        self.first += count

    def restart(self, first: int, data: NDArray[np.uint8]) -> None:
        """Put bytes in front, so that the stream's byte `first` is first again."""
        rest = self.data.copy()
        self._begin = self._end = 0
        self.first = first
        self.append(data)
        self.append(rest)

    def bytes(self, first_bit: int, end_bit: int) -> NDArray[np.uint8]:
        """Whole bytes that hold these bits; the first one begins at bit ``first_bit // 8 * 8``."""
        begin = self._begin - self.first
        return self._memory[begin + first_bit // 8 : begin + (end_bit + 7) // 8]

    def bits(self, first_bit: int, end_bit: int) -> NDArray[np.uint8]:
        """0 and 1, shape (end_bit - first_bit,)."""
        at = first_bit % 8
        return unpack(self.bytes(first_bit, end_bit), self._order)[at : at + end_bit - first_bit]
