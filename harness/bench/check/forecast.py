"""The forecast: how long a run takes, and what its record takes on the disk."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from harness.assess.requirement import requirement_at, requirement_of
from harness.bench.schedule import seconds_until
from harness.bench.visits import visits_of
from harness.profile import Profile
from harness.statistics.plans import Plan

# Measured on SQLite with the layout of this version: bytes a row of a second, a run and a point take.
RUN_BYTES = 60_000
POINT_BYTES = 3_000
SECOND_BYTES = 215
POSITION_BYTES = 2.1  # an error position, gap-coded, and its kind


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
    settings = profile.resolved()
    requirement = requirement_of(settings)
    longest: float | None = 0.0
    expected: float | None = 0.0
    visits = visits_of(profile)
    for visit in visits:
        asked = requirement_at(requirement, settings, visit.values)
        plan = asked.make_plan() if asked else None
        most, mean = _point_seconds(profile, plan, rate_bps)
        overhead = _overhead(profile)
        longest = None if longest is None or most is None else longest + most + overhead
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


def _overhead(profile: Profile) -> float:
    settle = max(
        (float(getattr(i.options, "settle_s", 0.0)) for i in profile.instruments.values()), default=0.0
    )
    return settle + (profile.sweep.settle_s if profile.sweep else 0.0)


def _disk(
    profile: Profile, seconds: float | None, rate_bps: float | None, points: int, positions: int
) -> int | None:
    if seconds is None:
        return None
    ber = profile.requirement.ber if profile.requirement is not None else 0.0
    errors_a_second = min(positions, ber * rate_bps) if rate_bps else 0.0
    a_second = SECOND_BYTES + POSITION_BYTES * errors_a_second
    return round(RUN_BYTES + POINT_BYTES * points + a_second * (seconds + points))


def stop_problem(profile: Profile, rate_bps: float | None) -> str | None:
    """Say why the stop rules never let the plan decide, or that nothing ends the run."""
    settings = profile.resolved()
    requirement = requirement_of(settings)
    stop = profile.stop
    if requirement is None or (profile.sweep is not None and not settings["requirement"].get("at")):
        if (
            stop.bits is None
            and stop.seconds is None
            and stop.errors is None
            and profile.need_link().driver != "capture"
        ):
            return "nothing ends this run: [stop] is empty and there is no plan"
        return None
    longest = requirement.make_plan().longest_bits
    if stop.bits is not None and stop.bits < longest:
        return f"stop.bits is {stop.bits}, and the plan may need up to {longest} bits"
    if stop.seconds is not None and rate_bps and stop.seconds * rate_bps < longest:
        needed = longest / rate_bps
        return f"stop.seconds is {stop.seconds:g}, and at {rate_bps:g} bit/s the plan may need up to {needed:.0f} s"
    return None
