"""Writing records: a run as it happens, one transaction a second; rows of seconds and events never change."""

from __future__ import annotations

import json
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import Connection, insert, select, update

from harness.record import EndedBy, Event, Note, Second, Sitting, Status, Tally, Verdict

from . import schema as t
from .coding import clean, to_json
from .connect import DATABASE_ERRORS, writing
from .errors import StoreError, explain
from .keys import new_key
from .liveness import gone
from .reading import Reading
from .rows import event_row, id_of, last_numbers, second_row, stream_digest

_ENDINGS = ("ended", "status", "ended_by", "verdict", "stated", "digest")


@dataclass
class _Open:
    """What the writer of a run must remember between commits."""

    run_id: int
    sitting: int
    next_event: int
    point: int | None = None
    facts: dict[int, dict[str, Any]] = field(default_factory=dict)


class Writing(Reading):
    """The writing half of a store. One process writes a run; several runs may be written at once."""

    def __init__(self, *args: Any) -> None:
        super().__init__(*args)
        self._open: dict[str, _Open] = {}

    def begin_run(
        self,
        *,
        title: str,
        command: str,
        started: int,
        profile_text: str,
        overrides: Sequence[str],
        settings: Mapping[str, Any],
        device: Mapping[str, str],
        key: str | None = None,
    ) -> str:
        """Begin a run.

        Parameters
        ----------
        title, command, profile_text, overrides, settings, device
            As `harness.record.Run` has them.
        started
            UTC, ns.
        key
            Left out: a new one.

        Returns
        -------
        str
            Its key.
        """
        key = key or new_key(started)
        requirement = settings.get("requirement") or {}
        values = {
            "key": key,
            "title": clean(title),
            "command": command,
            "started": started,
            "status": "running",
            "profile_text": clean(profile_text),
            "overrides": to_json(list(overrides)),
            "settings": to_json(settings),
            "device": to_json(device),
            "serial_number": _text(device.get("serial_number")),
            "model": _text(device.get("model")),
            "requirement_ber": requirement.get("ber"),
        }
        with self._writing() as connection:
            connection.execute(insert(t.run).values(values))
        return key

    def begin_sitting(self, key: str, sitting: Sitting, now: int | None = None) -> None:
        """Begin a sitting; on a run that was cut, interrupted or failed, this is what resumes it.

        How the run stood until then is kept with the sitting before.

        Raises
        ------
        StoreError
            If the run is completed, or another process is writing it.
        """
        now = time.time_ns() if now is None else now
        with self._writing() as connection:
            run = connection.execute(select(t.run).where(t.run.c.key == key)).first()
            run_id = id_of(connection, key)
            if run is not None and run.status == "completed":
                raise StoreError(f"the run {key} is completed and cannot go on", "start a new run")
            _close_last_sitting(connection, run, now)
            connection.execute(
                insert(t.sitting).values(
                    run_id=run_id,
                    number=sitting.index,
                    started=sitting.started,
                    ended=sitting.ended,
                    status="running",
                    host=to_json(sitting.host),
                    versions=to_json(sitting.versions),
                    undecided_bits=sitting.undecided_bits,
                    last_commit=now,
                )
            )
            reopened: dict[str, Any] = dict.fromkeys(_ENDINGS)
            connection.execute(
                update(t.run).where(t.run.c.id == run_id).values(reopened | {"status": "running"})
            )
            _, last_event = last_numbers(connection, run_id)
        self._open[key] = _Open(run_id, sitting.index, last_event + 1)

    def begin_point(
        self,
        key: str,
        index: int,
        values: Mapping[str, float],
        started: int,
        facts: Mapping[str, Any] | None = None,
    ) -> None:
        """Begin a point, or go on with one that was begun in an earlier sitting.

        Raises
        ------
        StoreError
            If it was ended by anything but an interruption or a fault.
        """
        run = self._writer(key)
        c = t.point.c
        with self._writing() as connection:
            there = connection.execute(
                select(c.facts, c.ended, c.ended_by).where(c.run_id == run.run_id, c.number == index)
            ).first()
            known = {} if there is None else json.loads(there.facts)
            known |= dict(facts or {})
            if there is None:
                connection.execute(
                    insert(t.point).values(
                        run_id=run.run_id,
                        number=index,
                        conditions=to_json(values),
                        started=started,
                        facts=to_json(known),
                        **_after(Tally()),
                    )
                )
            elif there.ended is None or there.ended_by in ("interrupted", "fault"):
                connection.execute(
                    update(t.point)
                    .where(c.run_id == run.run_id, c.number == index)
                    .values(ended=None, ended_by=None, facts=to_json(known), **_after(Tally()))
                )
            else:
                raise StoreError(f"point {index} of the run {key} is over", "go on with the next one")
        run.facts[index], run.point = known, index

    def commit(
        self,
        key: str,
        seconds: Sequence[Second],
        events: Sequence[tuple[int | None, Event]] = (),
        undecided_bits: int = 0,
        facts: Mapping[int, Mapping[str, Any]] | None = None,
        now: int | None = None,
    ) -> None:
        """Write what a second brought, in one transaction: all of it or nothing.

        A run that has nothing to say for a while commits nothing from time to time, or other hosts
        take it to be cut.

        Parameters
        ----------
        seconds
            Final ones, numbered on from the last.
        events
            Each with the point's number; None: the point that is being measured.
        undecided_bits
            Received and not decided yet.
        facts
            Point -> what was found there; keys that are known already are replaced.
        now
            UTC, ns.

        Raises
        ------
        StoreError
            If a second is there already, or the store failed; nothing was written then, and the
            same call may be made again.
        """
        now = time.time_ns() if now is None else now
        run = self._writer(key)
        merged = {index: run.facts.get(index, {}) | dict(new) for index, new in (facts or {}).items()}
        event_rows = [
            event_row(run.run_id, run.next_event + k, run.point if point is None else point, event)
            for k, (point, event) in enumerate(events)
        ]
        second_rows = [second_row(run.run_id, second) for second in seconds]
        with self._writing() as connection:
            if second_rows:
                connection.execute(insert(t.second), second_rows)
            if event_rows:
                connection.execute(insert(t.event), event_rows)
            for index, known in merged.items():
                connection.execute(
                    update(t.point)
                    .where(t.point.c.run_id == run.run_id, t.point.c.number == index)
                    .values(facts=to_json(known))
                )
            connection.execute(
                update(t.sitting)
                .where(t.sitting.c.run_id == run.run_id, t.sitting.c.number == run.sitting)
                .values(undecided_bits=undecided_bits, last_commit=now)
            )
        run.next_event += len(event_rows)
        run.facts |= merged

    def end_point(
        self,
        key: str,
        index: int,
        ended: int,
        ended_by: EndedBy,
        after_decision: Tally | None = None,
        facts: Mapping[str, Any] | None = None,
    ) -> None:
        """End a point; written once."""
        run = self._writer(key)
        known = run.facts.get(index, {}) | dict(facts or {})
        c = t.point.c
        with self._writing() as connection:
            done = connection.execute(
                update(t.point)
                .where(c.run_id == run.run_id, c.number == index, c.ended.is_(None))
                .values(
                    ended=ended, ended_by=ended_by, facts=to_json(known), **_after(after_decision or Tally())
                )
            )
            _once(done.rowcount, f"point {index} of the run {key}")
        run.facts[index] = known

    def end_sitting(self, key: str, index: int, ended: int, status: Status) -> None:
        """End a sitting; written once."""
        run_id = self._writer(key).run_id
        c = t.sitting.c
        with self._writing() as connection:
            done = connection.execute(
                update(t.sitting)
                .where(c.run_id == run_id, c.number == index, c.ended.is_(None))
                .values(ended=ended, status=status)
            )
            _once(done.rowcount, f"sitting {index} of the run {key}")

    def end_run(
        self,
        key: str,
        ended: int,
        status: Status,
        ended_by: EndedBy,
        verdict: Verdict | None,
        stated: Mapping[str, Any] | None,
    ) -> str:
        """End a run; written once, with the digest of the whole record.

        Parameters
        ----------
        stated
            The assessment's JSON, as stated at the end.

        Returns
        -------
        str
            The digest.
        """
        c = t.run.c
        with self._writing() as connection:
            done = connection.execute(
                update(t.run)
                .where(c.key == key, c.ended.is_(None))
                .values(
                    ended=ended,
                    status=status,
                    ended_by=ended_by,
                    verdict=verdict,
                    stated=None if stated is None else to_json(stated),
                )
            )
            _once(done.rowcount, f"the run {key}")
            digest = stream_digest(connection, key)
            connection.execute(update(t.run).where(c.key == key).values(digest=digest))
        self._open.pop(key, None)
        return digest

    def add_note(self, key: str, note: Note) -> None:
        """Add words to a record; nothing of it changes."""
        c = t.note.c
        with self._writing() as connection:
            run_id = id_of(connection, key)
            numbers = list(connection.scalars(select(c.number).where(c.run_id == run_id)))
            connection.execute(
                insert(t.note).values(
                    run_id=run_id,
                    number=max(numbers, default=-1) + 1,
                    at=note.at,
                    who=clean(note.who),
                    text=clean(note.text),
                    void=note.void,
                )
            )

    def _writer(self, key: str) -> _Open:
        if key not in self._open:
            raise StoreError(f"the run {key} has no sitting here", "begin one first")
        return self._open[key]

    @contextmanager
    def _writing(self) -> Iterator[Connection]:
        try:
            with writing(self._engine) as connection:
                yield connection
        except DATABASE_ERRORS as error:
            raise explain(error, self.place) from error


