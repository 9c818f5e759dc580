"""A point's seconds as columns of numbers, for figures and lists: nothing here is a result of its own."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.record import Point, Second

POSITIONS_SHOWN = 1_000_000  # for gaps and bursts
_SECOND_NS = 1_000_000_000

Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Outage:
    """A stretch of unaligned bits, or of seconds without any."""

    bit: int  # received bits before it
    bits: int
    at: int  # UTC, ns: the second in which it begins
    seconds: int  # that it touches
    silent: bool  # bits were due and none came


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """A point's seconds in order; arrays of shape (seconds,)."""

    seconds: Sequence[Second]
    at: Ints  # UTC, ns
    duration_ns: Ints
    compared: Ints
    received: Ints
    errors: Ints
    slips: Ints
    silent: NDArray[np.bool_]
    complete: bool  # every error's position is known

    @property
    def unaligned(self) -> Ints:
        """Unaligned bits of each second."""
        return self.received - self.compared

    def compared_positions(self) -> Ints | None:
        """Errors' places among compared bits, ascending; None where not all are known, or they are too many."""
        if not self.complete or int(self.errors.sum()) > POSITIONS_SHOWN:
            return None
        parts = [s.positions for s in self.seconds if len(s.positions)]
        if not parts:
            return np.empty(0, dtype=np.int64)
        places = np.concatenate(parts)
        starts, lengths = self._unaligned_stretches()
        if not len(starts):
            return places
        before = np.concatenate(([0], np.cumsum(lengths)))
        return np.asarray(places - before[np.searchsorted(starts, places, side="right")])

    def path(self, most: int) -> tuple[Ints, Ints]:
        """Give how errors grew: (compared bits, errors so far), both ascending, at most about `most` corners.

        At error positions where all are known and few, else at the ends of seconds.
        """
        places = self.compared_positions()
        if places is not None and len(places) <= most:
            return places + 1, np.arange(1, len(places) + 1)
        bits, errors = np.cumsum(self.compared), np.cumsum(self.errors)
        return thinned(bits, errors, most)

    def outages(self) -> list[Outage]:
        """List unaligned stretches and silent seconds, neighbouring ones joined."""
        found: list[Outage] = []
        reached = -1  # the second that the last outage lasted into
        for position, second in enumerate(self.seconds):
            for start, bits, silent in _out_of(second):
                before = found[-1] if found else None
                if (
                    before is not None
                    and before.silent == silent
                    and before.bit + before.bits == start
                    and (reached == position or (reached == position - 1 and self._follows(position)))
                ):
                    seconds = before.seconds + (position - reached)
                    found[-1] = Outage(before.bit, before.bits + bits, before.at, seconds, silent)
                else:
                    found.append(Outage(start, bits, second.at, 1, silent))
                reached = position
        return found

    def _follows(self, position: int) -> bool:
        """Whether a second begins where the one before it ends; after a cut it does not."""
        before = self.seconds[position - 1]
        return self.seconds[position].at < before.at + before.duration_ns + _SECOND_NS // 2

    def _unaligned_stretches(self) -> tuple[Ints, Ints]:
        rows = [
            (start, bits)
            for index in np.flatnonzero(self.unaligned).tolist()
            for start, bits, _silent in _out_of(self.seconds[index])
        ]
        if not rows:
            empty = np.empty(0, dtype=np.int64)
            return empty, empty
        starts, lengths = np.array(rows, dtype=np.int64).T
        return starts, lengths


def thinned(bits: Ints, errors: Ints, most: int) -> tuple[Ints, Ints]:
    """Leave out corners of a path until at most about `most` are left, the last one among them."""
    step = max(1, -(-len(bits) // most))
    kept = np.arange(len(bits) - 1, -1, -step)[::-1]
    return bits[kept], errors[kept]


def _out_of(second: Second) -> Iterator[tuple[int, int, bool]]:
    """Give (first bit, bits, silent) of each stretch in a second that was not compared."""
    if second.tally.received == 0:
        if second.due and second.duration_ns >= _SECOND_NS // 2:
            yield second.first_bit, 0, True
        return
    if not second.tally.unaligned:
        return
    at = second.first_bit
    for bits, aligned in second.stretches:
        if not aligned and bits:
            yield at, bits, False
        at += bits


def series_of(point: Point) -> Series:
    """Lay out a point's seconds."""
    seconds = sorted(point.seconds, key=lambda s: s.index)
    rows = np.array(
        [(s.at, s.duration_ns, s.tally.compared, s.tally.received, s.tally.errors, s.slips) for s in seconds],
        dtype=np.int64,
    ).reshape(-1, 6)
    silent = np.array([s.due and s.tally.received == 0 for s in seconds], dtype=np.bool_)
    complete = all(s.positions_complete for s in seconds)
    at, duration, compared, received, errors, slips = (rows[:, i] for i in range(6))
    return Series(seconds, at, duration, compared, received, errors, slips, silent, complete)
