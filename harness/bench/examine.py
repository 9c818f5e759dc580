"""Examining bytes captured elsewhere: the same counter and the same assessment, without a link.

Seconds follow from the rate where it is stated; without one the whole capture is one stretch without times.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from harness.assess.accumulate import EVENTS_KEPT
from harness.assess.words import slip_words
from harness.bench.book import Book
from harness.record import BitOrder, Event, Point, Run, Second, Segment, Tally
from harness.signal.counter import Counter
from harness.signal.patterns import Pattern

CHUNK_BYTES = 1 << 20
POSITIONS_PER_SECOND = 65_536
SMALL_SLIP_BITS = 64


@dataclass(frozen=True, slots=True)
class Capture:
    """Bytes to examine and what is known of them."""

    data: NDArray[np.uint8]  # (n,), perhaps mapped from a file
    pattern: Pattern
    bit_order: BitOrder
    rate_bps: float | None
    alternatives: tuple[str, ...] = ()
    remarks: tuple[str, ...] = ()


def true_slip(size: int, period: int | None) -> tuple[int, int | None]:
    """Resolve a slip in captured bytes: whole bytes where that fits, a few bits where only that does.

    A capture does not say whether its link carried bytes or bits. Up to 64 bits the nearest size is
    believed; beyond, bytes are lost and invented whole.
    """
    if period is None:
        return size, None
    nearest = size % period
    nearest = nearest - period if 2 * nearest > period else nearest
    if nearest % 8 and abs(nearest) <= SMALL_SLIP_BITS:
        return nearest, period
    modulo = math.lcm(8, period)
    step = period if period % 2 else modulo
    options = [nearest + k * step for k in range(-8, 9)]
    whole = [o for o in options if o % 8 == 0]
    return (min(whole, key=abs), modulo) if whole else (nearest, period)


class Examination:
    """Counts a capture second by second."""

    def __init__(self, capture: Capture) -> None:
        self._capture = capture
        self._counter = Counter(
            capture.pattern, bit_order=capture.bit_order, slip_unit=1, position_limit=POSITIONS_PER_SECOND
        )
        self._book = Book(
            point=0, sitting=0, first_index=0, started_ns=0, wall_ns=0, keep_positions=POSITIONS_PER_SECOND
        )
        self.events: list[Event] = []
        self.seconds: list[Second] = []

    def run(self, commit: Callable[[list[Second], list[Event], int], None] | None = None) -> None:
        """Count everything; `commit` is given what is complete, from time to time."""
        for start, stop, ends_second in self._pieces():
            self._enter(self._counter.feed(self._capture.data[start:stop]))
            if ends_second is not None:
                self._counter.mark()
                self._book.close_second(
                    ends_ns=ends_second, received_bits=self._counter.received, sent=0, due=True
                )
            self._hand_over(commit)
        self._enter(self._counter.finish())
        bits = self._counter.received
        rate = self._capture.rate_bps
        ends_ns = 0 if rate is None else round(bits / rate * 1e9)
        self._book.end(ends_ns=ends_ns, received_bits=bits, sent=0, due=True)
        self._hand_over(commit)

    def _pieces(self) -> Iterator[tuple[int, int, int | None]]:
        """Chunks as (first byte, end, end of the second in ns or None)."""
        size, rate = len(self._capture.data), self._capture.rate_bps
        at, number = 0, 1
        while at < size:
            second_end = size + 1 if rate is None else max(at, math.ceil(rate * number / 8))
            stop = min(size, second_end, at + CHUNK_BYTES)
            ends = stop == second_end and stop < size
            yield at, stop, number * 1_000_000_000 if ends else None
            number += ends
            at = stop

    def _enter(self, segments: list[Segment]) -> None:
        for segment in segments:
            if segment.events:
                events = tuple(self._resolve(event, segment) for event in segment.events)
                segment = replace(segment, events=events)
                self.events.extend(events[: max(0, EVENTS_KEPT - len(self.events))])
            self._book.add(segment)

    def _resolve(self, event: Event, segment: Segment) -> Event:
        bit = segment.start if event.bit is None else event.bit
        rate = self._capture.rate_bps
        at = None if rate is None else round(bit / rate * 1e9)
        if event.kind != "slip":
            return replace(event, bit=bit, at=at)
        size, modulo = true_slip(int(event.data["bits"]), self._capture.pattern.period)
        return replace(event, bit=bit, at=at, text=slip_words(size), data={"bits": size, "modulo": modulo})

    def _hand_over(self, commit: Callable[[list[Second], list[Event], int], None] | None) -> None:
        rows = self._book.take_complete()
        self.seconds.extend(rows)
        if commit is not None and rows:
            commit(rows, [], self._counter.received - self._counter.decided)

    def record(self) -> Run:
        """Give the record that a store would hold."""
        capture = self._capture
        facts = {
            "pattern": capture.pattern.name,
            "pattern_inverted": capture.pattern.inverted,
            "bit_order": capture.bit_order,
            "rate_bps": capture.rate_bps,
            "alternatives": list(capture.alternatives),
            "untimed": capture.rate_bps is None,
        }
        settings = {"pattern": {"name": capture.pattern.name, "bit_order": capture.bit_order}}
        return _run(settings, facts, self.seconds, self.events)


def nothing_found(data: NDArray[np.uint8], rate_bps: float | None, asked: str) -> Run:
    """Give the record of a capture in which no pattern was found: all of it unaligned."""
    book = Book(point=0, sitting=0, first_index=0, started_ns=0, wall_ns=0, keep_positions=0)
    at = 0
    for stop, ends_ns in _ends(len(data), rate_bps):
        book.add(Segment(at, Tally(8 * stop - at, 0, 8 * stop - at), aligned=False))
        at = 8 * stop
        if stop < len(data):
            book.close_second(ends_ns=ends_ns, received_bits=at, sent=0, due=True)
        else:
            book.end(ends_ns=ends_ns, received_bits=at, sent=0, due=True)
    facts = {
        "pattern": None,
        "bit_order": None,
        "rate_bps": rate_bps,
        "untimed": rate_bps is None,
        "asked": asked,
    }
    return _run({"pattern": {"name": asked}}, facts, book.take_complete(), [])


def _ends(size: int, rate_bps: float | None) -> Iterator[tuple[int, int]]:
    """Where seconds end in `size` bytes: (bytes before it, ns); the last is where the bytes end."""
    number = 1
    while rate_bps is not None and (end := math.ceil(rate_bps * number / 8)) < size:
        yield end, number * 1_000_000_000
        number += 1
    yield size, 0 if rate_bps is None else round(8 * size / rate_bps * 1e9)


def _run(settings: dict[str, Any], facts: dict[str, Any], seconds: list[Second], events: list[Event]) -> Run:
    now = time.time_ns()
    point = Point(0, {}, now, now, "end_of_data", tuple(seconds), tuple(events), facts=facts)
    return Run(
        key="",
        title="",
        command="examine",
        started=now,
        ended=now,
        status="completed",
        ended_by="end_of_data",
        verdict=None,
        profile_text="",
        overrides=(),
        settings=settings,
        device={},
        sittings=(),
        points=(point,),
        stated=None,
    )


def map_file(path: Path) -> NDArray[np.uint8]:
    """Map a file's bytes without reading them all into memory; an empty one gives none."""
    if path.stat().st_size == 0:
        return np.empty(0, dtype=np.uint8)
    return np.memmap(path, dtype=np.uint8, mode="r")
