"""The accumulator: takes seconds and events one by one and knows every sum at any time.

The bench feeds it live, and a stored record is run through it again: the same code gives the numbers
on the screen, in the report and in `verify`.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.assess.feed import PlanFeed
from harness.assess.pace import Pace
from harness.assess.requirement import Requirement
from harness.record import Event, Point, Second, Segment, Tally
from harness.statistics.availability import Availability, AvailabilityResult
from harness.statistics.plans import Decision

POSITIONS_KEPT = 1_000_000  # for the clustering of errors; counts go on exactly beyond it
EVENTS_KEPT = 10_000
SEQUENCE_LOSS_RATIO = 0.20  # O.150 section 4.2, in one second


@dataclass(frozen=True, slots=True)
class Sums:
    """Sums over the seconds so far."""

    tally: Tally
    sent: int
    duration_ns: int
    seconds: int
    slips: int
    bits_lost: int
    bits_inserted: int
    positions_complete: bool


class Accumulator:
    """Sums, the plan's progress and availability over the seconds of one point, in order."""

    def __init__(
        self, requirement: Requirement | None, rate_bps: float | None = None, *, step: int = 1
    ) -> None:
        self.requirement = requirement
        self.plan = requirement.make_plan() if requirement else None
        self.feed = PlanFeed(self.plan, requirement) if self.plan and requirement else None
        self.decision: Decision | None = None
        self.looks = 0  # of the plan, without knowing positions
        self.events: list[Event] = []
        self.events_cut = 0
        self.recent: list[tuple[int, Tally]] = []  # (index, tally) of the last minute
        self.pace = Pace()
        self._tally = Tally()
        self._sent = self._duration_ns = self._seconds = 0
        self._slips = self._lost = self._inserted = 0
        # Of events, those no longer listed included.
        self.never_returned = self.links_lost = self.inversions = self.never_sent = 0
        self._positions: list[NDArray[np.int64]] = []
        self._kept = 0
        self._complete = True
        self.known_compared = 0  # compared bits within which every error's position is known and kept
        self._step = step
        self._next: int | None = None
        self._early: list[tuple[int, Second]] = []
        self._availability = _standards(requirement, rate_bps)

    def add(self, second: Second) -> None:
        """Take a second; an empty one may come before its elders are decided and waits for them."""
        if self._next is None:
            self._next = second.index
        heapq.heappush(self._early, (second.index, second))
        while self._early and self._early[0][0] <= self._next:
            index, ready = heapq.heappop(self._early)
            self._next = index + self._step
            self._take(ready)

    def flush(self) -> None:
        """Take what still waits: a cut or resumed run has gaps in its numbering."""
        while self._early:
            index, ready = heapq.heappop(self._early)
            self._next = index + self._step
            self._take(ready)

    def note(self, event: Event) -> None:
        """Take an event."""
        if event.kind == "never_returned":
            self.never_returned += int(event.data.get("bits", 0))
        self.never_sent += event.kind == "never_sent"
        self.links_lost += event.kind == "link_lost"
        self.inversions += event.kind == "inversion"
        if len(self.events) < EVENTS_KEPT:
            self.events.append(event)
        else:
            self.events_cut += 1

    @property
    def sums(self) -> Sums:
        """Sums over the seconds so far."""
        return Sums(
            self._tally,
            self._sent,
            self._duration_ns,
            self._seconds,
            self._slips,
            self._lost,
            self._inserted,
            self._complete,
        )

    def positions(self) -> NDArray[np.int64]:
        """Error positions among compared bits, (k,), ascending, as far as they are known and kept."""
        if not self._positions:
            return np.empty(0, dtype=np.int64)
        return np.concatenate(self._positions)

    def availability(self) -> tuple[AvailabilityResult, ...]:
        """Availability so far, by the required standard first."""
        return tuple(standard.result() for standard in self._availability)

    def _take(self, second: Second) -> None:
        compared_before = self._tally.compared
        self._tally += second.tally
        self._sent += second.sent
        self._duration_ns += second.duration_ns
        self._seconds += 1
        self.pace.take(second)
        self._slips += second.slips
        self._lost += second.bits_lost
        self._inserted += second.bits_inserted
        for standard in self._availability:
            standard.advance(second)
        self.recent = [*self.recent[-59:], (second.index // self._step, second.tally)]
        self._keep_positions(second, compared_before)
        self._advance_plan(second)

    def _keep_positions(self, second: Second, compared_before: int) -> None:
        if not self._complete:
            return
        if self._kept + len(second.positions) > POSITIONS_KEPT:
            self._complete = False
            return
        self._complete = second.positions_complete
        self.known_compared = compared_before + second.tally.compared
        if not len(second.positions):
            if not self._complete:
                self.known_compared = compared_before
            return
        among_compared = np.array(second.positions, dtype=np.int64) + (compared_before - second.first_bit)
        at = second.first_bit
        for bits, aligned in second.stretches:
            at += bits
            if not aligned:
                among_compared[second.positions >= at] -= bits
        if not self._complete:
            self.known_compared = int(among_compared[-1]) + 1
        self._positions.append(among_compared)
        self._kept += len(among_compared)

    def _advance_plan(self, second: Second) -> None:
        if self.feed is None or self.decision is not None:
            return
        for segment in segments_of(second):
            if segment.aligned and not segment.positions_complete:
                self.looks += 1
            decision = self.feed.advance(segment)
            if decision is not None:
                self.decision = decision
                return


def accumulator_for(point: Point, requirement: Requirement | None) -> Accumulator:
    """Make the accumulator for a stored point."""
    return Accumulator(requirement, point.facts.get("rate_bps"), step=int(point.facts.get("index_step", 1)))


def _standards(requirement: Requirement | None, rate_bps: float | None) -> list[Availability]:
    plain = Availability("G.821", rate_bps=rate_bps)
    if requirement is None or requirement.objectives is None:
        return [plain]
    asked = Availability(
        requirement.standard,
        rate_bps=rate_bps,
        block_bits=requirement.block_bits,
        objectives=requirement.objectives,
    )
    return [asked] if requirement.standard == "G.821" else [asked, plain]


def segments_of(second: Second) -> list[Segment]:
    """Lay a second out as the segments that it was made of, adjacent ones joined.

    Where positions were cut, the aligned bits behind the last one kept become one segment that says so: a plan
    then decides at its end, as it did on the bench.
    """
    segments = []
    at = second.first_bit
    for bits, aligned in _known_stretches(second):
        lo, hi = (int(i) for i in np.searchsorted(second.positions, (at, at + bits)))
        ones = int(np.count_nonzero(second.ones_lost[lo:hi]))
        compared = bits if aligned else 0
        tally = Tally(bits, compared, bits - compared, hi - lo, ones, hi - lo - ones)
        segments.append(
            Segment(
                at,
                tally,
                aligned=aligned,
                positions=second.positions[lo:hi],
                ones_lost=second.ones_lost[lo:hi],
            )
        )
        at += bits
    if second.positions_complete:
        return segments
    seen = Tally()
    for segment in segments:
        seen += segment.tally
    t = second.tally
    rest = Tally(
        t.compared - seen.compared,
        t.compared - seen.compared,
        0,
        t.errors - seen.errors,
        t.ones_as_zeros - seen.ones_as_zeros,
        t.zeros_as_ones - seen.zeros_as_ones,
    )
    return [*segments, Segment(at, rest, aligned=True, positions_complete=False)]


def _known_stretches(second: Second) -> list[tuple[int, bool]]:
    """Give a second's stretches as far as every error's position is known: up to the last one kept."""
    if second.positions_complete:
        return list(second.stretches)
    left = int(second.positions[-1]) + 1 - second.first_bit if len(second.positions) else 0
    known = []
    for bits, aligned in second.stretches:
        if left <= 0:
            break
        known.append((min(bits, left), aligned))
        left -= bits
    return known
