"""Rows of the store turned into records, and back."""

from __future__ import annotations

import json
import time
from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Any, cast

from sqlalchemy import Connection, Row, func, select

from harness.record import Event, Note, Point, Run, Second, Sitting, Status, Tally

from . import schema as t
from .canonical import Digest
from .coding import (
    clean,
    pack_kinds,
    pack_positions,
    pack_stretches,
    to_json,
    unpack_kinds,
    unpack_positions,
    unpack_stretches,
)
from .errors import NoSuchRun
from .liveness import gone

_CHUNK = 2_000  # seconds decoded at once


def status_of(connection: Connection, run_id: int, status: str, now: int) -> str:
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
    status = status_of(connection, row.id, row.status, now)
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


def spans_of(connection: Connection, run_id: int, after: int = -1) -> dict[int, tuple[int, int]]:
    """Give the numbers of each point's first and last second, among those numbered over `after`."""
    c = t.second.c
    query = (
        select(c.point, func.min(c.number), func.max(c.number))
        .where(c.run_id == run_id, c.number > after)
        .group_by(c.point)
    )
    return {point: (first, last) for point, first, last in connection.execute(query)}


def seconds_of(
    connection: Connection, run_id: int, point: int, span: tuple[int, int] | None
) -> Iterator[Second]:
    """Give a point's seconds in order; memory stays flat where they are not kept.

    Parameters
    ----------
    span
        From `spans_of`, so that a point of a long sweep does not look through all the others' seconds.
    """
    if span is None:
        return
    c = t.second.c
    query = (
        select(t.second)
        .where(c.run_id == run_id, c.number >= span[0], c.number <= span[1], c.point == point)
        .order_by(c.number)
        .execution_options(yield_per=_CHUNK)
    )
    with connection.execute(query) as result:
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


def events_of(connection: Connection, run_id: int, skip: int) -> tuple[list[tuple[int | None, Event]], int]:
    """Give a run's events beyond the first `skip`, each with its point, and how many there are in all."""
    c = t.event.c
    rows = connection.execute(
        select(t.event).where(c.run_id == run_id, c.number >= skip).order_by(c.number)
    ).all()
    events = [(row.point, Event(row.kind, row.bit, row.text, row.at, json.loads(row.data))) for row in rows]
    return events, rows[-1].number + 1 if rows else skip


def with_events(
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
        at = first if number is None else number
        if at not in shared:
            raise ValueError(f"an event belongs to point {at}, which is not there")
        shared[at].append(event)
    return tuple(replace(point, events=tuple(shared[point.index])) for point in points)


def stream_digest(connection: Connection, key: str) -> str:
    """Give the digest of a stored record without holding its seconds in memory."""
    run = head(connection, key, time.time_ns())
    run_id = id_of(connection, key)
    events, _ = events_of(connection, run_id, 0)
    spans = spans_of(connection, run_id)
    digest = Digest()
    digest.head(run)
    for sitting in run.sittings:
        digest.sitting(sitting)
    for point in with_events(run, run.points, events):
        digest.point(point)
        for second in seconds_of(connection, run_id, point.index, spans.get(point.index)):
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


def second_row(run_id: int, second: Second) -> dict[str, Any]:
    """Give a second as its row."""
    tally = second.tally
    return {
        "run_id": run_id,
        "number": second.index,
        "point": second.point,
        "sitting": second.sitting,
        "at": second.at,
        "duration_ns": second.duration_ns,
        "sent": second.sent,
        "received": tally.received,
        "compared": tally.compared,
        "unaligned": tally.unaligned,
        "errors": tally.errors,
        "ones_as_zeros": tally.ones_as_zeros,
        "zeros_as_ones": tally.zeros_as_ones,
        "due": second.due,
        "slips": second.slips,
        "bits_lost": second.bits_lost,
        "bits_inserted": second.bits_inserted,
        "first_bit": second.first_bit,
        "positions": pack_positions(second.positions, second.first_bit),
        "kinds": pack_kinds(second.ones_lost),
        "positions_complete": second.positions_complete,
        "stretches": pack_stretches(second.stretches, tally.received),
    }


def event_row(run_id: int, number: int, point: int | None, event: Event) -> dict[str, Any]:
    """Give an event as its row."""
    return {
        "run_id": run_id,
        "number": number,
        "point": point,
        "kind": event.kind,
        "bit": event.bit,
        "at": event.at,
        "text": clean(event.text),
        "data": to_json(event.data),
    }
