"""Bits and bytes that get lost, invented or repeated on the way: the stream jumps in its pattern."""

from __future__ import annotations

from typing import Annotated, Literal

import numpy as np
from pydantic import Field, model_validator

from drivers.channel.packing import delay_bits, pack, unpack
from drivers.channel.schedule import Schedule, given_once, schedule
from drivers.channel.stage import BitOrder, Bytes, ChannelSection, Line, OneOrSeveral, Stage

Filler = Literal["noise", "zeros", "ones", "repeat"]
_LARGEST_SLIP_BITS = 1 << 24


class SlipSection(ChannelSection):
    """Bits are lost or invented; several sizes: one of them by chance each time."""

    model: Literal["slip"]
    bits: Annotated[tuple[int, ...], OneOrSeveral()] = Field(
        min_length=1, description="Sizes in bits: negative, lost; positive, invented. One or a list."
    )
    at_bits: tuple[int, ...] | None = Field(default=None, description="After these numbers of bits.")
    every_bits: int | None = Field(default=None, ge=1, description="After every so many bits.")
    every_s: float | None = Field(default=None, gt=0, description="After every so many seconds of bits.")
    rate: float | None = Field(default=None, ge=0, le=1, description="Probability of a slip at a bit.")
    filler: Filler = Field(default="noise", description="What invented bits are.")

    @model_validator(mode="after")
    def _check(self) -> SlipSection:
        given_once(at_bits=self.at_bits, every_bits=self.every_bits, every_s=self.every_s, rate=self.rate)
        if any(size == 0 or abs(size) > _LARGEST_SLIP_BITS for size in self.bits):
            raise ValueError(f"a slip is at least 1 and at most {_LARGEST_SLIP_BITS} bits")
        return self

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage: of whole bytes where all sizes are, then at whole bytes too."""
        when, what = rng.spawn(2)
        times = schedule(self.at_bits, self.every_bits, self.every_s, self.rate, line, when)
        unit_bits = 8 if all(size % 8 == 0 for size in self.bits) else 1
        sizes = tuple(size // unit_bits for size in self.bits)
        return Slips(times, 1, sizes, unit_bits, self.filler, line.bit_order, what)


class ByteLossSection(ChannelSection):
    """Bytes are lost, invented or repeated."""

    model: Literal["byte_loss"]
    kind: Literal["loss", "insertion", "repeat"] = Field(
        default="loss", description="Bytes are lost; random ones come between; the last ones come again."
    )
    count: int = Field(default=1, ge=1, le=1 << 16, description="Bytes each time.")
    at_bytes: tuple[int, ...] | None = Field(default=None, description="After these numbers of bytes.")
    every_bytes: int | None = Field(default=None, ge=1, description="After every so many bytes.")
    every_s: float | None = Field(default=None, gt=0, description="After every so many seconds of bytes.")
    rate: float | None = Field(default=None, ge=0, le=1, description="Probability at a byte.")

    @model_validator(mode="after")
    def _check(self) -> ByteLossSection:
        given_once(at_bytes=self.at_bytes, every_bytes=self.every_bytes, every_s=self.every_s, rate=self.rate)
        return self

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        when, what = rng.spawn(2)
        times = schedule(self.at_bytes, self.every_bytes, self.every_s, self.rate, line, when, unit_bits=8)
        size = -self.count if self.kind == "loss" else self.count
        filler: Filler = "repeat" if self.kind == "repeat" else "noise"
        return Slips(times, 8, (size,), 8, filler, line.bit_order, what)


class Slips(Stage):
    """Cuts units out of the stream or puts some in.

    Parameters
    ----------
    times
        When, counted in places of `place_bits` bits.
    place_bits
        1 or 8.
    sizes
        In units; one of them by chance each time.
    unit_bits
        8: whole bytes only, at whole bytes; 1: any bits.
    filler
        What invented units are.
    order
        Which bit of a byte goes first.
    rng
        Its own generator.
    """

    step_bytes = 1 << 16

    def __init__(
        self,
        times: Schedule,
        place_bits: int,
        sizes: tuple[int, ...],
        unit_bits: int,
        filler: Filler,
        order: BitOrder,
        rng: np.random.Generator,
    ) -> None:
        self.whole_bytes = unit_bits == 8
        self._times = times
        self._place_bits = place_bits
        self._sizes = sizes
        self._unit_bits = unit_bits
        self._filler = filler
        self._order: BitOrder = order
        self._rng = rng
        self._passed_bits = 0  # that came in
        self._losing = 0  # units still to be cut out
        self._carry = np.empty(0, dtype=np.uint8)  # bits that fill no byte yet
        # The last units that came in, for repeats; before the first one the line was idle.
        longest = max(max(sizes), 0) if filler == "repeat" else 0
        self._history = np.full(longest, 0xFF if unit_bits == 8 else 1, dtype=np.uint8)

    def apply(self, data: Bytes) -> Bytes:
        """Pass bytes through, fewer or more of them."""
        start = self._passed_bits
        end = self._passed_bits = start + 8 * len(data)
        places = self._times.take(-(-end // self._place_bits)) * self._place_bits
        events = (places - start) // self._unit_bits
        if len(events) or self._losing or len(self._history):
            return self._cut(data, events)
        if len(self._carry) and len(data):
            return self._shift(data)
        return data

    def _shift(self, data: Bytes) -> Bytes:
        """Only put the bits in hand before the others."""
        held = len(self._carry)
        idle = np.zeros(8 - held, dtype=np.uint8)
        before = int(pack(np.concatenate([idle, self._carry]), self._order)[0])
        self._carry = unpack(data[-1:], self._order)[8 - held :]
        return delay_bits(data, before, held, self._order)

    def _cut(self, data: Bytes, events: np.ndarray) -> Bytes:
        units = data if self._unit_bits == 8 else unpack(data, self._order)
        known = np.concatenate([self._history, units]) if len(self._history) else units
        pieces = [self._carry]
        at = 0
        for event in events.tolist():
            pieces.append(self._kept(units, at, event))
            at = event
            size = self._sizes[0]
            if len(self._sizes) > 1:
                size = self._sizes[int(self._rng.random() * len(self._sizes))]
            if size < 0:
                self._losing -= size
            else:
                pieces.append(self._invented(size, known[event : event + len(self._history)]))
        pieces.append(self._kept(units, at, len(units)))
        if len(self._history):
            self._history = known[-len(self._history) :].copy()
        out = np.concatenate(pieces)
        if self._unit_bits == 8:
            return out
        whole = len(out) // 8 * 8
        self._carry = out[whole:].copy()
        return pack(out[:whole], self._order)

    def _kept(self, units: Bytes, start: int, end: int) -> Bytes:
        cut = min(self._losing, end - start)
        self._losing -= cut
        return units[start + cut : end]

    def _invented(self, size: int, history: Bytes) -> Bytes:
        """Make units; `history` is what came before this place, as much as is kept of it."""
        top = 256 if self._unit_bits == 8 else 2
        if self._filler == "noise":
            return (self._rng.random(size) * top).astype(np.uint8)
        if self._filler == "repeat":
            return history[len(history) - size :]
        return np.full(size, 0 if self._filler == "zeros" else top - 1, dtype=np.uint8)
