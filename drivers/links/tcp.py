"""The TCP link: connects to the device, or waits for the device to connect."""

from __future__ import annotations

import selectors
import socket
from collections.abc import Mapping
from time import monotonic

from pydantic import Field

from drivers.contract import EndOfStream, LinkError, OpenFailed, Section, SendRefused
from drivers.links.descriptor import DescriptorLink, Waiter, Waker, unsent_bytes
from drivers.links.sockets import (
    broken,
    connect,
    failed_to_bind,
    failed_to_connect,
    in_words,
    resolve,
    tune,
)


class TcpSection(Section):
    """Keys of a TCP link."""

    host: str = Field(
        min_length=1, description="The device's name or address; with `listen`, the local address to wait at."
    )
    port: int = Field(ge=1, le=65535, description="The device's port; with `listen`, the local port.")
    listen: bool = Field(False, description="Wait for the device to connect instead of connecting to it.")
    connect_timeout_s: float = Field(
        10.0, gt=0, le=86_400, description="Wait at most this long for the connection."
    )


class TcpLink(DescriptorLink):
    """A TCP connection to the device, as client or listening."""

    Section = TcpSection
    section: TcpSection

    def __init__(self, section: TcpSection, nominal_bps: float | None = None) -> None:
        super().__init__(section, nominal_bps)
        self._connection: socket.socket | None = None
        self._finished = False

    @property
    def label(self) -> str:
        """Host and port as in the profile."""
        return in_words(self.section.host, self.section.port)

    def open(self) -> None:
        """Connect, or wait for the device to connect.

        Raises
        ------
        OpenFailed
            Refused, unresolvable, no answer in time, or the local port is in use.
        Interrupted
        """
        self.close()
        waker = self._begin()
        deadline = monotonic() + self.section.connect_timeout_s
        try:
            connection = self._await(waker, deadline) if self.section.listen else self._reach(waker, deadline)
            tune(connection)
        except BaseException:
            waker.close()
            raise
        self._connection = connection
        self._finished = False
        self._attach(connection.fileno(), connection.fileno())

    def _reach(self, waker: Waker, deadline: float) -> socket.socket:
        failure: OSError | None = None
        for address in resolve(self.section.host, self.section.port, socket.SOCK_STREAM):
            try:
                return connect(address, waker, deadline)
            except OSError as error:
                failure = error
        raise failed_to_connect(self.label, failure or OSError(), self.section.connect_timeout_s)

    def _await(self, waker: Waker, deadline: float) -> socket.socket:
        family, address = resolve(self.section.host, self.section.port, socket.SOCK_STREAM, local=True)[0]
        with socket.socket(family, socket.SOCK_STREAM) as server:
            try:
                server.setblocking(False)
                server.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
                server.bind(address)
                server.listen(1)
            except OSError as error:
                raise failed_to_bind(self.label, error) from None
            waiter = Waiter(waker, server.fileno(), selectors.EVENT_READ)
            try:
                while waiter.wait(deadline - monotonic()):
                    try:
                        return server.accept()[0]
                    except (BlockingIOError, ConnectionAbortedError):
                        continue  # it was there and went away again
            finally:
                waiter.close()
        raise OpenFailed(
            f"no device connected to {self.label} within {self.section.connect_timeout_s:g} s",
            "point the device at this address, or raise `connect_timeout_s`",
        )

    def close(self) -> None:
        """Close the connection; may be called twice."""
        self._detach()
        if self._connection is not None:
            self._connection.close()
            self._connection = None

    def send(self, data: memoryview, timeout: float) -> int:
        """Hand over bytes; see the contract."""
        if self._finished:
            raise SendRefused(f"the sending side to {self.label} is closed already", "open the link again")
        return super().send(data, timeout)

    def drain(self, timeout: float) -> bool:
        """Wait until the peer's system has acknowledged every byte; False at time-out."""
        connection = self._connection
        return connection is None or self._wait_until(lambda: not unsent_bytes(connection.fileno()), timeout)

    def finish_sending(self) -> None:
        """Close the sending side; the device may still send."""
        if self._connection is None or self._finished:
            return
        self._finished = True
        try:
            self._connection.shutdown(socket.SHUT_WR)
        except OSError:
            return  # the peer has gone: `receive` will say so

    def describe(self) -> Mapping[str, str]:
        """Peer and local address."""
        words = {"peer": self.label, "role": "listening" if self.section.listen else "client"}
        if self._connection is not None:
            try:
                words["peer"] = in_words(*self._connection.getpeername()[:2])
                words["local"] = in_words(*self._connection.getsockname()[:2])
            except OSError:
                pass  # the peer has gone
        return words

    def _read(self, buffer: memoryview) -> int:
        assert self._connection is not None
        return self._connection.recv_into(buffer)

    def _write(self, data: memoryview) -> int:
        assert self._connection is not None
        return self._connection.send(data)

    def _ended(self) -> EndOfStream:
        return EndOfStream(
            f"{self.label} closed its side", "see whether the device's program ended before the run did"
        )

    def _broken(self, error: OSError) -> LinkError:
        return broken(self.label, error)
