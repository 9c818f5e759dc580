"""What the operating system counts on the line: framing, parity, breaks, overruns, turned into events."""

from __future__ import annotations

import time
from collections.abc import Sequence

from drivers.contract import DriverError, Link
from harness.assess.words import count
from harness.record import Event

NAMES = {
    "framing": "framing error",
    "parity": "parity error",
    "break": "break",
    "overrun": "overrun (of this computer's port)",
    "buffer_overrun": "buffer overrun (of this computer)",
    "cts_changes": "CTS change",
    "dcd_changes": "DCD change",
}


class LineCounts:
    """Looks at the counts of open links, and says what is new since the last look.

    Parameters
    ----------
    wall_ns
        UTC minus monotonic time, ns.
    """

    def __init__(self, links: Sequence[Link], wall_ns: int) -> None:
        self._links = list({id(link): link for link in links}.values())
        self._wall_ns = wall_ns
        self._before: dict[int, dict[str, int]] = {}
        self.forget()

    def forget(self) -> None:
        """Begin anew, as after a port was opened again."""
        self._before = {id(link): self._counts(link) or {} for link in self._links}

    def _counts(self, link: Link) -> dict[str, int] | None:
        try:
            return dict(link.health())
        except DriverError:
            return None

    def events(self) -> list[Event]:
        """Give an event for each count that has grown."""
        found = []
        for link in self._links:
            now = self._counts(link)
            if now is None:
                continue
            before = self._before[id(link)]
            for key, number in now.items():
                more = number - before.get(key, 0)
                if more > 0:
                    name, paren, rest = NAMES.get(key, key).partition(" (")
                    text = f"{count(more, name)}{paren}{rest} on the line"
                    at = time.monotonic_ns() + self._wall_ns
                    found.append(Event("line", None, text, at, {"count": key, "more": more}))
            self._before[id(link)] = now
        return found
