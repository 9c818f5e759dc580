"""Moving records: to a newer revision, and from one store to another, without losing or doubling any."""

from __future__ import annotations

import sqlite3
import time
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Row, Table, delete, insert, select, text, update

from . import schema as t
from .connect import (
    DATABASE_ERRORS,
    TABLE_LOCK,
    check_revision,
    is_sqlite,
    make_engine,
    migrate,
    parse_url,
    place_of,
    prepare_file,
    reading,
    revision_of,
    writing,
)
from .errors import StoreError, explain
from .rows import last_numbers, stream_digest
from .store import Store, open_store

_CHUNK = 2_000


@dataclass(frozen=True, slots=True)
class Upgraded:
    """What an upgrade did."""

    place: str
    found: str  # the revision before
    now: str
    backup: Path | None  # SQLite: the copy made beforehand; None where nothing had to be done


@dataclass(frozen=True, slots=True)
class Copied:
    """What a copy did; keys of runs."""

    new: tuple[str, ...] = ()
    continued: tuple[str, ...] = ()  # were there in part, or have changed since
    unchanged: int = 0
    behind: tuple[str, ...] = ()  # the target has more of them than the source: left alone
    diverged: tuple[str, ...] = ()  # the same key with different seconds: left alone
    unsound: tuple[str, ...] = ()  # copied as they are, but they do not match their stored digest
    seconds: int = 0
    events: int = 0


def upgrade(address: str | Path, busy_s: float = 5.0) -> Upgraded:
    """Bring a store's tables to this version's revision; SQLite is backed up beforehand.

    Raises
    ------
    StoreError
        If there is none, it is newer, or the upgrade failed; the store is then as it was.
    """
    url = parse_url(address)
    if is_sqlite(url):
        prepare_file(url, create=False)
    engine, place = make_engine(url, busy_s), place_of(url)
    try:
        with reading(engine) as connection:
            found = revision_of(connection, place)
        if found is None:
            raise StoreError(f"the store {place} is empty", "there is nothing to upgrade")
        if found > t.HEAD:
            check_revision(found, place)
        if found == t.HEAD:
            return Upgraded(place, found, t.HEAD, None)
        backup = _back_up(Path(place), found) if is_sqlite(url) else None
        with writing(engine) as connection:
            if engine.dialect.name == "postgresql":
                connection.execute(text(f"SELECT pg_advisory_xact_lock({TABLE_LOCK})"))
            migrate(connection)
        return Upgraded(place, found, t.HEAD, backup)
    except DATABASE_ERRORS as error:
        raise explain(error, place) from error
    finally:
        engine.dispose()


def _back_up(path: Path, found: str) -> Path:
    """Copy a SQLite store while others may be using it, and see that the copy is whole."""
    stamp = time.strftime("%Y%m%dT%H%M%SZ", time.gmtime())
    target = path.with_name(f"{path.name}.revision-{found}-{stamp}.backup")
    if target.exists():
        raise StoreError(f"the backup {target} is there already", "wait a second and try again")
    source, copy = sqlite3.connect(path), sqlite3.connect(target)
    try:
        source.backup(copy)
        (answer,) = copy.execute("PRAGMA integrity_check").fetchone()
    finally:
        source.close()
        copy.close()
    if answer != "ok":
        raise StoreError(f"the store {path} is damaged: {answer}", "restore an earlier backup")
    return target


def copy(source: str | Path, target: str | Path, busy_s: float = 5.0) -> Copied:
    """Copy all runs from one store to another; doing it again copies what has come since.

    A run that is still being written is copied as far as it goes.

    Raises
    ------
    StoreError
        If one of them cannot be used; runs copied until then stay.
    """
    if parse_url(source) == parse_url(target):
        raise StoreError("source and target are the same store", "name two stores")
    with open_store(source, create=False, busy_s=busy_s) as old, open_store(target, busy_s=busy_s) as new:
        return copy_runs(old, new)


