"""The time budget of a sweep: with ``finish_by``, how long each point may take, and when all will be over."""

from __future__ import annotations

import datetime
import time
from collections.abc import Sequence
from dataclasses import replace

from harness.assess.assessment import PointAssessment
from harness.bench.measurement import StopRules
from harness.profile import Profile

LEAST_S = 1.0


class Schedule:
    """Shares the time that is left among the points that are left.

    A point that ends early, since it met its errors, leaves its time to the others: those with few errors,
    where the curve needs bits most, get it.
    """

    def __init__(self, profile: Profile, points: int, now: datetime.datetime | None = None) -> None:
        self._points = points
        self._begun = time.monotonic()
        self.deadline: float | None = None  # monotonic
        sweep = profile.sweep
        if sweep is not None and sweep.finish_by is not None:
            self.deadline = self._begun + seconds_until(str(sweep.finish_by), now)

    def share(self, stop: StopRules, left_points: int, done: Sequence[PointAssessment]) -> StopRules:
        """Give a point's stop rules with its share of the time."""
        if self.deadline is None:
            return stop
        overhead = self._overhead(done)
        left = self.deadline - time.monotonic() - overhead * left_points
        share = max(LEAST_S, left / max(1, left_points))
        seconds = share if stop.seconds is None else min(stop.seconds, share)
        return replace(stop, seconds=seconds)

    def _overhead(self, done: Sequence[PointAssessment]) -> float:
        """Seconds a point takes beside measuring, as seen so far."""
        if not done:
            return 0.0
        spent = time.monotonic() - self._begun
        return max(0.0, (spent - sum(p.seconds for p in done)) / len(done))

    def until(self, done: Sequence[PointAssessment], points: int) -> float | None:
        """Forecast the end, seconds since the epoch; None before the first point is over."""
        if self.deadline is not None:
            return time.time() + self.deadline - time.monotonic()
        if not done or points <= 1:
            return None
        each = (time.monotonic() - self._begun) / len(done)
        return time.time() + each * max(0, points - len(done))


def seconds_until(clock: str, now: datetime.datetime | None = None) -> float:
    """Seconds until the next time a local clock shows ``HH:MM``."""
    now = now or datetime.datetime.now().astimezone()
    hour, minute = (int(part) for part in clock.split(":")[:2])
    then = now.replace(hour=hour, minute=minute, second=0, microsecond=0)
    if then <= now:
        then += datetime.timedelta(days=1)
    return (then - now).total_seconds()
