"""What links over sockets share: addresses, connecting, the send queue, and errors in words."""

from __future__ import annotations

import errno
import os
import selectors
import socket
from time import monotonic

from drivers.contract import LinkError, LinkLost, OpenFailed
from drivers.links.descriptor import Waiter, Waker

Address = tuple[socket.AddressFamily, "tuple[str, int] | tuple[str, int, int, int]"]


def in_words(host: str, port: int) -> str:
    """Host and port, an IPv6 address in brackets."""
    return f"[{host}]:{port}" if ":" in host else f"{host}:{port}"


def resolve(host: str, port: int, kind: socket.SocketKind, *, local: bool = False) -> list[Address]:
    """Addresses that a name stands for; raises `OpenFailed`."""
    flags = socket.AI_PASSIVE if local else 0
    try:
        found = socket.getaddrinfo(host, port, type=kind, flags=flags)
    except (OSError, UnicodeError) as error:
        reason = error.strerror if isinstance(error, OSError) and error.strerror else "not a name"
        raise OpenFailed(
            f"the host name in {in_words(host, port)} cannot be resolved ({reason.lower()})",
            "correct `host`, or give the address in numbers",
        ) from None
    return [(socket.AddressFamily(family), address) for family, _, _, _, address in found]  # type: ignore[misc]


def connect(address: Address, waker: Waker, deadline: float) -> socket.socket:
    """Connect a non-blocking TCP socket; raises `OSError`, `TimeoutError`, `Interrupted`."""
    connection = socket.socket(address[0], socket.SOCK_STREAM)
    try:
        connection.setblocking(False)
        code = connection.connect_ex(address[1])
        if code in (errno.EINPROGRESS, errno.EWOULDBLOCK):
            waiter = Waiter(waker, connection.fileno(), selectors.EVENT_WRITE)
            try:
                if not waiter.wait(deadline - monotonic()):
                    raise TimeoutError(errno.ETIMEDOUT, "no answer")
            finally:
                waiter.close()
            code = connection.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
        if code:
            raise OSError(code, errno.errorcode.get(code, str(code)))
        return connection
    except BaseException:
        connection.close()
        raise


def tune(connection: socket.socket) -> None:
    """Send small pieces at once, and notice a peer that has gone without a word."""
    connection.setblocking(False)
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    connection.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
    for name, value in (("TCP_KEEPIDLE", 10), ("TCP_KEEPINTVL", 5), ("TCP_KEEPCNT", 3)):
        if hasattr(socket, name):
            connection.setsockopt(socket.IPPROTO_TCP, getattr(socket, name), value)


def failed_to_connect(label: str, error: OSError, seconds: float) -> OpenFailed:
    """Word a connection that did not come about."""
    code = error.errno
    if code == errno.ECONNREFUSED:
        return OpenFailed(
            f"{label} refused the connection",
            "start the device's side first, and check `host` and `port`",
        )
    if isinstance(error, TimeoutError) or code == errno.ETIMEDOUT:
        return OpenFailed(
            f"{label} did not answer within {seconds:g} s",
            "check the cable, the address and a firewall between, or raise `connect_timeout_s`",
        )
    if code in (errno.EHOSTUNREACH, errno.ENETUNREACH, errno.EADDRNOTAVAIL):
        return OpenFailed(
            f"there is no way to {label} ({reason(error)})",
            "check the cable and this computer's network settings",
        )
    return OpenFailed(f"{label} could not be reached ({reason(error)})", "check `host` and `port`")


def failed_to_bind(label: str, error: OSError) -> OpenFailed:
    """Word a local port that could not be taken."""
    if error.errno == errno.EADDRINUSE:
        return OpenFailed(
            f"{label} is in use by another program",
            "stop that program, or choose another port",
        )
    if error.errno in (errno.EACCES, errno.EPERM):
        return OpenFailed(
            f"no permission to take {label}",
            "choose a port over 1023, or ask for the right to use this one",
        )
    if error.errno == errno.EADDRNOTAVAIL:
        return OpenFailed(
            f"{label} is no address of this computer",
            "give one of its own addresses, or 0.0.0.0 for all of them",
        )
    return OpenFailed(f"{label} could not be taken ({reason(error)})", "check the local host and port")


def broken(label: str, error: OSError) -> LinkError:
    """Word a connection that came to grief."""
    code = error.errno
    if code in (errno.ECONNRESET, errno.EPIPE, errno.ECONNABORTED):
        return LinkLost(
            f"{label} broke the connection off ({reason(error)})",
            "see whether the device restarted or its program ended; then run again",
        )
    if isinstance(error, TimeoutError) or code in (errno.ETIMEDOUT, errno.EHOSTUNREACH, errno.ENETUNREACH):
        return LinkLost(
            f"{label} no longer answers ({reason(error)})",
            "check the cable and the device's power; then run again",
        )
    return LinkLost(f"the connection to {label} failed ({reason(error)})", "check the device; then run again")


def reason(error: OSError) -> str:
    """Give the operating system's word for an error, in lower case."""
    return (os.strerror(error.errno) if error.errno else str(error) or type(error).__name__).lower()
