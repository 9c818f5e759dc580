"""What is seen of a run while it goes on and when it is over: progress, hooks, the result."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

from harness.assess.accumulate import Accumulator
from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.point import Facts, assess_point
from harness.assess.requirement import Requirement
from harness.bench.outlook import Outlook, outlook_of
from harness.bench.terms import StopRules
from harness.record import Event, Second


@dataclass(frozen=True, slots=True)
class Progress:
    """What a watcher is shown while a run goes on."""

    run: str
    title: str
    device: Mapping[str, str]
    point: PointAssessment
    longest_bits: int | None
    stop: StopRules
    elapsed_s: float
    waiting_writes: int = 0
    outlook: Outlook = field(default_factory=Outlook)
    number: int = 0  # of the visit under way
    visits: int = 1  # in all; 0: not known beforehand, as in a search
    seeking: str = ""  # what the visit under way is for, in a search
    units: Mapping[str, str] = field(default_factory=dict)  # instrument -> unit
    done: tuple[PointAssessment, ...] = ()  # a sweep's points so far
    sensitivity_ber: float | None = None
    until: float | None = None  # forecast of the end, seconds since the epoch
    elsewhere: bool = False  # another process measures, and this one only watches
    beside: tuple[Progress, ...] = ()  # the other direction, where both are measured at once

    def of_direction(self, live: Live) -> Progress:
        """Give the same for another direction that is measured at once."""
        longest = live.plan.longest_bits if live.plan else None
        return replace(self, point=live.point(), longest_bits=longest, outlook=live.outlook(), done=())


@dataclass(frozen=True, slots=True)
class Hooks:
    """What the command line adds: a view, and a way to end the run."""

    interrupted: threading.Event = field(default_factory=threading.Event)
    started: Callable[[str], None] = lambda _key: None
    tick: Callable[[Progress], None] = lambda _progress: None
    log: Callable[[str], None] = lambda _line: None
    pausing: Callable[[str], None] = lambda _what: None  # what is waited for; empty: nothing any more


@dataclass(frozen=True, slots=True)
class RunResult:
    """A run that has ended: its record's assessment, and what failed."""

    key: str
    assessment: Assessment
    fault: tuple[str, str] | None  # what, advice


class Live:
    """The accumulator that the screen is fed from, shared between the consumer and the main thread."""

    def __init__(self, requirement: Requirement | None, about: Facts) -> None:
        self._lock = threading.Lock()
        self._acc = Accumulator(requirement, about.rate_bps, step=int(about.facts.get("index_step", 1)))
        self._about = about
        self.plan = self._acc.plan

    def take(self, seconds: list[Second], events: list[Event]) -> None:
        """Take what has just been committed."""
        with self._lock:
            for event in events:
                self._acc.note(event)
            for second in seconds:
                self._acc.add(second)

    def outlook(self) -> Outlook:
        """Say what is ahead of the plan, and what speaks against a PASS already."""
        with self._lock:
            return outlook_of(self._acc, self._about.requirement)

    def point(self) -> PointAssessment:
        """Assess what is known so far."""
        with self._lock:
            return assess_point(self._acc, self._about, quick=True)
