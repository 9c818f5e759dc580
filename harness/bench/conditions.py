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

from drivers.contract import (
    Applied,
    DriverError,
    Instrument,
    Interrupted,
    Link,
    NotConfirmed,
    OutOfLimits,
    WrongInstrument,
)
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
        self._standing: dict[str, float] = {}  # what was set, and as far as is known still stands
        self.unsafe: list[str] = []  # what was left in a state that may not be safe, in words
        self.instruments: dict[str, Instrument] = {}
        self._strangers: set[str] = set()  # not those that a resumed run was begun with: never sent a value
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
        """Open all; on every way out make them safe and close them.

        Raises
        ------
        DriverError
            `OutOfLimits` before anything is opened, where a safe value is none for the device.
        """
        self._check_safe_values()
        if not self.instruments:
            yield
            return
        described = {
            name: (settings.driver, settings.options.model_dump(mode="json"))
            for name, settings in self._profile.instruments.items()
        }
        guardian: Guardian | None = None
        try:
            for name, instrument in self.instruments.items():
                with _of(name):
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

    def _check_safe_values(self) -> None:
        """A safe value that would reach a power limit is not safe."""
        name = self.level.instrument
        safe = getattr(self.instruments[name].section, "safe", None) if name is not None else None
        if name is None or safe is None:
            return
        try:
            self.level.check({**self.fixed(), name: float(safe)})
        except OutOfLimits as error:
            raise OutOfLimits(
                f"the safe value {_value(self.instruments[name], safe)} of {name} is not safe: {error.what}",
                "state a safe value that keeps to [level]",
            ) from error

    def _leave(self) -> bool:
        """Make everything safe and close it; never raises, says whether all went well."""
        self._standing.clear()
        well = True
        for name, instrument in self.instruments.items():
            if name in self._strangers:
                self._say(f"{name} was left alone: it is another instrument than before")
                continue
            try:
                instrument.make_safe()
                if getattr(instrument.section, "safe", None) is not None:
                    self._say(f"{name} made safe at {_value(instrument, instrument.section.safe)}")
            except DriverError as error:
                well = False
                self.unsafe.append(f"{name} could NOT be made safe: {error.what}")
                self._say(self.unsafe[-1])
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

    def recognise(self, before: Mapping[str, str]) -> None:
        """See to it that these are the instruments that a cut run was begun with, before one is set.

        Raises
        ------
        WrongInstrument
        """
        now = self.identities()
        self._strangers = {name for name, who in before.items() if now.get(name) != who}
        for name in sorted(self._strangers):
            raise WrongInstrument(
                f'{name} is "{now.get(name, "")}" now, and the run was begun with "{before[name]}"',
                "connect the instrument that it was begun with, or start a new run",
            )

    def fixed(self) -> dict[str, float]:
        """Give what the profile sets where no sweep does."""
        return {n: s.value for n, s in self._profile.instruments.items() if s.value is not None}

    def apply(self, values: Mapping[str, float]) -> dict[str, Any]:
        """Set values, in the profile's order; gives readings and the level at the device's port.

        What stands where it should already is read once more and left alone: an oven need not settle at each
        step of an attenuator, nor a person be asked for what he has set.

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
            reading = self._stands(name, values[name]) or self._put(name, values[name])
            if reading.reading is not None:
                readings[name] = reading.reading
        if readings:
            facts["readings"] = readings
        port = self.level.at(values)
        if port is not None:
            facts["level"] = port.to_json()
        return facts

    def _stands(self, name: str, value: float) -> Applied | None:
        """Give the reading of an instrument that was set to this value before and has stayed there."""
        if self._standing.get(name) != value:
            return None
        try:
            with _of(name):
                return Applied(value, self.instruments[name].confirm(value))
        except NotConfirmed:
            return None

    def _put(self, name: str, value: float) -> Applied:
        instrument = self.instruments[name]
        self._standing.pop(name, None)
        with _of(name):
            applied = instrument.apply(value, self._cancel)
        self._standing[name] = value
        reads = "" if applied.reading is None else f", reads {_value(instrument, applied.reading)}"
        self._say(f"{name} set to {_value(instrument, value)}{reads}")
        for note in applied.notes:
            self._say(f"{name}: {note}")
        return applied

    def confirm(self, values: Mapping[str, float]) -> tuple[tuple[str, ...], DriverError | None]:
        """Read at a point's end whether everything still stands where it was set.

        Gives words for what does not, or cannot be known any more: what was counted meanwhile does not belong
        to this setting; and the fault where an instrument no longer answers.
        """
        doubts: list[str] = []
        fault: DriverError | None = None
        for name, value in values.items():
            instrument = self.instruments[name]
            try:
                instrument.confirm(value)
            except NotConfirmed as error:
                self._standing.pop(name, None)
                doubts.append(f"{name} did not stay where it was put: {error.what}")
            except DriverError as error:
                self._standing.pop(name, None)
                fault = error
                doubts.append(f"nobody knows whether {name} stayed where it was put: {error.what}")
        for words in doubts:
            self._say(f"{words}; what was counted at this point decides nothing")
        return tuple(doubts), fault

    def take_events(self) -> list[Event]:
        """Give what happened since the last call."""
        events, self.events = self.events, []
        return events

    def _say(self, text: str) -> None:
        self.events.append(Event("instrument", None, text, time.time_ns()))


@contextlib.contextmanager
def _of(name: str) -> Iterator[None]:
    """Let an instrument's error say which one it is: an address alone tells a tired person nothing."""
    try:
        yield
    except Interrupted:
        raise
    except DriverError as error:
        if not error.what.startswith(name):
            error.what = f"{name}: {error.what}"
        raise


def _value(instrument: Instrument, value: float) -> str:
    return f"{value:g} {getattr(instrument.section, 'unit', '')}".rstrip()


def caution(profile: Profile) -> str:
    """Say what a person must see to before power flows; empty where nothing real is set."""
    real = [s.options for s in profile.instruments.values() if s.driver != "simulated"]
    kinds = {str(getattr(options, "quantity", "")) for options in real}
    if not kinds & {"attenuation", "loss", "gain", "level", "power"} and profile.level is None:
        return ""
    level = profile.level
    words = "caution: too little attenuation can destroy a receiver"
    if level is not None and level.damage_dbm is not None:
        words += f" (this one's damage level is stated as {level.damage_dbm:g} dBm)"
    return f"{words}; transmit only into a shielded set-up, or where licence and local rules permit it"


def attended(profile: Profile) -> bool:
    """Whether somebody has to stand beside it: an instrument asks a person to set it."""
    return any(not instrument_class(s.driver).unattended for s in profile.instruments.values())
