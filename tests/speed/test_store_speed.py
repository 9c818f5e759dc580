"""What years of data cost: lists and single runs in a full store against a nearly empty one.

The full store has 10 000 runs and, by default, a million seconds; BITASSAY_SPEED_SECONDS sets another
number (50_000_000 takes some minutes and 8 GB).
"""

from __future__ import annotations

import os
import sqlite3
import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from sqlalchemy import text

from harness.record import Second, Sitting, Tally
from harness.store import Store, open_store, this_host

RUNS = 10_000
SECONDS = int(os.environ.get("BITASSAY_SPEED_SECONDS", "1000000"))
T0 = 1_700_000_000_000_000_000
BITS = 48_000


def second(k: int) -> Second:
    rng = np.random.default_rng(k)
    places = np.sort(rng.choice(BITS, 3, replace=False)).astype(np.int64) + k * BITS
    ones = np.array([True, False, True])
    tally = Tally(BITS, BITS, 0, 3, 2, 1)
    return Second(
        0, 0, k, T0 + k, 10**9, BITS, tally, first_bit=k * BITS, positions=places, ones_lost=ones,
        stretches=((BITS, True),),
    )  # fmt: skip


def one_run(store: Store, seconds: int) -> str:
    """Record a run whose profile, settings and stated numbers are as long as real ones."""
    from harness.assess.run import assess
    from harness.profile import load_profile
    from harness.profile.ready import ready_profiles

    path = ready_profiles() / "loopback.toml"
    profile = load_profile(path, [])
    key = store.begin_run(
        title="Wader-9", command="measure", started=T0, profile_text=path.read_text(), overrides=[],
        settings=profile.resolved(), device=dict(profile.device),
    )  # fmt: skip
    store.begin_sitting(key, Sitting(0, T0, None, this_host(), {}))
    store.begin_point(key, 0, {}, T0)
    store.commit(key, [second(k) for k in range(seconds)])
    store.end_point(key, 0, T0 + 1, "plan")
    store.end_sitting(key, 0, T0 + 1, "completed")
    a = assess(store.load(key))
    store.end_run(key, T0 + 1, "completed", "plan", a.verdict, a.to_json())
    return key


def fill(path: Path) -> None:
    """Multiply the one run that is there; by a bare connection that checks and syncs nothing."""
    with sqlite3.connect(path) as bare:
        bare.execute("PRAGMA synchronous=OFF")
        columns = {
            table: [row[1] for row in bare.execute(f"PRAGMA table_info({table})")]
            for table in ("run", "sitting", "point", "second")
        }
        others = ", ".join(f'"{name}"' for name in columns["run"] if name not in ("id", "key", "started"))
        bare.execute(
            f"WITH RECURSIVE n(i) AS (SELECT 2 UNION ALL SELECT i + 1 FROM n WHERE i < {RUNS}) "
            f'INSERT INTO run (id, "key", started, {others}) '
            "SELECT i, printf('01900000-0000-7000-8000-%012x', i * 7919), started + i * 1000000000, "
            f"{others} FROM n, run WHERE run.id = 1"
        )
        for table in ("sitting", "point", "second"):
            names = ", ".join(columns[table][1:])
            rows = ", ".join(f"{table}.{name}" for name in columns[table][1:])
            for first in range(2, RUNS + 1, 500):
                bare.execute(
                    f"INSERT INTO {table} (run_id, {names}) SELECT run.id, {rows} FROM run, {table} "
                    f"WHERE run.id BETWEEN {first} AND {first + 499} AND {table}.run_id = 1"
                )
                bare.commit()
    bare.close()


def median_s(act: Callable[[], object]) -> float:
    times = []
    for _ in range(9):
        start = time.perf_counter()
        act()
        times.append(time.perf_counter() - start)
    return statistics.median(times)


