"""The terms of a point: what it is measured with, what ends it, and what came of it."""

from __future__ import annotations

from dataclasses import dataclass

from drivers.contract import DriverError
from harness.assess.feed import PlanFeed
from harness.record import BitOrder, EndedBy, Tally
from harness.signal.patterns import Pattern
from harness.statistics.plans import Decision


class Defect(Exception):
    """A thread of ours failed: a defect in bitassay itself."""


@dataclass(frozen=True, slots=True)
class StopRules:
    """Whichever comes first."""

    bits: int | None = None  # sent; received where nothing is sent
    seconds: float | None = None
    errors: int | None = None

    @property
    def any(self) -> bool:
        """Whether there is one at all."""
        return (self.bits, self.seconds, self.errors) != (None, None, None)


@dataclass(frozen=True, slots=True)
class Rules:
    """What ends a point, as far as the consumer sees it."""

    plan: PlanFeed | None = None
    errors: int | None = None
    received_bits: int | None = None  # where nothing is sent


@dataclass(frozen=True, slots=True)
class Setup:
    """What a point is measured with."""

    pattern: Pattern
    bit_order: BitOrder
    plan: PlanFeed | None
    stop: StopRules
    pace_bps: float | None = None
    max_in_flight_bits: int | None = None
    drain_s: float = 5.0
    positions_per_second: int = 4096
    reconnect_s: float = 0.0
    first_place: int = 0
    point: int = 0
    sitting: int = 0
    first_index: int = 0
    base_bit: int = 0  # received bits that the point had in earlier sittings
    base_compared: int = 0
    index_step: int = 1  # two directions at once number their seconds in turns
    silence_is_a_result: bool = False  # a sweep's point without a bit: a result, not a fault
    last: bool = False  # nothing is sent over the link afterwards, so that its sending side may be closed


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of a point."""

    ended_by: EndedBy
    decision: Decision | None
    tally: Tally
    after: Tally
    sent_bits: int
    received_bits: int
    next_index: int
    next_place: int  # of the bit that would have been sent next
    fault: DriverError | None
