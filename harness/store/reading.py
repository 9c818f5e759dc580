"""Reading records: lists of runs, whole runs, the tail of a run that is being written."""

from __future__ import annotations

import json
import re
import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, cast

from sqlalchemy import Connection, Engine, Row, Select, and_, exists, func, or_, select

from harness.record import EndedBy, Event, Note, Point, Run, Second, Sitting, Status, Tally, Verdict

from . import schema as t
from .canonical import Digest
from .coding import unpack_kinds, unpack_positions, unpack_stretches
from .connect import DATABASE_ERRORS, reading
from .errors import AmbiguousRun, NoSuchRun, StoreError, explain
from .liveness import gone

_CHUNK = 2_000  # seconds decoded at once


@dataclass(frozen=True, slots=True)
class RunLine:
    """A run in one line, as lists show it."""

    run: str
    title: str
    command: str
    started: int
    ended: int | None
    status: Status
    ended_by: EndedBy | None
    verdict: Verdict | None
    serial_number: str | None
    model: str | None
    requirement_ber: float | None
    void: bool  # a note says that it does not count


@dataclass(frozen=True, slots=True)
class Tail:
    """What came since: the run with its new seconds and events only."""

    run: Run
    last_second: int  # pass it on as `after_second`
    events_seen: int  # pass it on as `after_events`


class Reading:
    """The reading half of a store.

    Parameters
    ----------
    engine
        Its connections are opened as needed, from any thread.
    place
        Its address, without a password.
    """

    def __init__(self, engine: Engine, place: str) -> None:
        self._engine = engine
        self.place = place

    def runs(self, limit: int | None = None, serial_number: str | None = None) -> list[RunLine]:
        """List runs, newest first."""
        query = _lines().order_by(t.run.c.started.desc(), t.run.c.key.desc())
        if serial_number is not None:
            query = query.where(t.run.c.serial_number == serial_number)
        if limit is not None:
            query = query.limit(limit)
        return self._run_lines(query)

    def earlier_runs(
        self,
        serial_number: str,
        before_key: str,
        requirement: Mapping[str, Any],
        model: str | None = None,
    ) -> list[RunLine]:
        """List earlier runs of a unit against the same requirement, oldest first.

        The same requirement is the same BER: another confidence or plan does not make a retest
        a first test. Void, interrupted, failed and cut runs count too.

        Parameters
        ----------
        serial_number
            Of the unit.
        before_key
            The run that asks; runs that began before it are listed.
        requirement
            Its resolved requirement; only ``ber`` is looked at.
        model
            Its model. Units of another model may have the same number; a run that names none counts.
        """
        run = t.run.c
        with self._reading() as connection:
            started = connection.scalar(select(run.started).where(run.key == before_key))
        query = _lines().where(
            run.serial_number == serial_number,
            run.requirement_ber == float(requirement["ber"]),
            run.key != before_key,
        )
        if started is not None:
            earlier = and_(run.started == started, run.key < before_key)
            query = query.where(or_(run.started < started, earlier))
        if model:
            query = query.where(or_(run.model.is_(None), run.model == "", run.model == model))
        return self._run_lines(query.order_by(run.started, run.key))

    def _run_lines(self, query: Select[Any]) -> list[RunLine]:
        now = time.time_ns()
        with self._reading() as connection:
            rows = connection.execute(query).all()
            statuses = {
                row.id: _status(connection, row.id, row.status, now)
                for row in rows
                if row.status == "running"
            }
        return [
            RunLine(
                run=row.key,
                title=row.title,
                command=row.command,
                started=row.started,
                ended=row.ended,
                status=cast(Status, statuses.get(row.id, row.status)),
                ended_by=row.ended_by,
                verdict=row.verdict,
                serial_number=row.serial_number,
                model=row.model,
                requirement_ber=row.requirement_ber,
                void=bool(row.void),
            )
            for row in rows
        ]

    def find(self, ref: str) -> str:
        """Give the key of a run: `last`, a whole key, or any unique ending of one.

        Raises
        ------
        NoSuchRun, AmbiguousRun
        """
        wanted = ref.strip().lower()
        run = t.run.c
        with self._reading() as connection:
            if wanted == "last":
                newest = select(run.key).order_by(run.started.desc(), run.key.desc()).limit(1)
                keys = list(connection.scalars(newest))
            elif re.fullmatch(r"[0-9a-f-]{1,36}", wanted):
                keys = list(connection.scalars(select(run.key).where(run.key.like(f"%{wanted}")).limit(4)))
            else:
                keys = []
        if len(keys) == 1:
            return cast(str, keys[0])
        if not keys:
            what = (
                f"the store {self.place} holds no run yet" if wanted == "last" else f'no run is named "{ref}"'
            )
            raise NoSuchRun(what, "`bitassay runs` lists them; give a whole key, any unique ending, or last")
        several = ", ".join("…" + key[-max(8, len(wanted) + 4) :] for key in sorted(keys)[:3])
        raise AmbiguousRun(
            f'"{ref}" is the ending of several runs: {several}' + (" and more" if len(keys) > 3 else ""),
            "give more of the key",
        )

    def load(self, key: str) -> Run:
        """Give a whole run.

        Raises
        ------
        NoSuchRun, StoreError
        """
        return self._load(key, None, 0)[0]

    def load_tail(self, key: str, after_second: int, after_events: int = 0) -> Tail:
        """Give what came since: seconds numbered over `after_second`, events beyond the first `after_events`.

        Everything else is whole; tallies of earlier seconds are the reader's to keep.
        """
        run, events = self._load(key, after_second, after_events)
        numbers = [point.seconds[-1].index for point in run.points if point.seconds]
        return Tail(run, max(numbers, default=after_second), events)

    def digest(self, key: str) -> str | None:
        """Give the digest that was stored when the run ended, or None."""
        with self._reading() as connection:
            row = connection.execute(select(t.run.c.digest).where(t.run.c.key == key)).first()
        if row is None:
            raise NoSuchRun(f'no run is named "{key}"', "`bitassay runs` lists them")
        return cast("str | None", row[0])

    def _load(self, key: str, after_second: int | None, after_events: int) -> tuple[Run, int]:
        now = time.time_ns()
        with self._reading() as connection:
            run = head(connection, key, now)
            run_id = id_of(connection, key)
            points = []
            for point in run.points:
                seconds = tuple(seconds_of(connection, run_id, point.index, after_second))
                points.append(replace(point, seconds=seconds))
            events, seen = _events(connection, run_id, after_events)
        return replace(run, points=_with_events(run, points, events)), seen

    def _reading(self) -> _Explained:
        return _Explained(self._engine, self.place)


