"""Independent bit errors, drawn as the gaps between them: cost grows with errors, not with bits."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from drivers.channel.packing import flip
from drivers.channel.stage import BitOrder, Bytes, ChannelSection, Line, Stage
from drivers.contract import Knob

_LONGEST_GAP = (
    1 << 56
)  # a longer gap is passed over without an error and drawn again: the process has no memory
_RARE = 1e-9  # below this probability few gaps are drawn at once, so that their sum stays a 64-bit count
_NOTHING = np.empty(0, dtype=np.int64)


class Gaps:
    """Places at which something happens independently, with the same probability at each place.

    Parameters
    ----------
    probability
        Of something happening at one place, 0 to 1.
    rng
        Its own generator: gaps are drawn in blocks of fixed size.
    """

    def __init__(self, probability: float, rng: np.random.Generator) -> None:
        self._rng = rng
        self.probability = probability
        self.restart(probability, 0)

    def restart(self, probability: float, at: int) -> None:
        """Go on with another probability from place `at`."""
        self.probability = probability
        self._places = _NOTHING
        self._used = 0
        self._drawn_to = at  # every place before it has been decided

    def take(self, until: int) -> NDArray[np.int64]:
        """Give the places before `until` that were not given yet, ascending."""
        if self._used < len(self._places) and self._places[self._used] >= until:
            return _NOTHING
        taken = []
        while self._drawn_to < until and self.probability > 0:
            taken.append(self._places[self._used :])
            self._draw()
        end = int(np.searchsorted(self._places, until))
        taken.append(self._places[self._used : max(end, self._used)])
        self._used = max(end, self._used)
        return taken[0] if len(taken) == 1 else np.concatenate(taken)

    def _draw(self) -> None:
        exponential = self._rng.standard_exponential(4096 if self.probability > _RARE else 64)
        if self.probability >= 1:
            gaps = np.zeros(len(exponential), dtype=np.int64)
        else:
            lengths = np.minimum(exponential / -np.log1p(-self.probability), float(_LONGEST_GAP))
            gaps = lengths.astype(np.int64)
        steps = np.cumsum(gaps + 1)
        real = gaps < _LONGEST_GAP
        self._places = (self._drawn_to - 1 + steps)[real]
        self._drawn_to += int(steps[-1])
        self._used = 0


class IndependentSection(ChannelSection):
    """Every bit is wrong with the same probability, whatever the others are."""

    model: Literal["independent"]
    ber: float = Field(ge=0, le=1, description="Probability that a bit is wrong.")

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        return Independent(self.ber, line.bit_order, rng)


class Independent(Stage):
    """Flips bits in place."""

    def __init__(self, ber: float, order: BitOrder, rng: np.random.Generator) -> None:
        self._gaps = Gaps(ber, rng)
        self._order: BitOrder = order
        self._bits = 0  # passed so far

    def apply(self, data: Bytes) -> Bytes:
        """Flip what is due."""
        end = self._bits + 8 * len(data)
        flip(data, self._gaps.take(end) - self._bits, self._order)
        self._bits = end
        return data

    def knobs(self) -> Mapping[str, Knob]:
        """The BER."""
        return {"ber": Knob("", 0.0, 1.0, lambda: self._gaps.probability, self._turn)}

    def _turn(self, ber: float) -> None:
        self._gaps.restart(ber, self._bits)
