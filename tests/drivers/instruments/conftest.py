"""A real attenuator for the instruments' tests: a separate process with a log of every command."""

from __future__ import annotations

import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

import pytest

PROGRAM = Path(__file__).with_name("attenuator.py")


@dataclass(frozen=True)
class Bench:
    """An attenuator that runs: where it is, and what it was told."""

    where: str  # port, or name of a terminal
    log: Path
    process: subprocess.Popen[str]

    @property
    def resource(self) -> str:
        if self.where.isdigit():
            return f"TCPIP::127.0.0.1::{self.where}::SOCKET"
        return f"ASRL{self.where}::INSTR"

    def commands(self) -> list[str]:
        """Every line that it received, in order."""
        return [line.partition(" ")[2] for line in self.log.read_text().splitlines()]

    def settings(self) -> list[float]:
        return [float(line[4:]) for line in self.commands() if line.startswith("ATT ")]

    def fault(self, name: str, value: object) -> None:
        """Turn a fault on while it runs."""
        command = f"FAULT {name} {value}".strip()
        told = self.commands().count(command)
        with socket.create_connection(("127.0.0.1", int(self.where))) as connection:
            connection.sendall(f"{command}\n".encode())
            ends = time.monotonic() + 30
            while self.commands().count(command) == told:
                assert time.monotonic() < ends, "the attenuator did not take the fault"
                time.sleep(0.01)

    def keys(self, **changed: object) -> dict[str, object]:
        """Its section in a profile."""
        keys: dict[str, object] = {
            "resource": self.resource,
            "backend": "@py",
            "quantity": "attenuation",
            "unit": "dB",
            "limits": [0, 95],
            "safe": 95,
            "set": "ATT {value:.1f}",
            "read": "ATT?",
            "error_queue": "SYST:ERR?",
            "tolerance": 0.05,
            "timeout_s": 1.0,
        }
        return {key: value for key, value in (keys | changed).items() if value is not None}


StartAttenuator = Callable[..., Bench]


@pytest.fixture
def attenuator(tmp_path: Path) -> Iterator[StartAttenuator]:
    """Start an attenuator, with options of its program as keywords."""
    with ExitStack() as stack:

        def start(**options: object) -> Bench:
            log = tmp_path / f"attenuator-{len(list(tmp_path.iterdir()))}.log"
            arguments = [
                f"--{name.replace('_', '-')}" + ("" if value is True else f"={value}")
                for name, value in options.items()
            ]
            process = subprocess.Popen(
                [sys.executable, str(PROGRAM), f"--log={log}", *arguments], stdout=subprocess.PIPE, text=True
            )
            stack.callback(stop, process)
            assert process.stdout is not None
            return Bench(process.stdout.readline().strip(), log, process)

        yield start


def stop(process: subprocess.Popen[str]) -> None:
    process.kill()
    process.wait()
    assert process.stdout is not None
    process.stdout.close()