class _Explained:
    """A reading transaction whose errors are put into our words, also those of a damaged record."""

    def __init__(self, engine: Engine, place: str) -> None:
        self._transaction = reading(engine)
        self._place = place

    def __enter__(self) -> Connection:
        try:
            return self._transaction.__enter__()
        except DATABASE_ERRORS as error:
            raise explain(error, self._place) from error

    def __exit__(self, kind: Any, error: BaseException | None, trace: Any) -> None:
        try:
            self._transaction.__exit__(kind, error, trace)
        except DATABASE_ERRORS as failure:
            raise explain(failure, self._place) from failure
        except (ValueError, TypeError, KeyError) as failure:
            raise StoreError(
                f"a record in the store {self._place} cannot be read: {failure}",
                "the file was changed by something else; restore a backup",
            ) from failure


def _lines() -> Select[Any]:
    run, note = t.run.c, t.note.c
    void = exists().where(note.run_id == run.id, note.void)
    return select(
        run.id,
        run.key,
        run.title,
        run.command,
        run.started,
        run.ended,
        run.status,
        run.ended_by,
        run.verdict,
        run.serial_number,
        run.model,
        run.requirement_ber,
        void.label("void"),
    )


def _status(connection: Connection, run_id: int, status: str, now: int) -> str:
    """Give a run's status, `cut` where it says running and its process is gone."""
    if status != "running":
        return status
    newest = (
        select(t.sitting.c.host, t.sitting.c.last_commit)
        .where(t.sitting.c.run_id == run_id)
        .order_by(t.sitting.c.number.desc())
        .limit(1)
    )
    row = connection.execute(newest).first()
    if row is None:  # begun and no sitting yet: a process that died within the first moments
        started = connection.scalar(select(t.run.c.started).where(t.run.c.id == run_id)) or 0
        return "cut" if gone({}, started, now) else status
    return "cut" if gone(json.loads(row.host), row.last_commit, now) else status


def id_of(connection: Connection, key: str) -> int:
    """Give the store's own number of a run; raises `NoSuchRun`."""
    run_id = connection.scalar(select(t.run.c.id).where(t.run.c.key == key))
    if run_id is None:
        raise NoSuchRun(f'no run is named "{key}"', "`bitassay runs` lists them")
    return cast(int, run_id)


def head(connection: Connection, key: str, now: int) -> Run:
    """Give a run without its seconds and events."""
    row = connection.execute(select(t.run).where(t.run.c.key == key)).first()
    if row is None:
        raise NoSuchRun(f'no run is named "{key}"', "`bitassay runs` lists them")
    status = _status(connection, row.id, row.status, now)
    sittings = connection.execute(
        select(t.sitting).where(t.sitting.c.run_id == row.id).order_by(t.sitting.c.number)
    ).all()
    points = connection.execute(
        select(t.point).where(t.point.c.run_id == row.id).order_by(t.point.c.number)
    ).all()
    notes = connection.execute(
        select(t.note).where(t.note.c.run_id == row.id).order_by(t.note.c.number)
    ).all()
    return Run(
        key=row.key,
        title=row.title,
        command=row.command,
        started=row.started,
        ended=row.ended,
        status=cast(Status, status),
        ended_by=row.ended_by,
        verdict=row.verdict,
        profile_text=row.profile_text,
        overrides=tuple(json.loads(row.overrides)),
        settings=json.loads(row.settings),
        device=json.loads(row.device),
        sittings=tuple(_sitting(s, status) for s in sittings),
        points=tuple(_point(p) for p in points),
        stated=None if row.stated is None else json.loads(row.stated),
        notes=tuple(Note(n.at, n.who, n.text, bool(n.void)) for n in notes),
    )


