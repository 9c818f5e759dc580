"""The UDP link: datagrams to and from the device; a lost datagram is bytes lost."""

from __future__ import annotations

import errno
import socket
import struct
import sys
from collections.abc import Mapping

from pydantic import Field, model_validator

from drivers.contract import LinkError, LinkLost, OpenFailed, Section, SendRefused, Traits
from drivers.links.descriptor import DescriptorLink, unsent_bytes
from drivers.links.sockets import broken, failed_to_bind, failed_to_connect, in_words, resolve

_RECEIVE_BUFFER_BYTES = 4 << 20  # asked for; the system may give less
_LARGEST_DATAGRAM_BYTES = 65_507
_SO_RXQ_OVFL = 40  # Linux, asm-generic/socket.h: a count of dropped datagrams comes with each one received


class UdpSection(Section):
    """Keys of a UDP link."""

    host: str | None = Field(
        None,
        min_length=1,
        description="The device's name or address; left out: whoever sends the first datagram is the device.",
    )
    port: int | None = Field(
        None, ge=1, le=65535, description="The device's port; given together with `host`."
    )
    local_host: str = Field("", description="Local address to receive at; empty: all of this computer's.")
    local_port: int = Field(0, ge=0, le=65535, description="Local port; 0: any free one (needs `host`).")
    message_bytes: int = Field(
        1024,
        ge=1,
        le=_LARGEST_DATAGRAM_BYTES,
        description="Bytes in a datagram sent; over about 1 400 the network may cut it up.",
    )

    @model_validator(mode="after")
    def _complete(self) -> UdpSection:
        if (self.host is None) != (self.port is None):
            raise ValueError("`host` and `port` belong together: give both, or neither")
        if self.host is None and not self.local_port:
            raise ValueError("without `host`, `local_port` must say where the device sends to")
        return self


