"""A sweep over a SCPI attenuator that is killed again and again: it goes on, and the attenuator is made safe."""

from __future__ import annotations

import itertools
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from harness.assess.verify import differences
from harness.record import Run
from harness.store import StoreError, open_store

SAFE = 80


def start(folder: Path, *arguments: str) -> subprocess.Popen[bytes]:
    with (folder / "errors.txt").open("ab") as errors:
        return subprocess.Popen(
            [sys.executable, "-m", "harness.cli.main", *arguments, "--quiet"],
            cwd=folder,
            env={k: v for k, v in os.environ.items() if k != "BITASSAY_STORE"},
            stdout=subprocess.DEVNULL,
            stderr=errors,
        )


def record_in(folder: Path) -> Run | None:
    try:
        with open_store(folder / "results" / "runs.sqlite", create=False) as store:
            return store.load(store.find("last"))
    except StoreError:
        return None


def wait_for_seconds(folder: Path, number: int) -> None:
    for _ in range(600):
        record = record_in(folder)
        if record is not None and sum(len(p.seconds) for p in record.points) >= number:
            return
        time.sleep(0.1)
    raise AssertionError("the sweep never got going: " + (folder / "errors.txt").read_text())


def kill_again_and_again(folder: Path, device, kills: int, seed: int) -> int:
    """Kill and resume at random instants until it is through; gives the number of kills."""
    rng = random.Random(seed)
    killed_at = [0]  # how many settings the attenuator had got
    process = start(folder, "sweep", "sweep.toml")
    wait_for_seconds(folder, 1)  # before the first second there is nothing to resume
    while len(killed_at) <= kills and process.poll() is None:
        process.kill()
        process.wait()
        killed_at.append(len(device.settings()))
        process = start(folder, "resume", "last")
        time.sleep(rng.uniform(0.2, 4.5))
    assert process.wait(timeout=300) == 0, (folder / "errors.txt").read_text()
    settings = device.settings()
    for begun, ended in itertools.pairwise(killed_at):
        if any(value != SAFE for value in settings[begun:ended]):  # this one had set something
            # One command may still have been on its way when it was killed.
            assert SAFE in settings[ended : ended + 2]
    return len(killed_at) - 1


def shape(record: Run) -> list[tuple[object, ...]]:
    sums = []
    for point in record.points:
        tally = [sum(getattr(s.tally, name) for s in point.seconds) for name in ("received", "compared")]
        sums.append((point.index, dict(point.values), point.ended_by, *tally))
    return sums


def test_a_sweep_killed_and_resumed_has_every_bit_and_the_attenuator_is_safe_after_each_kill(
    attenuated, tmp_path
):
    device = attenuated()
    (tmp_path / "sweep.toml").write_text(
        device.profile(
            "[sweep]\ninstrument = 'attenuator'\nvalues = [33, 34, 35]\n",
            stop="bits = 800_000",
            link="pace_bps = 400_000",
        )
    )
    assert kill_again_and_again(tmp_path, device, 3, 5) >= 2
    record = record_in(tmp_path)
    assert record is not None
    assert record.status == "completed"
    assert shape(record) == [(k, {"attenuator": 33.0 + k}, "bits", 800_000, 800_000) for k in range(3)]
    assert differences(record) == []
    settings = device.settings()
    assert all(0 <= value <= SAFE for value in settings)
    assert settings[-1] == SAFE


def test_a_run_is_not_resumed_with_another_attenuator_and_that_one_is_not_touched(
    bitassay, attenuated, tmp_path
):
    device = attenuated()
    (tmp_path / "sweep.toml").write_text(
        device.profile(
            "[sweep]\ninstrument = 'attenuator'\nvalues = [33, 34]\n",
            stop="bits = 800_000",
            link="pace_bps = 400_000",
        )
    )
    process = start(tmp_path, "sweep", "sweep.toml")
    wait_for_seconds(tmp_path, 1)
    process.kill()
    process.wait()
    for _ in range(600):
        if device.settings()[-1] == SAFE:
            break
        time.sleep(0.1)
    device.pretend("Fictional Bench,SA-95,0043,1.3")
    before = device.settings()
    refused = bitassay("resume", "last")
    assert refused.status == 4
    assert "0043" in refused.err
    assert "0042" in refused.err
    assert device.settings() == before
    device.pretend("Fictional Bench,SA-95,0042,1.3")
    done = bitassay("resume", "last", "--json", timeout=120)
    assert done.status == 0, done.err
    assert [p["bits_compared"] for p in done.json["points"]] == [800_000, 800_000]
    record = record_in(tmp_path)
    assert record is not None
    for point in record.points:  # what was found when a point was begun is not lost when it goes on
        assert point.facts["rate_bps"] == 1_000_000
        assert point.facts["units"] == {"attenuator": "dB"}
    assert any(e["kind"] == "resumed" for p in done.json["points"] for e in p["events"])
    assert bitassay("verify", "last").status == 0


def test_a_sweep_ended_by_ctrl_c_is_safe_at_once_and_can_go_on(bitassay, attenuated, tmp_path):
    device = attenuated()
    (tmp_path / "sweep.toml").write_text(
        device.profile(
            "[sweep]\ninstrument = 'attenuator'\nvalues = [33, 34]\n",
            stop="bits = 800_000",
            link="pace_bps = 400_000",
        )
    )
    process = start(tmp_path, "sweep", "sweep.toml")
    wait_for_seconds(tmp_path, 1)
    process.send_signal(signal.SIGINT)
    assert process.wait(timeout=60) == 130
    assert device.settings()[-1] == SAFE
    done = bitassay("resume", "last", "--json", timeout=120)
    assert done.status == 0, done.err
    assert [p["bits_compared"] for p in done.json["points"]] == [800_000, 800_000]
    assert device.settings()[-2:] == [34, SAFE]


@pytest.mark.campaign
@pytest.mark.parametrize("late_s", [0.0, 0.4])  # a slow attenuator makes a slow guardian
def test_a_sweep_killed_20_times_equals_one_that_was_not(attenuated, tmp_path, late_s):
    sweep = "[sweep]\ninstrument = 'attenuator'\nvalues = { start = 32, stop = 36, step = 0.5 }\n"
    rate = 400_000
    records = []
    for name, kills in (("whole", 0), ("killed", 20)):
        folder = tmp_path / name
        folder.mkdir()
        count = folder / "count.txt"
        device = attenuated(count=str(count), late_s=late_s)
        text = device.profile(sweep, stop=f"bits = {4 * rate}", link=f"pace_bps = {rate}")
        (folder / "sweep.toml").write_text(text)
        if not kills:
            assert start(folder, "sweep", "sweep.toml").wait(timeout=300) == 0
        else:
            assert kill_again_and_again(folder, device, kills, 11) == kills
        record = record_in(folder)
        assert record is not None
        assert differences(record) == []
        records.append(record)
        # Nothing but the second that was cut is measured again. Under load a second comes late: two allowed.
        kept = sum(s.tally.received for p in record.points for s in p.seconds)
        assert 8 * int(count.read_text()) - kept <= kills * 2 * rate
        assert device.settings()[-1] == SAFE
    assert shape(records[0]) == shape(records[1])
