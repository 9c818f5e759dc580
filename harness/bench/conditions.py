"""The conditions of a run: its instruments, opened, set, read, and made safe on every way out.

A guardian process does the same after a run that died. Caution: limits and safe values are the user's to
state; what may be transmitted, and what a receiver stands, local rules and the device's data sheet say.
"""

from __future__ import annotations

import contextlib
import threading
import time
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from drivers.contract import DriverError, Instrument, Link
from drivers.guardian import Guardian
from drivers.registry import instrument_class
from harness.bench.correction import PortLevel
from harness.profile import Profile
from harness.record import Event


class Conditions:
    """Instruments of a profile.

    Parameters
    ----------
    link
        The link whose knobs simulated instruments turn.
    lock
        The guardian's file.
    cancel
        Cuts settling short when set.
    """

    def __init__(self, profile: Profile, link: Link, lock: Path, cancel: threading.Event) -> None:
        self._profile = profile
        self._lock = lock
        self._cancel = cancel
        self.level = PortLevel.of(profile)
        self.events: list[Event] = []
        self.instruments: dict[str, Instrument] = {}
        for name, settings in profile.instruments.items():
            self.instruments[name] = instrument_class(settings.driver)(settings.options)
        for name, instrument in self.instruments.items():
            others = [other for key, other in self.instruments.items() if key != name]
            instrument.attach(link, others)

    def units(self) -> dict[str, str]:
        """Give each instrument's unit."""
        return {name: str(getattr(i.section, "unit", "")) for name, i in self.instruments.items()}

    @contextlib.contextmanager
    def opened(self) -> Iterator[None]:
        """Open all; on every way out make them safe and close them."""
        if not self.instruments:
            yield
            return
        described = {
            name: (settings.driver, settings.options.model_dump(mode="json"))
            for name, settings in self._profile.instruments.items()
        }
        guardian: Guardian | None = None
        try:
            for instrument in self.instruments.values():
                instrument.open()
            if any(instrument.lasting for instrument in self.instruments.values()):
                guardian = Guardian.start(described, self._lock)
            yield
        finally:
            safe = self._leave()
            if guardian is not None:
                if safe:
                    guardian.dismiss()
                    self._lock.unlink(missing_ok=True)
                else:  # let it try again: it takes our silence for our death
                    guardian.abandon()

    def _leave(self) -> bool:
        """Make everything safe and close it; never raises, says whether all went well."""
        well = True
        for name, instrument in self.instruments.items():
            try:
                instrument.make_safe()
                if getattr(instrument.section, "safe", None) is not None:
                    self._say(f"{name} made safe at {_value(instrument, instrument.section.safe)}")
            except DriverError as error:
                well = False
                self._say(f"{name} could NOT be made safe: {error.what}")
        for instrument in self.instruments.values():
            with contextlib.suppress(DriverError):
                instrument.close()
        return well

    def identities(self) -> dict[str, str]:
        """Say who each instrument is, in one line each."""
        found = {}
        for name, instrument in self.instruments.items():
            who = instrument.identity()
            found[name] = " ".join(
                w for w in (who.manufacturer, who.model, who.serial_number, who.firmware) if w
            )
        return found

    def fixed(self) -> dict[str, float]:
        """Give what the profile sets where no sweep does."""
        return {n: s.value for n, s in self._profile.instruments.items() if s.value is not None}

    def apply(self, values: Mapping[str, float]) -> dict[str, Any]:
        """Set values, in the profile's order; gives readings and the level at the device's port.

        Raises
        ------
        InstrumentError
            `OutOfLimits` before anything is sent, also where the level at the port would pass a limit.
        """
        self.level.check(values)
        facts: dict[str, Any] = {}
        readings: dict[str, float] = {}
        for name in self.instruments:
            if name not in values:
                continue
            instrument = self.instruments[name]
            applied = instrument.apply(values[name], self._cancel)
            if applied.reading is not None:
                readings[name] = applied.reading
            reads = "" if applied.reading is None else f", reads {_value(instrument, applied.reading)}"
            self._say(f"{name} set to {_value(instrument, values[name])}{reads}")
            for note in applied.notes:
                self._say(f"{name}: {note}")
        if readings:
            facts["readings"] = readings
        port = self.level.at(values)
        if port is not None:
            facts["level"] = port.to_json()
        return facts

    def take_events(self) -> list[Event]:
        """Give what happened since the last call."""
        events, self.events = self.events, []
        return events

    def _say(self, text: str) -> None:
        self.events.append(Event("instrument", None, text, time.time_ns()))


def _value(instrument: Instrument, value: float) -> str:
    return f"{value:g} {getattr(instrument.section, 'unit', '')}".rstrip()
