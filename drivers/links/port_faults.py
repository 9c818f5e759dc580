"""What went wrong with a serial port, in words: missing, busy, forbidden, unplugged."""

from __future__ import annotations

import errno
import os
import re
import stat
import sys
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from urllib.parse import urlsplit

from drivers.contract import LinkLost, OpenFailed

_BUSY = (errno.EBUSY, errno.EAGAIN, errno.EWOULDBLOCK)
_GONE = (errno.EIO, errno.ENXIO, errno.ENODEV, errno.EBADF)


def failed_to_open(port: str, error: Exception) -> OpenFailed:
    """Word what pyserial raised while opening."""
    code = _code(error)
    text = str(error)
    if "://" in port:
        return _url_failed(port, code, error)
    if code == errno.ENOENT or "FileNotFoundError" in text:
        return OpenFailed(f"there is no port {port}", _what_is_there())
    if code in _BUSY:
        return busy(port)
    if code in (errno.EACCES, errno.EPERM) or "PermissionError" in text:
        if sys.platform == "win32":
            return busy(port)  # Windows says "access denied" for a port that is open elsewhere
        return OpenFailed(f"no permission to use {port}", _how_to_be_let_in(port))
    if code == errno.ENOTTY or "Inappropriate ioctl" in text:
        return OpenFailed(f"{port} is no serial port", _what_is_there())
    if code in _GONE:
        return OpenFailed(
            f"{port} has a name but no working hardware behind it ({_reason(code, text)})",
            "plug the adapter in again, or choose another port",
        )
    if isinstance(error, ValueError) or code == errno.EINVAL:
        return OpenFailed(
            f"{port} does not take these settings ({_one_line(text)})",
            "check `baud`, `data_bits`, `parity` and `stop_bits` against what the adapter can do",
        )
    return OpenFailed(f"{port} could not be opened ({_reason(code, text)})", _what_is_there())


def busy(port: str, holder: str = "") -> OpenFailed:
    """Word a port that another program has open."""
    who = holder or "another program"
    return OpenFailed(
        f"{port} is in use by {who}", "close it there (a terminal program? a modem manager?), then run again"
    )


def gone(port: str, error: OSError | None) -> LinkLost:
    """Word a port that was open and went away."""
    code = None if error is None else _code(error)
    text = "" if error is None else str(error)
    if "://" in port:
        return LinkLost(
            f"{port} closed the connection" if error is None else f"{port} failed ({_reason(code, text)})",
            "see whether the server at the other end still runs, and reach it again",
        )
    if os.name == "posix" and not os.path.exists(port):
        return LinkLost(
            f"{port} has gone: the adapter was unplugged or lost its power",
            "plug it in again and check the cable; `link.reconnect_s` waits for a port to come back",
        )
    if error is not None and code not in _GONE:
        return LinkLost(f"{port} failed ({_reason(code, text)})", "check the adapter, then run again")
    return LinkLost(
        f"{port} was hung up: unplugged for a moment, or closed at its other end",
        "check the cable, and whether another program uses the port; then run again",
    )


def holder_of(fd: int) -> str | None:
    """Name another process that has the same device open, as far as this user may see (Linux)."""
    if sys.platform != "linux":
        return None
    device = os.fstat(fd).st_rdev
    own = os.getpid()
    for process in _processes():
        if int(process.name) == own:
            continue
        with suppress(OSError):
            for entry in (process / "fd").iterdir():
                with suppress(OSError):
                    found = entry.stat()
                    if stat.S_ISCHR(found.st_mode) and found.st_rdev == device:
                        name = (process / "comm").read_text("utf-8", "replace").strip()
                        return f"{name} (process {process.name})"
    return None


def _processes() -> Iterator[Path]:
    with suppress(OSError):
        for entry in Path("/proc").iterdir():
            if entry.name.isdigit():
                yield entry


def _url_failed(port: str, code: int | None, error: Exception) -> OpenFailed:
    scheme = port.split("://", 1)[0].lower()
    text = str(error)
    if "not known" in text and isinstance(error, ValueError):
        return OpenFailed(
            f"there is no kind of port {scheme}://",
            "use socket://HOST:PORT, rfc2217://HOST:PORT, hwgrep://PATTERN or loop://",
        )
    if scheme == "hwgrep":
        if "no ports found" in text:
            return OpenFailed(f"no port answers to {port}", _what_is_there())
        if code in _BUSY:
            return busy(port)
        if code in (errno.EACCES, errno.EPERM):
            return OpenFailed(f"no permission to use {port}", "ask for the right to use serial ports")
    if code == errno.ECONNREFUSED:
        return OpenFailed(f"{port} refused the connection", "start the server, and check host and port")
    if "expected a string in the form" in text or (scheme in ("socket", "rfc2217") and not _is_whole(port)):
        return OpenFailed(f"{port} is no complete address", f"write it as {scheme}://HOST:PORT")
    if "does not seem to support" in text:
        return OpenFailed(
            f"{port} answers, but not as an RFC 2217 server", "use socket://HOST:PORT for a raw connection"
        )
    return OpenFailed(
        f"{port} could not be opened ({_reason(code, text)})", "check host, port and the server's settings"
    )


def _is_whole(url: str) -> bool:
    """Whether an address names a host and a port."""
    try:
        parts = urlsplit(url)
        return bool(parts.hostname) and parts.port is not None
    except ValueError:
        return False


def _code(error: BaseException) -> int | None:
    """Find the system's error number: pyserial often keeps it only in its words or as the context."""
    seen: BaseException | None = error
    while seen is not None:
        if isinstance(seen, OSError) and seen.errno:
            return seen.errno
        if type(seen).__name__ == "error" and seen.args and isinstance(seen.args[0], int):
            return seen.args[0]  # termios.error
        seen = seen.__context__
    found = re.search(r"\[Errno (\d+)\]", str(error))
    return int(found.group(1)) if found else None


def _reason(code: int | None, text: str) -> str:
    return os.strerror(code).lower() if code else _one_line(text)


def _one_line(text: str) -> str:
    return " ".join(text.split())[:200]


def _what_is_there() -> str:
    from serial.tools.list_ports import comports

    ports = sorted(port.device for port in comports())
    if not ports:
        return "this computer has no serial port: plug the adapter in and see which name it gets"
    return f"there are: {', '.join(ports[:12])}"


def _how_to_be_let_in(port: str) -> str:
    group = ""
    with suppress(ImportError, OSError, KeyError):
        import grp

        group = grp.getgrgid(os.stat(port).st_gid).gr_name
    if group and group != "root":
        return f"join the group {group} (sudo usermod -aG {group} $USER), then log in again"
    return "ask whoever looks after this computer for the right to use it"
