"""Upgrades keep every record and a backup; copies neither lose nor double anything, however often made."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from sqlalchemy import text

from harness.record import Event, Note, Second, Sitting
from harness.store import (
    Copied,
    Store,
    StoreError,
    WrongRevision,
    copy,
    digest_of,
    open_store,
    this_host,
    upgrade,
)
from harness.store.connect import make_engine, migrate, parse_url, writing
from harness.store.moving import copy_runs
from harness.store.schema import HEAD

T0 = 1_780_000_000_000_000_000
Begin = Callable[..., str]
MakeSecond = Callable[..., Second]


# --- upgrading


@pytest.fixture
def old(address: str) -> str:
    """Give a store of the first revision with one run, written by hand as that version wrote it."""
    url = parse_url(address)
    if url.get_backend_name() == "sqlite":
        Path(str(url.database)).parent.mkdir(parents=True)
    engine = make_engine(url, 5.0)
    with writing(engine) as connection:
        migrate(connection, "0001")
        for statement in (
            "INSERT INTO run (id, key, title, command, started, ended, status, ended_by, verdict,"
            " profile_text, overrides, settings, device, stated)"
            " VALUES (1, '01900000-0000-7000-8000-00000000abcd', 'old',"
            " 'measure', 5, 9, 'completed', 'plan', 'PASS', 'x', '[]', '{\"requirement\":{\"ber\":1e-06}}',"
            ' \'{"serial_number":"0031","model":"Wader-9"}\', NULL)',
            "INSERT INTO sitting VALUES (1, 0, 5, 9, 'completed', '{}', '{}', 0, 9)",
            "INSERT INTO point VALUES (1, 0, '{}', 5, 9, 'plan', '{}', 0, 0, 0, 0, 0, 0)",
            "INSERT INTO event VALUES (1, 0, 0, 'aligned', 3, 6, 'aligned', '{}')",
        ):
            connection.execute(text(statement.replace(":", r"\:")))
        true = "true" if engine.dialect.name == "postgresql" else "1"
        connection.execute(
            text(
                "INSERT INTO second VALUES (1, 0, 0, 0, 5, 1000000000, 8, 8, 8, 0, 1, 1, 0, "
                f"{true}, 0, 0, 0, 0, :positions, :kinds, {true}, NULL)"
            ),
            {"positions": b"\x05", "kinds": b"\x01"},
        )
    engine.dispose()
    return address


def test_an_upgrade_keeps_the_record_and_fills_the_new_columns(old: str) -> None:
    with pytest.raises(WrongRevision, match="older revision"):
        open_store(old)
    done = upgrade(old)
    assert (done.found, done.now) == ("0001", HEAD)
    with open_store(old, create=False) as store:
        (line,) = store.runs()
        assert (line.serial_number, line.model, line.requirement_ber) == ("0031", "Wader-9", 1e-6)
        run = store.load(line.run)
        (second,) = run.points[0].seconds
        assert (second.positions.tolist(), second.ones_lost.tolist()) == ([5], [True])
        assert [event.text for event in run.points[0].events] == ["aligned"]
        assert store.digest(line.run) is None
    again = upgrade(old)
    assert (again.found, again.backup) == (HEAD, None)


def test_sqlite_is_backed_up_beforehand(old: str) -> None:
    backup = upgrade(old).backup
    if not old.endswith(".sqlite"):
        assert backup is None
        return
    assert backup is not None
    with sqlite3.connect(backup) as connection:
        assert connection.execute("SELECT version_num FROM bitassay_revision").fetchall() == [("0001",)]
        assert connection.execute("SELECT title FROM run").fetchall() == [("old",)]
    connection.close()


def test_an_upgrade_that_fails_leaves_the_store_as_it_was(old: str) -> None:
    engine = make_engine(parse_url(old), 5.0)
    with writing(engine) as connection:
        connection.execute(text("UPDATE run SET device = 'no json'"))
    engine.dispose()
    with pytest.raises(ValueError, match="Expecting value"):
        upgrade(old)
    with pytest.raises(WrongRevision, match=r"older revision \(0001;"):
        open_store(old)


def test_there_must_be_something_to_upgrade(sqlite: str) -> None:
    with pytest.raises(StoreError, match="there is no store"):
        upgrade(sqlite)
    assert not Path(sqlite).exists()


def test_a_newer_store_is_not_upgraded(sqlite: str) -> None:
    with open_store(sqlite) as store, store._writing() as connection:
        connection.execute(text("UPDATE bitassay_revision SET version_num = '9999'"))
    with pytest.raises(WrongRevision, match="newer revision"):
        upgrade(sqlite)


# --- copying


@pytest.fixture(params=["sqlite to sqlite", "sqlite to postgres", "postgres to sqlite"])
def pair(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[tuple[Store, Store]]:
    addresses = [
        str(request.getfixturevalue("postgres")) if kind == "postgres" else str(tmp_path / f"{k}.sqlite")
        for k, kind in enumerate(request.param.split(" to "))
    ]
    with open_store(addresses[0]) as source, open_store(addresses[1]) as target:
        yield source, target


def same(source: Store, target: Store, equal_seconds: Callable[..., bool]) -> bool:
    lines = source.runs()
    if lines != target.runs():
        return False
    for line in lines:
        one, two = source.load(line.run), target.load(line.run)
        if digest_of(one) != digest_of(two) or one.notes != two.notes:
            return False
        for p, q in zip(one.points, two.points, strict=True):
            assert equal_seconds(p.seconds, q.seconds)
    return True


def test_a_copy_equals_its_source_and_a_second_one_adds_nothing(
    pair: tuple[Store, Store], filled: Begin, equal_seconds: Callable[..., bool]
) -> None:
    source, target = pair
    keys = {filled(source, started=T0 + k) for k in range(3)}
    source.add_note(min(keys), Note(T0, "me", "seen"))
    done = copy_runs(source, target)
    assert set(done.new) == keys
    assert (done.seconds, done.events) == (15, 15)
    assert same(source, target, equal_seconds)
    again = copy_runs(source, target)
    assert again == Copied(unchanged=3)
    assert same(source, target, equal_seconds)


def test_a_running_run_is_copied_as_far_as_it_goes_and_continued(
    pair: tuple[Store, Store],
    filled: Begin,
    finish: Begin,
    make_second: MakeSecond,
    equal_seconds: Callable[..., bool],
) -> None:
    source, target = pair
    key = filled(source, end=False)
    assert copy_runs(source, target).new == (key,)
    assert target.load(key).status == "running"
    assert copy_runs(source, target) == Copied(unchanged=1)
    source.commit(key, [make_second(5)], [(0, Event("line", 5, "more"))], 3, {0: {"x": 1}})
    done = copy_runs(source, target)
    assert (done.continued, done.seconds, done.events) == ((key,), 1, 1)
    finish(source, key)
    assert copy_runs(source, target).continued == (key,)
    assert target.digest(key) == source.digest(key)
    assert same(source, target, equal_seconds)


def test_a_resumed_run_is_continued(
    pair: tuple[Store, Store],
    filled: Begin,
    finish: Begin,
    make_second: MakeSecond,
    equal_seconds: Callable[..., bool],
) -> None:
    source, target = pair
    key = filled(source, end=False)
    finish(source, key, status="interrupted", verdict=None)
    copy_runs(source, target)
    source.begin_sitting(key, Sitting(1, T0, None, this_host(), {}))
    source.begin_point(key, 0, {}, T0)
    source.commit(key, [make_second(5, sitting=1)])
    assert copy_runs(source, target).continued == (key,)
    assert target.load(key).status == "running"
    finish(source, key, sitting=1)
    copy_runs(source, target)
    assert same(source, target, equal_seconds)


def test_a_run_that_went_on_in_the_target_is_left_alone(
    pair: tuple[Store, Store], filled: Begin, finish: Begin, make_second: MakeSecond
) -> None:
    source, target = pair
    key = filled(source, end=False)
    copy_runs(source, target)
    copy_runs(target, source)
    with_more = source
    with_more.commit(key, [make_second(5)])
    assert copy_runs(target, source).behind == (key,)
    assert len(source.load(key).points[0].seconds) == 6


def test_one_run_continued_in_two_places_is_named_and_left_alone(
    pair: tuple[Store, Store], filled: Begin, make_second: MakeSecond
) -> None:
    source, target = pair
    key = filled(source, end=False)
    copy_runs(source, target)
    with target._writing() as connection:
        connection.execute(text("UPDATE second SET sent = sent + 8 WHERE number = 4"))
    source.commit(key, [make_second(5)])
    assert copy_runs(source, target).diverged == (key,)
    assert len(target.load(key).points[0].seconds) == 5


def test_notes_of_both_sides_are_kept(pair: tuple[Store, Store], filled: Begin) -> None:
    source, target = pair
    key = filled(source)
    copy_runs(source, target)
    source.add_note(key, Note(1, "a", "here"))
    target.add_note(key, Note(2, "b", "there", True))
    assert copy_runs(source, target).continued == (key,)
    assert copy_runs(source, target) == Copied(unchanged=1)
    assert {note.text for note in target.load(key).notes} == {"here", "there"}
    assert target.runs()[0].void


def test_a_record_that_does_not_match_its_digest_is_copied_and_named(
    pair: tuple[Store, Store], filled: Begin
) -> None:
    source, target = pair
    key, good = filled(source), filled(source, started=T0 + 1)
    with source._writing() as connection:
        connection.execute(
            text(
                "UPDATE second SET errors = errors + 1 "
                "WHERE number = 2 AND run_id = (SELECT id FROM run WHERE key = :key)"
            ),
            {"key": key},
        )
    done = copy_runs(source, target)
    assert set(done.new) == {key, good}
    assert done.unsound == (key,)


def test_source_and_target_must_differ_and_the_source_exist(sqlite: str, filled: Begin) -> None:
    with open_store(sqlite) as store:
        filled(store)
    with pytest.raises(StoreError, match="the same store"):
        copy(sqlite, f"sqlite:///{sqlite}")
    other = sqlite + ".other"
    with pytest.raises(StoreError, match="there is no store"):
        copy(other, sqlite)
    assert not Path(other).exists()
    assert len(copy(sqlite, other).new) == 1


def test_a_copy_that_breaks_leaves_whole_runs_only(sqlite: str, filled: Begin) -> None:
    other = sqlite + ".other"
    with open_store(sqlite) as source, open_store(other) as target:
        keys = sorted(filled(source, started=T0 + k * 10**9) for k in range(3))
        with target._writing() as connection:  # the last run's seconds are refused half-way
            connection.execute(
                text(
                    "CREATE TRIGGER stop BEFORE INSERT ON second WHEN NEW.run_id = 3 AND NEW.number = 3 "
                    "BEGIN SELECT RAISE(ABORT, 'no more'); END"
                )
            )
        with pytest.raises(StoreError, match="no more"):
            copy_runs(source, target)
        assert sorted(line.run for line in target.runs()) == keys[:2]
        with target._writing() as connection:
            connection.execute(text("DROP TRIGGER stop"))
        assert copy_runs(source, target).new == (keys[2],)
        assert target.digest(keys[2]) == source.digest(keys[2])
