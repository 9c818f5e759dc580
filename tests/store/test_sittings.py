"""A run whose process is gone is called cut, and can be resumed with what it had kept."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from typing import Any

import pytest

from harness.record import Second, Sitting
from harness.store import Store, StoreError, digest_of, open_store, this_host
from harness.store.liveness import SILENCE_NS, gone

T0 = 1_780_000_000_000_000_000
Begin = Callable[..., str]

WRITER = """
import sys, time
from harness.record import Second, Sitting, Tally
from harness.store import open_store, this_host
store = open_store(sys.argv[1])
now = time.time_ns()
key = store.begin_run(title="t", command="measure", started=now, profile_text="", overrides=[],
                      settings={}, device={})
store.begin_sitting(key, Sitting(0, now, None, this_host(), {}))
store.begin_point(key, 0, {}, now)
print(key, flush=True)
k = 0
while True:
    store.commit(key, [Second(0, 0, k, now, 10**9, 8, Tally(8, 8), stretches=((8, True),))], [], 3)
    print(k, flush=True)
    k += 1
"""


@pytest.fixture
def writer(address: str) -> Any:
    process = subprocess.Popen([sys.executable, "-c", WRITER, address], stdout=subprocess.PIPE, text=True)
    yield process
    process.kill()
    process.wait()
    assert process.stdout is not None
    process.stdout.close()


def test_a_killed_writer_leaves_a_cut_run_with_every_committed_second(address: str, writer: Any) -> None:
    key = writer.stdout.readline().strip()
    for _ in range(5):
        last = int(writer.stdout.readline())
    with open_store(address, create=False) as store:
        assert store.load(key).status == "running"
        assert store.runs()[0].status == "running"
        os.kill(writer.pid, signal.SIGKILL)
        rest = [int(line) for line in writer.stdout.read().split()]
        writer.wait()
        run = store.load(key)
        assert (run.status, run.sittings[0].status, run.ended) == ("cut", "cut", None)
        assert store.runs()[0].status == "cut"
        committed = [*range(last + 1), *rest]
        # The last commit may have been made and not yet been printed.
        kept = [second.index for second in run.points[0].seconds]
        assert kept in (committed, [*committed, len(committed)])


def test_reading_never_writes_that_a_run_was_cut(address: str, writer: Any) -> None:
    key = writer.stdout.readline().strip()
    writer.stdout.readline()
    writer.kill()
    writer.wait()
    with open_store(address, create=False) as store:
        assert store.load(key).status == "cut"
        with store._reading() as connection:
            assert connection.exec_driver_sql("SELECT status FROM run").scalar() == "running"


def test_a_stopped_writer_is_still_running_and_a_zombie_is_not(address: str, writer: Any) -> None:
    key = writer.stdout.readline().strip()
    writer.stdout.readline()
    os.kill(writer.pid, signal.SIGSTOP)
    with open_store(address, create=False) as store:
        assert store.load(key).status == "running"
        os.kill(writer.pid, signal.SIGKILL)  # not waited for: its number is still there
        deadline = time.monotonic() + 10
        while store.load(key).status == "running" and time.monotonic() < deadline:
            time.sleep(0.01)
        assert store.load(key).status == "cut"


def test_who_is_gone() -> None:
    here, now = this_host(), 10**18
    assert not gone(here, 0, now)  # this very process, however silent
    assert gone(here | {"process_started": 1}, now, now)  # its number was used again
    assert gone(here | {"pid": 2**22 + 5}, now, now)
    for elsewhere in (
        here | {"name": "another"},
        here | {"boot": "another"},
        here | {"namespace": "pid:[1]"},
        here | {"pid": None},
        {},
    ):
        assert not gone(elsewhere, now - SILENCE_NS, now)
        assert gone(elsewhere, now - SILENCE_NS - 1, now)


def test_a_run_elsewhere_is_cut_after_two_minutes_of_silence(store: Store, begin: Begin) -> None:
    host = this_host() | {"name": "another"}
    key = store.begin_run(
        title="", command="measure", started=T0, profile_text="", overrides=[], settings={}, device={}
    )
    store.begin_sitting(key, Sitting(0, T0, None, host, {}))
    store.begin_point(key, 0, {}, T0)
    assert store.load(key).status == "running"
    store.commit(key, [], now=time.time_ns() - SILENCE_NS - 10**9)
    assert store.load(key).status == "cut"
    store.commit(key, [])
    assert store.load(key).status == "running"


def test_a_cut_run_is_resumed_with_what_it_had(address: str, writer: Any, finish: Callable[..., str]) -> None:
    key = writer.stdout.readline().strip()
    writer.stdout.readline()
    with open_store(address) as store:
        with pytest.raises(StoreError, match="being written by another process"):
            store.begin_sitting(key, Sitting(1, T0, None, this_host(), {}))
        writer.kill()
        writer.wait()
        before = store.load(key)
        number = before.points[0].seconds[-1].index + 1
        store.begin_sitting(key, Sitting(1, T0 + 5, None, this_host(), {}))
        store.begin_point(key, 0, {}, T0 + 5)
        store.commit(key, [Second(0, 1, number, T0 + 5, 10**9, 0, before.points[0].seconds[0].tally)])
        finish(store, key, sitting=1)
        run = store.load(key)
        assert [s.status for s in run.sittings] == ["cut", "completed"]
        assert run.sittings[0].ended is not None
        assert run.sittings[0].undecided_bits == 3
        assert run.points[0].started == before.points[0].started
        assert [s.index for s in run.points[0].seconds] == list(range(number + 1))
        assert [s.sitting for s in run.points[0].seconds] == [0] * number + [1]
        assert store.digest(key) == digest_of(run)


def test_an_interrupted_run_is_resumed_and_how_it_stood_is_kept(
    store: Store, begin: Begin, finish: Callable[..., str], make_second: Callable[..., Second]
) -> None:
    key = begin(store)
    store.commit(key, [make_second(0)], [], 5)
    digest = finish(store, key, status="interrupted", verdict="UNDECIDED")
    store.begin_sitting(key, Sitting(1, T0 + 5, None, this_host(), {}))
    run = store.load(key)
    assert (run.status, run.ended, run.ended_by, run.verdict, run.stated) == (
        "running",
        None,
        None,
        None,
        None,
    )
    assert store.digest(key) is None
    with store._reading() as connection:
        closing = json.loads(
            connection.exec_driver_sql("SELECT closing FROM sitting WHERE number = 0").scalar_one()
        )
    assert (closing["status"], closing["verdict"], closing["digest"]) == ("interrupted", "UNDECIDED", digest)
    assert closing["stated"] == {"errors": 9, "ber": 1e-6}
    store.begin_point(key, 0, {}, T0 + 5)
    assert store.load(key).points[0].ended is None
    store.commit(key, [make_second(1, sitting=1)])
    finish(store, key, sitting=1)
    assert [s.status for s in store.load(key).sittings] == ["interrupted", "completed"]


def test_a_completed_run_cannot_go_on(store: Store, filled: Begin) -> None:
    key = filled(store)
    with pytest.raises(StoreError, match="is completed and cannot go on"):
        store.begin_sitting(key, Sitting(1, T0, None, this_host(), {}))
    assert store.load(key).status == "completed"


def test_of_two_processes_that_resume_a_run_one_gets_it(address: str, store: Store, begin: Begin) -> None:
    key = begin(store)
    finish_first = Sitting(1, T0, None, this_host(), {})
    store.end_point(key, 0, T0, "interrupted")
    store.end_sitting(key, 0, T0, "interrupted")
    store.end_run(key, T0, "interrupted", "interrupted", None, None)
    with open_store(address) as other:
        other.begin_sitting(key, finish_first)
        with pytest.raises(StoreError):
            store.begin_sitting(key, finish_first)
