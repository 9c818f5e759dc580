"""When something happens on the line: at stated places, regularly, every so many seconds, or by chance."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from drivers.channel.independent import Gaps
from drivers.channel.stage import Line

Places = NDArray[np.int64]


class Schedule(Protocol):
    """Gives places, ascending and each once; a place is the number of units that passed before it."""

    def take(self, until: int) -> Places:
        """Give the places before `until` that were not given yet."""


class Listed:
    """At these places."""

    def __init__(self, places: tuple[int, ...]) -> None:
        self._places = np.unique(np.array(places, dtype=np.int64))
        self._used = 0

    def take(self, until: int) -> Places:
        """Give the places before `until` that were not given yet."""
        start, self._used = self._used, max(self._used, int(np.searchsorted(self._places, until)))
        return self._places[start : self._used]


class Every:
    """At `period`, twice `period` and so on."""

    def __init__(self, period: int) -> None:
        self._period = period
        self._next = period

    def take(self, until: int) -> Places:
        """Give the places before `until` that were not given yet."""
        places = np.arange(self._next, max(until, self._next), self._period, dtype=np.int64)
        self._next += len(places) * self._period
        return places


def given_once(**keys: object) -> None:
    """Check that exactly one of these keys is given.

    Raises
    ------
    ValueError
        With their names.
    """
    if sum(value is not None for value in keys.values()) != 1:
        raise ValueError("give exactly one of " + ", ".join(keys))


def schedule(
    at: tuple[int, ...] | None,
    every: int | None,
    every_s: float | None,
    rate: float | None,
    line: Line,
    rng: np.random.Generator,
    unit_bits: int = 1,
) -> Schedule:
    """Choose the schedule that the one given key asks for; places count units of `unit_bits` bits."""
    if at is not None:
        return Listed(at)
    if every is not None:
        return Every(every)
    if every_s is not None:
        return Every(max(1, round(line.bits(every_s, "every_s") / unit_bits)))
    return Gaps(rate or 0.0, rng)
