"""One run: from the profile to the record, whatever happens in between."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

from drivers.contract import DriverError, Interrupted
from harness.assess.accumulate import Accumulator
from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.point import Facts, assess_point
from harness.assess.requirement import Requirement, requirement_of
from harness.assess.run import assess
from harness.bench.measurement import Defect, Measurement, Outcome, Setup, StopRules
from harness.bench.recorder import Recorder
from harness.bench.session import Links, Way, bench_host, bench_versions, status_of, ways_of
from harness.profile import Profile
from harness.record import EndedBy, Event, Run, Second, Sitting, Tally
from harness.store import Store

TICK_S = 0.2
Commit = Callable[[list[Second], list[Event], int], None]


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


@dataclass(frozen=True, slots=True)
class Hooks:
    """What the command line adds: a view, and a way to end the run."""

    interrupted: threading.Event = field(default_factory=threading.Event)
    started: Callable[[str], None] = lambda _key: None
    tick: Callable[[Progress], None] = lambda _progress: None
    log: Callable[[str], None] = lambda _line: None


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
        self._acc = Accumulator(requirement, about.rate_bps)
        self._about = about
        self.plan = self._acc.plan

    def take(self, seconds: list[Second], events: list[Event]) -> None:
        """Take what has just been committed."""
        with self._lock:
            for event in events:
                self._acc.note(event)
            for second in seconds:
                self._acc.add(second)

    def point(self) -> PointAssessment:
        """Assess what is known so far."""
        with self._lock:
            return assess_point(self._acc, self._about, quick=True)


class MeasureRun:
    """Carries out one profile with one point, or with two where both directions are measured at once."""

    def __init__(self, profile: Profile, store: Store, hooks: Hooks) -> None:
        self._profile = profile
        self._hooks = hooks
        self._settings = profile.resolved()
        self._requirement = requirement_of(self._settings)
        self._links = Links(profile.need_link(), hooks.interrupted)
        self._ways = ways_of(profile, self._links)
        self._stop = StopRules(profile.stop.bits, profile.stop.seconds, profile.stop.errors)
        self._recorder = Recorder(store)
        self._started = time.time_ns()
        self._next_tick = 0.0
        self._undecided: dict[int, int] = {}
        self._key = ""

    def run(self) -> RunResult:
        """Measure; whatever goes wrong on the bench ends in the record and in `fault`."""
        self._recorder.start()
        try:
            self._begin()
            lives = [Live(self._requirement, self._about(way)) for way in self._ways]
            outcomes, fault, ended_by = self._measure(lives)
            return self._end(outcomes, fault, ended_by)
        except BaseException:
            self._abandon()
            raise
        finally:
            self._recorder.finish()

    # -- the record

    def _begin(self) -> None:
        profile, started = self._profile, self._started
        facts = [way.facts(self._links) for way in self._ways]

        def job(store: Store) -> str:
            key = store.begin_run(
                title=profile.title,
                command="measure",
                started=started,
                profile_text=profile.text,
                overrides=profile.overrides,
                settings=self._settings,
                device=profile.device,
            )
            store.begin_sitting(key, Sitting(0, started, None, bench_host(), bench_versions()))
            for number, about in enumerate(facts):
                store.begin_point(key, number, {}, started, about)
            return key

        self._key = self._recorder.ask(job)
        self._hooks.started(self._key)

    def _commit(self, number: int, live: Live) -> Commit:
        key = self._key

        def commit(seconds: list[Second], events: list[Event], undecided: int) -> None:
            for event in events:
                self._hooks.log(event.text)
            self._undecided[number] = undecided
            waiting = sum(self._undecided.values())
            placed = [(number, event) for event in events]
            self._recorder.put(lambda store: store.commit(key, seconds, placed, waiting))
            live.take(seconds, events)

        return commit

    def _about(self, way: Way) -> Facts:
        facts = way.facts(self._links)
        return Facts(
            values={},
            status="running",
            ended_by=None,
            started=self._started,
            ended=None,
            after_decision=Tally(),
            pattern=way.pattern.name,
            bit_order=way.bit_order,
            rate_bps=facts["rate_bps"],
            requirement=self._requirement,
            facts=facts,
        )

    # -- the bench

    def _measure(self, lives: list[Live]) -> tuple[list[Outcome], tuple[str, str] | None, EndedBy]:
        outcomes: list[Outcome] = []
        fault: tuple[str, str] | None = None
        ended_by: EndedBy = "fault"
        try:
            with self._links.opened():
                outcomes = self._both([self._measurement(n, live, lives) for n, live in enumerate(lives)])
                ended_by = _worst(outcomes)
                failed = next((o.fault for o in outcomes if o.fault is not None), None)
                if failed is not None:
                    fault = (failed.what, failed.advice)
        except Interrupted:
            ended_by = "interrupted"
        except DriverError as error:
            fault, ended_by = (error.what, error.advice), "fault"
        extra = list(self._links.events)
        if fault is not None:
            extra.append(Event("fault", None, fault[0], time.time_ns()))
        if extra:
            self._commit(0, lives[0])([], extra, 0)
        return outcomes, fault, ended_by

    def _measurement(self, number: int, live: Live, lives: list[Live]) -> Measurement:
        way, link = self._ways[number], self._profile.need_link()
        setup = Setup(
            pattern=way.pattern,
            bit_order=way.bit_order,
            plan=self._requirement.make_plan() if self._requirement else None,
            stop=self._stop,
            pace_bps=link.pace_bps,
            max_in_flight_bits=link.max_in_flight_bits,
            drain_s=link.drain_s,
            reconnect_s=link.reconnect_s,
            point=number,
        )
        return Measurement(
            way.sending,
            way.receiving,
            setup,
            commit=self._commit(number, live),
            interrupted=self._hooks.interrupted,
            broken=lambda: self._recorder.failed,
            tick=(lambda: self._tick(lives)) if number == 0 else (lambda: None),
            reopen=self._links.reopen if len(self._ways) == 1 else None,
        )

    def _both(self, measurements: list[Measurement]) -> list[Outcome]:
        """Measure; a second direction has a thread of its own, beside this one."""
        answers: dict[int, Outcome | BaseException] = {}

        def beside(number: int) -> None:
            try:
                answers[number] = measurements[number].run()
            except BaseException as error:
                answers[number] = error

        threads = [
            threading.Thread(target=beside, args=(number,), name=f"direction {number}", daemon=True)
            for number in range(1, len(measurements))
        ]
        for thread in threads:
            thread.start()
        beside(0)
        for thread in threads:
            thread.join()
        outcomes = []
        for number in range(len(measurements)):
            answer = answers[number]
            if isinstance(answer, BaseException):
                raise answer
            outcomes.append(answer)
        return outcomes

    def _tick(self, lives: list[Live]) -> None:
        now = time.monotonic()
        if now < self._next_tick:
            return
        self._next_tick = now + TICK_S
        self._hooks.tick(
            Progress(
                run=self._key,
                title=self._profile.title,
                device=self._profile.device,
                point=lives[0].point(),
                longest_bits=lives[0].plan.longest_bits if lives[0].plan else None,
                stop=self._stop,
                elapsed_s=(time.time_ns() - self._started) / 1e9,
                waiting_writes=self._recorder.waiting,
            )
        )

    def _abandon(self) -> None:
        """After a defect: close the record as failed, as far as that goes; what was committed stays."""
        if not self._key:
            return
        key, now = self._key, time.time_ns()
        self._recorder.put(lambda store: store.end_run(key, now, "failed", "fault", None, None))

    def _end(self, outcomes: list[Outcome], fault: tuple[str, str] | None, ended_by: EndedBy) -> RunResult:
        ended = time.time_ns()
        status = status_of(ended_by)
        key = self._key

        def close(store: Store) -> Run:
            for number in range(len(self._ways)):
                outcome = outcomes[number] if outcomes else None
                why = outcome.ended_by if outcome else ended_by
                store.end_point(key, number, ended, why, outcome.after if outcome else Tally(), {})
            store.end_sitting(key, 0, ended, status)
            return store.load(key)

        run = replace(self._recorder.ask(close), status=status, ended=ended, ended_by=ended_by)
        assessment = assess(run)
        stated = assessment.to_json()
        self._recorder.ask(
            lambda store: store.end_run(key, ended, status, ended_by, assessment.verdict, stated)
        )
        return RunResult(key, assessment, fault)


def _worst(outcomes: list[Outcome]) -> EndedBy:
    """What ended a run: a fault or an interruption in either direction, else what ended the first."""
    reasons: list[EndedBy] = [outcome.ended_by for outcome in outcomes]
    for bad in ("interrupted", "fault"):
        if bad in reasons:
            return bad
    return reasons[0]


__all__ = ["Defect", "Hooks", "Live", "MeasureRun", "Progress", "RunResult"]