def copy_runs(source: Store, target: Store) -> Copied:
    """Copy all runs between two open stores."""
    there = _overview(target)
    lists: dict[str, list[str]] = {name: [] for name in ("new", "continued", "behind", "diverged", "unsound")}
    counts: Counter[str] = Counter()
    for key, state in sorted(_overview(source).items()):
        if _nothing_new(state, there.get(key)):
            counts["unchanged"] += 1
            continue
        outcome = _copy_one(source, target, key)
        if outcome.name == "unchanged":
            counts["unchanged"] += 1
        else:
            lists[outcome.name].append(key)
        if outcome.unsound:
            lists["unsound"].append(key)
        counts.update(seconds=outcome.seconds, events=outcome.events)
    return Copied(
        new=tuple(lists["new"]),
        continued=tuple(lists["continued"]),
        unchanged=counts["unchanged"],
        behind=tuple(lists["behind"]),
        diverged=tuple(lists["diverged"]),
        unsound=tuple(lists["unsound"]),
        seconds=counts["seconds"],
        events=counts["events"],
    )


@dataclass(frozen=True, slots=True)
class _State:
    """Enough of a run to see that nothing has come since."""

    digest: str | None
    notes: frozenset[tuple[Any, ...]]


_NO_NOTES: frozenset[tuple[Any, ...]] = frozenset()


def _overview(store: Store) -> dict[str, _State]:
    n = t.note.c
    notes: dict[int, set[tuple[Any, ...]]] = {}
    with store._reading() as connection:
        for run_id, *words in connection.execute(select(n.run_id, n.at, n.who, n.text, n.void)):
            notes.setdefault(run_id, set()).add(tuple(words))
        runs = connection.execute(select(t.run.c.id, t.run.c.key, t.run.c.digest)).all()
    return {row.key: _State(row.digest, frozenset(notes.get(row.id, _NO_NOTES))) for row in runs}


def _nothing_new(source: _State, target: _State | None) -> bool:
    return (
        target is not None
        and source.digest is not None
        and source.digest == target.digest
        and source.notes <= target.notes
    )


@dataclass
class Outcome:
    """What became of one run."""

    name: str
    seconds: int = 0
    events: int = 0
    unsound: bool = False


@dataclass
class _Side:
    """A run in one store."""

    connection: Connection
    row: Row[Any]
    last_second: int = field(init=False)
    last_event: int = field(init=False)

    def __post_init__(self) -> None:
        self.last_second, self.last_event = last_numbers(self.connection, self.row.id)

    def progress(self) -> tuple[int, int, int, bool]:
        """How far it has come: of two copies of one run the lesser is the older."""
        sittings = self.rows(t.sitting)
        return len(sittings), self.last_second, self.last_event, self.row.ended is not None

    def rows(self, table: Table) -> list[dict[str, Any]]:
        """Rows of a small table."""
        query = select(table).where(table.c.run_id == self.row.id).order_by(table.c.number)
        return [dict(row._mapping) for row in self.connection.execute(query)]

    def second(self, number: int) -> dict[str, Any] | None:
        """One second, without the store's own number of the run."""
        c = t.second.c
        row = self.connection.execute(
            select(t.second).where(c.run_id == self.row.id, c.number == number)
        ).first()
        return None if row is None else {k: v for k, v in row._mapping.items() if k != "run_id"}


def _copy_one(source: Store, target: Store, key: str) -> Outcome:
    with source._reading() as reader, target._writing() as writer:
        return copy_run(reader, writer, key, authoritative=False)


