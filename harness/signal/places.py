"""Where in the pattern a received stretch may be: a place, with its polarity, and the bits expected there."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder
from harness.signal.patterns import Pattern, Reader


@dataclass(frozen=True, slots=True)
class Place:
    """What a received stream is compared with.

    Attributes
    ----------
    anchor
        The pattern's place of the stream's bit 0; bit t is compared with place anchor + t.
    inverted
        In the opposite polarity to the pattern's name.
    """

    anchor: int
    inverted: bool


class Reference:
    """A pattern in both polarities, asked for by stream bits.

    Parameters
    ----------
    pattern
        What is expected.
    order
        Which bit of a byte comes first.
    """

    def __init__(self, pattern: Pattern, order: BitOrder) -> None:
        self.pattern = pattern
        self.order: BitOrder = order

    @cached_property
    def _opposite(self) -> Pattern:
        return self.pattern.opposite()

    def bits(self, place: Place, first: int, count: int) -> NDArray[np.uint8]:
        """Expected bits from stream bit `first` on, 0 and 1, shape (count,)."""
        bits = self.pattern.bits(place.anchor + first, count)
        return bits ^ np.uint8(1) if place.inverted else bits

    def reader(self, place: Place, first: int) -> Reader:
        """Expected bytes from stream bit `first` on."""
        pattern = self._opposite if place.inverted else self.pattern
        return pattern.reader(place.anchor + first, self.order)

    def normal(self, place: Place) -> Place:
        """The same place with its anchor within one period."""
        period = self.pattern.period
        return place if period is None else Place(place.anchor % period, place.inverted)
