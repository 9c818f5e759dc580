"""What every pattern can do, and the error that a bad pattern name raises."""

from __future__ import annotations

from abc import ABC, abstractmethod
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.patterns.readers import Reader
from harness.signal.registers import Register

XON, XOFF = 0x11, 0x13


class PatternError(ValueError):
    """A pattern that does not exist or cannot be used, with one line `what` is wrong and one of `advice`."""

    def __init__(self, what: str, advice: str = "") -> None:
        super().__init__(what)
        self.what = what
        self.advice = advice


class Pattern(ABC):
    """A bit sequence that both ends know.

    A *place* counts its bits from 0 and may be any int: it is taken modulo the period where there is one.

    Attributes
    ----------
    name
        Canonical name, as `parse_pattern` reads it.
    period
        Bits after which it repeats; None where it does not.
    inverted
        Sent inverted against its row in the table of patterns.
    register
        The register behind it, None where there is none.
    """

    name: str
    period: int | None
    inverted: bool = False
    register: Register | None = None

    @abstractmethod
    def bits(self, place: int, count: int) -> NDArray[np.uint8]:
        """`count` bits from a place on, as sent: 0 and 1, shape (count,)."""

    @abstractmethod
    def reader(self, place: int, order: BitOrder) -> Reader:
        """Packed bytes from a place on, which need not be a multiple of 8."""

    @abstractmethod
    def opposite(self) -> Pattern:
        """The same pattern in the other polarity, with the same places."""

    def packed(self, place: int, count: int, order: BitOrder) -> NDArray[np.uint8]:
        """`count` bytes from a place on, shape (count,)."""
        out = np.empty(count, dtype=np.uint8)
        self.reader(place, order).read_into(out)
        return out

    @cached_property
    def constant(self) -> bool:
        """Whether it never changes, so that it cannot be told from a dead line."""
        return self.period == 1

    @cached_property
    def transparent(self) -> bool:
        """Whether XON or XOFF occurs among its bytes, in either bit order: not for XON/XOFF links."""
        count = min(self.period or 8192, 8192)  # bytes: 8 periods, after which the bytes repeat
        return any(bool(np.isin((XON, XOFF), self.packed(0, count, order)).any()) for order in _ORDERS)

    def __repr__(self) -> str:
        return f"<pattern {self.name}>"


_ORDERS: tuple[BitOrder, BitOrder] = ("lsb", "msb")