def copy_run(reader: Connection, writer: Connection, key: str, authoritative: bool) -> Outcome:
    """Copy one run, or what has come of it since, inside the two stores' transactions.

    Parameters
    ----------
    authoritative
        The source is where the run was last written, even where it holds less of it: the rest of a run
        that was begun in the target.
    """
    source = _Side(reader, reader.execute(select(t.run).where(t.run.c.key == key)).one())
    found = writer.execute(select(t.run).where(t.run.c.key == key)).first()
    if found is None:
        columns = {name: value for name, value in source.row._mapping.items() if name != "id"}
        run_id = writer.execute(insert(t.run).values(columns)).inserted_primary_key
        assert run_id is not None
        found = writer.execute(select(t.run).where(t.run.c.id == run_id[0])).one()
        outcome, target = Outcome("new"), _Side(writer, found)
    else:
        outcome, target = Outcome("unchanged"), _Side(writer, found)
        if not _same_until_now(source, target):
            return Outcome("diverged")
        if not authoritative and target.progress() > source.progress():
            return Outcome("behind")
    changed = _sync_small(source, target)
    outcome.seconds = _append(source, target, t.second, target.last_second)
    outcome.events = _append(source, target, t.event, target.last_event)
    changed |= _add_notes(source, target) or bool(outcome.seconds or outcome.events)
    if changed and outcome.name == "unchanged":
        outcome.name = "continued"
    if changed and source.row.ended is not None:
        digest = stream_digest(writer, key)
        if source.row.digest is None:
            writer.execute(update(t.run).where(t.run.c.id == target.row.id).values(digest=digest))
        outcome.unsound = source.row.digest is not None and digest != source.row.digest
    return outcome


def _same_until_now(source: _Side, target: _Side) -> bool:
    """Whether the last second that both have is the same: otherwise two benches went on with one run."""
    last = min(source.last_second, target.last_second)
    if last < 0:
        return True
    one = source.second(last)
    return one is None or one == target.second(last)


def _sync_small(source: _Side, target: _Side) -> bool:
    """Bring sittings, points and the run's own row to the source's state; whether anything changed."""
    changed = False
    for table in (t.sitting, t.point):
        there = {row["number"]: row for row in target.rows(table)}
        for row in source.rows(table):
            row["run_id"] = target.row.id
            if row["number"] not in there:
                target.connection.execute(insert(table).values(row))
            elif there[row["number"]] != row:
                target.connection.execute(
                    update(table)
                    .where(table.c.run_id == target.row.id, table.c.number == row["number"])
                    .values(row)
                )
            else:
                continue
            changed = True
    here = {k: v for k, v in source.row._mapping.items() if k != "id"}
    if here != {k: v for k, v in target.row._mapping.items() if k != "id"}:
        target.connection.execute(update(t.run).where(t.run.c.id == target.row.id).values(here))
        changed = True
    return changed


def _append(source: _Side, target: _Side, table: Table, after: int) -> int:
    query = (
        select(table)
        .where(table.c.run_id == source.row.id, table.c.number > after)
        .order_by(table.c.number)
        .execution_options(yield_per=_CHUNK)
    )
    count = 0
    with source.connection.execute(query) as result:
        for rows in result.partitions(_CHUNK):
            copies = [dict(row._mapping) | {"run_id": target.row.id} for row in rows]
            target.connection.execute(insert(table), copies)
            count += len(rows)
    return count


def _add_notes(source: _Side, target: _Side) -> bool:
    """Add the notes that the target does not have; each store numbers its own."""

    def words(row: dict[str, Any]) -> tuple[Any, ...]:
        return row["at"], row["who"], row["text"], bool(row["void"])

    there = target.rows(t.note)
    known = {words(row) for row in there}
    missing = [row for row in source.rows(t.note) if words(row) not in known]
    number = max((row["number"] for row in there), default=-1)
    for row in missing:
        number += 1
        target.connection.execute(insert(t.note).values(row | {"run_id": target.row.id, "number": number}))
    return bool(missing)


def forget(connection: Connection, key: str) -> None:
    """Take a run out of a buffer from which it has been handed over."""
    run_id = connection.scalar(select(t.run.c.id).where(t.run.c.key == key))
    for table in (t.note, t.event, t.second, t.point, t.sitting):
        connection.execute(delete(table).where(table.c.run_id == run_id))
    connection.execute(delete(t.run).where(t.run.c.id == run_id))


__all__ = ["Copied", "Upgraded", "copy", "copy_run", "copy_runs", "forget", "upgrade"]