@pytest.mark.campaign
def test_a_full_store_answers_nearly_as_fast_as_an_empty_one(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    each = max(1, SECONDS // RUNS)
    with open_store(tmp_path / "small.sqlite") as small, open_store(tmp_path / "full.sqlite") as full:
        keys = {id(store): one_run(store, each) for store in (small, full)}
        fill(tmp_path / "full.sqlite")
        with full._reading() as connection:
            count = connection.execute(text("SELECT count(*) FROM second")).scalar_one()
        questions: dict[str, Callable[[Store], object]] = {
            "the newest run": lambda store: store.runs(limit=1),
            "a run by its ending": lambda store: store.find(keys[id(store)][-12:]),
            "a whole run": lambda store: store.load(keys[id(store)]),
            "earlier runs": lambda store: store.earlier_runs("0031", keys[id(store)], {"ber": 1e-6}),
        }
        with capsys.disabled():
            print(f"\n{RUNS} runs, {count} seconds, against one run of {each} seconds:")
            for name, ask in questions.items():
                few, many = median_s(lambda a=ask: a(small)), median_s(lambda a=ask: a(full))  # type: ignore[misc]
                print(f"  {name:20} {many * 1e3:8.2f} ms  {many / few:5.2f} times the nearly empty store's")
            listing = median_s(lambda: full.runs())
            print(f"  {'all runs, listed':20} {listing * 1e3:8.2f} ms  {listing / RUNS * 1e6:.1f} us a run")


def cost_of(*arguments: str) -> tuple[float, float]:
    """Run the command several times; gives medians of (s until it ended, s of computing)."""
    walls, computing = [], []
    for _ in range(7):
        start = time.perf_counter()
        process = subprocess.Popen(
            [sys.executable, "-m", "harness.cli.main", *arguments], stdout=subprocess.DEVNULL
        )
        _, status, used = os.wait4(process.pid, 0)
        walls.append(time.perf_counter() - start)
        computing.append(used.ru_utime + used.ru_stime)
        assert os.waitstatus_to_exitcode(status) == 0
        process.returncode = 0
    return statistics.median(walls), statistics.median(computing)


@pytest.mark.campaign
def test_commands_on_a_full_store_against_a_nearly_empty_one(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    each = max(1, SECONDS // RUNS)
    keys = {}
    for name in ("small", "full"):
        with open_store(tmp_path / f"{name}.sqlite") as store:
            keys[name] = one_run(store, each)
    fill(tmp_path / "full.sqlite")
    with capsys.disabled():
        print(f"\n{RUNS} runs, {RUNS * each} seconds, against one run of {each} seconds:")
        for command in (["runs"], ["runs", "--json"], ["runs", "--limit=20"], ["show", "last"], ["show"]):
            few, many = (
                cost_of(*command, *([keys[name][-12:]] if command == ["show"] else []),
                        f"--store={tmp_path / name}.sqlite")
                for name in ("small", "full")
            )  # fmt: skip
            print(
                f"  {' '.join(command):18} {many[0]:5.2f} s, {many[1]:5.2f} s of computing: "
                f"{many[0] / few[0]:5.2f} and {many[1] / few[1]:5.2f} times the nearly empty store's"
            )


@pytest.mark.campaign
def test_a_night_is_loaded_in_a_fraction_of_reading_its_file(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "night.sqlite"
    with open_store(path) as store:
        key = one_run(store, 43_200)
        load, digest = median_s(lambda: store.load(key)), 0.0
        start = time.perf_counter()
        with store._reading() as connection:
            rows = connection.exec_driver_sql("SELECT * FROM second").fetchall()
        bare = time.perf_counter() - start
        from harness.store import digest_of

        run = store.load(key)
        start = time.perf_counter()
        digest_of(run)
        digest = time.perf_counter() - start
    size = sum(p.stat().st_size for p in tmp_path.glob("night.sqlite*"))
    with capsys.disabled():
        print(f"\na night of {len(rows)} seconds: loaded in {load:.2f} s ({load / bare:.1f} bare SELECTs),")
        print(f"  digest in {digest:.2f} s; {size / len(rows):.0f} bytes a second on disk")
