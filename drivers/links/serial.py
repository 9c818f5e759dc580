"""The serial link: real ports, pseudo-terminals, COM ports and pyserial's URLs.

Caution: a port's DTR and RTS can key a transmitter. They are set as the profile says before the port is
opened, but Linux itself raises both for a moment while it opens a port; where that moment matters, key the
transmitter by other means. Follow the local rules for transmitting.
"""

from __future__ import annotations

import os
import warnings
from collections.abc import Mapping
from contextlib import suppress
from time import monotonic
from typing import Any, Literal

import serial
from pydantic import Field, field_validator

from drivers.contract import DriverError, LinkError, LinkLost, Section, Traits
from drivers.links.characters import Regrouper
from drivers.links.descriptor import DescriptorLink, pause
from drivers.links.line_counts import LineCounts, modem_lines
from drivers.links.port_faults import busy, failed_to_open, gone, holder_of
from drivers.links.ports import DescriptorPort, Port, RemotePort, is_pseudo_terminal, is_terminal, port_for

_FIFO_CHARACTERS = 16  # what a port's hardware holds after the system's buffer is empty, where it cannot say
_PIECE_BYTES = 4096  # packed into characters at a time
_TIOCSERGETLSR = 0x5459  # Linux: whether the transmitter itself is empty
_TRANSMITTER_EMPTY = 0x01

Parity = Literal["none", "even", "odd", "mark", "space"]
_PARITY: Mapping[str, str] = {"none": "N", "even": "E", "odd": "O", "mark": "M", "space": "S"}


class SerialSection(Section):
    """Keys of a serial link."""

    port: str = Field(
        min_length=1,
        description="/dev/ttyUSB0, COM3, socket://HOST:PORT, rfc2217://HOST:PORT, hwgrep://PATTERN or loop://.",
    )
    baud: int = Field(115_200, ge=1, le=20_000_000, description="Symbols a second on the line.")
    data_bits: Literal[5, 6, 7, 8] = Field(
        8, description="Data bits in a character; with fewer than 8 the payload's bits are packed into them."
    )
    parity: Parity = Field("none", description="Parity bit.")
    stop_bits: float = Field(
        1, description="Stop bits after a character.", json_schema_extra={"enum": [1, 1.5, 2]}
    )
    flow: Literal["none", "rtscts", "xonxoff"] = Field(
        "none", description="Flow control; with xonxoff not every byte goes through."
    )
    dtr: bool = Field(
        False, description="DTR on from opening on; many modems want it, and it can key a transmitter."
    )
    rts: bool = Field(
        False, description="RTS on from opening on (not with rtscts); it can key a transmitter."
    )
    park_dtr: bool = Field(False, description="DTR when parked: after the run and on every fault.")
    park_rts: bool = Field(False, description="RTS when parked: after the run and on every fault.")
    exclusive: bool = Field(
        True, description="Refuse a port that another program has open, and keep others out."
    )

    @field_validator("stop_bits")
    @classmethod
    def _known(cls, bits: float) -> float:
        if bits not in (1, 1.5, 2):
            raise ValueError("must be 1, 1.5 or 2")
        return bits


