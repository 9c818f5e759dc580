"""An instrument declared in the profile, over VISA: its commands, and how its answers are checked."""

from __future__ import annotations

import re
import time
from collections.abc import Sequence
from contextlib import AbstractContextManager
from threading import Event
from typing import Self

from pydantic import Field, field_validator, model_validator

from drivers.contract import (
    Applied,
    Identity,
    Instrument,
    InstrumentError,
    InstrumentLost,
    Interrupted,
    Link,
    NotConfirmed,
    OpenFailed,
    OutOfLimits,
    WrongInstrument,
)
from drivers.instruments.commands import SetCommand, error_text, one_line, parse_number, shown
from drivers.instruments.condition import ConditionSection
from drivers.instruments.session import Manners, VisaSession

_QUEUE_LENGTH = 32  # entries read at most: a queue that never empties is an instrument that never answers 0
_SAFE_LIMIT_S = 3.0  # going to the safe value takes no longer, waiting for others included
_SAFE_ANSWER_S = 1.0  # nor one answer meanwhile
_CONFIRM_EVERY_S = 0.2


class ScpiSection(ConditionSection):
    """Where the instrument is, and what to say to it."""

    resource: str = Field(min_length=1, description="VISA address, as TCPIP::192.0.2.7::5025::SOCKET.")
    backend: str = Field(
        default="", description='VISA library: "" the vendor\'s, "@py" in Python, "FILE.yaml@sim" simulated.'
    )
    set: str | None = Field(default=None, description="Command with one place {value}; left out: only read.")
    read: str | None = Field(default=None, description="Question whose answer is the value.")
    tolerance: float | None = Field(
        default=None, ge=0, description="How far the reading may lie from the value that was set."
    )
    confirm_s: float = Field(
        default=0.0, ge=0, le=86_400, description="Keep reading this long until the tolerance is met."
    )
    identity: str | None = Field(default="*IDN?", description="Question for its name; empty: none is asked.")
    expect_identity: str | None = Field(
        default=None, description="Regular expression that the answer must contain, without regard to case."
    )
    error_queue: str | None = Field(
        default=None, description="Question for the next entry of its error queue, read after every setting."
    )
    termination: str = Field(default="\n", min_length=1, max_length=2, description="End of every line.")
    timeout_s: float = Field(default=2.0, gt=0, le=600, description="Longest wait for an answer.")
    baud: int | None = Field(default=None, gt=0, description="Of a serial resource.")

    @field_validator("set", "read", "identity", "error_queue", mode="after")
    @classmethod
    def _command(cls, text: str | None) -> str | None:
        return one_line(text) if text else None

    @field_validator("expect_identity", mode="after")
    @classmethod
    def _expression(cls, text: str | None) -> str | None:
        try:
            re.compile(text or "")
        except re.error as error:
            raise ValueError(f"{text!r} is no regular expression: {error}") from error
        return text

    @field_validator("termination", mode="after")
    @classmethod
    def _line_end(cls, text: str) -> str:
        if text not in ("\n", "\r", "\r\n"):
            raise ValueError(r'the termination is "\n", "\r" or "\r\n"')
        return text

    @model_validator(mode="after")
    def _complete(self) -> Self:
        if self.set is None and self.read is None:
            raise ValueError("an instrument needs `set` or `read`, or both")
        if self.expect_identity is not None and self.identity is None:
            raise ValueError("expect_identity needs the question `identity`")
        if self.set is not None:
            if self.limits is None or self.safe is None:
                raise ValueError("an instrument that sets something needs limits and a safe value")
            (low, high), safe = self.limits, self.safe
            if not low <= SetCommand(self.set).sent(safe) <= high:
                raise ValueError(f"the safe value {safe:g}, rounded as `set` says, lies outside the limits")
        return self


