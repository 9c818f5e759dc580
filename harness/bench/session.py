"""A sitting at the bench: the store's recorder, the links with their dialogues, and every way out of them."""

from __future__ import annotations

import contextlib
import getpass
import sys
import threading
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path
from typing import Any, Literal

from drivers.contract import DriverError, EndOfStream, Link
from drivers.dialogue import run_dialogue
from drivers.registry import link_class
from harness.profile import LinkSettings, Profile
from harness.record import BitOrder, Event, Status
from harness.signal.patterns import Pattern, parse_pattern
from harness.store import this_host

QUIET_S = 0.05


def bench_host() -> dict[str, Any]:
    """Say who measures: host, process, person, platform."""
    try:
        person = getpass.getuser()
    except (KeyError, OSError):
        person = ""
    return {**this_host(), "user": person}


def bench_versions() -> dict[str, str]:
    """Say with what: versions of bitassay and of the libraries that numbers pass through."""
    versions = {}
    for name in ("bitassay", "numpy", "scipy", "pyserial", "PyVISA", "PyVISA-py", "SQLAlchemy"):
        with contextlib.suppress(metadata.PackageNotFoundError):
            versions[name] = metadata.version(name)
    versions["python"] = sys.version.split()[0]
    return versions


def open_pattern(name: str, bit_order: BitOrder) -> Pattern:
    """Make a pattern; raises `PatternError`, or `OSError` for a file."""
    return parse_pattern(name, bit_order=bit_order, read=lambda path: Path(path).read_bytes())


class Links:
    """The links of a profile: the one that sends and the one that receives, often the same.

    Parameters
    ----------
    settings
        The profile's ``[link]``.
    cancel
        Cuts a dialogue short when set.
    """

    def __init__(self, settings: LinkSettings, cancel: threading.Event) -> None:
        self.settings = settings
        self._cancel = cancel
        self.main = link_class(settings.driver)(settings.options, settings.rate_bps)
        self.other: Link | None = None
        if settings.receive is not None:
            there = settings.receive
            self.other = link_class(there.driver)(there.options, there.rate_bps or settings.rate_bps)
        self._dialogue_due = False
        self.events: list[Event] = []

    @property
    def all(self) -> list[Link]:
        """Every link, once."""
        return [link for link in (self.main, self.other) if link is not None]

    @property
    def sending(self) -> Link | None:
        """The link that the pattern is sent on."""
        if self.other is not None and self.settings.direction == "reverse":
            return self.other
        if self.settings.topology == "one-way" and self.other is None and self.main.traits.receives:
            return None if not self.main.traits.sends or self.settings.direction == "forward" else self.main
        return self.main if self.main.traits.sends else None

    @property
    def receiving(self) -> Link | None:
        """The link that is counted."""
        if self.other is not None:
            return self.main if self.settings.direction == "reverse" else self.other
        if self.settings.topology == "one-way" and self.sending is not None:
            return None
        return self.main if self.main.traits.receives else None

    @property
    def rate_bps(self) -> float | None:
        """Payload rate, bit/s, as the receiving link knows it."""
        link = self.receiving or self.main
        return link.rate_bps

    def describe(self) -> dict[str, Any]:
        """Say what a report should: driver, peer, topology."""
        about: dict[str, Any] = {"topology": self.settings.topology, "driver": self.settings.driver}
        about.update(self.main.describe())
        if self.other is not None:
            about["receive"] = dict(self.other.describe())
        return about

    @contextlib.contextmanager
    def opened(self) -> Iterator[None]:
        """Open all, hold the set-up dialogue; on every way out the closing dialogue, park and close."""
        try:
            for link in self.all:
                link.open()
            if self.settings.before:
                self._dialogue_due = True
                self._talk(self.settings.before, self._cancel)
            elif self.settings.after:
                self._dialogue_due = True
            self._carry("payload")
            yield
        finally:
            self._leave()

    def take_events(self) -> list[Event]:
        """Give what happened since the last call."""
        events, self.events = self.events, []
        return events

    def reopen(self) -> None:
        """Close and open again, set-up dialogue included; raises while that fails."""
        for link in self.all:
            link.close()
        for link in self.all:
            link.open()
        if self.settings.before:
            self._carry("characters")
            self._talk(self.settings.before, self._cancel)
        self._carry("payload")

    def _carry(self, what: Literal["payload", "characters"]) -> None:
        """Dialogues are in characters; on ports with fewer than 8 data bits the pattern is not."""
        for link in self.all:
            link.carry(what)

    def _talk(self, steps: Any, cancel: threading.Event) -> None:
        for exchange in run_dialogue(self.main, steps, cancel):
            parts = []
            if exchange.sent:
                parts.append(f'sent "{exchange.sent}"')
            if exchange.received:
                parts.append(f'heard "{exchange.received}"')
            again = f" in {exchange.attempts} attempts" if exchange.attempts > 1 else ""
            text = f"dialogue: {', '.join(parts) or 'waited'} ({exchange.seconds:.2f} s{again})"
            self.events.append(Event("dialogue", None, text, time.time_ns()))

    def _leave(self) -> None:
        """Never raises: a failing way out must not hide why it was taken."""
        if self._dialogue_due and self.settings.after:
            try:
                self._carry("characters")
                self._talk(self.settings.after, threading.Event())
            except DriverError as error:
                self.events.append(Event("dialogue", None, f"closing dialogue: {error.what}", time.time_ns()))
        for link in self.all:
            for step in (link.park, link.close):
                try:
                    step()
                except DriverError as error:
                    self.events.append(Event("link", None, f"on the way out: {error.what}", time.time_ns()))


