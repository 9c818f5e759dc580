"""The contracts of the lab: Link, Instrument, ErrorCounter, and the errors that they raise.

The tree of errors, each with one line `what` is wrong and one line of `advice`:

    DriverError
    ├── LinkError
    │   ├── OpenFailed        refused, no such host or port, in use by another program, no permission
    │   ├── LinkLost          it was open and went away: unplugged, reset by the peer
    │   └── SendRefused       the port takes nothing any more
    ├── InstrumentError
    │   ├── OutOfLimits       the value lies outside the limits, or is no number; nothing was sent
    │   ├── NotConfirmed      the reading differs from what was set, or the error queue holds something
    │   ├── WrongInstrument   another identity answered
    │   └── InstrumentLost    it no longer answers
    ├── EndOfStream           no error: the peer closed its side, or the file is at its end
    └── Interrupted           no error: `interrupt` was called from another thread

Construction does no I/O. `open` after `close` works: that is reconnecting. All are context managers.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from threading import Event
from types import TracebackType
from typing import Any, ClassVar, Literal, Self

from pydantic import BaseModel, ConfigDict


class DriverError(Exception):
    """Something between the computer and the device failed."""

    def __init__(self, what: str, advice: str = "") -> None:
        super().__init__(what)
        self.what = what
        self.advice = advice


class LinkError(DriverError):
    """A link failed."""


class OpenFailed(LinkError):
    """The link could not be opened."""


class LinkLost(LinkError):
    """The link was open and went away."""


class SendRefused(LinkError):
    """The port takes nothing any more."""


class InstrumentError(DriverError):
    """An instrument failed."""


class OutOfLimits(InstrumentError):
    """A value outside the limits, or no number; nothing was sent."""


class NotConfirmed(InstrumentError):
    """The instrument did not confirm what was set."""


class WrongInstrument(InstrumentError):
    """Another instrument than the one expected answered."""


class InstrumentLost(InstrumentError):
    """The instrument no longer answers."""


class EndOfStream(DriverError):
    """Nothing more will come: the peer closed its side, or the file is at its end."""

    def __init__(self, what: str = "end of the stream", advice: str = "") -> None:
        super().__init__(what, advice)


class Interrupted(DriverError):
    """`interrupt` was called from another thread."""

    def __init__(self, what: str = "interrupted", advice: str = "") -> None:
        super().__init__(what, advice)


class Section(BaseModel):
    """Base of every driver's keys in the profile."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=False)


@dataclass(frozen=True, slots=True)
class Traits:
    """What a link can do."""

    sends: bool = True
    receives: bool = True
    message_bytes: int | None = None  # None: a byte stream; otherwise bytes in a message
    half_duplex: bool = False
    finite: bool = False  # ends by itself, as a file does
    whole_bytes: bool = True  # bits are lost and invented in whole bytes only
    transparent: bool = True  # every byte value goes through; False: XON and XOFF do not
    ends_with_input: bool = (
        False  # once its input has ended, the device still gives what it kept; False: it may hang up
    )
    holds_back: bool = (
        True  # what we do not read waits at the sender; False: it is lost (a port without flow control)
    )


@dataclass(frozen=True, slots=True)
class Knob:
    """Something that a simulated instrument may turn, live."""

    unit: str
    minimum: float
    maximum: float
    get: Callable[[], float]
    turn: Callable[[float], None]


class _Opened:
    """Open on entry, close on every way out."""

    def open(self) -> None:
        raise NotImplementedError

    def close(self) -> None:
        raise NotImplementedError

    def __enter__(self) -> Self:
        self.open()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


