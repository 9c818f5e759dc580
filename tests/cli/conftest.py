"""Fixtures for what is shown: assessments and progress made of real seconds, through the real accumulator."""

from __future__ import annotations

import itertools
import json
import socket
import subprocess
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from harness.assess.accumulate import Accumulator
from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.point import Facts, assess_point
from harness.assess.requirement import Requirement
from harness.bench.outlook import outlook_of
from harness.bench.run import Progress
from harness.bench.terms import StopRules
from harness.record import Event, Second, Tally

BITS = 48_000  # of a second
SECOND_NS = 10**9
START = 1_788_250_000 * SECOND_NS  # some morning in 2026


class Making:
    """Makes what the view is shown from seconds: a number of errors each, or what else they were.

    "silent": nothing came; "unaligned"; "slip": a byte was lost.
    """

    start = START

    def second(self, index: int, what: int | str, first_bit: int) -> Second:
        bits = 0 if what == "silent" else BITS
        errors = 0 if isinstance(what, str) else what
        slipped = what == "slip"
        aligned = what != "unaligned"
        positions = first_bit + np.linspace(0, BITS - 1, errors).astype(np.int64)
        lost = np.arange(errors) % 2 == 0
        ones = int(np.count_nonzero(lost))
        compared = bits if aligned else 0
        return Second(
            point=0,
            sitting=0,
            index=index,
            at=START + index * SECOND_NS,
            duration_ns=SECOND_NS,
            sent=BITS,
            tally=Tally(bits, compared, bits - compared, errors, ones, errors - ones),
            first_bit=first_bit,
            positions=positions,
            ones_lost=lost,
            stretches=((bits, aligned),) if bits else (),
            slips=int(slipped),
            bits_lost=8 * slipped,
        )

    def accumulator(
        self, seconds: Sequence[int | str], events: Sequence[Event], requirement: Requirement | None
    ) -> Accumulator:
        acc = Accumulator(requirement, float(BITS))
        for event in events:
            acc.note(event)
        first = 0
        for index, what in enumerate(seconds):
            made = self.second(index, what, first)
            first += made.tally.received
            acc.add(made)
        return acc

    def point(
        self,
        acc: Accumulator,
        requirement: Requirement | None,
        values: dict[str, float] | None = None,
        **more: Any,
    ) -> PointAssessment:
        about: dict[str, Any] = {
            "values": values or {},
            "status": "running",
            "ended_by": None,
            "started": START,
            "ended": None,
            "after_decision": Tally(),
            "pattern": "PRBS15",
            "bit_order": "lsb",
            "rate_bps": float(BITS),
            "requirement": requirement,
        }
        return assess_point(acc, Facts(**(about | more)), quick=about["status"] == "running" and not more)

    def progress(
        self,
        seconds: Sequence[int | str] = (),
        events: Sequence[Event] = (),
        requirement: Requirement | None = None,
        stop: StopRules | None = None,
        **more: Any,
    ) -> Progress:
        acc = self.accumulator(seconds, events, requirement)
        fields: dict[str, Any] = {
            "run": "01a23131-8b67-7daf-abad-9efac13d5de1",
            "title": "Wader-9 acceptance, 48 kbit/s",
            "device": {"model": "Wader-9", "serial_number": "0031"},
            "point": self.point(acc, requirement),
            "longest_bits": acc.plan.longest_bits if acc.plan else None,
            "stop": stop or StopRules(),
            "elapsed_s": float(len(seconds)),
            "outlook": outlook_of(acc, requirement),
        }
        return Progress(**(fields | more))

    def assessment(
        self,
        seconds: Sequence[int | str],
        events: Sequence[Event] = (),
        requirement: Requirement | None = None,
        *,
        status: str = "completed",
        ended_by: str = "plan",
        **more: Any,
    ) -> Assessment:
        acc = self.accumulator(seconds, events, requirement)
        ended = START + len(seconds) * SECOND_NS
        p = self.point(acc, requirement, status=status, ended_by=ended_by, ended=ended)
        fields: dict[str, Any] = {
            "run": "01a23131-8b67-7daf-abad-9efac13d5de1",
            "title": "Wader-9 acceptance, 48 kbit/s",
            "command": "measure",
            "status": status,
            "ended_by": ended_by,
            "started": START,
            "ended": ended,
            "device": {"model": "Wader-9", "serial_number": "0031"},
            "verdict": p.verdict,
            "reasons": p.reasons,
            "whole": p,
            "points": [p],
        }
        return Assessment(**(fields | more))

    def event(self, kind: str, text: str, second: float = 0.0, bit: int | None = None) -> Event:
        data = {"bits": -8, "modulo": None} if kind == "slip" else {}
        return Event(kind, bit, text, START + int(second * SECOND_NS), data)


