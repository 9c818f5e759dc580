"""One run: from the profile to the record, point by point, whatever happens in between."""

from __future__ import annotations

import datetime
import time
from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from drivers.contract import DriverError, Interrupted
from harness.assess.assessment import PointAssessment
from harness.assess.feed import PlanFeed
from harness.assess.point import Facts
from harness.assess.requirement import requirement_at, requirement_of
from harness.assess.run import assess
from harness.bench.both import side_by_side, worst
from harness.bench.conditions import Conditions
from harness.bench.measurement import Defect, Measurement, Outcome, Setup, StopRules
from harness.bench.progress import Hooks, Live, Progress, RunResult
from harness.bench.recorder import Recorder
from harness.bench.resumption import instruments_of, points_done
from harness.bench.schedule import Schedule
from harness.bench.search import route_of
from harness.bench.session import Links, bench_host, bench_versions, flush, status_of, ways_of
from harness.bench.visits import Had, Visit, had_by, what_is_left
from harness.profile import Profile
from harness.record import EndedBy, Event, Run, Second, Sitting, Tally
from harness.store import Store

TICK_S = 0.2
SIGN_OF_LIFE_S = 30.0
TRIES_KEPT = 20  # named in the record; all are counted
Commit = Callable[[list[Second], list[Event], int], None]


