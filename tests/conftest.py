"""Fixtures that every room's tests share: the command itself, and a device as a process of its own."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

DEVICES = Path(__file__).parent / "devices"


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


@pytest.fixture
def bitassay(tmp_path: Path) -> Callable[..., Finished]:
    """Run the command in a folder of its own, as a user would."""

    def run(*arguments: object, timeout: float = 60, stdin: bytes | None = None) -> Finished:
        done = subprocess.run(
            [sys.executable, "-m", "harness.cli.main", *map(str, arguments)],
            cwd=tmp_path,
            env={k: v for k, v in os.environ.items() if k != "BITASSAY_STORE"} | {"NO_COLOR": "1"},
            capture_output=True,
            timeout=timeout,
            input=stdin,
        )
        return Finished(done.returncode, done.stdout.decode(), done.stderr.decode())

    return run


@pytest.fixture
def device() -> Iterator[Callable[..., int]]:
    """Start a TCP device that misbehaves as it is told; gives its port."""
    running: list[subprocess.Popen[str]] = []

    def start(**options: Any) -> int:
        process = subprocess.Popen(
            [sys.executable, str(DEVICES / "tcp_device.py"), json.dumps(options)],
            stdout=subprocess.PIPE,
            text=True,
        )
        running.append(process)
        assert process.stdout is not None
        return int(process.stdout.readline())

    yield start
    for process in running:
        process.kill()
        process.wait()
        assert process.stdout is not None
        process.stdout.close()


@pytest.fixture
def modem() -> Iterator[Callable[..., str]]:
    """Start a modem over a pseudo-terminal, a socket or RFC 2217; gives what link.port names in a profile."""
    running: list[subprocess.Popen[str]] = []
    urls = {"pty": "{}", "socket": "socket://127.0.0.1:{}", "rfc2217": "rfc2217://127.0.0.1:{}"}

    def start(**options: Any) -> str:
        process = subprocess.Popen(
            [sys.executable, str(DEVICES / "modem.py"), json.dumps(options)],
            stdout=subprocess.PIPE,
            text=True,
        )
        running.append(process)
        assert process.stdout is not None
        return urls[options.get("over", "pty")].format(process.stdout.readline().strip())

    yield start
    for process in running:
        process.kill()
        process.wait()
        assert process.stdout is not None
        process.stdout.close()