@pytest.fixture
def making(monkeypatch: pytest.MonkeyPatch) -> Making:
    return Making()


@pytest.fixture
def utc(monkeypatch: pytest.MonkeyPatch) -> Callable[[], None]:
    """Let the local time of day be UTC."""
    import time

    monkeypatch.setenv("TZ", "UTC")
    time.tzset()
    return time.tzset


@dataclass(frozen=True)
class AttenuatedDevice:
    """A device behind a SCPI attenuator, as a process of its own that logs what the attenuator is told."""

    scpi_port: int
    echo_port: int
    log: Path
    process: subprocess.Popen[str]

    def commands(self) -> list[tuple[float, str]]:
        """Every line that the attenuator got, with the time of day."""
        lines = [line.split(" ", 1) for line in self.log.read_text().splitlines()]
        return [(float(at), words) for at, words in lines]

    def settings(self) -> list[float]:
        """Every value that it was set to, in order."""
        return [float(words[4:]) for _, words in self.commands() if words.startswith("ATT ")]

    def pretend(self, identity: str) -> None:
        """Let another attenuator answer from now on."""
        with socket.create_connection(("127.0.0.1", self.scpi_port)) as connection:
            connection.sendall(f"PRETEND {identity}\n".encode())
            assert connection.recv(100)

    def profile(
        self, sweep: str, *, stop: str = "bits = 400_000", more: str = "", link: str = "", **keys: Any
    ) -> str:
        """Write a profile; `keys` change the attenuator's section, None drops a key."""
        section: dict[str, Any] = {
            "driver": "scpi",
            "resource": f"TCPIP::127.0.0.1::{self.scpi_port}::SOCKET",
            "backend": "@py",
            "quantity": "attenuation",
            "unit": "dB",
            "limits": [0, 80],
            "safe": 80,
            "set": "ATT {value:.1f}",
            "read": "ATT?",
            "expect_identity": "SA-95",
            "error_queue": "SYST:ERR?",
            "tolerance": 0.05,
            "timeout_s": 10,
        }
        lines = [f"{k} = {json.dumps(v)}" for k, v in (section | keys).items() if v is not None]
        attenuator = "\n".join(lines)
        return f"""
title = "Wader-9, invented: sensitivity at the bench"
[device]
model = "Wader-9"
serial_number = "0031"
[link]
driver = "tcp"
host = "127.0.0.1"
port = {self.echo_port}
rate_bps = 1_000_000
max_in_flight_bits = 800_000
drain_s = 2
{link}
[stop]
{stop}
[instruments.attenuator]
{attenuator}
{sweep}
{more}
"""


@pytest.fixture
def attenuated(tmp_path: Path, program: Callable[..., Any]) -> Callable[..., AttenuatedDevice]:
    """Start a device behind a SCPI attenuator, with the options of its program."""
    logs = (tmp_path / f"attenuator-{number}.log" for number in itertools.count())

    def start(**options: Any) -> AttenuatedDevice:
        log = next(logs)
        log.touch()
        process = program("attenuated_device.py", log=str(log), **options)
        scpi, echo = (int(word) for word in process.stdout.readline().split())
        return AttenuatedDevice(scpi, echo, log, process)

    return start


@pytest.fixture
def bridge(program: Callable[..., Any]) -> Callable[..., list[int]]:
    """Start a device with two ports, with the options of its program; gives the ports."""
    return lambda **options: [int(port) for port in program("bridge.py", **options).stdout.readline().split()]
