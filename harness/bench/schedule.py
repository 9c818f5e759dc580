"""The time budget of a sweep: with ``finish_by``, how long each point may take, and when all will be over.

The time that is left is shared out anew before each point. A point that has errors enough leaves its time to
the others: more errors would drown in the scatter of levels from point to point. Where the curve so far
expects a BER near the target, a point gets several shares, since that is where the sensitivity is decided.
"""

from __future__ import annotations

import datetime
import math
import time
from collections.abc import Callable, Sequence
from dataclasses import replace

from harness.assess.assessment import PointAssessment
from harness.bench.terms import StopRules
from harness.bench.visits import Visit
from harness.profile import Profile
from harness.statistics.gaussian import inverse_q

LEAST_S = 1.0
ENOUGH_ERRORS = 400  # 5 % of BER: 0.02 dB near 1e-6
SHARES = ((10.0, 4.0), (100.0, 2.0))  # (within so many times the target, so many shares)
FEW_ERRORS = 3  # under which a point says nothing of the curve's slope


class Schedule:
    """Shares the time that is left among the points that are left.

    Parameters
    ----------
    now
        For tests: the local time of day at the start.
    clock
        For tests: a monotonic clock, s.
    """

    def __init__(
        self,
        profile: Profile,
        now: datetime.datetime | None = None,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._clock = clock
        self._begun = clock()
        self._done_before: int | None = None  # points of earlier sittings
        self._axis, self._target = "", None
        self.deadline: float | None = None  # of the clock
        sweep = profile.sweep
        if sweep is not None:
            self._axis, self._target = profile.curve_axis, sweep.sensitivity_ber
            if sweep.finish_by is not None:
                self.deadline = self._begun + seconds_until(str(sweep.finish_by), now)

    def share(
        self,
        stop: StopRules,
        visit: Visit,
        ahead: Sequence[Visit],
        done: Sequence[PointAssessment],
        *,
        planned: bool = False,
    ) -> StopRules:
        """Give a point's stop rules with its share of the time.

        Parameters
        ----------
        ahead
            The visits after this one.
        done
            The points so far, earlier sittings' first.
        planned
            A plan decides on this point: it has whatever time is left, less the least for each other point.
        """
        if self._done_before is None:
            self._done_before = len(done)
        if self.deadline is None:
            return stop
        left = self.deadline - self._clock() - self._overhead(done) * (1 + len(ahead))
        if planned:
            return _no_longer(stop, left - LEAST_S * len(ahead))
        shares = [self._shares(v, done) for v in (visit, *ahead)]
        errors = ENOUGH_ERRORS if stop.errors is None else stop.errors
        return replace(_no_longer(stop, left * shares[0] / sum(shares)), errors=errors)

    def left_over(self, done: Sequence[PointAssessment]) -> float | None:
        """Seconds that are left after the last point, less what a point takes beside; None: no budget."""
        if self.deadline is None:
            return None
        return self.deadline - self._clock() - self._overhead(done)

    def _overhead(self, done: Sequence[PointAssessment]) -> float:
        """Seconds that a point takes beside measuring, as seen so far."""
        own = done[self._done_before or 0 :]
        if not own:
            return 0.0
        spent = self._clock() - self._begun
        return max(0.0, (spent - sum(p.seconds for p in own)) / len(own))

    def _shares(self, visit: Visit, done: Sequence[PointAssessment]) -> float:
        expected = self._expected(visit, done)
        if expected is None or self._target is None:
            return 1.0
        away = max(expected / self._target, self._target / expected)
        return next((shares for times, shares in SHARES if away <= times), 1.0)

    def _expected(self, visit: Visit, done: Sequence[PointAssessment]) -> float | None:
        """BER that the two points nearest to the target foretell: a line in dB of Q's argument."""
        if self._target is None or self._axis not in visit.values:
            return None
        known: dict[float, float] = {}  # value -> BER
        for p in done:
            rest = {n: v for n, v in p.values.items() if n != self._axis}
            if (
                p.tally.errors >= FEW_ERRORS
                and not p.moved
                and all(visit.values.get(n) == v for n, v in rest.items())
            ):
                known[p.values[self._axis]] = min(p.tally.errors / p.tally.compared, 0.4)
        target = self._target
        nearest = sorted(known.items(), key=lambda item: abs(math.log(item[1] / target)))[:2]
        if len(nearest) < 2:
            return None
        (x0, p0), (x1, p1) = nearest
        u0, u1 = _decibels(p0), _decibels(p1)
        u = u0 + (visit.values[self._axis] - x0) * (u1 - u0) / (x1 - x0)
        argument = 10 ** (min(u, 30.0) / 20)
        return max(0.5 * math.erfc(argument / math.sqrt(2)), 1e-300)

    def until(self, done: Sequence[PointAssessment], left: int) -> float | None:
        """Forecast the end, seconds since the epoch; None before the first point is over."""
        if self.deadline is not None:
            return time.time() + self.deadline - self._clock()
        own = len(done) - (self._done_before or 0)
        if own <= 0:
            return None
        return time.time() + (self._clock() - self._begun) / own * left


def _no_longer(stop: StopRules, seconds: float) -> StopRules:
    longest = max(LEAST_S, seconds)
    return replace(stop, seconds=longest if stop.seconds is None else min(stop.seconds, longest))


def _decibels(ber: float) -> float:
    return 20 * math.log10(inverse_q(ber))


def seconds_until(clock: str, now: datetime.datetime | None = None) -> float:
    """Seconds until the next time a local clock shows ``HH:MM``."""
    # Local time without a zone, so that a change of the clocks tonight is reckoned with.
    now = (now or datetime.datetime.now()).replace(tzinfo=None)
    hour, minute = (int(part) for part in clock.split(":")[:2])
    then = now.replace(hour=hour, minute=minute, second=0, microsecond=0)
    if then <= now:
        then += datetime.timedelta(days=1)
    return then.timestamp() - now.timestamp()
