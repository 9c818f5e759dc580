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

# As the command itself does: threads for tiny matrices only spin, above all where several tests run at once.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

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
