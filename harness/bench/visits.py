"""The points of a run: settings in the order of visiting, and what a resumed run has of them already."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

from harness.assess.accumulate import accumulator_for
from harness.assess.feed import PlanFeed
from harness.assess.requirement import Requirement
from harness.bench.terms import StopRules
from harness.profile import Profile
from harness.record import Point


@dataclass(frozen=True, slots=True)
class Had:
    """What a point had when its run was cut."""

    point: Point
    received: int = 0
    sent: int = 0
    compared: int = 0
    errors: int = 0
    lost: int = 0
    inserted: int = 0
    duration_s: float = 0.0
    plan: PlanFeed | None = None


@dataclass(frozen=True, slots=True)
class Visit:
    """A setting to be visited."""

    number: int
    values: Mapping[str, float] = field(default_factory=dict)
    reference: bool = False
    stop: StopRules | None = None  # beside the profile's; whichever comes first
    facts: Mapping[str, Any] = field(default_factory=dict)  # kept with the point


def visits_of(profile: Profile) -> list[Visit]:
    """List what a profile visits: its sweep's points, a search's two ends, or one point without settings."""
    if profile.search is not None:
        search = profile.search
        return [Visit(k, {search.instrument: end}) for k, end in enumerate((search.low, search.high))]
    if profile.sweep is None:
        return [Visit(0)]
    sweep = profile.sweep
    name = sweep.all_axes()[0].instrument
    return [
        Visit(number, values, reference=sweep.reference is not None and values == {name: sweep.reference})
        for number, values in enumerate(sweep.visits())
    ]


def had_by(point: Point, requirement: Requirement | None) -> Had:
    """Sum up what a point of a cut run had, its plan advanced as far as it was."""
    acc = accumulator_for(point, requirement)
    for second in sorted(point.seconds, key=lambda s: s.index):
        acc.add(second)
    acc.flush()
    sums = acc.sums
    return Had(
        point,
        received=sums.tally.received,
        sent=sums.sent,
        compared=sums.tally.compared,
        errors=sums.tally.errors,
        lost=sums.bits_lost,
        inserted=sums.bits_inserted,
        duration_s=sums.duration_ns / 1e9,
        plan=acc.feed,
    )


def what_is_left(profile: Profile, visit: Visit, had: Had | None, *, sends: bool) -> StopRules:
    """Give the stop rules less what a cut point had already."""
    stop, own = profile.stop, visit.stop or StopRules()
    bits = _first(stop.bits, own.bits)
    seconds = _first(stop.seconds, own.seconds)
    errors = _first(stop.errors, own.errors)
    if had is None:
        return StopRules(bits, seconds, errors)
    if bits is not None:
        bits = max(8, bits - had.received - (had.lost if sends else 0))
    seconds = None if seconds is None else max(0.001, seconds - had.duration_s)
    errors = None if errors is None else max(1, errors - had.errors)
    return StopRules(bits, seconds, errors)


Limit = TypeVar("Limit", int, float)


def _first(a: Limit | None, b: Limit | None) -> Limit | None:
    limits = [limit for limit in (a, b) if limit is not None]
    return min(limits) if limits else None
