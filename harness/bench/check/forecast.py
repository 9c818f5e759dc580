"""The forecast: how long a run takes, and what its record takes on the disk."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from harness.assess.requirement import requirement_at, requirement_of
from harness.assess.words import duration, rate
from harness.bench.schedule import seconds_until
from harness.bench.visits import visits_of
from harness.profile import Profile
from harness.statistics.plans import Plan
from harness.statistics.search import MOST_POINTS

# Measured on SQLite with the layout of this version, indexes and the space that pages leave free included;
# tests/bench/test_forecast.py measures them again.
PAGE_BYTES = 4096
RUN_BYTES = 1_700  # beside the profile's text and settings
POINT_BYTES = 2_250  # its row, its first events, and its share of the stated assessment
REQUIRED_BYTES = 900  # of a requirement, in each point's and the run's assessment
INSTRUMENT_BYTES = 250  # at each point: readings, and the event of its setting
SECOND_ROW_BYTES = 44  # beside counts and positions
SECOND_INDEX_BYTES = 13
SEARCH_POINTS = 12  # that a search looks at, more or less
POINT_S = 0.4  # that a point takes beside settling and measuring: asking instruments, emptying the line
COUNTS = 3  # of a second's bits: sent, received, compared


@dataclass(frozen=True, slots=True)
class Forecast:
    """Of one profile; None where nothing ends it, or the rate is not known."""

    longest_s: float | None
    expected_s: float | None
    points: int
    disk_bytes: int | None

    def to_json(self) -> dict[str, Any]:
        """JSON as `check` prints it."""
        return {
            "longest_seconds": self.longest_s,
            "expected_seconds": self.expected_s,
            "points": self.points,
            "disk_bytes": self.disk_bytes,
        }


def forecast(profile: Profile, rate_bps: float | None, *, positions_per_second: int = 4096) -> Forecast:
    """Forecast a profile's run at a payload rate."""
    visits = visits_of(profile)
    if profile.search is not None:
        most = _search_seconds(profile, rate_bps)
        disk = _disk(profile, most, rate_bps, SEARCH_POINTS, positions_per_second)
        return Forecast(most, None, len(visits), disk)
    settings = profile.resolved()
    requirement = requirement_of(settings)
    longest: float | None = 0.0
    expected: float | None = 0.0
    before: Mapping[str, float] = {}
    for visit in visits:
        asked = requirement_at(requirement, settings, visit.values)
        plan = asked.make_plan() if asked else None
        most, mean = _point_seconds(profile, plan, rate_bps)
        overhead = _overhead(profile, before, visit.values)
        before = visit.values
        longest = None if longest is None or most is None else longest + most + overhead + _late(profile)
        expected = None if expected is None or mean is None else expected + mean + overhead
    if profile.sweep is not None:
        warm = profile.sweep.warm_up_s
        longest = None if longest is None else longest + warm
        expected = None if expected is None else expected + warm
        if profile.sweep.finish_by is not None:
            budget = seconds_until(str(profile.sweep.finish_by))
            longest = budget if longest is None else min(longest, budget)
            expected = longest if expected is None else min(expected, budget)
    return Forecast(
        longest, expected, len(visits), _disk(profile, expected, rate_bps, len(visits), positions_per_second)
    )


def _point_seconds(
    profile: Profile, plan: Plan | None, rate_bps: float | None
) -> tuple[float | None, float | None]:
    """Longest and expected seconds of one point."""
    stop = profile.stop
    limits = [] if stop.seconds is None else [stop.seconds]
    if stop.bits is not None and rate_bps:
        limits.append(stop.bits / rate_bps)
    means = list(limits)
    if plan is not None and rate_bps:
        limits.append(plan.longest_bits / rate_bps)
        means.append(plan.expected_bits(plan.good_ber) / rate_bps)
    return (min(limits) if limits else None), (min(means) if means else None)


def _search_seconds(profile: Profile, rate_bps: float | None) -> float | None:
    """Longest seconds of a search, as far as the profile limits it."""
    search = profile.search
    assert search is not None
    limits = [] if search.max_seconds is None else [search.max_seconds]
    if search.max_bits is not None and rate_bps:
        each = POINT_S + search.settle_s + _settling(profile, search.instrument) + _late(profile)
        limits.append(search.max_bits / rate_bps + MOST_POINTS * each)
    return search.warm_up_s + min(limits) if limits else None


def _overhead(profile: Profile, before: Mapping[str, float], values: Mapping[str, float]) -> float:
    """Seconds that a point takes beside measuring: what was set before and stays need not settle again."""
    if profile.sweep is None:
        return sum(_settling(profile, name) for name in profile.instruments)
    first = [] if before else [name for name in profile.instruments if name not in values]
    changed = [name for name, value in values.items() if before.get(name) != value]
    return POINT_S + profile.sweep.settle_s + sum(_settling(profile, name) for name in (*first, *changed))


