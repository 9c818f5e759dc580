"""One run: from the profile to the record, point by point, whatever happens in between."""

from __future__ import annotations

import datetime
import time
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from drivers.contract import DriverError, Interrupted, NotConfirmed
from harness.assess.assessment import PointAssessment
from harness.assess.feed import PlanFeed
from harness.assess.point import Facts
from harness.assess.requirement import requirement_at, requirement_of
from harness.assess.words import count
from harness.bench.both import side_by_side, worst
from harness.bench.conditions import Conditions
from harness.bench.measurement import Measurement
from harness.bench.pausing import Pausing
from harness.bench.progress import Hooks, Live, Progress, RunResult
from harness.bench.record_keeping import RecordKeeping
from harness.bench.resumption import instruments_of, points_done
from harness.bench.schedule import Schedule
from harness.bench.search import route_of
from harness.bench.session import Links, flush, ways_of
from harness.bench.terms import Defect, Outcome, Setup, StopRules
from harness.bench.visits import Had, Visit, had_by, what_is_left
from harness.profile import Profile
from harness.record import EndedBy, Event, Run, Tally
from harness.store import Store

TICK_S = 0.2
MOST_MOVED = 3  # points in a row at which an instrument did not stay where it was put: then the run ends


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
        self._cut = cut
        self._lock = lock
        self._settings = profile.resolved()
        self._requirement = requirement_of(self._settings)
        self._links = Links(profile.need_link(), hooks.interrupted)
        self._ways = ways_of(profile, self._links)
        self._several = profile.sweep is not None or profile.search is not None
        self._route = route_of(profile, cut, len(self._ways))
        self._record = RecordKeeping(profile, store, hooks, command=command, cut=cut)
        for link in self._links.all:
            link.begin_sitting(self._record.sitting)
        self._pausing = Pausing(hooks.pausing, self._record.sign_of_life, hooks.interrupted)
        self._next_tick = 0.0
        self._done: list[PointAssessment] = points_done(cut) if cut else []
        self._next_index = 1 + max((s.index for p in cut.points for s in p.seconds), default=-1) if cut else 0
        self._next_place = 0
        self._now = Visit(0)
        self._moved_in_a_row = 0
        self._schedule = Schedule(profile)

    def run(self) -> RunResult:
        """Measure; whatever goes wrong on the bench ends in the record and in `fault`."""
        try:
            self._begin()
            fault, ended_by = self._carry_out()
            return RunResult(self._record.key, self._record.end(ended_by), fault)
        except BaseException:
            self._record.abandon()
            raise
        finally:
            self._record.finish()

    def _begin(self) -> None:
        self._record.begin()
        self._conditions = Conditions(
            self._profile,
            self._links.main,
            self._lock / f"guardian-{self._record.key}.log",
            self._hooks.interrupted,
        )
        self._hooks.started(self._record.key)

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
        return self._with_what_is_unsafe(fault), ended_by

    def _with_what_is_unsafe(self, fault: tuple[str, str] | None) -> tuple[str, str] | None:
        """Let nobody overlook an instrument that could not be made safe, however well the run went."""
        unsafe = "; ".join(self._conditions.unsafe)
        if not unsafe:
            return fault
        log = self._lock / f"guardian-{self._record.key}.log"
        advice = (
            f"set it by hand before anyone touches the bench; what its guardian still tries stands in {log}"
        )
        return (f"{fault[0]}; {unsafe}" if fault else unsafe), advice

    def _make_sure_of(self, number: int, events: list[Event]) -> None:
        """Enter events that came outside of a point's measurement, beginning the point where need be."""
        if not self._record.begun(number):
            self._begin_point(self._now, 0, {})
        self._record.note(number, events)

    def _set(self, visit: Visit) -> dict[str, Any]:
        """Set a point's conditions; nothing is being sent meanwhile."""
        self._now = visit
        values = {**self._conditions.fixed(), **visit.values}
        words = ", ".join(f"{name} {value:g}" for name, value in values.items())
        with self._pausing.during(f"being set: {words}"):
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
        self._pausing.wait(steps.warm_up_s if steps else 0.0, "instruments and device warm up")
        visit: Visit | None = first
        ended_by: EndedBy = "bits"
        while visit is not None:
            if self._hooks.interrupted.is_set():
                return "interrupted", None
            if visit is not first:
                facts = self._set(visit)
            self._pausing.wait(steps.settle_s if steps else 0.0, "everything settles before bits count")
            outcomes = self._measure(visit, facts)
            ended_by, fault = worst(outcomes), next((o.fault for o in outcomes if o.fault), None)
            if ended_by in ("interrupted", "fault"):
                return ended_by, fault
            here = self._point(visit, 0)
            visit = self._route.next(self._done)
            if visit is None:
                visit = self._route.again(self._done, self._schedule.left_over(self._done))
            self._record.note(here, self._route.take_events())
        return ended_by, None

    def _begin_point(self, visit: Visit, way: int, facts: Mapping[str, Any]) -> None:
        about = {**self._ways[way].facts(self._links), **facts, **visit.facts}
        if visit.reference:
            about["reference"] = True
        if len(self._ways) > 1:
            about["index_step"] = len(self._ways)
        self._record.begin_point(self._point(visit, way), visit.values, about)

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
            self._record.note(number, self._resumed(had), live)
        before = [*self._conditions.take_events(), *self._links.take_events()]
        self._record.note(self._point(visit, 0), before, lives[0])
        outcomes = side_by_side(measurements)
        self._next_index = max(o.next_index for o in outcomes)
        self._next_place = outcomes[0].next_place
        moved, lost = self._moved(visit, worst(outcomes))
        found = {"moved": list(moved)} if moved else {}
        for way, outcome in enumerate(outcomes):
            self._record.close_point(self._point(visit, way), outcome, found)
            point = lives[way].point()
            facts = {**point.facts, **found}
            self._done.append(replace(point, values=visit.values, ended_by=outcome.ended_by, facts=facts))
        if lost is not None:
            raise lost
        return outcomes

    def _moved(self, visit: Visit, ended_by: EndedBy) -> tuple[tuple[str, ...], DriverError | None]:
        """Say what no longer stands where it was set for a point that came to its end."""
        if ended_by in ("interrupted", "fault"):
            return (), None
        moved, lost = self._conditions.confirm({**self._conditions.fixed(), **visit.values})
        self._record.note(self._point(visit, 0), self._conditions.take_events())
        self._moved_in_a_row = self._moved_in_a_row + 1 if moved else 0
        if self._moved_in_a_row >= MOST_MOVED and lost is None:
            lost = NotConfirmed(
                f"{moved[0]}, at {MOST_MOVED} points in a row",
                "see who else turns it: a hand, another program, a supply that fails",
            )
        return moved, lost

    def _resumed(self, had: Had | None) -> list[Event]:
        if had is None:
            return []
        # In the data all that every cut so far has left out; in words what this one did.
        missing = max(0, had.sent + had.inserted - had.received - had.lost)
        earlier = [int(e.data.get("bits", 0)) for e in had.point.events if e.kind == "resumed"]
        bits = max(0, missing - (earlier[-1] if earlier else 0))
        stopped = self._cut.sittings[-1].status if self._cut and self._cut.sittings else "cut"
        why = {"interrupted": "it was interrupted", "failed": "something failed"}.get(stopped, "it was cut")
        on_the_way = f"{count(bits, 'bit')} on the way then" if bits else "no bit was on its way then"
        text = f"the run goes on after {why}; {on_the_way}{', not counted' if bits else ''}"
        return [Event("resumed", had.received, text, time.time_ns(), {"bits": missing})]

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
            sitting=self._record.sitting,
            first_index=self._next_index + way,
            index_step=len(self._ways),
            base_bit=had.received if had else 0,
            base_compared=had.compared if had else 0,
            silence_is_a_result=self._several,
            last=not self._several and len(self._ways) == 1 and not link.after,
        )
        return Measurement(
            chosen.sending,
            chosen.receiving,
            setup,
            commit=self._record.commit_to(self._point(visit, way), lives[way]),
            interrupted=self._hooks.interrupted,
            broken=lambda: self._record.failed,
            tick=(lambda: self._tick(lives, stop)) if way == 0 else (lambda: None),
            reopen=self._links.reopen if len(self._ways) == 1 else None,
        )

    def _tick(self, lives: list[Live], stop: StopRules) -> None:
        now = time.monotonic()
        if now < self._next_tick:
            return
        self._next_tick = now + TICK_S
        sweep, search = self._profile.sweep, self._profile.search
        progress = Progress(
            run=self._record.key,
            title=self._profile.title,
            device=self._profile.device,
            point=lives[0].point(),
            longest_bits=lives[0].plan.longest_bits if lives[0].plan else None,
            stop=stop,
            elapsed_s=(time.time_ns() - self._record.started) / 1e9,
            waiting_writes=self._record.waiting,
            outlook=lives[0].outlook(),
            number=self._now.number,
            visits=self._route.total,
            seeking=self._route.words,
            units=self._conditions.units(),
            done=tuple(self._done),
            sensitivity_ber=search.ber if search else sweep.sensitivity_ber if sweep else None,
            until=self._schedule.until(self._done, len(self._route.ahead)) if sweep else None,
        )
        beside = tuple(progress.of_direction(live) for live in lives[1:])
        self._hooks.tick(replace(progress, beside=beside) if beside else progress)


__all__ = ["BenchRun", "Defect", "Hooks", "Live", "Progress", "RunResult"]