class ScpiInstrument(Instrument):
    """Any instrument that takes lines of text: set, read back, checked.

    What is set is confirmed by the reading where there is one, by the error queue where there is one, and
    else by the instrument's still answering who it is.
    """

    Section = ScpiSection
    section: ScpiSection

    def __init__(self, section: ScpiSection) -> None:
        super().__init__(section)
        self._command = SetCommand(section.set) if section.set is not None else None
        self.settable = self._command is not None
        self.readable = section.read is not None
        self._manners = Manners(section.termination, section.timeout_s, section.baud)
        self._session = VisaSession(section.backend, section.resource)
        self._joined = False
        self._met = 0  # generation of the session in which the identity was checked
        self._identity = Identity()

    def attach(self, link: Link | None, others: Sequence[Instrument]) -> None:
        """Share the session of another instrument on the same resource."""
        del link
        for other in others:
            if isinstance(other, ScpiInstrument) and other._session.key == self._session.key:
                self._session = other._session
                return

    def open(self) -> None:
        """Open, check who answers, and clear old entries from the error queue."""
        if self._joined:
            return
        self._session.join()
        try:
            with self._held():
                self._meet()
                self._errors(self._manners)
        except InstrumentLost as error:
            self._session.leave()
            raise OpenFailed(error.what, error.advice) from error
        except BaseException:
            self._session.leave()
            raise
        self._joined = True

    def close(self) -> None:
        """Leave the session; the last instrument on it closes it."""
        if self._joined:
            self._joined = False
            self._session.leave()

    def identity(self) -> Identity:
        """Who answered: maker, model, serial number, firmware."""
        with self._held():
            self._meet()
        return self._identity

    def read(self) -> float:
        """Ask for the value."""
        if self.section.read is None:
            return super().read()
        with self._held():
            self._meet()
            return self._reading(self._manners)

    def confirm(self, value: float) -> float | None:
        """Read whether the value still stands: a knob may have been turned, or its supply have failed."""
        if self.section.read is None or self._command is None:
            return None
        reading = self.read()
        if abs(reading - value) > self._tolerance(value):
            raise NotConfirmed(
                f"{self.section.resource} was put at {value:g} {self.section.unit} and reads {reading:g} "
                f"{self.section.unit} now",
                "see that nobody, no other program and no power failure turns it meanwhile",
            )
        return reading

    def make_safe(self) -> None:
        """Go to the safe value in a few seconds at most, through a new session if the old one is broken."""
        safe = self.section.safe
        if self._command is None or safe is None:
            return
        if not self._session.free(_SAFE_LIMIT_S):
            # Whoever holds it hangs: leave it to him.
            self._leave_behind()
        with self._session.hold(_SAFE_LIMIT_S):
            self._session.join()
            try:
                self._insist(self._command.text(safe), safe)
            finally:
                self._session.leave()

    def _apply(self, value: float, cancel: Event) -> Applied:
        if self._command is None:
            raise InstrumentError(f"{self.section.resource} cannot be set", "give it a `set` command")
        sent = self._command.sent(value)
        low, high = self.limits
        tolerance = self._tolerance(value)
        if not low <= sent <= high:
            raise OutOfLimits(
                f"{value:g} would be sent as {sent:g}, outside the limits {low:g} to {high:g}; "
                "nothing was sent",
                "choose a value that the command's format can express",
            )
        rounding = abs(sent - value)
        if rounding > max(self.section.tolerance or 0.0, 1e-9 * abs(value)):
            raise OutOfLimits(
                f"{value:g} would be sent as {sent:g}, further off than the tolerance; nothing was sent",
                "choose values that the command's format can express, or give the format more places",
            )
        with self._held():
            if cancel.is_set():  # perhaps while it waited for `make_safe`
                raise Interrupted
            self._meet()
            self._session.write(self._command.text(value), self._manners)
            errors = self._errors(self._manners)
            if self.section.read is None and self.section.error_queue is None:
                self._alive(self._manners)
        if errors:
            raise NotConfirmed(
                f"{self.section.resource} reported {'; '.join(errors)} after {self._command.text(value)!r}",
                "check the command and the value against the instrument's manual",
            )
        if cancel.wait(self.section.settle_s):
            raise Interrupted
        notes = (f"sent as {sent:g}",) if rounding > 1e-9 * abs(value) else ()
        return Applied(value, self._confirmed(value, tolerance, cancel), notes)

    def _confirmed(self, value: float, tolerance: float, cancel: Event) -> float | None:
        """Read until the reading is near enough, at most for `confirm_s`."""
        if self.section.read is None:
            return None
        ends = time.monotonic() + self.section.confirm_s
        while True:
            with self._held():
                reading = self._reading(self._manners)
            if abs(reading - value) <= tolerance:
                return reading
            if time.monotonic() >= ends:
                self._session.drop()  # perhaps it was the answer to an earlier question
                raise NotConfirmed(
                    f"{self.section.resource} was set to {value:g} {self.section.unit} and reads "
                    f"{reading:g} {self.section.unit}, further off than the tolerance {tolerance:g}",
                    "check the instrument; one that is slow needs settle_s or confirm_s",
                )
            if cancel.wait(_CONFIRM_EVERY_S):
                raise Interrupted

    def _tolerance(self, value: float) -> float:
        if self.section.tolerance is not None or self._command is None:
            return self.section.tolerance or 0.0
        return self._command.resolution(value)

    def _held(self) -> AbstractContextManager[None]:
        return self._session.hold(self._manners.timeout_s + _SAFE_LIMIT_S)

    def _meet(self) -> None:
        """Check who is there whenever the session was opened anew."""
        generation = self._session.ensure(self._manners)
        if generation == self._met or self.section.identity is None:
            return
        self._check_identity(self._session.query(self.section.identity, self._manners))
        self._met = generation

    def _check_identity(self, answer: str) -> None:
        expected = self.section.expect_identity
        if not answer:
            raise WrongInstrument(
                f"{self.section.resource} gave an empty answer to {self.section.identity!r}",
                "check the address, or leave `identity` empty for an instrument that has none",
            )
        if expected is not None and re.search(expected, answer, re.IGNORECASE) is None:
            raise WrongInstrument(
                f"{self.section.resource} is {shown(answer)!r}, which does not contain {expected!r}",
                "check the address and which instrument is connected",
            )
        identity = Identity(*(part.strip() for part in answer.split(",", 3)))
        if self._identity not in (Identity(), identity):
            raise WrongInstrument(
                f"{self.section.resource} is {shown(answer)!r} now, and was another instrument before",
                "check which instrument is connected, and start again",
            )
        self._identity = identity

    def _alive(self, manners: Manners) -> None:
        if self.section.identity is not None:
            self._check_identity(self._session.query(self.section.identity, manners))

    def _errors(self, manners: Manners) -> list[str]:
        """Empty the error queue."""
        found: list[str] = []
        if self.section.error_queue is None:
            return found
        for _ in range(_QUEUE_LENGTH):
            text = error_text(self._session.query(self.section.error_queue, manners))
            if text is None:
                break
            found.append(shown(text))
        return found

    def _reading(self, manners: Manners) -> float:
        question = self.section.read or ""
        answer = self._session.query(question, manners)
        number = parse_number(answer, self.section.unit)
        if number is None:
            self._session.drop()  # what else may be out of step?
            raise NotConfirmed(
                f"{self.section.resource} answered {shown(answer)!r} to {question!r}, which is no number of "
                f"{self.section.unit}",
                "check the question and its answer against the instrument's manual",
            )
        return number

    def _insist(self, command: str, safe: float) -> None:
        """Send the safe value, through a new session after a fault, until it is confirmed or time is up."""
        ends = time.monotonic() + _SAFE_LIMIT_S
        manners = Manners(
            self.section.termination, min(self.section.timeout_s, _SAFE_ANSWER_S), self.section.baud
        )
        while True:
            try:
                self._go_safe(command, safe, manners)
            except WrongInstrument:
                raise
            except (InstrumentError, OpenFailed):
                self._session.drop()
                if time.monotonic() + _SAFE_ANSWER_S > ends:
                    raise
                time.sleep(0.1)
            else:
                return

    def _leave_behind(self) -> None:
        self._session = VisaSession(self.section.backend, self.section.resource)
        self._met = 0
        if self._joined:
            self._session.join()

    def _go_safe(self, command: str, safe: float, manners: Manners) -> None:
        generation = self._session.ensure(manners)
        if self.section.expect_identity is not None and generation != self._met:
            self._meet_if_it_answers(manners)
        self._session.write(command, manners)
        errors = self._errors(manners)
        if self.section.read is not None and not self.section.confirm_s:
            reading = self._reading(manners)
            if abs(reading - safe) > self._tolerance(safe):
                raise NotConfirmed(
                    f"{self.section.resource} was sent to its safe value {safe:g} {self.section.unit} and "
                    f"reads {reading:g} {self.section.unit}",
                    "switch the transmitter off by hand and check the instrument",
                )
        elif errors:
            raise NotConfirmed(
                f"{self.section.resource} reported {'; '.join(errors)} on the way to its safe value",
                "switch the transmitter off by hand and check the instrument",
            )
        elif self.section.error_queue is None:
            self._alive(manners)

    def _meet_if_it_answers(self, manners: Manners) -> None:
        """Never send to a stranger; but one that no longer talks may still listen."""
        try:
            self._check_identity(self._session.query(self.section.identity or "", manners))
        except InstrumentLost:
            return