class SerialLink(DescriptorLink):
    """A serial port, with modem lines and the counts that the operating system keeps."""

    Section = SerialSection
    section: SerialSection

    def __init__(self, section: SerialSection, nominal_bps: float | None = None) -> None:
        super().__init__(section, nominal_bps)
        self.traits = Traits(
            whole_bytes=section.data_bits == 8,  # a lost character is so many bits
            transparent=section.flow != "xonxoff",
            holds_back=section.flow != "none" or self._scheme in ("socket", "loop"),
        )
        self._serial: Any = None
        self._port: Port | None = None
        self._counts: LineCounts | None = None
        self._packer: Regrouper | None = None
        self._unpacker: Regrouper | None = None
        self._packed = bytearray()  # characters that were accepted and not yet written

    @property
    def label(self) -> str:
        """The port's name as in the profile."""
        return self.section.port

    @property
    def _scheme(self) -> str:
        name = self.section.port
        return name.split("://", 1)[0].lower() if "://" in name else ""

    @property
    def rate_bps(self) -> float | None:
        """Payload rate that the framing allows, or the profile's where that is lower."""
        if self._scheme in ("socket", "loop"):
            return self._nominal_bps
        section = self.section
        framed = section.baud * section.data_bits / self._character_bits
        return framed if self._nominal_bps is None else min(framed, self._nominal_bps)

    @property
    def _character_bits(self) -> float:
        section = self.section
        return 1 + section.data_bits + (section.parity != "none") + section.stop_bits

    def open(self) -> None:
        """Open the port with its settings and the states of DTR and RTS.

        Raises
        ------
        OpenFailed
            No such port, in use, no permission, settings that it does not take.
        """
        self.close()
        waker = self._begin()
        try:
            self._serial = self._opened()
            self._port = port_for(self._serial, self.section.port)
            self._claim()
        except BaseException as error:
            waker.close()
            self._release()
            if isinstance(error, DriverError) or not isinstance(error, Exception):
                raise
            # pyserial lets errors of many kinds through: its own, the system's, termios's, wrong values.
            raise failed_to_open(self.label, error) from None
        self.carry("payload")
        self._counts = LineCounts(self._port.fd, self.lines())
        self._reading, self._writing = self._port.waiters(waker)

    def _opened(self) -> Any:
        section = self.section
        with warnings.catch_warnings():
            # pyserial's network handlers call methods of threads that newer Pythons deprecate.
            warnings.simplefilter("ignore", DeprecationWarning)
            port = serial.serial_for_url(section.port, do_not_open=True)
            port.baudrate = section.baud
            port.bytesize = section.data_bits
            port.parity = _PARITY[section.parity]
            port.stopbits = section.stop_bits
            port.rtscts = section.flow == "rtscts"
            port.xonxoff = section.flow == "xonxoff"
            port.dsrdtr = False
            port.dtr = section.dtr
            port.rts = section.rts
            port.timeout = 0.05  # only for the ports that pyserial reads, and these are asked beforehand
            if section.exclusive and os.name == "posix" and self._scheme in ("", "hwgrep"):
                port.exclusive = True
            port.open()
        return port

    def _claim(self) -> None:
        """Refuse a port that somebody else has open, and keep others from opening it."""
        port = self._port
        if not self.section.exclusive or not isinstance(port, DescriptorPort) or not is_terminal(port.fd):
            return
        # Whoever made a pseudo-terminal may well hold its other end open.
        if not is_pseudo_terminal(port.fd) and (holder := holder_of(port.fd)):
            raise busy(self.label, holder)
        import fcntl
        import termios

        with suppress(OSError):
            fcntl.ioctl(port.fd, termios.TIOCEXCL)

    def close(self) -> None:
        """Close the port without waiting for what has not left; may be called twice."""
        self._detach()
        self._release()

    def _release(self) -> None:
        opened, self._serial = self._serial, None
        port, self._port = self._port, None
        self._counts = None
        if opened is None:
            return
        if port is not None:
            if not isinstance(port, RemotePort):  # whose far port may still be transmitting, and may do so
                port.drop_unsent()
            if isinstance(port, DescriptorPort) and is_terminal(port.fd):
                import fcntl
                import termios

                with suppress(OSError):
                    fcntl.ioctl(port.fd, termios.TIOCNXCL)
        with suppress(Exception):  # pyserial's network handlers may stumble over a connection that has gone
            opened.close()

    def drain(self, timeout: float) -> bool:
        """Wait until the last bit has left the port; False at time-out, as while flow control holds."""
        port = self._port
        if port is None or self._waker is None:
            return True
        deadline = monotonic() + timeout
        if not self._wait_until(lambda: self._all_written(port) and not port.unsent(), timeout):
            return False
        if not isinstance(port, DescriptorPort) or not is_terminal(port.fd) or is_pseudo_terminal(port.fd):
            return True
        if _transmitter_empty(port.fd) is not None:
            return self._wait_until(lambda: _transmitter_empty(port.fd) is not False, deadline - monotonic())
        rest = _FIFO_CHARACTERS * self._character_bits / self.section.baud
        pause(self._waker, max(0.0, min(rest, deadline - monotonic())))
        return monotonic() < deadline

    def carry(self, what: Literal["payload", "characters"]) -> None:
        """Pack payload into characters of fewer than eight bits, or send characters as they are."""
        bits = self.section.data_bits
        packs = what == "payload" and bits < 8
        self._packer = Regrouper(8, bits) if packs else None
        self._unpacker = Regrouper(bits, 8) if packs else None
        self._packed.clear()

    def lines(self) -> Mapping[str, bool]:
        """CTS, DCD, DSR, RI; empty for pseudo-terminals and plain sockets, which have none."""
        if self._serial is None or self._scheme == "socket":
            return {}
        return modem_lines(self._serial)

    def health(self) -> Mapping[str, int]:
        """Counts since `open`.

        ``framing``, ``parity``, ``break``: of characters received. ``overrun`` (in the port's hardware) and
        ``buffer_overrun`` (in the system's buffer): characters lost because this computer was too slow.
        ``cts_changes``, ``dcd_changes``: changes of the modem lines. Only what the port's driver counts.
        """
        return {} if self._counts is None else self._counts.look(self.lines())

    def park(self) -> None:
        """Stop transmitting: drop what has not left, and set DTR and RTS to their parked states."""
        if self._serial is None:
            return
        if self._port is not None:
            self._port.drop_unsent()
        for name, state in (("rts", self.section.park_rts), ("dtr", self.section.park_dtr)):
            with suppress(Exception):  # on every way out, also of a port that has gone
                if name == "rts" and self._serial.rtscts:
                    self._serial.rtscts = False  # else the driver goes on raising RTS by itself
                setattr(self._serial, name, state)

    def describe(self) -> Mapping[str, str]:
        """Port, framing, flow control, and the adapter behind it."""
        section = self.section
        words = {"port": section.port}
        if self._scheme not in ("socket", "loop"):
            letter = _PARITY[section.parity]
            words["framing"] = f"{section.baud} baud {section.data_bits}{letter}{section.stop_bits:g}"
            words["flow"] = section.flow
        device = getattr(self._serial, "port", None)
        if self._scheme in ("", "hwgrep") and device:
            words["device"] = str(device)
            words.update(_adapter(str(device)))
        return words

    def _read(self, buffer: memoryview) -> int:
        assert self._port is not None
        unpacker = self._unpacker
        if unpacker is None:
            return self._port.read(buffer)
        # As many characters as fill the buffer, the bits that wait included; at least one.
        room = (8 * buffer.nbytes + 7 - unpacker.waiting_bits) // self.section.data_bits
        characters = bytearray(room)
        count = self._port.read(memoryview(characters))
        if not count:
            return 0
        payload = unpacker.regroup(characters[:count])
        if not payload:
            raise BlockingIOError  # not a whole byte yet
        buffer.cast("B")[: len(payload)] = payload
        return len(payload)

    def _write(self, data: memoryview) -> int:
        assert self._port is not None
        if self._packer is None:
            return self._port.write(data)
        if not self._all_written(self._port):
            raise BlockingIOError
        piece = data.cast("B")[:_PIECE_BYTES]
        self._packed += self._packer.regroup(piece)
        self._all_written(self._port)
        return len(piece)

    def _all_written(self, port: Port) -> bool:
        """Write packed characters that wait; whether none is left."""
        with suppress(BlockingIOError):
            while self._packed:
                with memoryview(self._packed) as waiting:
                    count = port.write(waiting)
                del self._packed[:count]
        return not self._packed

    def _ended(self) -> LinkLost:
        return gone(self._device, None)

    def _broken(self, error: OSError) -> LinkError:
        return gone(self._device, error)

    @property
    def _device(self) -> str:
        """The port's own name, also where a pattern found it."""
        if self._scheme == "hwgrep" and self._serial is not None:
            return str(self._serial.port)
        return self.section.port


def _transmitter_empty(fd: int) -> bool | None:
    """Ask the port's hardware; None where it cannot say."""
    import fcntl
    import struct
    import sys

    if sys.platform != "linux":
        return None
    try:
        answer = struct.unpack("I", fcntl.ioctl(fd, _TIOCSERGETLSR, bytes(4)))[0]
    except OSError:
        return None
    return bool(answer & _TRANSMITTER_EMPTY)


def _adapter(device: str) -> dict[str, str]:
    """What the system knows of the adapter: make, model, serial number."""
    from serial.tools.list_ports import comports

    device = os.path.realpath(device)
    for port in comports():
        if port.device == device:
            found = {"adapter": port.description, "adapter_serial_number": port.serial_number}
            return {name: words for name, words in found.items() if words and words != "n/a"}
    return {}