def flush(link: Link, longest_s: float) -> int:
    """Receive and drop what is still on its way, until it is quiet; gives the bytes dropped.

    What was sent before a setting changed must not count for what comes after.
    """
    if not link.traits.receives or link.traits.finite:
        return 0
    buffer = memoryview(bytearray(65_536))
    dropped, ends = 0, time.monotonic() + longest_s
    with contextlib.suppress(EndOfStream):
        while time.monotonic() < ends and (count := link.receive(buffer, QUIET_S)):
            dropped += count
    return dropped


def status_of(ended_by: str) -> Status:
    """Give a run's status for what ended it."""
    if ended_by == "interrupted":
        return "interrupted"
    return "failed" if ended_by == "fault" else "completed"


@dataclass(frozen=True, slots=True)
class Way:
    """One direction that is measured: what is sent where, and where it is counted."""

    name: str  # of the direction where both are measured at once, otherwise empty
    sending: Link | None
    receiving: Link | None
    pattern: Pattern
    bit_order: BitOrder

    def facts(self, links: Links) -> Mapping[str, Any]:
        """Collect what a point's assessment needs beside numbers."""
        counted = self.receiving or links.main
        facts: dict[str, Any] = {
            "pattern": self.pattern.name,
            "pattern_inverted": self.pattern.inverted,
            "bit_order": self.bit_order,
            "rate_bps": counted.rate_bps,
            "link": links.describe(),
        }
        if counted.traits.finite and self.sending is None and not counted.rate_bps:
            facts["untimed"] = True  # how fast a file is read says nothing of how fast its bytes came
        facts["link"]["sends"] = self.sending is not None
        facts["link"]["receives"] = self.receiving is not None
        if self.name:
            facts["direction"] = self.name
        return facts


def ways_of(profile: Profile, links: Links) -> list[Way]:
    """List the directions that a profile measures: one, or both at once where ``duplex`` is on."""
    chosen = profile.pattern
    pattern = open_pattern(chosen.name, chosen.bit_order)
    if not links.settings.duplex or links.other is None or chosen.reverse is None:
        return [Way("", links.sending, links.receiving, pattern, chosen.bit_order)]
    other = chosen.reverse
    back = open_pattern(other.name, other.bit_order)
    return [
        Way("forward", links.main, links.other, pattern, chosen.bit_order),
        Way("reverse", links.other, links.main, back, other.bit_order),
    ]
