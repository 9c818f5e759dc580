"""What a run leaves behind: tallies, segments, events, seconds, points and runs, as frozen data.

Everyone may import this room; it imports nothing of the house. Counts are Python ints in bits,
times are UTC in integer nanoseconds, and nothing here computes more than sums and cuts.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

BitOrder = Literal["lsb", "msb"]
Verdict = Literal["PASS", "FAIL", "UNDECIDED"]
Status = Literal["running", "completed", "interrupted", "failed", "cut"]
EndedBy = Literal["plan", "bits", "seconds", "errors", "end_of_data", "interrupted", "fault"]


@dataclass(frozen=True, slots=True)
class Tally:
    """Counts over a stretch of the received stream, all in bits."""

    received: int = 0
    compared: int = 0
    unaligned: int = 0
    errors: int = 0
    ones_as_zeros: int = 0
    zeros_as_ones: int = 0

    def __add__(self, other: Tally) -> Tally:
        return Tally(
            self.received + other.received,
            self.compared + other.compared,
            self.unaligned + other.unaligned,
            self.errors + other.errors,
            self.ones_as_zeros + other.ones_as_zeros,
            self.zeros_as_ones + other.zeros_as_ones,
        )

    @property
    def holds(self) -> bool:
        """Whether nothing is counted twice and nothing dropped."""
        return (
            self.received == self.compared + self.unaligned
            and self.errors == self.ones_as_zeros + self.zeros_as_ones
            and 0 <= self.errors <= self.compared
            and min(self.unaligned, self.ones_as_zeros, self.zeros_as_ones) >= 0
        )


@dataclass(frozen=True, slots=True)
class Event:
    """Something that happened, in words.

    Kinds from the counter: ``aligned``, ``alignment_lost``, ``slip``, ``inversion``, ``skipped``.
    Kinds from the bench: ``host_overrun``, ``host_stalled``, ``link_lost``, ``link_back``, ``line``, ``sequence_loss``
    (O.150 section 4.2), ``delay``, ``never_returned``, ``never_sent``, ``decided``, ``closed``, ``fault``, ``stopped``,
    ``resumed``, ``instrument``, ``positions_cut``.
    """

    kind: str
    bit: int | None  # received bits before it; None where it is not tied to a bit
    text: str
    at: int | None = None  # UTC, ns; the counter has no clock and leaves it out
    data: Mapping[str, Any] = field(
        default_factory=dict
    )  # JSON values; a slip: {"bits": int, "modulo": int | None}


def _no_positions() -> NDArray[np.int64]:
    return np.empty(0, dtype=np.int64)


def _no_kinds() -> NDArray[np.bool_]:
    return np.empty(0, dtype=np.bool_)


@dataclass(frozen=True, slots=True, eq=False)
class Segment:
    """A contiguous, final stretch of the received stream, either wholly aligned or wholly unaligned."""

    start: int  # received bits before it
    tally: Tally
    aligned: bool
    place: int | None = None  # aligned: the pattern's bit that its first bit was compared with
    inverted: bool = False  # aligned: the opposite polarity to the pattern's name was compared
    positions: NDArray[np.int64] = field(default_factory=_no_positions)  # (k,) received bits, ascending
    ones_lost: NDArray[np.bool_] = field(default_factory=_no_kinds)  # (k,) True: a ONE received as ZERO
    positions_complete: bool = True  # False: the limit bit; counts stay exact
    events: tuple[Event, ...] = ()  # those whose bit lies in [start, start + received], in order

    @property
    def end(self) -> int:
        """Received bits up to and with its last."""
        return self.start + self.tally.received

    @property
    def known_bits(self) -> int:
        """Bits from its beginning within which every error's position is known."""
        if self.positions_complete or len(self.positions) == self.tally.errors:
            return self.tally.received
        return int(self.positions[-1]) + 1 - self.start if len(self.positions) else 0

    def split(self, bits: int) -> tuple[Segment, Segment]:
        """Cut into the first `bits` bits and the rest.

        Raises
        ------
        ValueError
            If errors would have to be shared out whose positions are not known.
        """
        if not 0 <= bits <= self.tally.received:
            raise ValueError("the cut lies outside the segment")
        if self.known_bits < bits < self.tally.received:
            raise ValueError("positions beyond the limit are not known: this segment cannot be cut there")
        cut = self.start + bits
        at = len(self.positions) if bits == self.tally.received else int(np.searchsorted(self.positions, cut))
        first = tuple(e for e in self.events if e.bit is None or e.bit <= cut)
        if bits == self.tally.received:
            head = self.tally
        else:
            ones = int(np.count_nonzero(self.ones_lost[:at]))
            compared = bits if self.aligned else 0
            head = Tally(bits, compared, bits - compared, at, ones, at - ones)
        whole = self.tally
        tail = Tally(
            whole.received - head.received,
            whole.compared - head.compared,
            whole.unaligned - head.unaligned,
            whole.errors - head.errors,
            whole.ones_as_zeros - head.ones_as_zeros,
            whole.zeros_as_ones - head.zeros_as_ones,
        )
        return (
            replace(
                self,
                tally=head,
                positions=self.positions[:at],
                ones_lost=self.ones_lost[:at],
                positions_complete=self.positions_complete or head.errors == at,
                events=first,
            ),
            replace(
                self,
                start=cut,
                tally=tail,
                place=None if self.place is None else self.place + bits,
                positions=self.positions[at:],
                ones_lost=self.ones_lost[at:],
                positions_complete=self.positions_complete or tail.errors == len(self.positions) - at,
                events=self.events[len(first) :],
            ),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Second:
    """The one-second tally of ITU-T G.821; the last of a sitting may be partial."""

    point: int
    sitting: int
    index: int  # counted through the run
    at: int  # UTC, ns, of its beginning
    duration_ns: int
    sent: int  # bits
    tally: Tally
    due: bool = True  # bits were due to arrive in it
    slips: int = 0
    bits_lost: int = 0
    bits_inserted: int = 0
    first_bit: int = 0  # received bits of the point before it
    positions: NDArray[np.int64] = field(default_factory=_no_positions)  # (k,) received bits of the point
    ones_lost: NDArray[np.bool_] = field(default_factory=_no_kinds)
    positions_complete: bool = True
    stretches: tuple[
        tuple[int, bool], ...
    ] = ()  # (bits, aligned) in order: where compared bits lie among received


@dataclass(frozen=True, slots=True)
class Sitting:
    """A stretch of a run without interruption; a resumed run has several."""

    index: int
    started: int
    ended: int | None
    host: Mapping[str, Any]  # name, pid, boot, python, platform
    versions: Mapping[str, str]
    undecided_bits: int = 0  # received, not decided when the last commit was made
    status: Status = "running"


@dataclass(frozen=True, slots=True, eq=False)
class Point:
    """One setting of the conditions, with what was measured there; a plain run has one."""

    index: int
    values: Mapping[str, float]  # instrument -> value set, in the instrument's unit
    started: int
    ended: int | None
    ended_by: EndedBy | None
    seconds: tuple[Second, ...]
    events: tuple[Event, ...]
    after_decision: Tally = Tally()  # bits that came after the plan had decided
    facts: Mapping[str, Any] = field(
        default_factory=dict
    )  # readings, delay, alternatives: what was found, not derived


@dataclass(frozen=True, slots=True)
class Note:
    """Words added to a record afterwards; a record is never edited."""

    at: int
    who: str
    text: str
    void: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Run:
    """One profile carried out once."""

    key: str  # UUIDv7
    title: str
    command: str  # measure, sweep, examine
    started: int
    ended: int | None
    status: Status
    ended_by: EndedBy | None
    verdict: Verdict | None  # as stated when the run ended
    profile_text: str  # as given
    overrides: tuple[str, ...]  # "section.key=value", as given
    settings: Mapping[str, Any]  # the profile as resolved, defaults included
    device: Mapping[str, str]
    sittings: tuple[Sitting, ...]
    points: tuple[Point, ...]
    stated: Mapping[str, Any] | None  # the assessment's JSON as stated at the end
    notes: tuple[Note, ...] = ()
