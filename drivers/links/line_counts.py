"""What the operating system counts at a serial port (framing, parity, overrun, break) and its modem lines."""

from __future__ import annotations

import struct
import sys
from collections.abc import Mapping
from typing import Any

# struct serial_icounter_struct of linux/serial.h: twenty ints, the last nine reserved.
_TIOCGICOUNT = 0x545D
_FIELDS = (
    "cts_changes",
    "dsr_changes",
    "ring_changes",
    "dcd_changes",
    "received",
    "sent",
    "framing",
    "overrun",
    "parity",
    "break",
    "buffer_overrun",
)
_TOLD = ("framing", "parity", "overrun", "break", "buffer_overrun", "cts_changes", "dcd_changes")


def port_counts(fd: int) -> dict[str, int] | None:
    """Read the driver's own counts; None where it keeps none, as pseudo-terminals and many adapters do."""
    if sys.platform != "linux":
        return None
    import fcntl

    room = bytearray(80)
    try:
        fcntl.ioctl(fd, _TIOCGICOUNT, room)
    except OSError:
        return None
    return dict(zip(_FIELDS, struct.unpack_from("11i", room), strict=True))


def modem_lines(port: Any) -> dict[str, bool]:
    """Read CTS, DCD, DSR and RI of a pyserial port; empty where it has none."""
    try:
        return {"CTS": bool(port.cts), "DCD": bool(port.cd), "DSR": bool(port.dsr), "RI": bool(port.ri)}
    except (OSError, NotImplementedError, AttributeError, TypeError):
        return {}


class LineCounts:
    """Counts since a port was opened.

    Where the driver of the port keeps counts, they are its own. Elsewhere only changes of CTS and DCD are
    counted, and of these only what two looks one after the other show.
    """

    def __init__(self, fd: int | None, lines: Mapping[str, bool]) -> None:
        self._fd = fd
        self._first = port_counts(fd) if fd is not None else None
        self._seen = lines
        self._changes: dict[str, int] = {}

    def look(self, lines: Mapping[str, bool]) -> Mapping[str, int]:
        """Counts up to now, with the lines as they are now."""
        now = port_counts(self._fd) if self._first is not None and self._fd is not None else None
        if now is not None and self._first is not None:
            # The driver's counters are 32 bits wide and wrap.
            return {name: (now[name] - self._first[name]) & 0xFFFFFFFF for name in _TOLD}
        for name in ("CTS", "DCD"):
            if name in lines:
                changed = lines[name] != self._seen.get(name, lines[name])
                key = f"{name.lower()}_changes"
                self._changes[key] = self._changes.get(key, 0) + changed
        self._seen = lines or self._seen
        return dict(self._changes)
