"""Benches that share a PostgreSQL server lose no second and double none, whatever becomes of the server."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import text

from harness.record import Event, Note, Second, Sitting
from harness.store import (
    SharedStore,
    Store,
    StoreLost,
    WrongRevision,
    digest_of,
    open_for_bench,
    open_store,
    this_host,
)

T0 = 1_780_000_000_000_000_000
Begin = Callable[..., str]
MakeSecond = Callable[..., Second]


class Bench:
    """A bench that measures: a shared store and what it was told."""

    def __init__(self, server: Any, buffer: Path) -> None:
        self.told: list[str] = []
        store = open_for_bench(server.address, buffer, self.told.append, busy_s=2.0)
        assert isinstance(store, SharedStore)
        store._retry_s = 0.0
        self.store = store


@pytest.fixture
def bench(server: Any, tmp_path: Path) -> Iterator[Callable[[str], Bench]]:
    made: list[Bench] = []

    def make(name: str = "handover.sqlite") -> Bench:
        made.append(Bench(server, tmp_path / name))
        return made[-1]

    yield make
    for one in made:
        one.store.close()


def kept(buffer: Path) -> int:
    """How many runs a local file still holds."""
    with open_store(buffer) as store:
        return len(store.runs())


def test_two_benches_write_and_a_reader_follows(
    server: Any, bench: Callable[[str], Bench], begin: Begin, finish: Begin, make_second: MakeSecond
) -> None:
    one, two = bench("one.sqlite"), bench("two.sqlite")
    keys = [begin(b.store, started=T0 + k) for k, b in enumerate((one, two))]
    with open_store(server.address, create=False) as reader:
        for k in range(20):
            for b, key in zip((one, two), keys, strict=True):
                b.store.commit(key, [make_second(k)], [(0, Event("line", k, str(k)))])
            for key in keys:
                assert len(reader.load(key).points[0].seconds) == k + 1
        for b, key in zip((one, two), keys, strict=True):
            digest = finish(b.store, key)
            assert digest == reader.digest(key) == digest_of(reader.load(key))
            b.store.close()
    assert one.told == two.told == []
    assert [kept(Path(b.store.buffer)) for b in (one, two)] == [0, 0]


@pytest.mark.parametrize("how", ["fast", "immediate"])
def test_a_server_that_stops_and_starts_in_mid_run_gets_every_second_once(
    server: Any,
    bench: Callable[..., Bench],
    begin: Begin,
    finish: Begin,
    make_second: MakeSecond,
    how: str,
) -> None:
    one = bench()
    key = begin(one.store)
    for k in range(30):
        if k == 10:
            server.stop(how)
        if k == 20:
            server.start()
        one.store.commit(key, [make_second(k)], [(0, Event("line", k, str(k)))], k, {0: {"last": k}})
        assert len(one.store.load(key).points[0].seconds) == k + 1
        assert one.store.behind == (10 <= k < 20)
    digest = finish(one.store, key)
    with open_store(server.address, create=False) as reader:
        run = reader.load(key)
        assert [s.index for s in run.points[0].seconds] == list(range(30))
        assert [e.text for e in run.points[0].events] == [str(k) for k in range(30)]
        assert digest == reader.digest(key) == digest_of(run)
    assert len(one.told) == 2
    assert "nothing is lost, the run goes on into" in one.told[0]
    assert "is back and has got the 10 seconds" in one.told[1] or "got the 11 seconds" in one.told[1]
    one.store.close()
    assert kept(Path(one.store.buffer)) == 0


def test_a_server_that_is_away_at_the_end_is_handed_the_run_by_the_next_one(
    server: Any, bench: Callable[..., Bench], begin: Begin, finish: Begin, make_second: MakeSecond
) -> None:
    one = bench()
    key = begin(one.store)
    one.store.commit(key, [make_second(0)])
    server.stop()
    one.store.commit(key, [make_second(1)])
    digest = finish(one.store, key)
    run = one.store.load(key)
    one.store.close()
    assert "handed over by the next run" in one.told[-1]
    assert kept(Path(one.store.buffer)) == 1
    server.start()
    two = bench()
    assert two.store.load(key).status == "completed"
    with open_store(server.address, create=False) as reader:
        assert digest == reader.digest(key) == digest_of(reader.load(key)) == digest_of(run)
    two.store.close()
    assert kept(Path(one.store.buffer)) == 0


def test_a_server_that_is_away_from_the_start_is_no_error(
    server: Any, bench: Callable[..., Bench], begin: Begin, finish: Begin, make_second: MakeSecond
) -> None:
    with open_store(server.address):
        pass
    server.stop()
    one = bench()
    assert "cannot be reached" in one.told[0]
    key = begin(one.store)
    one.store.commit(key, [make_second(0)])
    with pytest.raises(StoreLost):
        one.store.runs()
    server.start()
    one.store.commit(key, [make_second(1)])
    finish(one.store, key)
    with open_store(server.address, create=False) as reader:
        assert [s.index for s in reader.load(key).points[0].seconds] == [0, 1]


def test_earlier_runs_are_known_though_the_server_goes_away(
    server: Any, bench: Callable[..., Bench], begin: Begin, finish: Begin
) -> None:
    one = bench()
    first = begin(one.store)
    finish(one.store, first, verdict="FAIL")
    second = begin(one.store, started=T0 + 1)
    server.stop()
    one.store.commit(second, [])
    found = one.store.earlier_runs("0031", second, {"ber": 1e-6}, "Wader-9")
    assert [(line.run, line.verdict) for line in found] == [(first, "FAIL")]
    server.start()


def test_a_run_that_only_the_server_has_is_fetched_and_resumed(
    server: Any, bench: Callable[..., Bench], begin: Begin, finish: Begin, make_second: MakeSecond
) -> None:
    one = bench("one.sqlite")
    key = begin(one.store)
    one.store.commit(key, [make_second(0)])
    finish(one.store, key, status="interrupted", verdict=None)
    one.store.close()
    assert kept(Path(one.store.buffer)) == 0
    two = bench("two.sqlite")
    two.store.begin_sitting(key, Sitting(1, T0, None, this_host(), {}))
    two.store.begin_point(key, 0, {}, T0)
    server.stop()
    two.store.commit(key, [make_second(1, sitting=1)])
    server.start()
    two.store.commit(key, [make_second(2, sitting=1)])
    digest = finish(two.store, key, sitting=1)
    with open_store(server.address, create=False) as reader:
        run = reader.load(key)
        assert [(s.index, s.sitting) for s in run.points[0].seconds] == [(0, 0), (1, 1), (2, 1)]
        assert [s.status for s in run.sittings] == ["interrupted", "completed"]
        assert digest == digest_of(run)
    two.store.add_note(key, Note(T0, "me", "seen"))
    assert [n.text for n in two.store.load(key).notes] in ([], ["seen"])


def test_a_bench_that_is_killed_while_the_server_is_away_loses_nothing(
    server: Any, bench: Callable[..., Bench], tmp_path: Path
) -> None:
    writer = f"""
