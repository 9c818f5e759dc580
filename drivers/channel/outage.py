"""Stretches in which the device is deaf or babbles, and places at which its polarity turns over."""

from __future__ import annotations

from typing import Literal

import numpy as np
from pydantic import Field, model_validator

from drivers.channel.packing import flip_stretch
from drivers.channel.schedule import Schedule, given_once, schedule
from drivers.channel.stage import BitOrder, Bytes, ChannelSection, Line, Stage

Fill = Literal["nothing", "zeros", "ones", "noise"]


class DropoutSection(ChannelSection):
    """For a while nothing comes back, or something that has nothing to do with what was sent."""

    model: Literal["dropout"]
    at_bits: tuple[int, ...] | None = Field(default=None, description="Begins after these numbers of bits.")
    every_bits: int | None = Field(default=None, ge=1, description="Begins after every so many bits.")
    every_s: float | None = Field(default=None, gt=0, description="Begins after every so many seconds.")
    rate: float | None = Field(default=None, ge=0, le=1, description="Probability that it begins at a bit.")
    for_bits: int | None = Field(
        default=None, ge=1, description="How long; for_bits and for_s left out: until the end."
    )
    for_s: float | None = Field(default=None, gt=0, description="How long, in seconds of bits.")
    length: Literal["fixed", "exponential"] = Field(
        default="fixed", description="Whether for_bits or for_s is the length, or the mean of random ones."
    )
    fill: Fill = Field(default="nothing", description="What comes meanwhile.")

    @model_validator(mode="after")
    def _check(self) -> DropoutSection:
        given_once(at_bits=self.at_bits, every_bits=self.every_bits, every_s=self.every_s, rate=self.rate)
        if self.for_bits is not None and self.for_s is not None:
            raise ValueError("give one of for_bits, for_s, or neither")
        if self.length == "exponential" and self.for_bits is None and self.for_s is None:
            raise ValueError('length = "exponential" needs for_bits or for_s')
        return self

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        times = schedule(self.at_bits, self.every_bits, self.every_s, self.rate, line, rng.spawn(1)[0])
        bits = self.for_bits if self.for_s is None else line.bits(self.for_s, "for_s")
        return Dropouts(times, bits, self.length == "exponential", self.fill, rng)


class Dropouts(Stage):
    """Swallows or replaces whole bytes; a byte that a drop-out only touches is gone with it.

    Parameters
    ----------
    times
        When one begins, in bits.
    bits
        How long; None: until the end.
    exponential
        Whether `bits` is the mean of random lengths.
    fill
        What comes meanwhile.
    rng
        Its own generator.
    """

    def __init__(
        self, times: Schedule, bits: int | None, exponential: bool, fill: Fill, rng: np.random.Generator
    ) -> None:
        self._times = times
        self._length = bits
        self._exponential = exponential
        self._fill = fill
        self._lengths, self._noise = rng.spawn(2)
        self._bytes = 0
        self._until: int | None = 0  # byte at which the latest drop-out ends; None: never

    def apply(self, data: Bytes) -> Bytes:
        """Pass bytes through, or not."""
        start = self._bytes
        end = self._bytes = start + len(data)
        kept: list[Bytes] = []
        at = start
        for place in self._times.take(8 * end).tolist():
            at = self._pass(data, at, max(at, place // 8), start, kept)
            self._begin(place)
        self._pass(data, at, end, start, kept)
        if self._fill != "nothing":
            return data
        return kept[0] if len(kept) == 1 else np.concatenate(kept)

    def _begin(self, place: int) -> None:
        if self._length is None or self._until is None:
            self._until = None
            return
        length = self._length
        if self._exponential:
            length = max(1, round(self._lengths.standard_exponential() * length))
        self._until = max(self._until, -(-(place + length) // 8))

    def _pass(self, data: Bytes, at: int, end: int, start: int, kept: list[Bytes]) -> int:
        """Deal with the bytes from `at` up to `end` and return `end`."""
        dark = end if self._until is None else min(max(self._until, at), end)
        if self._fill == "nothing":
            kept.append(data[dark - start : end - start])
        elif dark > at:
            data[at - start : dark - start] = self._babble(dark - at)
        return end

    def _babble(self, count: int) -> Bytes:
        if self._fill == "noise":
            return (self._noise.random(count) * 256).astype(np.uint8)
        return np.full(count, 0 if self._fill == "zeros" else 0xFF, dtype=np.uint8)


class InversionSection(ChannelSection):
    """The polarity turns over at each of these places, and stays so until the next."""

    model: Literal["inversion"]
    from_start: bool = Field(default=False, description="Whether it begins turned over.")
    at_bits: tuple[int, ...] | None = Field(default=None, description="After these numbers of bits.")
    every_bits: int | None = Field(default=None, ge=1, description="After every so many bits.")
    every_s: float | None = Field(default=None, gt=0, description="After every so many seconds of bits.")
    rate: float | None = Field(default=None, ge=0, le=1, description="Probability at a bit.")

    @model_validator(mode="after")
    def _check(self) -> InversionSection:
        keys = {
            "at_bits": self.at_bits,
            "every_bits": self.every_bits,
            "every_s": self.every_s,
            "rate": self.rate,
        }
        if not self.from_start or any(value is not None for value in keys.values()):
            given_once(**keys)
        return self

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        times = schedule(self.at_bits, self.every_bits, self.every_s, self.rate, line, rng)
        return Inversions(times, self.from_start, line.bit_order)


class Inversions(Stage):
    """Flips whole stretches in place, from one place of `times` to the next."""

    def __init__(self, times: Schedule, turned: bool, order: BitOrder) -> None:
        self._times = times
        self._turned = turned
        self._order: BitOrder = order
        self._bits = 0

    def apply(self, data: Bytes) -> Bytes:
        """Flip where the polarity is turned over."""
        start, end = self._bits, self._bits + 8 * len(data)
        at = start
        for place in [*self._times.take(end).tolist(), end]:
            if self._turned:
                flip_stretch(data, at - start, place - start, self._order)
            at = place
            self._turned = not self._turned
        self._turned = not self._turned  # the chunk's end is no place to turn at
        self._bits = end
        return data
