"""Bursts: a channel of two states (Gilbert, 1960; Elliott, 1963), each with its own share of wrong bits."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from drivers.channel.independent import Gaps
from drivers.channel.packing import flip
from drivers.channel.stage import BitOrder, Bytes, ChannelSection, Line, Stage
from drivers.contract import Knob

Count = NDArray[np.int64]

_DRAWN_AHEAD_BITS = 1 << 18


class BurstSection(ChannelSection):
    """The channel changes at random between a bad state (a burst) and a good one (the gap between bursts)."""

    model: Literal["burst"]
    burst_bits: float = Field(ge=1, le=1e12, description="Mean length of a burst, in bits.")
    gap_bits: float = Field(ge=1, le=1e15, description="Mean length between bursts, in bits.")
    ber_inside: float = Field(default=0.5, ge=0, le=1, description="Share of wrong bits in a burst.")
    ber_outside: float = Field(default=0.0, ge=0, le=1, description="Share of wrong bits between bursts.")

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        return Bursts(self, line.bit_order, rng)


class _States:
    """Where the bad state holds: stretches of geometric length, drawn in pairs of gap and burst."""

    def __init__(self, gap_bits: float, burst_bits: float, rng: np.random.Generator) -> None:
        self.gap_bits = gap_bits
        self.burst_bits = burst_bits
        self._rng = rng
        self._known_to = 0
        self._starts = np.empty(0, dtype=np.int64)
        self._ends = np.empty(0, dtype=np.int64)
        # In the long run this share of the time is bad: the channel is met somewhere in its life.
        if rng.random() < burst_bits / (burst_bits + gap_bits):
            self._begin_bad(0)

    def restart(self, gap_bits: float, at: int) -> None:
        """Go on with another mean gap from bit `at`; a burst that holds there goes on as it was."""
        self.gap_bits = gap_bits
        begun = self._starts < at
        self._starts, self._ends = self._starts[begun], self._ends[begun]
        self._known_to = max(at, int(self._ends[-1]) if len(self._ends) else 0)

    def bad(self, start: int, end: int) -> tuple[Count, Count]:
        """Stretches of the bad state in bits from `start` up to `end`, cut to them."""
        while self._known_to < end:
            self._draw()
        over = int(np.searchsorted(self._ends, start, side="right"))
        self._starts, self._ends = self._starts[over:], self._ends[over:]
        upto = int(np.searchsorted(self._starts, end))
        return np.maximum(self._starts[:upto], start), np.minimum(self._ends[:upto], end)

    def _lengths(self, mean: float, exponentials: NDArray[np.float64]) -> Count:
        """Geometric lengths of at least one bit with this mean."""
        if mean <= 1:
            return np.ones(len(exponentials), dtype=np.int64)
        lengths: Count = np.floor(exponentials / -np.log1p(-1 / mean)).astype(np.int64) + 1
        return lengths

    def _begin_bad(self, at: int) -> None:
        length = self._lengths(self.burst_bits, self._rng.standard_exponential(1))
        self._starts, self._ends = np.array([at]), at + length
        self._known_to = int(self._ends[-1])

    def _draw(self) -> None:
        pairs = int(min(max(_DRAWN_AHEAD_BITS / (self.gap_bits + self.burst_bits), 64), 1 << 16))
        drawn = self._rng.standard_exponential((pairs, 2))
        gaps = self._lengths(self.gap_bits, drawn[:, 0])
        bursts = self._lengths(self.burst_bits, drawn[:, 1])
        ends = self._known_to + np.cumsum(gaps + bursts)
        self._starts = np.concatenate([self._starts, ends - bursts])
        self._ends = np.concatenate([self._ends, ends])
        self._known_to = int(ends[-1])


class _Errors:
    """Independent errors at one state's share, counted along that state's own time."""

    def __init__(self, ber: float, rng: np.random.Generator) -> None:
        self.gaps = Gaps(ber, rng)
        self.passed = 0

    def among(self, starts: Count, ends: Count) -> Count:
        """Bits that are wrong in these stretches, ascending."""
        lengths = np.cumsum(ends - starts)
        total = int(lengths[-1]) if len(lengths) else 0
        at = self.gaps.take(self.passed + total) - self.passed
        self.passed += total
        if not len(at):
            return at
        which = np.searchsorted(lengths, at, side="right")
        return np.asarray(ends[which] - (lengths[which] - at))

    def restart(self, ber: float) -> None:
        self.gaps.restart(ber, self.passed)


class Bursts(Stage):
    """Flips bits in place, by the state of the channel."""

    step_bytes = 1 << 16

    def __init__(self, section: BurstSection, order: BitOrder, rng: np.random.Generator) -> None:
        states, inside, outside = rng.spawn(3)
        self._states = _States(section.gap_bits, section.burst_bits, states)
        self._inside = _Errors(section.ber_inside, inside)
        self._outside = _Errors(section.ber_outside, outside)
        self._order: BitOrder = order
        self._bits = 0

    def apply(self, data: Bytes) -> Bytes:
        """Flip what is due."""
        start, end = self._bits, self._bits + 8 * len(data)
        begins, ends = self._states.bad(start, end)
        flip(data, self._inside.among(begins, ends) - start, self._order)
        edges = np.concatenate([[start], ends]), np.concatenate([begins, [end]])
        flip(data, self._outside.among(edges[0], edges[1]) - start, self._order)
        self._bits = end
        return data

    def knobs(self) -> Mapping[str, Knob]:
        """Mean gap between bursts, and the share of wrong bits in either state."""
        return {
            "gap_bits": Knob("bit", 1.0, 1e15, lambda: self._states.gap_bits, self._turn_gap),
            "ber_inside": Knob("", 0.0, 1.0, lambda: self._inside.gaps.probability, self._inside.restart),
            "ber_outside": Knob("", 0.0, 1.0, lambda: self._outside.gaps.probability, self._outside.restart),
        }

    def _turn_gap(self, gap_bits: float) -> None:
        self._states.restart(gap_bits, self._bits)
