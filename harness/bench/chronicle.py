"""The chronicle of a point: what happened, when and at which bit, in words, until it is committed."""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from dataclasses import replace

from harness.assess.accumulate import EVENTS_KEPT
from harness.record import Event

COMMON = ("slip", "aligned", "alignment_lost", "delay")  # no longer listed once there are too many
OF_BITS = (*COMMON, "inversion", "skipped")  # seen by the counter in the bits of a second


class Chronicle:
    """Collects events of the consumer, and those that other threads post.

    Parameters
    ----------
    wall_ns
        UTC minus monotonic time, ns.
    base_bit
        Received bits that the point had in earlier sittings.
    """

    def __init__(self, wall_ns: int, base_bit: int) -> None:
        self._wall_ns = wall_ns
        self._base_bit = base_bit
        self._events: list[Event] = []
        self._of_bits: list[Event] = []  # of seconds that may not be complete
        self._count = 0
        self._posted: deque[Event] = deque()

    def post(self, event: Event) -> None:
        """Take an event from another thread."""
        self._posted.append(event)

    def happened(self, kind: str, text: str, at_ns: int, data: Mapping[str, object], bit: int) -> Event:
        """Enter what happened at a received bit, at a monotonic time."""
        event = Event(kind, bit, text, at_ns + self._wall_ns, data)
        self.keep(event)
        return event

    def stamped(self, event: Event, at_ns: int) -> Event:
        """Give a counter's event its time."""
        return replace(event, at=at_ns + self._wall_ns)

    def keep(self, event: Event) -> None:
        """Enter an event whose bit is counted from this sitting's first."""
        if event.bit is not None and self._base_bit:
            event = replace(event, bit=event.bit + self._base_bit)
        self._count += 1
        if self._count <= EVENTS_KEPT or event.kind not in COMMON:
            (self._of_bits if event.kind in OF_BITS else self._events).append(event)
        if self._count == EVENTS_KEPT + 1:
            text = f"more than {EVENTS_KEPT} events: slips are still counted, no longer listed"
            self._events.append(replace(event, kind="events_cut", text=text, data={}))

    def take(self, entered_bit: int | None) -> list[Event]:
        """Give what is new since the last call.

        Parameters
        ----------
        entered_bit
            The received bit, counted from this sitting's first, up to which seconds are complete; None: all are.
            What the counter saw at later bits waits for its second: a run that is killed in between would have
            a slip in its record, and not the second that it belongs to.
        """
        while self._posted:
            self._events.append(self._posted.popleft())
        limit = None if entered_bit is None else entered_bit + self._base_bit
        ready: list[Event] = []
        seen, self._of_bits = self._of_bits, []
        for event in seen:
            waits = limit is not None and event.bit is not None and event.bit >= limit
            (self._of_bits if waits else ready).append(event)
        events, self._events = [*ready, *self._events], []
        return events
