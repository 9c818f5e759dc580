"""Reading records: lists of runs, whole runs, the tail of a run that is being written."""

from __future__ import annotations

import json
import re
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import Any, cast

from sqlalchemy import Connection, Engine, Select, and_, exists, or_, select

from harness.record import EndedBy, Run, Status, Verdict

from . import schema as t
from .connect import DATABASE_ERRORS, reading
from .errors import AmbiguousRun, NoSuchRun, StoreError, explain
from .rows import events_of, head, id_of, seconds_of, spans_of, status_of, with_events


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

    def listed(self, key: str) -> RunLine:
        """Give a run as lists show it."""
        lines = self._run_lines(_lines().where(t.run.c.key == key))
        if not lines:
            raise NoSuchRun(f'no run is named "{key}"', "`bitassay runs` lists them")
        return lines[0]

    def in_lot(self, name: str) -> list[str]:
        """List the keys of the runs of a lot, by what ``device.lot`` says, oldest first."""
        return [key for key, lot in self._lots() if lot == name]

    def lots(self) -> list[str]:
        """List the names of all lots, the one measured last first."""
        return list(dict.fromkeys(lot for _key, lot in reversed(self._lots())))

    def _lots(self) -> list[tuple[str, str]]:
        """Give (key, lot) of every run that belongs to one, oldest first."""
        run = t.run.c
        query = select(run.key, run.device).where(run.device.like('%"lot"%')).order_by(run.started, run.key)
        with self._reading() as connection:
            rows = connection.execute(query).all()
            named = [(cast(str, row.key), json.loads(row.device).get("lot")) for row in rows]
        return [(key, str(lot)) for key, lot in named if lot]

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
                row.id: status_of(connection, row.id, row.status, now)
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
        return self._load(key, -1, 0)[0]

    def load_head(self, key: str) -> Run:
        """Give a run without its seconds and events: who, what, when, and how it stands."""
        with self._reading() as connection:
            return head(connection, key, time.time_ns())

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

    def _load(self, key: str, after_second: int, after_events: int) -> tuple[Run, int]:
        now = time.time_ns()
        with self._reading() as connection:
            run = head(connection, key, now)
            run_id = id_of(connection, key)
            spans = spans_of(connection, run_id, after_second)
            points = []
            for point in run.points:
                seconds = tuple(seconds_of(connection, run_id, point.index, spans.get(point.index)))
                points.append(replace(point, seconds=seconds))
            events, seen = events_of(connection, run_id, after_events)
            return replace(run, points=with_events(run, points, events)), seen

    @contextmanager
    def _reading(self) -> Iterator[Connection]:
        """Give a reading transaction whose errors are put into our words, a damaged record's too."""
        try:
            with reading(self._engine) as connection:
                yield connection
        except DATABASE_ERRORS as error:
            raise explain(error, self.place) from error
        except (ValueError, TypeError, KeyError) as error:
            raise StoreError(
                f"a record in the store {self.place} cannot be read: {' '.join(str(error).split())}",
                "something else has changed it; restore a backup",
            ) from error


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