class UdpLink(DescriptorLink):
    """Datagrams to and from one peer."""

    Section = UdpSection
    section: UdpSection

    def __init__(self, section: UdpSection, nominal_bps: float | None = None) -> None:
        super().__init__(section, nominal_bps)
        self.traits = Traits(message_bytes=section.message_bytes, holds_back=False)
        self._socket: socket.socket | None = None
        self._connected = False
        self._spill = bytearray()  # the end of a datagram that was longer than the caller's buffer
        self._whole = bytearray(1 << 16)
        self._dropped = 0

    @property
    def label(self) -> str:
        """Host and port of the device, or the local ones while it is not known."""
        if self.section.host is not None and self.section.port is not None:
            return in_words(self.section.host, self.section.port)
        return in_words(self.section.local_host or "0.0.0.0", self.section.local_port)

    def open(self) -> None:
        """Take the local port and note the device's address; nothing is sent.

        Raises
        ------
        OpenFailed
            Unresolvable, or the local port is in use.
        """
        self.close()
        waker = self._begin()
        try:
            self._open()
        except BaseException:
            waker.close()
            raise

    def _open(self) -> None:
        section = self.section
        peer = None
        family = socket.AF_INET
        if section.host is not None and section.port is not None:
            family, peer = resolve(section.host, section.port, socket.SOCK_DGRAM)[0]
        local = None
        if section.local_host:
            local = next(
                (
                    address
                    for found, address in resolve(
                        section.local_host, section.local_port, socket.SOCK_DGRAM, local=True
                    )
                    if peer is None or found == family
                ),
                None,
            )
            if local is None:
                raise OpenFailed(
                    f"`local_host` {section.local_host} and {self.label} are not of one address family",
                    "give both as IPv4, or both as IPv6 addresses",
                )
            family = socket.AF_INET6 if ":" in local[0] else socket.AF_INET
        elif section.local_port:
            local = ("::" if family == socket.AF_INET6 else "0.0.0.0", section.local_port)
        self._socket = self._make(family, local, peer)
        self._connected = peer is not None
        self._spill.clear()
        self._dropped = 0
        self._attach(self._socket.fileno(), self._socket.fileno())

    def _make(
        self,
        family: socket.AddressFamily,
        local: tuple[str, int] | tuple[str, int, int, int] | None,
        peer: tuple[str, int] | tuple[str, int, int, int] | None,
    ) -> socket.socket:
        made = socket.socket(family, socket.SOCK_DGRAM)
        try:
            made.setblocking(False)
            made.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, _RECEIVE_BUFFER_BYTES)
            if sys.platform == "linux":
                made.setsockopt(socket.SOL_SOCKET, _SO_RXQ_OVFL, 1)
            if local is not None:
                try:
                    made.bind(local)
                except OSError as error:
                    raise failed_to_bind(in_words(local[0], local[1]), error) from None
            if peer is not None:
                try:
                    made.connect(peer)
                except OSError as error:
                    raise failed_to_connect(self.label, error, 0) from None
        except BaseException:
            made.close()
            raise
        return made

    def close(self) -> None:
        """Give the port back; may be called twice."""
        self._detach()
        if self._socket is not None:
            self._socket.close()
            self._socket = None

    def send(self, data: memoryview, timeout: float) -> int:
        """Send one datagram of at most `message_bytes`, or nothing; see the contract."""
        if data.nbytes > self.section.message_bytes:
            raise SendRefused(
                f"{data.nbytes} bytes do not fit into one datagram of {self.section.message_bytes}",
                "send at most `message_bytes` at a time",
            )
        if not self._connected and self._writing is not None:
            self._wait_until(lambda: self._connected, timeout)  # there is nobody to send to yet
            timeout = 0.0
        return super().send(data, timeout)

    def drain(self, timeout: float) -> bool:
        """Wait until this computer has sent every datagram; False at time-out."""
        made = self._socket
        return made is None or self._wait_until(lambda: not unsent_bytes(made.fileno()), timeout)

    def health(self) -> Mapping[str, int]:
        """``buffer_overrun``: datagrams that this computer dropped; known once another one comes (Linux)."""
        return {"buffer_overrun": self._dropped} if sys.platform == "linux" else {}

    def describe(self) -> Mapping[str, str]:
        """Peer, local address, datagram size."""
        words = {"peer": self.label, "message_bytes": str(self.section.message_bytes)}
        if self._socket is not None:
            words["local"] = in_words(*self._socket.getsockname()[:2])
            if self._connected:
                words["peer"] = in_words(*self._socket.getpeername()[:2])
            else:
                words["peer"] = "nobody yet"
        return words

    def _read(self, buffer: memoryview) -> int:
        assert self._socket is not None
        target = buffer.cast("B")
        if self._spill:
            count = min(len(self._spill), len(target))
            target[:count] = self._spill[:count]
            del self._spill[:count]
            return count
        whole = target if len(target) >= len(self._whole) else memoryview(self._whole)
        size = 0
        while not size:  # an empty datagram carries no bits, and is no end either
            size, extra, _, sender = self._socket.recvmsg_into([whole], socket.CMSG_SPACE(4))
            self._note_drops(extra)
            if not self._connected:
                self._socket.connect(sender)
                self._connected = True
        count = min(size, len(target))
        if whole is not target:
            target[:count] = whole[:count]
            self._spill += whole[count:size]
        return count

    def _note_drops(self, extra: list[tuple[int, int, bytes]]) -> None:
        for level, kind, data in extra:
            if level == socket.SOL_SOCKET and kind == _SO_RXQ_OVFL:
                self._dropped = struct.unpack("I", data[:4])[0]

    def _write(self, data: memoryview) -> int:
        assert self._socket is not None
        if not self._connected:
            raise BlockingIOError
        try:
            return self._socket.send(data)
        except OSError as error:
            if error.errno == errno.ENOBUFS:
                raise BlockingIOError from None
            raise

    def _ended(self) -> LinkError:
        return LinkLost(f"the datagrams of {self.label} ended", "run again")  # datagrams have no end

    def _broken(self, error: OSError) -> LinkError:
        if error.errno == errno.ECONNREFUSED:
            return LinkLost(
                f"nobody receives datagrams at {self.label}",
                "start the device's side first, and check `host` and `port`",
            )
        if error.errno == errno.EMSGSIZE:
            return SendRefused(
                f"a datagram of {self.section.message_bytes} bytes is too long for the way to {self.label}",
                "choose a smaller `message_bytes`",
            )
        return broken(self.label, error)