def _late(profile: Profile) -> float:
    """Seconds that a point may take longer at most: what is out is waited for, and a setting confirmed."""
    if profile.sweep is None and profile.search is None:
        return 0.0
    slow = [float(getattr(i.options, "confirm_s", 0.0)) for i in profile.instruments.values()]
    return profile.need_link().drain_s + sum(slow)


def _settling(profile: Profile, name: str) -> float:
    """Seconds that an instrument takes to settle."""
    return float(getattr(profile.instruments[name].options, "settle_s", 0.0))


def _disk(
    profile: Profile, seconds: float | None, rate_bps: float | None, points: int, positions: int
) -> int | None:
    """Bytes that the record takes, at a unit's error ratio half as high as required.

    A sweep goes where there are errors: there it is the most that the record can take.
    """
    if seconds is None:
        return None
    each = seconds / points
    if profile.sweep is not None or profile.search is not None:
        errors = float(positions)
        if profile.stop.errors is not None:
            errors = min(errors, profile.stop.errors / each)
    else:
        ber = profile.requirement.ber if profile.requirement is not None else 0.0
        errors = min(float(positions), 0.5 * ber * (rate_bps or 0.0))
    a_point = POINT_BYTES + INSTRUMENT_BYTES * len(profile.instruments)
    required = REQUIRED_BYTES if profile.requirement is not None else 0
    settings = len(profile.text) + len(json.dumps(profile.resolved()))
    if profile.link is not None and profile.link.duplex:
        points *= 2  # each direction has a point and rows of its own
    rows = math.ceil(each) * points
    return round(
        RUN_BYTES
        + settings
        + required
        + (a_point + required) * points
        + second_bytes(rate_bps or 1e6, each, errors) * rows
    )


def second_bytes(rate_bps: float, seconds: float, errors: float) -> float:
    """Bytes that a second's row takes in a point of so many seconds, with so many errors in each, on average.

    An error position is the gap to the one before it in base 128, and one bit for its kind.
    """
    counts = COUNTS * _integer_bytes(rate_bps) + _integer_bytes(rate_bps * seconds / 2)
    positions = 0.0
    if errors > 0:
        share = min(1.0, errors / rate_bps)
        gap = sum(math.exp(-share * 128.0**k) for k in range(8))
        positions = errors * (gap + 1 / 8) + 2 * -math.expm1(-errors)
    row = SECOND_ROW_BYTES + counts + positions
    fit = (PAGE_BYTES - 8) // row
    return SECOND_INDEX_BYTES + (PAGE_BYTES / fit if fit and row > PAGE_BYTES / 8 else row)


def _integer_bytes(value: float) -> int:
    """Bytes that SQLite takes for an integer."""
    return next((size for size in (1, 2, 3, 4, 6) if value < 2.0 ** (8 * size - 1)), 8)


def stop_problem(profile: Profile, rate_bps: float | None) -> str | None:
    """Say why the stop rules never let the plan decide, or that nothing ends the run."""
    search = profile.search
    if search is not None:  # each of its points ends by itself, but how many there will be nobody knows
        limited = search.max_seconds is not None or search.max_bits is not None
        return (
            None if limited else "nothing limits this search: how long it goes on cannot be said beforehand"
        )
    settings = profile.resolved()
    requirement = requirement_of(settings)
    stop, sweep = profile.stop, profile.sweep
    plans = [requirement_at(requirement, settings, visit.values) for visit in visits_of(profile)]
    ends = stop.bits is not None or stop.seconds is not None or stop.errors is not None
    ends = ends or (sweep is not None and sweep.finish_by is not None)
    if not ends and None in plans and profile.need_link().driver != "capture":
        where = " at the points where nothing is required" if any(plans) else ""
        return f"nothing ends this run{where}: [stop] is empty and there is no plan"
    if requirement is None or not any(plans):
        return None
    plan = requirement.make_plan()
    longest = plan.longest_bits
    if stop.bits is not None and stop.bits < longest:
        return f"stop.bits is {stop.bits}, and the plan may need up to {longest} bits"
    if stop.seconds is not None and rate_bps and stop.seconds * rate_bps < longest:
        needed = duration(longest / rate_bps)
        return f"stop.seconds is {stop.seconds:g}, and at {rate(rate_bps)} the plan may need up to {needed}"
    undecided = len(plan.boundaries) - 1 if plan.boundaries else (plan.accept_errors or 0)
    if stop.errors is not None and stop.errors <= undecided:
        return f"stop.errors is {stop.errors}, and the plan may still accept with {undecided} errors"
    return None
