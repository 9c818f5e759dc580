"""Devices for the drivers' tests: separate processes, reached over what they print first."""

from __future__ import annotations

import os
import random
import socket
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from functools import cache
from pathlib import Path

import pytest

DEVICE = Path(__file__).with_name("device.py")
EPHEMERAL = Path("/proc/sys/net/ipv4/ip_local_port_range")

Start = Callable[..., str]


@pytest.fixture(scope="session")
def own_port() -> Callable[[socket.SocketKind], int]:
    """Give a free port of 127.0.0.1 that the system hands to nobody by itself.

    A device that calls such a port again and again, or a test that wants to be refused there, would otherwise
    now and then reach a device of another test that was given the port in the meantime.
    """
    lowest = int(EPHEMERAL.read_text().split()[0]) if EPHEMERAL.exists() else 32768
    worker = int(os.environ.get("PYTEST_XDIST_WORKER", "gw0")[2:]) % 8
    mine = [port for port in range(max(1024, lowest - 12_000), lowest) if port % 8 == worker]
    random.SystemRandom().shuffle(mine)

    def free(kind: socket.SocketKind) -> int:
        while True:
            port = mine.pop()
            with socket.socket(socket.AF_INET, kind) as probe:
                try:
                    probe.bind(("127.0.0.1", port))
                except OSError:
                    continue
            return port

    return free


@pytest.fixture
def device() -> Iterator[Start]:
    """Start device.py with arguments; gives back where it can be reached."""
    with ExitStack() as stack:
        yield lambda *arguments: start(stack, arguments)


@pytest.fixture(scope="module")
def lasting_device() -> Iterator[Start]:
    """The same, but one device serves all tests of a file that ask with the same arguments."""
    with ExitStack() as stack:
        yield cache(lambda *arguments: start(stack, arguments))


def start(stack: ExitStack, arguments: tuple[object, ...]) -> str:
    process = subprocess.Popen(
        [sys.executable, str(DEVICE), *map(str, arguments)], stdout=subprocess.PIPE, text=True
    )
    stack.callback(stop, process)
    assert process.stdout is not None
    return process.stdout.readline().strip()


def stop(process: subprocess.Popen[str]) -> None:
    process.kill()
    process.wait()
    assert process.stdout is not None
    process.stdout.close()
