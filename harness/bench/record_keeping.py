"""The record of a run under way: begun, filled point by point and ended, every write through the recorder."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any

from harness.assess.assessment import Assessment
from harness.assess.run import assess
from harness.bench.progress import Hooks, Live
from harness.bench.recorder import Recorder
from harness.bench.session import bench_host, bench_versions, status_of
from harness.bench.terms import Defect, Outcome
from harness.profile import Profile
from harness.record import EndedBy, Event, Run, Second, Sitting, Tally
from harness.store import Store, StoreError, StoreLost

TRIES_KEPT = 20  # named in the record; all are counted
Commit = Callable[[list[Second], list[Event], int], None]


class RecordKeeping:
    """Writes down what a run brings, in order and without holding anybody up.

    Parameters
    ----------
    cut
        The record of a cut run that goes on; None: a new run.
    """

    def __init__(
        self, profile: Profile, store: Store, hooks: Hooks, *, command: str, cut: Run | None = None
    ) -> None:
        self._profile = profile
        self._hooks = hooks
        self._command = command
        self._cut = cut
        self._recorder = Recorder(store)
        self._undecided: dict[int, int] = {}  # point -> bits received and not decided
        self._earlier: list[dict[str, Any]] = []
        self._earlier_unknown = False
        self._begun: set[int] = set()
        self._ended: set[int] = set()
        self.started = time.time_ns()
        self.sitting = len(cut.sittings) if cut else 0
        self.key = cut.key if cut else ""

    # -- the run

    def begin(self) -> None:
        """Begin the run, or a sitting that goes on with it."""
        self._recorder.start()
        profile = self._profile
        sitting = Sitting(self.sitting, self.started, None, bench_host(), bench_versions())

        def job(store: Store) -> str:
            key = self.key or store.begin_run(
                title=profile.title,
                command=self._command,
                started=self.started,
                profile_text=profile.text,
                overrides=profile.overrides,
                settings=profile.resolved(),
                device=profile.device,
            )
            store.begin_sitting(key, sitting)
            try:
                self._earlier = self._earlier_tries(store, key)
            except StoreLost:
                self._earlier_unknown = True  # said with the verdict: no reason to keep a bench waiting
            return key

        self.key = self._recorder.ask(job)

    def _earlier_tries(self, store: Store, key: str) -> list[dict[str, Any]]:
        """List this unit's earlier runs against the same requirement; a try is each in which a bit came."""
        device, asked = self._profile.device, self._profile.resolved().get("requirement")
        serial = device.get("serial_number")
        if not asked or not serial:
            return []
        earlier = []
        for r in store.earlier_runs(serial, key, asked, device.get("model")):
            run: dict[str, Any] = {
                "run": r.run,
                "status": r.status,
                "verdict": "VOID" if r.void else r.verdict,
            }
            if r.verdict in (None, "UNDECIDED") and _without_a_bit(store, r.run):
                run["without_a_bit"] = True
            earlier.append(run)
        return earlier

    def end(self, ended_by: EndedBy) -> Assessment:
        """End what is open, and keep what the run states; raises what the recorder met."""
        self._raise_failure()
        ended, status, key = time.time_ns(), status_of(ended_by), self.key

        def close(store: Store) -> Run:
            for number in sorted(self._begun - self._ended):
                store.end_point(key, number, ended, ended_by, Tally(), {})
            store.end_sitting(key, self.sitting, ended, status)
            return store.load(key)

        run = replace(self._recorder.ask(close), status=status, ended=ended, ended_by=ended_by)
        assessment = assess(run)
        stated = assessment.to_json()
        self._recorder.ask(
            lambda store: store.end_run(key, ended, status, ended_by, assessment.verdict, stated)
        )
        return assessment

    def _raise_failure(self) -> None:
        if self._recorder.defect is not None:
            raise Defect(str(self._recorder.defect)) from self._recorder.defect
        if self._recorder.fault is not None:
            raise self._recorder.fault

    def abandon(self) -> None:
        """After a defect: close the record as failed, as far as that goes; what was committed stays."""
        if not self.key:
            return
        key, now = self.key, time.time_ns()
        self._recorder.put(lambda store: store.end_run(key, now, "failed", "fault", None, None))

    def finish(self) -> None:
        """Write what is left, then end the recorder."""
        self._recorder.finish()

    @property
    def failed(self) -> bool:
        """Whether a write went wrong."""
        return self._recorder.failed

    @property
    def waiting(self) -> int:
        """Writes that wait for the store."""
        return self._recorder.waiting

    # -- its points

    def begun(self, number: int) -> bool:
        """Whether a point was begun in this sitting."""
        return number in self._begun

    def begin_point(self, number: int, values: Mapping[str, float], about: Mapping[str, Any]) -> None:
        """Begin a point, or go on with one of an earlier sitting: what was found then stays."""
        key, facts = self.key, dict(about)
        self._begun.add(number)
        there = next((p for p in self._cut.points if p.index == number), None) if self._cut else None
        if there is not None:
            missing = {name: fact for name, fact in facts.items() if name not in there.facts}
            self._recorder.ask(lambda store: store.begin_point(key, number, {}, 0, missing))
            return
        if self._earlier_unknown:
            facts["earlier_tries_unknown"] = True
        if self._earlier:
            facts["earlier_tries"] = self._earlier[-TRIES_KEPT:]
            facts["earlier_tries_count"] = sum(not run.get("without_a_bit") for run in self._earlier)
        now = time.time_ns()
        self._recorder.ask(lambda store: store.begin_point(key, number, dict(values), now, facts))

    def commit_to(self, number: int, live: Live | None) -> Commit:
        """Give what takes a point's seconds, events and undecided bits into the record and onto the screen."""
        key = self.key

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

    def note(self, number: int, events: list[Event], live: Live | None = None) -> None:
        """Take events of a point from outside of its measurement."""
        if events:
            self.commit_to(number, live)([], events, self._undecided.get(number, 0))

    def sign_of_life(self) -> None:
        """Commit nothing: other hosts take a run that says nothing for two minutes to be cut."""
        key = self.key
        self._recorder.put(lambda store: store.commit(key, [], [], 0))

    def close_point(self, number: int, outcome: Outcome, facts: Mapping[str, Any]) -> None:
        """End a point that came to its end; `end` closes others, with how the run ended."""
        if outcome.ended_by in ("interrupted", "fault"):
            return
        key, now = self.key, time.time_ns()
        self._recorder.put(
            lambda store: store.end_point(key, number, now, outcome.ended_by, outcome.after, facts)
        )
        self._undecided.pop(number, None)
        self._ended.add(number)


def _without_a_bit(store: Store, key: str) -> bool:
    """Whether a run that has ended states that not a single bit came, so that it could never have passed."""
    try:
        run = store.load_head(key)
    except StoreError:
        return False  # not known: it counts
    return run.stated is not None and run.stated.get("bits_received") == 0
