"""`bitassay follow`: watches a run from another terminal, reading nothing but the store."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from harness.assess.assessment import PointAssessment
from harness.assess.requirement import requirement_at, requirement_of
from harness.assess.run import assess, facts_of
from harness.bench.progress import Live, Progress
from harness.bench.spare import AGAIN
from harness.bench.terms import StopRules
from harness.cli.output import open_reading, print_json, store_place
from harness.cli.page import print_page
from harness.cli.watch import watcher
from harness.record import Point, Run
from harness.store import Store

LOOK_EVERY_S = 0.5
LOOK_AGAIN_S = 2.0  # while the store is away
HANDED_OVER_S = 30.0  # after that, a bench has handed over what its store lacks: until then it seems gone
LATE = 120  # seconds that are numbered so far behind the newest and are still missing will not come any more


class Follower:
    """Keeps up with a run that another process writes: only what is new is read.

    A second without bits is written at once, and may stand there before earlier ones that are not decided
    yet: what is read again is everything since the first gap.
    """

    def __init__(self, store: Store, key: str) -> None:
        self._store = store
        self._key = key
        self._after = -1  # seconds up to here are all known
        self._seen: set[int] = set()  # those beyond it
        self._events = 0
        self._lives: dict[int, Live] = {}
        self._total: int | None = None
        self.run = store.load_head(key)
        self._requirement = requirement_of(self.run.settings)

    @property
    def goes_on(self) -> bool:
        """Whether the run was going on at the last look."""
        return self.run.status == "running"

    def look(self) -> None:
        """Read what is new."""
        tail = self._store.load_tail(self._key, self._after, self._events)
        self.run, self._events = tail.run, tail.events_seen
        for point in tail.run.points:
            new = [s for s in point.seconds if s.index > self._after and s.index not in self._seen]
            self._seen.update(s.index for s in new)
            self._live(point).take(new, list(point.events))
        if self._seen:
            self._after = max(self._after, max(self._seen) - LATE)
        while self._after + 1 in self._seen:
            self._after += 1
        self._seen = {index for index in self._seen if index > self._after}

    def _live(self, point: Point) -> Live:
        if point.index not in self._lives:
            asked = requirement_at(self._requirement, self.run.settings, point.values)
            about = replace(facts_of(self.run, point, asked), status="running")
            self._lives[point.index] = Live(asked, about)
        return self._lives[point.index]

    def progress(self, now_ns: int) -> Progress | None:
        """Say how the run stands, as the process that measures would; None before its first point."""
        if not self.run.points:
            return None
        settings = self.run.settings
        last = self.run.points[-1]
        ways = int(last.facts.get("index_step", 1))
        now = next(p for p in self.run.points if p.index == last.index - last.index % ways)
        live = self._live(now)
        number = now.index // ways
        sweep: Mapping[str, Any] = settings.get("sweep") or {}
        search: Mapping[str, Any] = settings.get("search") or {}
        done = self._done()
        visits = self._visits()
        began = self.run.sittings[-1].started if self.run.sittings else self.run.started
        progress = Progress(
            run=self.run.key,
            title=self.run.title,
            device=self.run.device,
            point=live.point(),
            longest_bits=live.plan.longest_bits if live.plan else None,
            stop=_stop_rules(settings, now),
            elapsed_s=(now_ns - began) / 1e9,
            outlook=live.outlook(),
            number=number,
            visits=visits,
            seeking=AGAIN if now.facts.get("again") else str((now.facts.get("search") or {}).get("why", "")),
            units=dict(now.facts.get("units") or {}),
            done=tuple(done),
            sensitivity_ber=search.get("ber") or sweep.get("sensitivity_ber"),
            until=self._until(now_ns, visits * ways),
            elsewhere=True,
        )
        others = [p for p in self.run.points if now.index < p.index < now.index + ways]
        beside = tuple(progress.of_direction(self._live(p)) for p in others)
        return replace(progress, beside=beside) if beside else progress

    def _visits(self) -> int:
        """How many points there are in all, as the profile says; 0: not known beforehand."""
        if self._total is None:
            settings = self.run.settings
            self._total = (
                _points_of(self.run) if settings.get("sweep") else 0 if settings.get("search") else 1
            )
        return self._total

    def _until(self, now_ns: int, points: int) -> float | None:
        """Forecast a sweep's end, seconds since the epoch, from how long its points took so far."""
        over = [p for p in self.run.points if p.ended is not None]
        if not over or points < 2:
            return None
        each = max(p.ended or 0 for p in over) - min(p.started for p in over)
        return (now_ns + each / len(over) * (points - len(over))) / 1e9

    def _done(self) -> list[PointAssessment]:
        ended = [p for p in self.run.points if p.ended_by is not None]
        return [replace(self._live(p).point(), ended_by=p.ended_by) for p in ended]


def _stop_rules(settings: Mapping[str, Any], point: Point) -> StopRules:
    """What ends the point: the profile's limits, and those that the search gave it."""
    limits: list[Mapping[str, Any]] = [settings.get("stop") or {}, point.facts.get("search") or {}]

    def least(key: str) -> Any:
        return min((limit[key] for limit in limits if limit.get(key) is not None), default=None)

    return StopRules(least("bits"), least("seconds"), least("errors"))


def _points_of(run: Run) -> int:
    """Count a sweep's points, as its profile lists them."""
    from harness.bench.visits import visits_of
    from harness.profile import ProfileError, parse_profile

    try:
        profile = parse_profile(run.profile_text, run.overrides, f"the profile of run {run.key}")
    except ProfileError:  # a plug-in that this computer does not have
        return len(run.points) + 1
    return len(visits_of(profile))


def follow(run: str, store: str | None, *, as_json: bool) -> int:
    """Watch a run until it ends, then show it."""
    with open_reading(store) as opened:
        key = opened.find(run)
        follower = Follower(opened, key)
        if follower.goes_on:
            _watch(follower, quiet=as_json)
        record = opened.load(key)
    assessment = assess(record)
    if as_json:
        print_json(assessment.to_json())
    else:
        print_page(assessment, store_place(store))
    return 0


def _watch(follower: Follower, *, quiet: bool) -> None:
    """Watch until the run has ended; while the store cannot be reached, wait for it: the bench does so too."""
    from harness.store import StoreLost

    back_at = float("-inf")
    with watcher(quiet=quiet, title=follower.run.title, device=follower.run.device) as view:
        view.started(follower.run.key)
        away = paused = False
        while True:
            try:
                follower.look()
            except StoreLost as error:
                if not away:
                    view.waiting(f"{error.what}; waiting for it (the bench that measures goes on without it)")
                away = True
                time.sleep(LOOK_AGAIN_S)
                continue
            if away:
                away, back_at = False, time.monotonic()
                view.waiting("")
            silent = follower.run.status == "cut" and time.monotonic() - back_at < HANDED_OVER_S
            if not follower.goes_on and not silent:
                return
            progress = follower.progress(time.time_ns())
            if progress is not None:
                view.tick(progress)
            elif not paused:  # what the bench waits for meanwhile is not in the store
                view.pausing("instruments are set and warm up; nothing is measured yet")
            paused = True
            time.sleep(LOOK_EVERY_S)
