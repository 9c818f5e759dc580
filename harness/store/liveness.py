"""Whether the process that writes a run is still there, so that a run can be called cut."""

from __future__ import annotations

import os
import platform
import socket
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

SILENCE_NS = 120 * 10**9  # a process elsewhere that has not committed for so long is taken to be gone


def this_host() -> dict[str, Any]:
    """Say who writes: host, process and system, as `Sitting.host` keeps it."""
    pid = os.getpid()
    return {
        "name": socket.gethostname(),
        "pid": pid,
        "boot": _boot(),
        "process_started": _process_started(pid),
        "namespace": _namespace(),
        "python": platform.python_version(),
        "platform": platform.platform(),
    }


def gone(host: Mapping[str, Any], last_commit: int, now: int) -> bool:
    """Whether a sitting's process is gone.

    On the same host since the same start-up the process itself is asked for: its number, and when it
    began, since numbers are used again. Elsewhere only its silence tells.

    Parameters
    ----------
    host
        What `this_host` said in that process.
    last_commit, now
        UTC, ns.
    """
    here = (socket.gethostname(), _boot(), _namespace())
    there = (host.get("name"), host.get("boot"), host.get("namespace"))
    pid = host.get("pid")
    if here == there and here[1] and isinstance(pid, int) and os.name == "posix":
        return not _alive(pid) or _process_started(pid) != host.get("process_started")
    return now - last_commit > SILENCE_NS


def _alive(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except (PermissionError, OverflowError):
        return True
    return _state(pid) != "Z"  # a zombie writes nothing any more


def _read(path: str) -> str:
    try:
        return Path(path).read_text()
    except OSError:
        return ""


def _stat(pid: int) -> list[str]:
    # The name in parentheses may hold spaces and parentheses of its own.
    return _read(f"/proc/{pid}/stat").rpartition(")")[2].split()


def _state(pid: int) -> str:
    fields = _stat(pid)
    return fields[0] if fields else ""


def _process_started(pid: int) -> int | None:
    """Give when a process began, in the system's clock ticks since start-up; None where unknown."""
    fields = _stat(pid)
    return int(fields[19]) if len(fields) > 19 else None


def _boot() -> str | None:
    if sys.platform == "linux":
        return _read("/proc/sys/kernel/random/boot_id").strip() or None
    return None


def _namespace() -> str | None:
    try:
        return os.readlink("/proc/self/ns/pid")
    except OSError:
        return None
