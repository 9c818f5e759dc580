"""Reading and writing an open pyserial port without ever being held up by it.

pyserial's own `write` waits, or spins, for as long as flow control holds. So ports with a file descriptor
(real ports on POSIX, pseudo-terminals, ``socket://``) are read and written directly; the others (COM ports,
``loop://``, ``rfc2217://``) through pyserial, but never with more than there is room for.
"""

from __future__ import annotations

import os
import selectors
import stat
from abc import ABC, abstractmethod
from contextlib import suppress
from queue import Empty
from time import monotonic
from typing import Any

from drivers.contract import LinkLost
from drivers.links.descriptor import Waiter, Waits, Waker, pause, unsent_bytes

_POLL_S = 0.003
_ROOM_BYTES = 4096  # what pyserial asks Windows for, and what loop:// holds
_PIECE_BYTES = 1024  # a writable socket takes this much at once
_STOLEN_LIMIT = 3


class Port(ABC):
    """An open port, as the serial link uses it."""

    fd: int | None = None  # where the operating system may be asked about it

    def __init__(self, port: Any) -> None:
        self._port = port

    @abstractmethod
    def read(self, buffer: memoryview) -> int:
        """Read at once; 0 at the end; raises `BlockingIOError`, `OSError`."""

    @abstractmethod
    def write(self, data: memoryview) -> int:
        """Write at once; raises `BlockingIOError`, `OSError`."""

    @abstractmethod
    def waiters(self, waker: Waker) -> tuple[Waits, Waits]:
        """Make what waits for reading and for writing."""

    @abstractmethod
    def unsent(self) -> int:
        """Bytes that have not left yet, as far as can be known."""

    def drop_unsent(self) -> None:
        """Throw away what has not left yet, so that nothing more is transmitted and closing does not wait."""
        with suppress(Exception):  # on every way out, also of a port that has gone: nothing may stop it
            self._port.reset_output_buffer()


class DescriptorPort(Port):
    """A port with a file descriptor of its own."""

    def __init__(self, port: Any, fd: int) -> None:
        super().__init__(port)
        self.fd: int = fd
        self._promised = False
        self._stolen = 0
        if is_terminal(fd):
            _make_raw(fd)

    def read(self, buffer: memoryview) -> int:
        """Read at once; notice a second reader."""
        promised, self._promised = self._promised, False
        try:
            return os.readv(self.fd, [buffer])
        except BlockingIOError:
            # Told that something was there, and now it is not: somebody else has taken it.
            self._stolen += promised
            if self._stolen < _STOLEN_LIMIT:
                raise
        raise LinkLost(
            f"another program reads from {self._port.port} at the same time and takes bytes away",
            "close it (a terminal program? a modem manager?), then run again",
        )

    def write(self, data: memoryview) -> int:
        """Write at once."""
        return os.write(self.fd, data)

    def waiters(self, waker: Waker) -> tuple[Waits, Waits]:
        """Wait with the operating system."""
        return _Promise(self, waker), Waiter(waker, self.fd, selectors.EVENT_WRITE)

    def promise(self) -> None:
        """Note that the operating system says that there is something to read."""
        self._promised = True

    def unsent(self) -> int:
        """Bytes in the system's buffer."""
        return unsent_bytes(self.fd)


class _Promise(Waiter):
    def __init__(self, port: DescriptorPort, waker: Waker) -> None:
        super().__init__(waker, port.fd, selectors.EVENT_READ)
        self._descriptor_port = port

    def wait(self, seconds: float) -> bool:
        ready = super().wait(seconds)
        if ready:
            self._descriptor_port.promise()
        return ready


class PolledPort(Port):
    """A port that only pyserial can read and write, and only asking tells whether it is ready."""

    def read(self, buffer: memoryview) -> int:
        """Read what is there."""
        count = min(self._port.in_waiting, buffer.nbytes)
        data = self._port.read(count) if count else b""
        if not data:
            raise BlockingIOError
        buffer.cast("B")[: len(data)] = data
        return len(data)

    def write(self, data: memoryview) -> int:
        """Write what there is room for."""
        room = self._room()
        if room <= 0:
            raise BlockingIOError
        piece = bytes(data.cast("B")[:room])
        self._port.write(piece)
        return len(piece)

    def waiters(self, waker: Waker) -> tuple[Waits, Waits]:
        """Wait by asking again and again."""
        return _Asking(waker, self.can_read), _Asking(waker, lambda: self._room() > 0)

    def can_read(self) -> bool:
        """Whether `read` would do anything but say that nothing is there."""
        return bool(self._port.in_waiting)

    def unsent(self) -> int:
        """Bytes in pyserial's or the system's buffer; 0 where it does not say."""
        try:
            return int(self._port.out_waiting)
        except (AttributeError, NotImplementedError):
            return 0

    def _room(self) -> int:
        return _ROOM_BYTES - self.unsent()