def _once(rows: int, what: str) -> None:
    if rows != 1:
        raise StoreError(f"{what} is over already, or was never begun", "a record is written once")


def _text(value: Any) -> str | None:
    return None if value is None else clean(str(value))


def _after(tally: Tally) -> dict[str, int]:
    return {
        "after_received": tally.received,
        "after_compared": tally.compared,
        "after_unaligned": tally.unaligned,
        "after_errors": tally.errors,
        "after_ones_as_zeros": tally.ones_as_zeros,
        "after_zeros_as_ones": tally.zeros_as_ones,
    }


def _close_last_sitting(connection: Connection, run: Any, now: int) -> None:
    """Close what an earlier sitting left behind, and keep how the run stood."""
    c = t.sitting.c
    last = connection.execute(
        select(t.sitting).where(c.run_id == run.id).order_by(c.number.desc()).limit(1)
    ).first()
    if last is None:
        return
    values: dict[str, Any] = {}
    if last.status == "running":
        if not gone(json.loads(last.host), last.last_commit, now):
            raise StoreError(
                f"the run {run.key} is being written by another process",
                "wait until it is done, or end it there",
            )
        values = {"status": "cut", "ended": last.last_commit}
    if run.ended is not None:
        closing = {name: getattr(run, name) for name in _ENDINGS}
        closing["stated"] = None if run.stated is None else json.loads(run.stated)
        values["closing"] = to_json(closing)
    if values:
        connection.execute(
            update(t.sitting).where(c.run_id == run.id, c.number == last.number).values(values)
        )