class BenchRun:
    """Carries out a profile: one point, or those of a sweep; each in one direction, or in both at once.

    Parameters
    ----------
    lock
        Folder for the guardian's files.
    cut
        The record of a cut run that goes on; None: a new run.
    """

    def __init__(
        self,
        profile: Profile,
        store: Store,
        hooks: Hooks,
        *,
        lock: Path,
        command: str,
        cut: Run | None = None,
    ) -> None:
        self._profile = profile
        self._hooks = hooks
        self._command = command
        self._cut = cut
        self._lock = lock
        self._settings = profile.resolved()
        self._requirement = requirement_of(self._settings)
        self._links = Links(profile.need_link(), hooks.interrupted)
        self._ways = ways_of(profile, self._links)
        self._route = route_of(profile, cut, len(self._ways))
        self._recorder = Recorder(store)
        self._started = time.time_ns()
        self._next_tick = 0.0
        self._undecided: dict[int, int] = {}  # point -> bits received and not decided
        self._earlier: list[dict[str, str | None]] = []
        self._begun: set[int] = set()
        self._ended: set[int] = set()
        self._done: list[PointAssessment] = points_done(cut) if cut else []
        self._next_index = 1 + max((s.index for p in cut.points for s in p.seconds), default=-1) if cut else 0
        self._next_place = 0
        self._sitting = len(cut.sittings) if cut else 0
        self._key = cut.key if cut else ""
        self._now = Visit(0)
        self._schedule = Schedule(profile)

    def run(self) -> RunResult:
        """Measure; whatever goes wrong on the bench ends in the record and in `fault`."""
        self._recorder.start()
        try:
            self._begin()
            fault, ended_by = self._carry_out()
            if self._recorder.defect is not None:
                raise Defect(str(self._recorder.defect)) from self._recorder.defect
            if self._recorder.fault is not None:
                raise self._recorder.fault
            return self._end(fault, ended_by)
        except BaseException:
            self._abandon()
            raise
        finally:
            self._recorder.finish()

    # -- the record

    def _begin(self) -> None:
        profile = self._profile
        sitting = Sitting(self._sitting, self._started, None, bench_host(), bench_versions())

        def job(store: Store) -> str:
            key = self._key or store.begin_run(
                title=profile.title,
                command=self._command,
                started=self._started,
                profile_text=profile.text,
                overrides=profile.overrides,
                settings=self._settings,
                device=profile.device,
            )
            store.begin_sitting(key, sitting)
            self._earlier = self._earlier_tries(store, key)
            return key

        self._key = self._recorder.ask(job)
        self._conditions = Conditions(
            profile, self._links.main, self._lock / f"guardian-{self._key}.log", self._hooks.interrupted
        )
        self._hooks.started(self._key)

    def _earlier_tries(self, store: Store, key: str) -> list[dict[str, str | None]]:
        """List this unit's earlier runs against the same requirement: each of them was a try."""
        serial = self._profile.device.get("serial_number")
        if self._requirement is None or not serial:
            return []
        asked, model = self._settings["requirement"], self._profile.device.get("model")
        return [
            {"run": r.run, "status": r.status, "verdict": "VOID" if r.void else r.verdict}
            for r in store.earlier_runs(serial, key, asked, model)
        ]

    def _point(self, visit: Visit, way: int) -> int:
        return visit.number * len(self._ways) + way

    def _had(self, number: int) -> Had | None:
        """What an earlier sitting left of a point; None where it was never begun."""
        if self._cut is None:
            return None
        point = next((p for p in self._cut.points if p.index == number), None)
        if point is None:
            return None
        return had_by(point, requirement_at(self._requirement, self._settings, point.values))

    def _commit(self, number: int, live: Live | None) -> Commit:
        key = self._key

        def commit(seconds: list[Second], events: list[Event], undecided: int) -> None:
            for event in events:
                self._hooks.log(event.text)
            self._undecided[number] = undecided
            waiting = sum(self._undecided.values())
            placed = [(number, event) for event in events]
            self._recorder.put(lambda store: store.commit(key, seconds, placed, waiting))
            if live is not None:
                live.take(seconds, events)

        return commit

    def _note(self, number: int, events: list[Event], live: Live | None = None) -> None:
        if events:
            self._commit(number, live)([], events, self._undecided.get(number, 0))

    # -- the bench

    def _carry_out(self) -> tuple[tuple[str, str] | None, EndedBy]:
        """Visit all points; gives the fault that ended it, and what ended it."""
        fault: tuple[str, str] | None = None
        ended_by: EndedBy = "bits"
        first = self._route.next(self._done)
        if first is None:
            return None, "bits"
        self._now = first
        try:
            with self._conditions.opened():
                if self._cut is not None:
                    self._conditions.recognise(instruments_of(self._cut))
                facts = self._set(first)
                with self._links.opened():
                    ended_by, failed = self._visit_all(first, facts)
                    if failed is not None:
                        fault = (failed.what, failed.advice)
        except Interrupted:
            ended_by = "interrupted"
        except DriverError as error:
            fault, ended_by = (error.what, error.advice), "fault"
        last = self._point(self._now, 0)
        extra = [*self._conditions.take_events(), *self._links.take_events()]
        if fault is not None:
            extra.append(Event("fault", None, fault[0], time.time_ns()))
        self._make_sure_of(last, extra)
        return fault, ended_by

    def _make_sure_of(self, number: int, events: list[Event]) -> None:
        """Enter events that came outside of a point's measurement, beginning the point where need be."""
        if number not in self._begun:
            self._begin_point(self._now, 0, {})
        self._note(number, events)

    def _set(self, visit: Visit) -> dict[str, Any]:
        """Set a point's conditions; nothing is being sent meanwhile."""
        self._now = visit
        values = {**self._conditions.fixed(), **visit.values}
        facts = self._conditions.apply(values)
        if self._conditions.instruments:
            facts["instruments"] = self._conditions.identities()
            facts["units"] = self._conditions.units()
        calibration = self._conditions.level.facts()
        if any(calibration.values()):
            facts["calibration"] = calibration
        overdue = self._conditions.level.overdue(datetime.date.today())
        if overdue:
            facts["overdue"] = overdue
        return facts

    def _visit_all(self, first: Visit, facts: dict[str, Any]) -> tuple[EndedBy, DriverError | None]:
        steps = self._profile.sweep or self._profile.search
        self._pause(steps.warm_up_s if steps else 0.0)
        visit: Visit | None = first
        ended_by: EndedBy = "bits"
        while visit is not None:
            if self._hooks.interrupted.is_set():
                return "interrupted", None
            if visit is not first:
                facts = self._set(visit)
            self._pause(steps.settle_s if steps else 0.0)
            outcomes = self._measure(visit, facts)
            ended_by, fault = worst(outcomes), next((o.fault for o in outcomes if o.fault), None)
            if ended_by in ("interrupted", "fault"):
                return ended_by, fault
            here = self._point(visit, 0)
            visit = self._route.next(self._done)
            if visit is None:
                visit = self._route.again(self._done, self._schedule.left_over(self._done))
            self._note(here, self._route.take_events())
        return ended_by, None

    def _pause(self, seconds: float) -> None:
        key, ends = self._key, time.monotonic() + seconds
        while (left := ends - time.monotonic()) > 0 and not self._hooks.interrupted.is_set():
            # Other hosts take a run that says nothing for two minutes to be cut.
            self._recorder.put(lambda store: store.commit(key, [], [], 0))
            self._hooks.interrupted.wait(min(left, SIGN_OF_LIFE_S))

    def _begin_point(self, visit: Visit, way: int, facts: Mapping[str, Any]) -> None:
        number, key = self._point(visit, way), self._key
        self._begun.add(number)
        if self._cut is not None and any(p.index == number for p in self._cut.points):
            self._recorder.ask(
                lambda store: store.begin_point(key, number, {}, 0)
            )  # it goes on, facts and all
            return
        about = {**self._ways[way].facts(self._links), **facts, **visit.facts}
        values = dict(visit.values)
        if self._earlier:
            about["earlier_tries"] = self._earlier[-TRIES_KEPT:]
            about["earlier_tries_count"] = len(self._earlier)
        if visit.reference:
            about["reference"] = True
        if len(self._ways) > 1:
            about["index_step"] = len(self._ways)
        now = time.time_ns()
        self._recorder.ask(lambda store: store.begin_point(key, number, values, now, about))

    def _measure(self, visit: Visit, facts: dict[str, Any]) -> list[Outcome]:
        """Measure one point in all its directions."""
        for link in self._links.all:
            flush(link, self._profile.need_link().drain_s)
        lives: list[Live] = []
        measurements: list[Measurement] = []
        for way in range(len(self._ways)):
            number = self._point(visit, way)
            self._begin_point(visit, way, facts)
            had = self._had(number)
            live = Live(
                requirement_at(self._requirement, self._settings, visit.values), self._about(visit, way)
            )
            if had is not None:  # the screen goes on from what the point had
                live.take(list(had.point.seconds), list(had.point.events))
            lives.append(live)
            measurements.append(self._measurement(visit, way, had, lives))
            self._note(number, self._resumed(had), live)
        before = [*self._conditions.take_events(), *self._links.take_events()]
        self._note(self._point(visit, 0), before, lives[0])
        outcomes = side_by_side(measurements)
        self._next_index = max(o.next_index for o in outcomes)
        self._next_place = outcomes[0].next_place
        for way, outcome in enumerate(outcomes):
            self._close_point(self._point(visit, way), outcome)
            self._done.append(replace(lives[way].point(), values=visit.values, ended_by=outcome.ended_by))
        return outcomes

    def _resumed(self, had: Had | None) -> list[Event]:
        if had is None:
            return []
        missing = max(0, had.sent - had.received - had.lost)
        text = f"the run goes on after it was cut; {missing} bits were on their way then and are not counted"
        return [Event("resumed", had.received, text, time.time_ns(), {"bits": missing})]

    def _close_point(self, number: int, outcome: Outcome) -> None:
        key, now = self._key, time.time_ns()
        if outcome.ended_by in ("interrupted", "fault"):
            return  # `_end` closes it, with how the run ended
        self._recorder.put(
            lambda store: store.end_point(key, number, now, outcome.ended_by, outcome.after, {})
        )
        self._undecided.pop(number, None)
        self._ended.add(number)

    def _about(self, visit: Visit, way: int) -> Facts:
        facts = {**self._ways[way].facts(self._links), "index_step": len(self._ways), **visit.facts}
        if visit.reference:
            facts["reference"] = True
        return Facts(
            values=visit.values,
            status="running",
            ended_by=None,
            started=time.time_ns(),
            ended=None,
            after_decision=Tally(),
            pattern=self._ways[way].pattern.name,
            bit_order=self._ways[way].bit_order,
            rate_bps=facts["rate_bps"],
            requirement=requirement_at(self._requirement, self._settings, visit.values),
            facts=facts,
        )

    def _measurement(self, visit: Visit, way: int, had: Had | None, lives: list[Live]) -> Measurement:
        link, chosen = self._profile.need_link(), self._ways[way]
        requirement = requirement_at(self._requirement, self._settings, visit.values)
        plan = PlanFeed(requirement.make_plan(), requirement) if requirement else None
        if had is not None and had.plan is not None:
            plan = had.plan
        stop = what_is_left(self._profile, visit, had, sends=chosen.sending is not None)
        stop = self._schedule.share(stop, visit, self._route.ahead, self._done, planned=plan is not None)
        setup = Setup(
            pattern=chosen.pattern,
            bit_order=chosen.bit_order,
            plan=plan,
            stop=stop,
            pace_bps=link.pace_bps,
            max_in_flight_bits=link.max_in_flight_bits,
            drain_s=link.drain_s,
            reconnect_s=link.reconnect_s,
            first_place=self._next_place,
            point=self._point(visit, way),
            sitting=self._sitting,
            first_index=self._next_index + way,
            index_step=len(self._ways),
            base_bit=had.received if had else 0,
            base_compared=had.compared if had else 0,
            silence_is_a_result=self._profile.sweep is not None or self._profile.search is not None,
        )
        return Measurement(
            chosen.sending,
            chosen.receiving,
            setup,
            commit=self._commit(self._point(visit, way), lives[way]),
            interrupted=self._hooks.interrupted,
            broken=lambda: self._recorder.failed,
            tick=(lambda: self._tick(lives, stop)) if way == 0 else (lambda: None),
            reopen=self._links.reopen if len(self._ways) == 1 else None,
        )

    def _tick(self, lives: list[Live], stop: StopRules) -> None:
        now = time.monotonic()
        if now < self._next_tick:
            return
        self._next_tick = now + TICK_S
        sweep, search = self._profile.sweep, self._profile.search
        self._hooks.tick(
            Progress(
                run=self._key,
                title=self._profile.title,
                device=self._profile.device,
                point=lives[0].point(),
                longest_bits=lives[0].plan.longest_bits if lives[0].plan else None,
                stop=stop,
                elapsed_s=(time.time_ns() - self._started) / 1e9,
                waiting_writes=self._recorder.waiting,
                outlook=lives[0].outlook(),
                number=self._now.number,
                visits=self._route.total,
                seeking=self._route.words,
                units=self._conditions.units(),
                done=tuple(self._done),
                sensitivity_ber=search.ber if search else sweep.sensitivity_ber if sweep else None,
                until=self._schedule.until(self._done, len(self._route.ahead)) if sweep else None,
            )
        )

    # -- the end

    def _abandon(self) -> None:
        """After a defect: close the record as failed, as far as that goes; what was committed stays."""
        if not self._key:
            return
        key, now = self._key, time.time_ns()
        self._recorder.put(lambda store: store.end_run(key, now, "failed", "fault", None, None))

    def _end(self, fault: tuple[str, str] | None, ended_by: EndedBy) -> RunResult:
        ended = time.time_ns()
        status = status_of(ended_by)
        key = self._key

        def close(store: Store) -> Run:
            for number in sorted(self._begun - self._ended):
                store.end_point(key, number, ended, ended_by, Tally(), {})
            store.end_sitting(key, self._sitting, ended, status)
            return store.load(key)

        run = replace(self._recorder.ask(close), status=status, ended=ended, ended_by=ended_by)
        assessment = assess(run)
        stated = assessment.to_json()
        self._recorder.ask(
            lambda store: store.end_run(key, ended, status, ended_by, assessment.verdict, stated)
        )
        return RunResult(key, assessment, fault)


__all__ = ["BenchRun", "Defect", "Hooks", "Live", "Progress", "RunResult"]
