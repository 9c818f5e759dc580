"""Fixtures that every room's tests share: the command itself, and a device as a process of its own."""

from __future__ import annotations

import contextlib
import json
import os
import random
import select
import signal
import socket
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

# As the command itself does: threads for tiny matrices only spin, above all where several tests run at once.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

DEVICES = Path(__file__).parent / "devices"
EPHEMERAL = Path("/proc/sys/net/ipv4/ip_local_port_range")


@dataclass(frozen=True)
class Finished:
    """A command that has ended."""

    status: int
    out: str
    err: str

    @property
    def json(self) -> dict[str, Any]:
        """Its one JSON object."""
        return json.loads(self.out)


class ReadyCommand:
    """Gives commands to a process that has read the program already (see devices/ready_command.py)."""

    def __init__(self) -> None:
        self._requests, theirs = socket.socketpair(socket.AF_UNIX, socket.SOCK_DGRAM)
        with theirs:
            self._process = subprocess.Popen(
                [sys.executable, str(DEVICES / "ready_command.py"), str(theirs.fileno())],
                pass_fds=[theirs.fileno()],
            )

    def run(
        self, arguments: list[str], folder: Path, environment: dict[str, str], stdin: bytes, timeout: float
    ) -> Finished:
        """Run one command; as `subprocess.run` does, it is killed and TimeoutExpired raised when it takes longer."""
        with contextlib.ExitStack() as open_files:
            given, out, err = (open_files.enter_context(tempfile.TemporaryFile()) for _ in range(3))
            given.write(stdin)
            given.seek(0)
            told, theirs = os.pipe()
            news = open_files.enter_context(os.fdopen(told, "rb", buffering=0))
            request = {"arguments": arguments, "folder": str(folder), "environment": environment}
            files = [given.fileno(), out.fileno(), err.fileno(), theirs]
            socket.send_fds(self._requests, [json.dumps(request).encode()], files)
            os.close(theirs)
            process = int(news.readline())
            if not select.select([news], [], [], timeout)[0]:
                os.kill(process, signal.SIGKILL)
                raise subprocess.TimeoutExpired(arguments, timeout)
            status = int(news.readline())
            for file in (out, err):
                file.seek(0)
            return Finished(status, out.read().decode(), err.read().decode())

    def close(self) -> None:
        """End the process."""
        self._requests.send(b"")
        self._requests.close()
        self._process.wait()


@pytest.fixture(scope="session")
def ready_command() -> Iterator[ReadyCommand | None]:
    """One for all tests; None where a process cannot be forked."""
    if not hasattr(os, "fork"):
        yield None
        return
    with contextlib.closing(ReadyCommand()) as ready:
        yield ready


@pytest.fixture
def bitassay(tmp_path: Path, ready_command: ReadyCommand | None) -> Callable[..., Finished]:
    """Run the command in a folder of its own, as a user would."""

    def run(*arguments: object, timeout: float = 60, stdin: bytes = b"") -> Finished:
        words = list(map(str, arguments))
        environment = {k: v for k, v in os.environ.items() if k != "BITASSAY_STORE"} | {"NO_COLOR": "1"}
        if ready_command is not None:
            return ready_command.run(words, tmp_path, environment, stdin, timeout)
        done = subprocess.run(
            [sys.executable, "-m", "harness.cli.main", *words],
            cwd=tmp_path,
            env=environment,
            capture_output=True,
            timeout=timeout,
            input=stdin,
        )
        return Finished(done.returncode, done.stdout.decode(), done.stderr.decode())

    return run


@pytest.fixture
def program() -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Start a program of tests/devices with its options; its first line says where to reach it."""
    running: list[subprocess.Popen[str]] = []

    def start(name: str, /, **options: Any) -> subprocess.Popen[str]:
        process = subprocess.Popen(
            [sys.executable, str(DEVICES / name), json.dumps(options)], stdout=subprocess.PIPE, text=True
        )
        running.append(process)
        return process

    yield start
    for process in running:
        process.kill()
        process.wait()
        assert process.stdout is not None
        process.stdout.close()


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
def device(program: Callable[..., Any]) -> Callable[..., int]:
    """Start a TCP device that misbehaves as it is told; gives its port."""
    return lambda **options: int(program("tcp_device.py", **options).stdout.readline())


@pytest.fixture
def modem(program: Callable[..., Any]) -> Callable[..., str]:
    """Start a modem over a pseudo-terminal, a socket or RFC 2217; gives what link.port names in a profile."""
    urls = {"pty": "{}", "socket": "socket://127.0.0.1:{}", "rfc2217": "rfc2217://127.0.0.1:{}"}

    def start(**options: Any) -> str:
        where = program("modem.py", **options).stdout.readline().strip()
        return urls[options.get("over", "pty")].format(where)

    return start