import sys, time
from pathlib import Path
from harness.record import Second, Sitting, Tally
from harness.store import open_for_bench, this_host
store = open_for_bench({server.address!r}, Path(sys.argv[1]), busy_s=2.0)
key = store.begin_run(title="t", command="measure", started=5, profile_text="", overrides=[],
                      settings={{}}, device={{}})
store.begin_sitting(key, Sitting(0, 5, None, this_host(), {{}}))
store.begin_point(key, 0, {{}}, 5)
print(key, flush=True)
k = 0
while True:
    store.commit(key, [Second(0, 0, k, 5, 10**9, 8, Tally(8, 8), stretches=((8, True),))], [], 0)
    print(k, flush=True)
    k += 1
    time.sleep(0.01)
"""
    process = subprocess.Popen(
        [sys.executable, "-c", writer, str(tmp_path / "handover.sqlite")], stdout=subprocess.PIPE, text=True
    )
    assert process.stdout is not None
    key = process.stdout.readline().strip()
    for _ in range(5):
        process.stdout.readline()
    server.stop()
    for _ in range(10):
        last = int(process.stdout.readline())
    process.kill()
    rest = process.stdout.read().split()
    last = int(rest[-1]) if rest else last
    process.wait()
    process.stdout.close()
    server.start()
    two = bench()
    run = two.store.load(key)
    assert run.status == "cut"
    assert [s.index for s in run.points[0].seconds] in (list(range(last + 1)), list(range(last + 2)))
    two.store.close()
    assert kept(tmp_path / "handover.sqlite") == 0


def test_a_run_that_two_benches_went_on_with_stays_in_the_file(
    server: Any, bench: Callable[..., Bench], begin: Begin, make_second: MakeSecond
) -> None:
    one = bench()
    key = begin(one.store)
    one.store.commit(key, [make_second(0)])
    server.stop()
    one.store.commit(key, [make_second(1)])
    server.start()
    with open_store(server.address) as other, other._writing() as connection:
        connection.execute(text("UPDATE second SET sent = 1 WHERE number = 0"))
    one.store.commit(key, [make_second(2)])
    one.store.close()
    assert any("is not the one in" in words for words in one.told)
    assert kept(Path(one.store.buffer)) == 1


def test_a_server_of_another_revision_is_refused_before_a_run_and_survived_within(
    server: Any, bench: Callable[..., Bench], begin: Begin, make_second: MakeSecond, tmp_path: Path
) -> None:
    one = bench()
    key = begin(one.store)
    with open_store(server.address) as other, other._writing() as connection:
        connection.execute(text("UPDATE bitassay_revision SET version_num = '9999'"))
    try:
        with pytest.raises(WrongRevision):
            open_for_bench(server.address, tmp_path / "new.sqlite")
        server.stop()
        one.store.commit(key, [make_second(0)])
        server.start()
        one.store.commit(key, [make_second(1)])
        assert len(one.store.load(key).points[0].seconds) == 2
    finally:
        store = Store(one.store._server.url if one.store._server else _url(server), 2.0)
        with store._writing() as connection:
            connection.execute(text("UPDATE bitassay_revision SET version_num = '0002'"))
        store.close()


def _url(server: Any) -> Any:
    from harness.store.connect import parse_url

    return parse_url(server.address)


def test_a_file_store_needs_no_buffer(tmp_path: Path) -> None:
    store = open_for_bench(tmp_path / "runs.sqlite", tmp_path / "handover.sqlite")
    assert type(store) is Store
    store.close()
    assert not (tmp_path / "handover.sqlite").exists()