def _sitting(row: Row[Any], run_status: str) -> Sitting:
    status: Status = row.status
    if status == "running" and run_status != "running":
        status = "cut"
    return Sitting(
        index=row.number,
        started=row.started,
        ended=row.ended,
        host=json.loads(row.host),
        versions=json.loads(row.versions),
        undecided_bits=row.undecided_bits,
        status=status,
    )


def _point(row: Row[Any]) -> Point:
    return Point(
        index=row.number,
        values=json.loads(row.conditions),
        started=row.started,
        ended=row.ended,
        ended_by=row.ended_by,
        seconds=(),
        events=(),
        after_decision=Tally(
            row.after_received,
            row.after_compared,
            row.after_unaligned,
            row.after_errors,
            row.after_ones_as_zeros,
            row.after_zeros_as_ones,
        ),
        facts=json.loads(row.facts),
    )


def seconds_of(connection: Connection, run_id: int, point: int, after: int | None = None) -> Iterator[Second]:
    """Give a point's seconds in order; memory stays flat where they are not kept."""
    c = t.second.c
    query = select(t.second).where(c.run_id == run_id, c.point == point).order_by(c.number)
    if after is not None:
        query = query.where(c.number > after)
    result = connection.execution_options(yield_per=_CHUNK).execute(query)
    for rows in result.partitions(_CHUNK):
        yield from _decode(rows)


def _decode(rows: Sequence[Row[Any]]) -> Iterator[Second]:
    all_positions = unpack_positions([r.positions for r in rows], [r.first_bit for r in rows])
    for row, positions in zip(rows, all_positions, strict=True):
        # In the order of the table's columns: names would double the time that a long run takes.
        (_, number, point, sitting, at, duration_ns, sent, *counts) = tuple(row)[:13]
        (due, slips, lost, inserted, first_bit, _, kinds, complete, stretches) = tuple(row)[13:]
        yield Second(
            point,
            sitting,
            number,
            at,
            duration_ns,
            sent,
            Tally(*counts),
            bool(due),
            slips,
            lost,
            inserted,
            first_bit,
            positions,
            unpack_kinds(kinds, len(positions)),
            bool(complete),
            unpack_stretches(stretches, counts[0]),
        )


def _events(connection: Connection, run_id: int, skip: int) -> tuple[list[tuple[int | None, Event]], int]:
    c = t.event.c
    rows = connection.execute(
        select(t.event).where(c.run_id == run_id, c.number >= skip).order_by(c.number)
    ).all()
    events = [(row.point, Event(row.kind, row.bit, row.text, row.at, json.loads(row.data))) for row in rows]
    return events, rows[-1].number + 1 if rows else skip


def _with_events(
    run: Run, points: Sequence[Point], events: Sequence[tuple[int | None, Event]]
) -> tuple[Point, ...]:
    """Share the events out; those from before the first point belong to it."""
    if not points and events:
        # It failed before its first point: what happened must be seen all the same.
        points = [Point(0, {}, run.started, run.ended, run.ended_by, (), ())]
    if not points:
        return ()
    first = points[0].index
    shared: dict[int, list[Event]] = {point.index: [] for point in points}
    for number, event in events:
        shared[first if number is None else number].append(event)
    return tuple(replace(point, events=tuple(shared[point.index])) for point in points)


def stream_digest(connection: Connection, key: str) -> str:
    """Give the digest of a stored record without holding its seconds in memory."""
    run = head(connection, key, time.time_ns())
    run_id = id_of(connection, key)
    events, _ = _events(connection, run_id, 0)
    digest = Digest()
    digest.head(run)
    for sitting in run.sittings:
        digest.sitting(sitting)
    for point in _with_events(run, run.points, events):
        digest.point(point)
        for second in seconds_of(connection, run_id, point.index):
            digest.second(second)
        for event in point.events:
            digest.event(event)
    return digest.hexdigest()


def last_numbers(connection: Connection, run_id: int) -> tuple[int, int]:
    """Give the number of a run's last second and of its last event, -1 where there are none."""
    second = select(func.max(t.second.c.number)).where(t.second.c.run_id == run_id)
    event = select(func.max(t.event.c.number)).where(t.event.c.run_id == run_id)
    last_second, last_event = connection.scalar(second), connection.scalar(event)
    return (
        -1 if last_second is None else int(last_second),
        -1 if last_event is None else int(last_event),
    )