class LoopPort(PolledPort):
    """``loop://``: what was written lies in the loop until it is read, and has left all the same."""

    def _room(self) -> int:
        return _ROOM_BYTES - int(self._port.out_waiting)

    def unsent(self) -> int:
        """Nothing waits to be sent."""
        return 0

    def drop_unsent(self) -> None:
        """Nothing waits to be sent."""


class RemotePort(PolledPort):
    """``rfc2217://``: a port behind a network server, over telnet.

    pyserial's `read` throws away what has come once the connection has ended, so its queue is read directly.
    """

    def __init__(self, port: Any) -> None:
        super().__init__(port)
        self._ended = False

    def read(self, buffer: memoryview) -> int:
        """Take what pyserial's reading thread has put into its queue."""
        target = buffer.cast("B")
        queue = self._port._read_buffer
        count = 0
        with suppress(Empty):
            while count < len(target) and not self._ended:
                byte = queue.get_nowait()
                if byte is None:
                    self._ended = True
                else:
                    target[count : count + 1] = byte
                    count += 1
        if not count and not self._ended:
            raise BlockingIOError
        return count

    def can_read(self) -> bool:
        """Whether something is there, or the connection has ended."""
        return self._ended or bool(self._port._read_buffer.qsize())

    def unsent(self) -> int:
        """Bytes on their way to the server; what the far port still holds cannot be known."""
        return unsent_bytes(self._port._socket.fileno())

    def _room(self) -> int:
        if self._port._remote_suspend_flow:
            return 0
        with selectors.DefaultSelector() as selector:
            selector.register(self._port._socket, selectors.EVENT_WRITE)
            return _PIECE_BYTES if selector.select(0) else 0


class _Asking:
    """Waits by asking every few milliseconds."""

    def __init__(self, waker: Waker, ready: Any) -> None:
        self._waker = waker
        self._ready = ready

    def wait(self, seconds: float) -> bool:
        deadline = monotonic() + seconds
        self._waker.check()
        while True:
            try:
                if self._ready():
                    return True
            except OSError:
                return True  # reading or writing will say what is wrong
            left = deadline - monotonic()
            if left <= 0:
                return False
            pause(self._waker, min(left, _POLL_S))

    def close(self) -> None:
        pass


def port_for(port: Any, name: str) -> Port:
    """Choose how to read and write an open pyserial port."""
    scheme = name.split("://", 1)[0].lower() if "://" in name else ""
    if scheme == "rfc2217":
        return RemotePort(port)
    if scheme == "loop":
        return LoopPort(port)
    if os.name == "posix":
        try:
            return DescriptorPort(port, port.fileno())
        except (OSError, AttributeError):
            pass  # a handler without a descriptor
    return PolledPort(port)


def is_terminal(fd: int) -> bool:
    """Whether it is a terminal device, so that it has the settings of one."""
    return os.name == "posix" and os.isatty(fd)


def is_pseudo_terminal(fd: int) -> bool:
    """Whether it is the slave of a pseudo-terminal (major numbers 136 to 143 on Linux)."""
    mode = os.fstat(fd)
    return stat.S_ISCHR(mode.st_mode) and 136 <= os.major(mode.st_rdev) <= 143


def _make_raw(fd: int) -> None:
    """Turn off what pyserial leaves as the last program set it.

    A break must not flush the buffers, a byte with a framing error must not vanish; a read must not return
    nothing where nothing is there, which would look like the end; and the lines must drop when we are gone.
    """
    import termios

    settings = termios.tcgetattr(fd)
    settings[0] &= ~(termios.BRKINT | termios.IGNPAR | termios.PARMRK | termios.INPCK | termios.ISTRIP)
    settings[2] |= termios.HUPCL
    settings[6][termios.VMIN] = 1
    settings[6][termios.VTIME] = 0
    termios.tcsetattr(fd, termios.TCSANOW, settings)
