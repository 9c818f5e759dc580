"""`bitassay follow`: the store alone tells how a run stands, as well as the process that measures knows it."""

from __future__ import annotations

import contextlib
import os
import random
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from harness.assess.run import assess
from harness.cli.follow import Follower
from harness.cli.view.sheet import sheet_of_progress
from harness.cli.watch import progress_line
from harness.profile import parse_profile
from harness.record import Event, Second, Sitting, Tally
from harness.store import Store, StoreError, open_store
from harness.store.liveness import this_host

SWEEP = """
title = "Wader-9 sensitivity, invented"
[device]
model = "Wader-9"
serial_number = "0031"
[link]
driver = "loopback"
rate_bps = 400_000
pace_bps = 400_000
[[link.channel]]
model = "awgn"
modulation = "bpsk"
ebn0_db = 40
seed = 5
[stop]
bits = 800_000
[instruments.attenuator]
driver = "simulated"
knob = "attenuation_db"
limits = [0, 60]
safe = 60
[sweep]
instrument = "attenuator"
values = [32, 33, 34]
sensitivity_ber = 1e-3
"""
PLAIN = SWEEP.partition("[instruments")[0] + "[requirement]\nber = 1e-5\nconfidence = 0.99\n"
BITS = 400_000
SECOND_NS = 10**9


def second(point: int, index: int, first_bit: int, errors: int, bits: int = BITS) -> Second:
    positions = first_bit + np.linspace(0, bits - 1, errors).astype(np.int64) if errors else None
    places = {} if positions is None else {"positions": positions, "ones_lost": np.ones(errors, dtype=bool)}
    return Second(
        point=point,
        sitting=0,
        index=index,
        at=time.time_ns(),
        duration_ns=SECOND_NS,
        sent=BITS,
        tally=Tally(bits, bits, 0, errors, errors, 0),
        first_bit=first_bit,
        stretches=((bits, True),) if bits else (),
        **places,
    )


def begin(store: Store, text: str, command: str) -> str:
    profile = parse_profile(text)
    now = time.time_ns()
    key = store.begin_run(
        title=profile.title,
        command=command,
        started=now,
        profile_text=text,
        overrides=(),
        settings=profile.resolved(),
        device=profile.device,
    )
    store.begin_sitting(key, Sitting(0, now, None, this_host(), {}))
    return key


FACTS = {"pattern": "PRBS15", "bit_order": "lsb", "rate_bps": 400_000.0, "units": {"attenuator": "dB"}}


def test_a_follower_knows_every_bit_in_whatever_pieces_and_order_they_are_written(tmp_path):
    rng = random.Random(3)
    with open_store(tmp_path / "runs.sqlite") as store:
        key = begin(store, PLAIN, "measure")
        store.begin_point(key, 0, {}, time.time_ns(), FACTS)
        follower = Follower(store, key)
        first, waiting, written = 0, [], 0
        for index in range(300):
            # A silent second is written at once, before earlier ones that are not decided yet.
            silent = rng.random() < 0.2
            made = second(0, index, first, 0 if silent else rng.randrange(3), 0 if silent else BITS)
            first += made.tally.received
            if silent:
                store.commit(key, [made], [])
                written += 1
            else:
                waiting.append(made)
            if rng.random() < 0.4:
                events = [(0, Event("line", None, f"event {index}", time.time_ns()))]
                store.commit(key, waiting, events)
                written += len(waiting)
                waiting = []
            if rng.random() < 0.5:
                follower.look()
        store.commit(key, waiting, [])
        follower.look()
        follower.look()
        assert follower.goes_on
        progress = follower.progress(time.time_ns())
        assert progress is not None
        whole = assess(store.load(key)).whole
        assert progress.point.tally == whole.tally
        assert progress.point.tally.received == first
        assert progress.point.seconds == whole.seconds == 300
        assert [e.text for e in progress.point.events] == [e.text for e in whole.events]
        assert progress.outlook.decided
        store.end_point(key, 0, time.time_ns(), "bits")
        store.end_run(key, time.time_ns(), "completed", "bits", None, None)
        follower.look()
        assert not follower.goes_on


def test_a_follower_of_a_sweep_shows_the_page_of_the_live_view(tmp_path):
    with open_store(tmp_path / "runs.sqlite") as store:
        key = begin(store, SWEEP, "sweep")
        follower = Follower(store, key)
        follower.look()
        assert follower.progress(time.time_ns()) is None
        for point, value in enumerate((32.0, 33.0)):
            store.begin_point(key, point, {"attenuator": value}, time.time_ns(), FACTS)
            store.commit(key, [second(point, point, 0, 100 * (point + 1))], [])
            if point == 0:
                store.end_point(key, 0, time.time_ns(), "bits")
        follower.look()
        now = time.time_ns()
        progress = follower.progress(now)
        assert progress is not None
        sheet = sheet_of_progress(progress, now)
        assert sheet.point == "2 of 3: attenuator 33 dB"
        assert [label for label, _ in sheet.bars] == ["32", "33"]
        assert "Ctrl-C ends the watching; the run goes on" in sheet.foot[-1]
        assert sheet.unit == "Wader-9 0031"
        line = progress_line(progress, now).replace("\u202f", " ")
        assert line.startswith("point 2 of 3 (attenuator 33), ")
        assert "200 errors in 400 000 bits" in line


def test_after_a_gap_that_never_fills_only_the_last_minutes_are_read_again(tmp_path):
    with open_store(tmp_path / "runs.sqlite") as store:
        key = begin(store, PLAIN, "measure")
        store.begin_point(key, 0, {}, time.time_ns(), FACTS)
        follower = Follower(store, key)
        store.commit(key, [second(0, index, 0, 0) for index in range(5)], [])
        follower.look()
        store.commit(key, [second(0, index, 0, 0) for index in range(6, 400)], [])
        for _ in range(3):
            follower.look()
        progress = follower.progress(time.time_ns())
        assert progress is not None
        read: list[int] = []
        load = store.load_tail

        def counted(*arguments: Any) -> Any:
            tail = load(*arguments)
            read.append(sum(len(p.seconds) for p in tail.run.points))
            return tail

        store.load_tail = counted  # type: ignore[method-assign]
        follower.look()
        assert read[0] <= 120


@pytest.fixture
def running(tmp_path: Path) -> Callable[[str], subprocess.Popen[bytes]]:
    def start(text: str) -> subprocess.Popen[bytes]:
        (tmp_path / "run.toml").write_text(text)
        with (tmp_path / "said.txt").open("wb") as said:
            return subprocess.Popen(
                [sys.executable, "-m", "harness.cli.main", "sweep", "run.toml", "--quiet"],
                cwd=tmp_path,
                env={k: v for k, v in os.environ.items() if k != "BITASSAY_STORE"},
                stdout=said,
                stderr=said,
            )

    return start


def test_the_command_watches_until_the_run_ends_and_then_shows_it(bitassay, running, tmp_path):
    process = running(SWEEP.replace("800_000", "2_000_000"))
    for _ in range(600):
        with contextlib.suppress(StoreError), open_store(tmp_path / "results/runs.sqlite", create=False) as s:
            if s.runs():
                break
        assert process.poll() is None, (tmp_path / "said.txt").read_text()
        time.sleep(0.1)
    followed = bitassay("follow", "last", timeout=120)
    assert process.wait(timeout=60) == 0
    assert followed.status == 0, followed.err
    shown = bitassay("show", "last")
    assert followed.out == shown.out
    assert followed.err.startswith("run ")
    assert bitassay("follow", "last", "--json").json == bitassay("show", "last", "--json").json
