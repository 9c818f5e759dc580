"""The way through a run's points: a list that is known beforehand, less what has become hopeless."""

from __future__ import annotations

import time
from abc import ABC, abstractmethod
from collections.abc import Sequence

from harness.assess.assessment import PointAssessment
from harness.assess.words import count
from harness.bench.spare import AGAIN, visit_again
from harness.bench.visits import Visit, visits_of
from harness.profile import Profile
from harness.record import Event, Point


class Route(ABC):
    """Says what is visited next.

    Attributes
    ----------
    total
        Points in all; 0 where that is not known beforehand.
    words
        What a watcher should know of the way, beside the point's number.
    """

    total: int = 0
    words: str = ""

    def __init__(self) -> None:
        self._events: list[Event] = []

    @abstractmethod
    def next(self, done: Sequence[PointAssessment]) -> Visit | None:
        """Give the next visit, or None at the end.

        Parameters
        ----------
        done
            The points that were measured to their end, in order, earlier sittings included.
        """

    @property
    def ahead(self) -> Sequence[Visit]:
        """What comes after the visit given last, as far as it is known."""
        return ()

    def again(self, done: Sequence[PointAssessment], seconds: float | None) -> Visit | None:
        """Choose a point to be visited again in the time that is left over; None: none."""
        del done, seconds
        return None

    def take_events(self) -> list[Event]:
        """Give what there was to say since the last call."""
        events, self._events = self._events, []
        return events

    def _say(self, kind: str, text: str) -> None:
        self._events.append(Event(kind, None, text, time.time_ns()))


class ListRoute(Route):
    """A sweep's points, or the only one.

    Parameters
    ----------
    finished
        Numbers of visits that an earlier sitting has to their end.
    unfinished
        A point beyond the list, visited again when the run was cut: it is gone on with at the end.
    """

    def __init__(
        self, profile: Profile, finished: Sequence[int] = (), unfinished: Point | None = None
    ) -> None:
        super().__init__()
        visits = visits_of(profile)
        self.total = len(visits)
        self._profile = profile
        self._highest = max((len(visits) - 1, *finished))
        self._left = [visit for visit in visits if visit.number not in finished]
        if unfinished is not None and unfinished.index >= len(visits):
            self._highest = max(self._highest, unfinished.index)
            self._left.append(Visit(unfinished.index, dict(unfinished.values), facts={"again": True}))
        self._guard = profile.sweep.guard if profile.sweep is not None else 0
        self._axis = profile.curve_axis

    def next(self, done: Sequence[PointAssessment]) -> Visit | None:
        """Give the next visit, leaving out those where hope is gone."""
        hopeless = [visit for visit in self._left if self._is_hopeless(visit, done)]
        if hopeless:
            self._left = [visit for visit in self._left if visit not in hopeless]
            values = ", ".join(dict.fromkeys(f"{visit.values[self._axis]:g}" for visit in hopeless))
            self._say(
                "guard",
                f"{count(self._guard, 'point')} before them were never aligned, so "
                f"{count(len(hopeless), 'point')} at still worse conditions are left out: "
                f"{self._axis} {values}",
            )
        return self._left.pop(0) if self._left else None

    @property
    def ahead(self) -> Sequence[Visit]:
        """What comes after the visit given last."""
        return self._left

    def again(self, done: Sequence[PointAssessment], seconds: float | None) -> Visit | None:
        """Choose a point to be visited again, where the curve is worth it."""
        sweep, link = self._profile.sweep, self._profile.link
        if sweep is None or seconds is None or (link is not None and link.duplex):
            return None
        visit = visit_again(sweep, done, seconds, self._highest + 1, self._profile.stop.errors)
        if visit is not None:
            self._highest = visit.number
            self.words = AGAIN
        return visit

    def _is_judged(self, visit: Visit) -> bool:
        """Whether the requirement names it: it has to be measured, hopeless or not."""
        at = self._profile.requirement.at if self._profile.requirement is not None else {}
        return bool(at) and all(visit.values.get(name) == value for name, value in at.items())

    def _is_hopeless(self, visit: Visit, done: Sequence[PointAssessment]) -> bool:
        """Whether enough points that lie between it and every aligned one were never aligned themselves.

        A sweep that begins where there is no link has no aligned point yet and goes on.
        """
        if not self._guard or visit.reference or self._is_judged(visit):
            return False
        rest = {name: value for name, value in visit.values.items() if name != self._axis}
        alike = [
            p for p in done if not p.moved and {n: v for n, v in p.values.items() if n != self._axis} == rest
        ]
        aligned = [p.values[self._axis] for p in alike if p.tally.compared]
        lost = {p.values[self._axis] for p in alike if not p.tally.compared}
        here = visit.values[self._axis]
        if not aligned:
            return False
        up = sum(1 for value in lost if max(aligned) < value <= here)
        down = sum(1 for value in lost if here <= value < min(aligned))
        return max(up, down) >= self._guard