class Link(_Opened, ABC):
    """The path that carries bytes to the device and back.

    Parameters
    ----------
    section
        The driver's own keys, validated by its `Section`.
    nominal_bps
        ``link.rate_bps`` of the profile, bit/s of payload; a driver that knows better overrides `rate_bps`.
    """

    Section: ClassVar[type[BaseModel]]
    traits: Traits = Traits()

    def __init__(self, section: Any, nominal_bps: float | None = None) -> None:
        self.section = section
        self._nominal_bps = nominal_bps

    @property
    def rate_bps(self) -> float | None:
        """Payload rate in bit/s: 115 200 baud 8N1 carries 92 160; None where unknown."""
        return self._nominal_bps

    @abstractmethod
    def open(self) -> None:
        """Open; raises `OpenFailed`."""

    @abstractmethod
    def close(self) -> None:
        """Close; may be called twice, and before `open`."""

    def send(self, data: memoryview, timeout: float) -> int:
        """Hand over bytes, return how many were accepted (a stream: perhaps 0; messages: all or 0).

        Waits at most `timeout` seconds for room. Raises `LinkLost`, `Interrupted`.
        """
        raise SendRefused("this link only receives", "use a link that sends, or set topology to one-way")

    def receive(self, buffer: memoryview, timeout: float) -> int:
        """Fill the start of `buffer`, return how many bytes came; 0 at time-out.

        Raises `EndOfStream` at the end, `LinkLost`, `Interrupted`.
        """
        raise EndOfStream("this link only sends")

    def drain(self, timeout: float) -> bool:
        """Wait until the last bit has left the port; False at time-out."""
        return True

    def finish_sending(self) -> None:
        """Say that nothing more will be sent (half-close)."""

    def turn(self, to: Literal["send", "receive"]) -> None:
        """Half-duplex links: change direction."""

    def begin_sitting(self, number: int) -> None:
        """Say, before `open`, which sitting of its run this is: a simulation goes on instead of starting again.

        Number 0 begins a run; each time that it goes on after it was cut it is one more.
        """

    def carry(self, what: Literal["payload", "characters"]) -> None:
        """Say what the bytes are: payload, as after `open`, or the characters of a set-up dialogue.

        The two differ only on ports whose characters have fewer than eight bits.
        """

    def lines(self) -> Mapping[str, bool]:
        """Modem lines as they are now, where known: ``CTS``, ``DCD``, ``DSR``, ``RI``."""
        return {}

    def health(self) -> Mapping[str, int]:
        """Counts since `open`: framing, parity, overrun, break, changes of CTS and DCD, where known."""
        return {}

    @abstractmethod
    def interrupt(self) -> None:
        """From any thread: `send` and `receive` raise `Interrupted` until the next `open`."""

    def park(self) -> None:
        """Stop transmitting: unkey, drop RTS. May be called twice, also on a closed link."""

    def describe(self) -> Mapping[str, str]:
        """What a report should say of it: peer, port, framing."""
        return {}

    def knobs(self) -> Mapping[str, Knob]:
        """What a simulated instrument may turn: ``ber``, ``ebn0_db``."""
        return {}


@dataclass(frozen=True, slots=True)
class Identity:
    """Who answered."""

    manufacturer: str = ""
    model: str = ""
    serial_number: str = ""
    firmware: str = ""


@dataclass(frozen=True, slots=True)
class Applied:
    """What came of a setting: the value asked for, the reading where there is one, notes in words."""

    value: float
    reading: float | None = None
    notes: tuple[str, ...] = ()


class Instrument(_Opened, ABC):
    """Something that sets or reads a condition: attenuation, level, temperature."""

    Section: ClassVar[type[BaseModel]]
    settable: bool = True
    readable: bool = False
    unattended: bool = True  # works without a person beside it
    lasting: bool = True  # what it has set stays when the program dies

    def __init__(self, section: Any) -> None:
        self.section = section

    def attach(self, link: Link | None, others: Sequence[Instrument]) -> None:
        """Meet the bench, once, before `open`.

        Parameters
        ----------
        link
            The link of the run: a simulated instrument turns one of its knobs.
        others
            The other instruments of the run: those on one resource share a session.
        """

    @abstractmethod
    def open(self) -> None:
        """Open and check the identity; raises `OpenFailed`, `WrongInstrument`."""

    @abstractmethod
    def close(self) -> None:
        """Close; may be called twice, and before `open`."""

    @property
    def limits(self) -> tuple[float, float]:
        """Lowest and highest value that may ever be set."""
        low, high = getattr(self.section, "limits", None) or (-math.inf, math.inf)
        return float(low), float(high)

    def apply(self, value: float, cancel: Event) -> Applied:
        """Set `value`, confirm it and let it settle; `cancel` cuts the waiting short.

        Raises
        ------
        OutOfLimits
            Before anything is sent; NaN fails too.
        NotConfirmed, InstrumentLost, Interrupted
        """
        low, high = self.limits
        if not (math.isfinite(value) and low <= value <= high):
            raise OutOfLimits(
                f"{value:g} lies outside the limits {low:g} to {high:g}; nothing was sent",
                "choose a value within the instrument's limits",
            )
        return self._apply(value, cancel)

    @abstractmethod
    def _apply(self, value: float, cancel: Event) -> Applied:
        """Set a value that lies within the limits."""

    def read(self) -> float:
        """Read the condition; raises `InstrumentLost`."""
        raise InstrumentError("this instrument cannot be read", "leave `read` out")

    def confirm(self, value: float) -> float | None:
        """Read once more, at a point's end, whether it still stands where it was set.

        Gives the reading; None where it cannot be read. Raises `NotConfirmed` where it has moved away, or
        `InstrumentLost`.
        """
        del value
        return None

    def identity(self) -> Identity:
        """Who answers."""
        return Identity()

    @abstractmethod
    def make_safe(self) -> None:
        """Go to the safe value. May be called twice, has its own short time limit, also after a fault."""


@dataclass(frozen=True, slots=True)
class Reading:
    """What an error counter has counted since `start`."""

    bits: int
    errors: int
    in_sync: bool


class ErrorCounter(_Opened, ABC):
    """An instrument that counts errors itself and stands in place of a link."""

    Section: ClassVar[type[BaseModel]]

    @abstractmethod
    def start(self) -> None:
        """Begin counting from zero."""

    @abstractmethod
    def read(self) -> Reading:
        """Counts since `start`; raises `InstrumentLost`."""

    @abstractmethod
    def stop(self) -> None:
        """Stop counting; may be called twice."""
