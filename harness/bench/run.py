"""One run: from the profile to the record, whatever happens in between."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from drivers.contract import DriverError, Interrupted
from harness.assess.accumulate import Accumulator
from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.point import Facts, assess_point
from harness.assess.requirement import requirement_of
from harness.assess.run import assess
from harness.bench.measurement import Defect, Measurement, Outcome, Setup, StopRules
from harness.bench.recorder import Recorder
from harness.bench.session import Links, bench_host, bench_versions, open_pattern, point_facts, status_of
from harness.profile import Profile
from harness.record import EndedBy, Event, Run, Second, Sitting, Tally, Verdict
from harness.store import Store


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


class _Live:
    """The accumulator that the screen is fed from, shared between the consumer and the main thread."""

    def __init__(self, requirement: Any, about: Facts) -> None:
        self._lock = threading.Lock()
        self._acc = Accumulator(requirement, about.rate_bps)
        self._about = about
        self.plan = self._acc.plan

    def take(self, seconds: list[Second], events: list[Event]) -> None:
        with self._lock:
            for event in events:
                self._acc.note(event)
            for second in seconds:
                self._acc.add(second)

    def point(self) -> PointAssessment:
        with self._lock:
            return assess_point(self._acc, self._about, quick=True)


class MeasureRun:
    """Carries out one profile with one point."""

    def __init__(self, profile: Profile, store: Store, hooks: Hooks) -> None:
        self._profile = profile
        self._store = store
        self._hooks = hooks
        self._settings = profile.resolved()
        self._requirement = requirement_of(self._settings)
        self._pattern = open_pattern(profile)
        self._links = Links(profile.need_link(), hooks.interrupted)
        self._started = time.time_ns()
        self._key = ""

    def run(self) -> RunResult:
        """Measure; whatever goes wrong on the bench ends in the record and in `fault`."""
        recorder = Recorder(self._store)
        recorder.start()
        try:
            self._begin(recorder)
            outcome, fault, ended_by = self._measure(recorder)
            return self._end(recorder, outcome, fault, ended_by)
        finally:
            recorder.finish()

    # -- the record

    def _begin(self, recorder: Recorder) -> None:
        profile, started = self._profile, self._started
        facts = point_facts(profile, self._pattern, self._links)

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
            store.begin_point(key, 0, {}, started, facts)
            return key

        self._key = recorder.ask(job)
        self._hooks.started(self._key)

    def _commit(self, recorder: Recorder, live: _Live) -> Callable[[list[Second], list[Event], int], None]:
        key = self._key

        def commit(seconds: list[Second], events: list[Event], undecided: int) -> None:
            for event in events:
                self._hooks.log(event.text)
            recorder.put(lambda store: store.commit(key, seconds, [(0, e) for e in events], undecided))
            live.take(seconds, events)

        return commit

    # -- the bench

    def _measure(self, recorder: Recorder) -> tuple[Outcome | None, tuple[str, str] | None, EndedBy]:
        profile, links = self._profile, self._links
        stop = StopRules(profile.stop.bits, profile.stop.seconds, profile.stop.errors)
        about = Facts(
            values={},
            status="running",
            ended_by=None,
            started=self._started,
            ended=None,
            after_decision=Tally(),
            pattern=self._pattern.name,
            bit_order=profile.pattern.bit_order,
            rate_bps=links.rate_bps,
            requirement=self._requirement,
            facts=point_facts(profile, self._pattern, links),
        )
        live = _Live(self._requirement, about)
        commit = self._commit(recorder, live)
        outcome: Outcome | None = None
        fault: tuple[str, str] | None = None
        ended_by: EndedBy = "fault"
        try:
            with links.opened():
                measurement = Measurement(
                    links.sending,
                    links.receiving,
                    self._setup(stop),
                    commit=commit,
                    interrupted=self._hooks.interrupted,
                    broken=lambda: recorder.failed,
                    tick=lambda: self._tick(live, stop, recorder),
                )
                outcome = measurement.run()
                ended_by = outcome.ended_by
                if outcome.fault is not None:
                    fault = (outcome.fault.what, outcome.fault.advice)
        except Interrupted:
            ended_by = "interrupted"
        except DriverError as error:
            fault = (error.what, error.advice)
            ended_by = "fault"
        extra = list(links.events)
        if fault is not None:
            extra.append(Event("fault", None, fault[0], time.time_ns()))
        commit([], extra, 0)
        return outcome, fault, ended_by

    def _setup(self, stop: StopRules) -> Setup:
        profile, link = self._profile, self._profile.need_link()
        return Setup(
            pattern=self._pattern,
            bit_order=profile.pattern.bit_order,
            plan=self._requirement.make_plan() if self._requirement else None,
            stop=stop,
            pace_bps=link.pace_bps,
            max_in_flight_bits=link.max_in_flight_bits,
            drain_s=link.drain_s,
        )

    def _tick(self, live: _Live, stop: StopRules, recorder: Recorder) -> None:
        point = live.point()
        self._hooks.tick(
            Progress(
                run=self._key,
                title=self._profile.title,
                device=self._profile.device,
                point=point,
                longest_bits=live.plan.longest_bits if live.plan else None,
                stop=stop,
                elapsed_s=(time.time_ns() - self._started) / 1e9,
                waiting_writes=recorder.waiting,
            )
        )

    def _end(
        self,
        recorder: Recorder,
        outcome: Outcome | None,
        fault: tuple[str, str] | None,
        ended_by: EndedBy,
    ) -> RunResult:
        ended = time.time_ns()
        status = status_of(ended_by)
        after = outcome.after if outcome else Tally()
        key = self._key

        def close(store: Store) -> Run:
            store.end_point(key, 0, ended, ended_by, after, {})
            store.end_sitting(key, 0, ended, status)
            return store.load(key)

        run = replace(recorder.ask(close), status=status, ended=ended, ended_by=ended_by)
        assessment = assess(run)
        verdict: Verdict | None = assessment.verdict
        recorder.ask(lambda store: store.end_run(key, ended, status, ended_by, verdict, assessment.to_json()))
        return RunResult(key, assessment, fault)


__all__ = ["Defect", "Hooks", "MeasureRun", "Progress", "RunResult"]
