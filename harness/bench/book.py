"""The book of seconds: shares final segments out among the seconds in which their bits arrived.

A second's row is complete when its last bit has been decided; an empty second is complete at once.
What is complete is never revised.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field

import numpy as np

from harness.record import Second, Segment, Tally


@dataclass(slots=True)
class _Page:
    """A second that is still being filled."""

    index: int
    starts_ns: int  # monotonic
    first_bit: int
    end_bit: int | None = None  # known when its time is over
    ends_ns: int = 0
    sent: int = 0
    due: bool = True
    tally: Tally = field(default_factory=Tally)
    slips: int = 0
    lost: int = 0
    inserted: int = 0
    segments: list[Segment] = field(default_factory=list)
    stretches: list[tuple[int, bool]] = field(default_factory=list)

    def add(self, segment: Segment) -> None:
        self.tally += segment.tally
        if len(segment.positions) or not segment.positions_complete:
            self.segments.append(segment)
        bits = segment.tally.received
        if self.stretches and self.stretches[-1][1] == segment.aligned:
            self.stretches[-1] = (self.stretches[-1][0] + bits, segment.aligned)
        elif bits:
            self.stretches.append((bits, segment.aligned))
        for event in segment.events:
            if event.kind == "slip":
                size = int(event.data["bits"])
                self.slips += 1
                self.lost += max(0, -size)
                self.inserted += max(0, size)


class Book:
    """Seconds of one point in one sitting.

    Parameters
    ----------
    point, sitting
        Numbers that the rows carry.
    first_index
        Number of the first second, counted through the run.
    started_ns
        Monotonic time at which the first second begins.
    wall_ns
        UTC minus monotonic time, ns.
    keep_positions
        Error positions kept a second, at most.
    base_bit
        Received bits that the point had in earlier sittings.
    step
        From one number to the next: 2 where two directions are measured at once and take turns.
    """

    def __init__(
        self,
        *,
        point: int,
        sitting: int,
        first_index: int,
        started_ns: int,
        wall_ns: int,
        keep_positions: int,
        base_bit: int = 0,
        step: int = 1,
    ) -> None:
        self._point = point
        self._sitting = sitting
        self._wall_ns = wall_ns
        self._keep = keep_positions
        self._base_bit = base_bit
        self._step = step
        self._next_index = first_index + step
        self._pages: deque[_Page] = deque([_Page(first_index, started_ns, 0)])
        self._complete: list[Second] = []

    @property
    def next_index(self) -> int:
        """Number that the second after the last one has."""
        return self._next_index

    def close_second(self, *, ends_ns: int, received_bits: int, sent: int, due: bool) -> None:
        """End the second that takes new bits, at `received_bits`, and begin the next."""
        page = self._pages[-1]
        page.end_bit, page.ends_ns, page.sent, page.due = received_bits, ends_ns, sent, due
        self._pages.append(_Page(page.index + self._step, ends_ns, received_bits))
        self._next_index = page.index + 2 * self._step
        self._turn_pages()

    def add(self, segment: Segment) -> None:
        """Enter a final segment; it must not straddle a second's end."""
        for page in self._pages:
            if page.end_bit is None or segment.start < page.end_bit:
                page.add(segment)
                break
        self._turn_pages()

    def end(self, *, ends_ns: int, received_bits: int, sent: int, due: bool) -> None:
        """End the last second where it stands; a second without time or bits leaves no row."""
        page = self._pages[-1]
        page.end_bit, page.ends_ns, page.sent, page.due = received_bits, ends_ns, sent, due
        self._turn_pages()
        for left in self._pages:  # empty or fully entered: nothing may be left undecided here
            if left.tally.received or left.sent or left.ends_ns > left.starts_ns:
                self._complete.append(self._row(left))
        self._pages.clear()

    def cut(self, *, bit: int, ends_ns: int, sent: int) -> None:
        """End the book at a bit that was already entered: what came later belongs to no second.

        `sent` is what was sent in the second that takes new bits.
        """
        for page in list(self._pages):
            if page.first_bit < bit or page is self._pages[0]:
                if page.end_bit is None:
                    page.ends_ns, page.sent = ends_ns, sent
                page.end_bit = bit if page.end_bit is None else min(page.end_bit, bit)
                page.ends_ns = max(page.starts_ns, min(page.ends_ns, ends_ns))
                self._complete.append(self._row(page))
        self._pages.clear()

    @property
    def entered_bit(self) -> int | None:
        """Received bit of this sitting up to which seconds are complete; None: all are, the book is closed."""
        return self._pages[0].first_bit if self._pages else None

    def take_complete(self) -> list[Second]:
        """Rows that are complete since the last call."""
        rows, self._complete = self._complete, []
        return rows

    def _turn_pages(self) -> None:
        keep: deque[_Page] = deque()
        for page in self._pages:
            if page.end_bit is not None and page.first_bit + page.tally.received >= page.end_bit:
                self._complete.append(self._row(page))
            else:
                keep.append(page)
        self._pages = keep

    def _row(self, page: _Page) -> Second:
        positions = np.empty(0, dtype=np.int64)
        ones_lost = np.empty(0, dtype=np.bool_)
        complete = all(segment.positions_complete for segment in page.segments)
        if page.segments:
            positions = np.concatenate([s.positions for s in page.segments])
            ones_lost = np.concatenate([s.ones_lost for s in page.segments])
        if len(positions) > self._keep:
            positions, ones_lost, complete = positions[: self._keep], ones_lost[: self._keep], False
        return Second(
            point=self._point,
            sitting=self._sitting,
            index=page.index,
            at=page.starts_ns + self._wall_ns,
            duration_ns=max(0, page.ends_ns - page.starts_ns),
            sent=page.sent,
            tally=page.tally,
            due=page.due,
            slips=page.slips,
            bits_lost=page.lost,
            bits_inserted=page.inserted,
            first_bit=page.first_bit + self._base_bit,
            positions=positions + self._base_bit,
            ones_lost=ones_lost,
            positions_complete=complete,
            stretches=tuple(page.stretches),
        )
