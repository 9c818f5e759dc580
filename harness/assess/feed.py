"""What a plan is fed with: every error, or error events where the profile says so beforehand.

An event is a maximal set of errors whose neighbours are at most ``event_gap_bits`` compared bits apart. Where
positions are not known every error counts as an event of its own: more than there are, never fewer.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from harness.assess.requirement import Requirement
from harness.record import Segment
from harness.statistics.plans import Decision, Plan


class PlanFeed:
    """Feeds a plan segment by segment."""

    def __init__(self, plan: Plan, requirement: Requirement) -> None:
        self.plan = plan
        self._gap = requirement.event_gap_bits if requirement.count == "events" else None
        self._compared = plan.compared_bits
        self._last: int | None = None  # the last error, in compared bits

    def advance(self, segment: Segment) -> Decision | None:
        """Feed a segment; returns the decision if it falls within it."""
        if self._gap is None or not segment.aligned:
            return self.plan.advance(segment)
        return self.plan.advance(self._events_of(segment, self._gap))

    def _events_of(self, segment: Segment, gap: int) -> Segment:
        begin = self._compared
        self._compared += segment.tally.compared
        if not segment.positions_complete:
            self._last = self._compared
            return segment
        if not len(segment.positions):
            return segment
        at = np.asarray(segment.positions, dtype=np.int64) - segment.start + begin
        before = np.concatenate(([at[0] - gap - 1 if self._last is None else self._last], at[:-1]))
        first = at - before > gap
        self._last = int(at[-1])
        ones = int(np.count_nonzero(segment.ones_lost[first]))
        events = int(np.count_nonzero(first))
        tally = replace(segment.tally, errors=events, ones_as_zeros=ones, zeros_as_ones=events - ones)
        return replace(
            segment, tally=tally, positions=segment.positions[first], ones_lost=segment.ones_lost[first]
        )
