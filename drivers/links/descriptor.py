"""What links over file descriptors share: sending, receiving, and waiting that `interrupt` cuts short."""

from __future__ import annotations

import selectors
import socket
import struct
import sys
from abc import abstractmethod
from collections.abc import Callable
from contextlib import suppress
from time import monotonic
from typing import Protocol

from drivers.contract import Interrupted, Link, LinkError, LinkLost


class Waker:
    """Once woken, every wait that watches it ends at once, in whatever thread, until it is thrown away."""

    def __init__(self) -> None:
        self._reader, self._writer = socket.socketpair()
        self._writer.setblocking(False)
        self.woken = False

    def wake(self) -> None:
        """Wake all waits; from any thread, also after `close`."""
        self.woken = True
        with suppress(OSError):
            self._writer.send(b"!")  # never read: it stays readable for every other wait too

    def check(self) -> None:
        """Raise `Interrupted` if woken."""
        if self.woken:
            raise Interrupted

    def fileno(self) -> int:
        """Descriptor that becomes readable when woken."""
        return self._reader.fileno()

    def close(self) -> None:
        """Give the descriptors back; `woken` keeps its value."""
        self._reader.close()
        self._writer.close()


class Waits(Protocol):
    """Waits until a link is ready in one direction."""

    def wait(self, seconds: float) -> bool:
        """Return whether it became ready within `seconds`; raises `Interrupted`."""

    def close(self) -> None:
        """Give back what it holds."""


class Waiter:
    """Waits until a descriptor is ready in one direction, or until the waker wakes; for one thread."""

    def __init__(self, waker: Waker, fd: int, events: int) -> None:
        self._waker = waker
        self._selector = selectors.DefaultSelector()
        self._selector.register(waker.fileno(), selectors.EVENT_READ)
        self._selector.register(fd, events)

    def wait(self, seconds: float) -> bool:
        """Return whether the descriptor became ready within `seconds`; raises `Interrupted`."""
        ready = self._selector.select(max(seconds, 0.0))
        self._waker.check()
        return bool(ready)

    def close(self) -> None:
        """Give the descriptors back."""
        self._selector.close()


class DescriptorLink(Link):
    """A link that reads and writes non-blocking descriptors.

    A subclass opens them in `open`: `_begin`, then `_attach`. One thread may send while another receives.
    `close` belongs after both have ended; `interrupt` ends them.
    """

    def __init__(self, section: object, nominal_bps: float | None = None) -> None:
        super().__init__(section, nominal_bps)
        self._waker: Waker | None = None
        self._interrupted = False
        self._reading: Waits | None = None
        self._writing: Waits | None = None

    @property
    @abstractmethod
    def label(self) -> str:
        """What messages call it: host and port, or the port's name."""

    @abstractmethod
    def _read(self, buffer: memoryview) -> int:
        """Read at once; 0 at the end, `BlockingIOError` where nothing is there."""

    @abstractmethod
    def _write(self, data: memoryview) -> int:
        """Write at once; `BlockingIOError` where there is no room."""

    @abstractmethod
    def _ended(self) -> LinkError | Exception:
        """What to raise where reading has come to an end."""

    @abstractmethod
    def _broken(self, error: OSError) -> LinkError:
        """What to raise for an error of the operating system."""

    def _begin(self) -> Waker:
        """Forget an old interruption: the first thing that `open` does."""
        self._interrupted = False
        self._waker = Waker()
        return self._waker

    def _attach(self, read_fd: int | None, write_fd: int | None) -> None:
        """Watch the descriptors that `open` made."""
        assert self._waker is not None
        if read_fd is not None:
            self._reading = Waiter(self._waker, read_fd, selectors.EVENT_READ)
        if write_fd is not None:
            self._writing = Waiter(self._waker, write_fd, selectors.EVENT_WRITE)

    def _detach(self) -> None:
        """Stop watching: the first thing that `close` does. May be called twice."""
        for waiter in (self._reading, self._writing):
            if waiter is not None:
                waiter.close()
        self._reading = self._writing = None
        if self._waker is not None:
            self._waker.close()

    def _ready(self, waiter: Waits | None) -> Waits:
        if self._interrupted:
            raise Interrupted
        if waiter is None:
            raise LinkLost(f"{self.label} is not open", "open the link before using it")
        return waiter

    def send(self, data: memoryview, timeout: float) -> int:
        """Hand over what the descriptor takes at once; wait up to `timeout` seconds if it takes nothing."""
        if not data.nbytes:
            return 0
        waiter = self._ready(self._writing)
        deadline = None
        while True:
            try:
                return self._write(data)
            except BlockingIOError:
                pass
            except OSError as error:
                raise self._broken(error) from None
            now = monotonic()
            deadline = now + timeout if deadline is None else deadline
            # Time may be up though the descriptor is called ready: for a moment, or for another reader.
            if now > deadline or not waiter.wait(deadline - now):
                return 0

    def receive(self, buffer: memoryview, timeout: float) -> int:
        """Take what is there; wait up to `timeout` seconds while nothing is."""
        if not buffer.nbytes:
            return 0
        waiter = self._ready(self._reading)
        deadline = None
        while True:
            try:
                count = self._read(buffer)
                if count:
                    return count
                raise self._ended()
            except BlockingIOError:
                pass
            except OSError as error:
                raise self._broken(error) from None
            now = monotonic()
            deadline = now + timeout if deadline is None else deadline
            # Time may be up though the descriptor is called ready: for a moment, or for another reader.
            if now > deadline or not waiter.wait(deadline - now):
                return 0

    def interrupt(self) -> None:
        """From any thread: `send`, `receive`, a waiting `open` raise `Interrupted` until the next `open`."""
        self._interrupted = True
        if self._waker is not None:
            self._waker.wake()

    def _wait_until(self, done: Callable[[], bool], timeout: float) -> bool:
        """Ask again and again, for `timeout` seconds at most; raises `Interrupted`."""
        waker = self._waker
        if waker is None:
            return done()
        deadline = monotonic() + timeout
        waker.check()
        while not done():
            left = deadline - monotonic()
            if left <= 0:
                return False
            pause(waker, min(left, 0.005))
        return True


def pause(waker: Waker, seconds: float) -> None:
    """Sleep, unless woken; raises `Interrupted`."""
    with selectors.DefaultSelector() as selector:
        selector.register(waker.fileno(), selectors.EVENT_READ)
        selector.select(seconds)
    waker.check()


def unsent_bytes(fd: int) -> int:
    """Bytes that the system still holds for sending, unacknowledged ones too; 0 if it cannot say."""
    if sys.platform == "win32":
        return 0
    import fcntl
    import termios

    with suppress(OSError):
        count: int = struct.unpack("i", fcntl.ioctl(fd, termios.TIOCOUTQ, bytes(4)))[0]
        return count
    return 0
