"""The way of a search: each point is chosen from those before it, until the crossing is bounded or cannot be."""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from decimal import Decimal

from harness.assess.assessment import PointAssessment
from harness.assess.words import count
from harness.bench.route import ListRoute, Route
from harness.bench.terms import StopRules
from harness.bench.visits import Visit
from harness.profile import Profile
from harness.profile.sweeps import Search
from harness.record import Point, Run
from harness.statistics.conditions import rises_with
from harness.statistics.curve import CurvePoint
from harness.statistics.search import Found, SearchSpace, Step, next_step

UNFINISHED = (None, "interrupted", "fault")


def route_of(profile: Profile, cut: Run | None, ways: int = 1) -> Route:
    """Choose the way through a profile's points.

    Parameters
    ----------
    cut
        The record of a cut run that goes on.
    ways
        Directions that are measured at once: so many points of the record to a visit.
    """
    points = cut.points if cut is not None else ()
    if profile.search is not None:
        return SearchRoute(profile, profile.search, points)
    ended = {p.index for p in points if p.ended_by not in UNFINISHED}
    visits = {index // ways for index in ended}
    finished = [v for v in visits if all(v * ways + way in ended for way in range(ways))]
    return ListRoute(profile, finished, next((p for p in points if p.ended_by in UNFINISHED), None))


class SearchRoute(Route):
    """Goes where the crossing is bounded with the fewest bits.

    Parameters
    ----------
    points
        Of the record, where a cut search goes on: the last may be unfinished, and is then measured first.
    """

    def __init__(self, profile: Profile, search: Search, points: Sequence[Point] = ()) -> None:
        super().__init__()
        self._search = search
        self._unfinished = next((p for p in points if p.ended_by in UNFINISHED), None)
        self._begun = time.monotonic()
        self._space = space_of(profile, search)
        self._longest_s = search.max_seconds

    def next(self, done: Sequence[PointAssessment]) -> Visit | None:
        """Choose the next point."""
        if self._unfinished is not None:
            point, self._unfinished = self._unfinished, None
            limits = point.facts.get("search") or {}
            stop = StopRules(limits.get("bits"), self._seconds_left(done), limits.get("errors"))
            return Visit(point.index, dict(point.values), stop=stop)
        seconds = self._seconds_left(done)
        if seconds is not None and seconds <= 0:
            self._say("search", "the search ends: its limit of time was reached")
            return None
        points = [curve_point(p, self._search.instrument) for p in done if not p.moved]
        chosen = next_step(self._space, points)
        if isinstance(chosen, Found):
            took = f"{count(len(done), 'point')} and {count(chosen.bits, 'bit')}"
            self._say("search", f"the search ends after {took}: {chosen.words}")
            return None
        bits = 8 * math.ceil(chosen.bits / 8)
        self.words = self._in_words(chosen, done)
        return Visit(
            len(done),
            {self._search.instrument: chosen.value},
            stop=StopRules(bits, seconds, chosen.errors),
            facts={"search": {"errors": chosen.errors, "bits": bits, "why": chosen.words}},
        )

    def _seconds_left(self, done: Sequence[PointAssessment]) -> float | None:
        if self._longest_s is None:
            return None
        # Pauses of this sitting count, those between sittings do not.
        spent = max(sum(p.seconds for p in done), time.monotonic() - self._begun)
        return self._longest_s - spent

    def _in_words(self, step: Step, done: Sequence[PointAssessment]) -> str:
        steps = f"{step.words}, up to {count(step.errors, 'error')} or {count(step.bits, 'bit')}"
        ratios = [
            (p.values[self._search.instrument], p.ber) for p in done if p.ber is not None and not p.moved
        ]
        over = [x for x, ber in ratios if ber > self._search.ber]
        under = [x for x, ber in ratios if ber <= self._search.ber]
        if not over or not under:
            return steps
        nearest = min(((a, b) for a in over for b in under), key=lambda pair: abs(pair[0] - pair[1]))
        return f"{steps}; so far between {min(nearest):g} and {max(nearest):g}"


def space_of(profile: Profile, search: Search) -> SearchSpace:
    """Say what is looked for, and where."""
    quantity = str(getattr(profile.instruments[search.instrument].options, "quantity", ""))
    return SearchSpace(
        low=search.low,
        high=search.high,
        target_ber=search.ber,
        width=search.resolution,
        rising=rises_with(quantity) is True,
        resolution=search.step or fine_step(search.resolution),
        confidence=search.confidence,
        most_bits=search.max_bits,
    )


def fine_step(resolution: float) -> float:
    """Give the power of ten that is a fifth of the resolution or less: 0.1 for 0.5."""
    return float(Decimal(1).scaleb(math.floor(math.log10(resolution / 5) + 1e-9)))


def curve_point(point: PointAssessment, name: str) -> CurvePoint:
    """Give a measured point as the chooser wants it."""
    tally = point.tally
    return CurvePoint(point.values[name], tally.compared, tally.errors, aligned=tally.compared > 0)
