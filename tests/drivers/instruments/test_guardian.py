"""A killed run's attenuator is at its safe value soon after; after a goodbye nothing is sent."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import pytest

from drivers.contract import DriverError
from drivers.guardian import Guardian, last_words, wait_for_guardian

Start = Callable[..., Any]

# A run that sets its attenuator to 20 dB and then does as it was told.
RUN = """
import json, sys, time
from threading import Event
from drivers.guardian import Guardian
from drivers.registry import instrument_class

described, lock, then = json.loads(sys.argv[1]), sys.argv[2], sys.argv[3]
guardian = Guardian.start(described, lock)
kind = instrument_class("scpi")
instrument = kind(kind.Section.model_validate(described["attenuator"][1]))
instrument.open()
instrument.apply(20.0, Event())
print(guardian._process.pid, flush=True)
if then == "wait":
    time.sleep(600)
if then == "crash":
    raise RuntimeError("a defect")
if then == "end":
    instrument.make_safe()
    guardian.dismiss()
"""

StartRun = Callable[..., tuple[subprocess.Popen[str], int]]


@pytest.fixture
def run() -> Iterator[StartRun]:
    """Start a run; gives back its process and its guardian's id."""
    with ExitStack() as stack:

        def start(described: object, lock: Path, then: str) -> tuple[subprocess.Popen[str], int]:
            process = subprocess.Popen(
                [sys.executable, "-c", RUN, json.dumps(described), str(lock), then],
                stdout=subprocess.PIPE,
                stderr=subprocess.DEVNULL,
                text=True,
                start_new_session=True,
            )
            stack.enter_context(process)
            stack.callback(process.kill)
            assert process.stdout is not None
            return process, int(process.stdout.readline())

        yield start


def test_a_killed_run_leaves_its_attenuator_safe(attenuator: Start, run: StartRun, tmp_path: Path) -> None:
    bench, lock = attenuator(), tmp_path / "guardian.log"
    process, guardian = run({"attenuator": ["scpi", bench.keys()]}, lock, "wait")
    assert bench.settings() == [20.0]
    assert not wait_for_guardian(lock, 0)

    # Nothing of the run's reaches it: another session, and no output of the run's is held open.
    assert os.getsid(guardian) == guardian != os.getsid(process.pid)
    for descriptor in (1, 2):
        assert os.readlink(f"/proc/{guardian}/fd/{descriptor}") == os.devnull
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        os.kill(guardian, number)

    os.killpg(process.pid, signal.SIGKILL)
    assert wait_for_guardian(lock, 30)
    assert bench.settings() == [20.0, 95.0]
    words = last_words(lock)
    assert "left without a goodbye" in words[1]
    assert words[2].endswith("attenuator: safe at 95.0")
    assert words[3].endswith("done")


def test_a_run_that_crashes_leaves_it_safe_too(attenuator: Start, run: StartRun, tmp_path: Path) -> None:
    bench, lock = attenuator(), tmp_path / "guardian.log"
    process, _ = run({"attenuator": ["scpi", bench.keys()]}, lock, "crash")
    process.wait(30)
    assert wait_for_guardian(lock, 30)
    assert bench.settings() == [20.0, 95.0]


def test_after_a_goodbye_nothing_is_sent(attenuator: Start, run: StartRun, tmp_path: Path) -> None:
    bench, lock = attenuator(), tmp_path / "guardian.log"
    process, _ = run({"attenuator": ["scpi", bench.keys()]}, lock, "end")
    assert process.wait(30) == 0
    assert wait_for_guardian(lock, 0)
    assert bench.settings() == [20.0, 95.0]  # the run's own
    assert last_words(lock)[-1].endswith("dismissed")


def test_it_tries_again_when_an_instrument_does_not_answer_at_first(
    attenuator: Start, run: StartRun, tmp_path: Path
) -> None:
    bench, lock = attenuator(), tmp_path / "guardian.log"
    process, _ = run({"attenuator": ["scpi", bench.keys(timeout_s=0.3)]}, lock, "wait")
    bench.fault("stuck", "yes")
    process.kill()
    ends = time.monotonic() + 30
    while not any("not yet safe" in line for line in last_words(lock)):
        assert time.monotonic() < ends, last_words(lock)
        time.sleep(0.05)
    bench.fault("stuck", "")
    assert wait_for_guardian(lock, 30)
    assert last_words(lock)[-2].endswith("attenuator: safe at 95.0")


def test_one_that_cannot_be_made_safe_does_not_keep_the_others_from_it(
    attenuator: Start, run: StartRun, tmp_path: Path
) -> None:
    bench, lock = attenuator(), tmp_path / "guardian.log"
    condition = {"quantity": "attenuation", "unit": "dB", "limits": [0, 60], "safe": 60}
    described = {
        "unknown": ["no-such-driver", {}],
        "broken": ["scpi", {"resource": 5}],
        "by_hand": ["manual", condition],
        "imagined": ["simulated", {"knob": "attenuation_db", **condition}],
        "attenuator": ["scpi", bench.keys()],
    }
    process, _ = run(described, lock, "wait")
    process.kill()
    assert wait_for_guardian(lock, 30)
    assert bench.settings()[-1] == 95.0
    words = "\n".join(last_words(lock))
    assert "unknown: cannot be made safe" in words
    assert "broken: cannot be made safe" in words
    assert "by_hand: set by hand, and nobody can be told" in words
    assert "imagined" not in words


def test_a_run_that_could_not_make_it_safe_itself_leaves_it_to_the_guardian(
    attenuator: Start, tmp_path: Path
) -> None:
    bench, lock = attenuator(), tmp_path / "guardian.log"
    guardian = Guardian.start({"attenuator": ("scpi", bench.keys())}, lock)
    guardian.abandon()
    assert wait_for_guardian(lock, 30)
    assert bench.settings() == [95.0]
    guardian.dismiss()


def test_the_file_belongs_to_one_guardian_at_a_time(tmp_path: Path) -> None:
    lock = tmp_path / "made" / "guardian.log"
    assert wait_for_guardian(lock, 0)
    assert last_words(lock) == ()
    with Guardian.start({}, lock) as first:
        assert first.alive
        with pytest.raises(DriverError, match="still holds"):
            Guardian.start({}, lock)
    assert not first.alive
    first.dismiss()
    with Guardian.start({}, lock) as second:
        assert second.alive


def test_a_file_that_cannot_be_written_is_an_error_in_plain_words(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(DriverError, match="cannot be written"):
        Guardian.start({}, tmp_path / "file" / "guardian.log")


def test_a_guardian_that_does_not_start_is_an_error_before_anything_is_set(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "executable", "/bin/false")
    with pytest.raises(DriverError, match="did not start"):
        Guardian.start({}, tmp_path / "guardian.log")
    monkeypatch.setattr(sys, "executable", "/bin/no-such-program")
    with pytest.raises(DriverError, match="cannot be started"):
        Guardian.start({}, tmp_path / "guardian.log")
