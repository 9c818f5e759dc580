"""What is still to do and until when: the plan's bits and the profile's limits, at the last minute's rate."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from typing import TYPE_CHECKING

from harness.assess.words import count, duration
from harness.record import Tally

if TYPE_CHECKING:
    from harness.bench.run import Progress

STALLED_S = 3  # so many last seconds without a compared bit: no forecast
_FAR_S = 10 * 365.25 * 86_400  # beyond it a time of day makes no sense


@dataclass(frozen=True, slots=True)
class Rates:
    """Rates of the last minute, bit/s and errors/s; None where they are not known."""

    compared_bps: float | None
    received_bps: float | None
    errors_per_s: float | None
    stalled: bool = False


def rates(recent: Sequence[tuple[int, Tally]], nominal_bps: float | None) -> Rates:
    """Measure the rates; before a second is complete the nominal one stands in."""
    if not recent:
        return Rates(nominal_bps, nominal_bps, None)
    span = recent[-1][0] - recent[0][0] + 1
    compared = sum(t.compared for _index, t in recent)
    received = sum(t.received for _index, t in recent)
    errors = sum(t.errors for _index, t in recent)
    last = [t for _index, t in recent[-STALLED_S:]]
    stalled = not any(t.compared for t in last) and (len(last) == STALLED_S or not compared)
    return Rates(compared / span or None, received / span or None, errors / span or None, stalled)


def moment(at_ns: float, now_ns: int) -> str:
    """Write a local time of day, with its day where it is not today, and without seconds when far off."""
    at = datetime.fromtimestamp(at_ns / 1e9).astimezone()
    now = datetime.fromtimestamp(now_ns / 1e9).astimezone()
    away = abs(at_ns - now_ns) / 1e9
    time = f"{at:%H:%M:%S}" if away < 3600 else f"{at:%H:%M}"
    if at.date() == now.date():
        return time
    year = f" {at:%Y}" if at.year != now.year else ""
    return f"{time} on {at:%a} {at.day} {at:%b}{year}"


def until(seconds: float, now_ns: int) -> str:
    """Write how long something takes, and until when: ``about 43 s: until 10:42:50``."""
    words = f"about {duration(round(seconds, 1) if seconds < 10 else round(seconds))}"
    if seconds > _FAR_S:
        return f"{words}: too long for one run"
    return f"{words}: until {moment(now_ns + seconds * 1e9, now_ns)}"


def elapsed_s(progress: Progress, now_ns: int) -> float:
    """Say how long the point under way has been going on, s."""
    return progress.elapsed_s if progress.visits == 1 else max(0.0, (now_ns - progress.point.started) / 1e9)


def still_to_do(progress: Progress, now_ns: int, *, behind_s: int = 0) -> list[str]:
    """Say what is still to do and until when, the plan first.

    Nothing is foretold of the plan when the newest second lies `behind_s` seconds back.
    """
    p = progress.point
    pace = rates(p.recent, p.rate_bps)
    if behind_s >= STALLED_S:
        pace = replace(pace, stalled=True)
    lines = list(_of_the_plan(progress, pace, now_ns))
    limits = sorted(_limits(progress, pace, now_ns), key=lambda limit: limit.seconds)
    if not lines and not limits:
        return ["nothing ends this run by itself: end it with Ctrl-C"]
    if not lines:
        return [_alone(limit, now_ns) for limit in limits[:2]]
    if limits and limits[0].seconds <= _FAR_S and not progress.outlook.decided:
        first = limits[0]
        when = moment(now_ns + first.seconds * 1e9, now_ns)
        plan_s = _plan_seconds(progress, pace)
        if plan_s is not None and first.seconds < plan_s:
            lines.append(f"{first.name} ends it at {when}, perhaps before the plan decides")
        else:
            lines.append(f"until {when} at the latest, by {first.name}")
    return lines


def _alone(limit: _Limit, now_ns: int) -> str:
    if limit.seconds == math.inf:
        return f"until {limit.name} is reached"
    return f"{until(limit.seconds, now_ns)}, by {limit.name}"


def _of_the_plan(progress: Progress, pace: Rates, now_ns: int) -> Iterator[str]:
    plan, outlook = progress.point.plan, progress.outlook
    if plan is None:
        return
    if outlook.decided:
        yield "the plan has decided; what is still on its way is taken in, then the record is closed"
        return
    aim = outlook.accept_at or int(plan["longest_bits"])
    left = max(0, aim - progress.point.tally.compared)
    if outlook.accept_at is None:
        what = f"{count(left, 'bit')} to the plan's end"
    elif plan["kind"] == "sequential":
        what = f"{count(left, 'bit')} to a PASS if no more errors come"
    else:
        what = f"{count(left, 'bit')} to the decision"
    if pace.stalled or pace.compared_bps is None:
        yield f"{what}; no forecast at a standstill"
    else:
        yield f"{what}, {until(left / pace.compared_bps, now_ns)}"
    if outlook.on_average is not None and outlook.accept_at is not None:
        yield (
            f"a good unit takes {count(round(outlook.on_average), 'bit')} on average, "
            f"none more than {count(int(plan['longest_bits']), 'bit')}"
        )


def _plan_seconds(progress: Progress, pace: Rates) -> float | None:
    """How long the plan may still take at most."""
    plan = progress.point.plan
    if plan is None or pace.stalled or pace.compared_bps is None:
        return None
    return max(0, int(plan["longest_bits"]) - progress.point.tally.compared) / pace.compared_bps


@dataclass(frozen=True, slots=True)
class _Limit:
    seconds: float  # from now; infinite where it cannot be told
    name: str


def _limits(progress: Progress, pace: Rates, now_ns: int) -> Iterator[_Limit]:
    """Give the profile's limits, with the time until each may end the run, or the point of a sweep."""
    stop, p = progress.stop, progress.point
    if stop.seconds is not None:
        left = max(0.0, stop.seconds - elapsed_s(progress, now_ns))
        yield _Limit(left, f"the limit of {duration(stop.seconds)}")
    counted = (
        (stop.bits, p.bits_sent or p.tally.received, pace.received_bps, "bit"),
        (stop.errors, p.tally.errors, pace.errors_per_s, "error"),
    )
    for limit, done, speed, noun in counted:
        if limit is not None:
            left = max(0, limit - done) / speed if speed and not pace.stalled else math.inf
            yield _Limit(left, f"the limit of {count(limit, noun)}")
