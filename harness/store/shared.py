"""A store that the lab shares, written so that losing the server loses nothing.

Every write goes to a local SQLite file first and then to the server. While the server is away the run
goes on into the file alone; when it is back, what it lacks is copied to it and checked. A run that is
whole on the server is taken out of the file again, so the file holds what has yet to be handed over.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from sqlalchemy import select

from harness.record import EndedBy, Event, Note, Run, Second, Sitting, Status, Tally, Verdict

from . import schema as t
from .connect import is_sqlite, parse_url
from .errors import NoSuchRun, StoreError, StoreLost, WrongRevision
from .moving import copy_run, forget
from .reading import RunLine
from .store import Store, open_store

Tell = Callable[[str], None]


def _keep_quiet(_: str) -> None:
    """Tell nobody."""


class SharedStore(Store):
    """A local file and a server behind it; what the base class does is done to the file.

    Lists, endings of keys and earlier runs come from the server; a whole run is loaded from the file
    where that holds it.

    Parameters
    ----------
    buffer
        Where the local file lies.
    address
        The server's.
    tell
        Is given a sentence when the server goes away and when it is back.
    retry_s
        How long to wait between two attempts to reach it again.
    """

    def __init__(
        self, buffer: Path, address: str, tell: Tell = _keep_quiet, retry_s: float = 5.0, busy_s: float = 5.0
    ) -> None:
        open_store(buffer, busy_s=busy_s).close()  # made and checked
        super().__init__(parse_url(buffer), busy_s)
        self.buffer = self.place
        self._address = address
        self._tell = tell
        self._retry_s = retry_s
        self._busy_s = busy_s
        self._server: Store | None = None
        self._behind = True
        self._tried = float("-inf")
        self._earlier: dict[str, list[RunLine]] = {}

    @property
    def behind(self) -> bool:
        """Whether the server lacks something that the file has."""
        return self._behind

    # --- the server

    def reach(self) -> bool:
        """Try to bring the server up to date with the file; whether it is."""
        try:
            self.reach_or_refuse()
        except WrongRevision as error:
            self._lose(error)  # upgraded while it was away: this run goes on into the file
        return not self._behind

    def reach_or_refuse(self) -> None:
        """Try to bring the server up to date with the file.

        Raises
        ------
        WrongRevision
            If the server's tables are not those of this version.
        """
        self._tried = time.monotonic()
        try:
            if self._server is None:
                self._server = open_store(self._address, busy_s=self._busy_s)
            self._hand_over(self._server)
        except WrongRevision:
            raise
        except StoreError as error:
            self._lose(error)
        else:
            self._behind = False

    def _lose(self, error: StoreError) -> None:
        if not self._behind:
            self._tell(f"{error.what}: nothing is lost, the run goes on into {self.buffer} until it is back")
        self._behind = True

    def _hand_over(self, server: Store) -> None:
        """Copy what the server lacks of all runs in the file, and take those out that are whole there."""
        with self._reading() as connection:
            lines = connection.execute(select(t.run.c.key, t.run.c.ended)).all()
        for key, ended in lines:
            if key not in self._open and self.load_head(key).status == "running":
                continue  # another program's, which hands it over itself
            with self._reading() as reader, server._writing() as writer:
                outcome = copy_run(reader, writer, key, authoritative=True)
            if outcome.name == "diverged" or outcome.unsound:
                self._tell(f"the run {key} on the server is not the one in {self.buffer}, where it stays")
            elif key in self._open:
                self._go_on(server, key)
            elif ended is not None or self.load_head(key).status == "cut":
                with self._writing() as connection:
                    forget(connection, key)
            if self._behind and outcome.seconds:
                lacked = f"{outcome.seconds} second{'' if outcome.seconds == 1 else 's'}"
                self._tell(f"the store is back and has got the {lacked} of the run {key} that it lacked")

    def _go_on(self, server: Store, key: str) -> None:
        """Let the server's writer stand where the file's does."""
        with server._reading() as connection:
            run_id = connection.execute(select(t.run.c.id).where(t.run.c.key == key)).scalar_one()
        ours = self._open[key]
        server._open[key] = replace(ours, run_id=run_id, facts=dict(ours.facts))

    def _too(self, act: Callable[[Store], Any]) -> None:
        """Do to the server what was done to the file, or all that it lacks."""
        if self._behind:
            if time.monotonic() - self._tried >= self._retry_s:
                self.reach()
            return
        assert self._server is not None
        try:
            act(self._server)
        except StoreError as error:
            self._lose(error)

    # --- writing

    def begin_run(self, **head: Any) -> str:
        """Begin a run, in the file and on the server."""
        key = super().begin_run(**head)
        self._too(lambda server: server.begin_run(**(head | {"key": key})))
        device, requirement = head["device"], head["settings"].get("requirement")
        if device.get("serial_number") and requirement and not self._behind and self._server:
            # Asked for now: at the run's end the server may be away.
            self._earlier[key] = self._server.earlier_runs(
                device["serial_number"], key, requirement, device.get("model")
            )
        return key

    def begin_sitting(self, key: str, sitting: Sitting, now: int | None = None) -> None:
        """Begin a sitting; a run that only the server has is fetched first.

        Raises
        ------
        StoreError
            As the base class's, and if the server that has the run is away.
        """
        if not self._has(key):
            self._fetch(key)
        if not self._behind and self._server is not None:
            try:
                self._server.begin_sitting(key, sitting, now)
            except StoreLost as error:
                self._lose(error)
        super().begin_sitting(key, sitting, now)
        if self._behind:
            self._too(lambda _: None)

    def begin_point(
        self,
        key: str,
        index: int,
        values: Mapping[str, float],
        started: int,
        facts: Mapping[str, Any] | None = None,
    ) -> None:
        """Begin a point, in the file and on the server."""
        super().begin_point(key, index, values, started, facts)
        self._too(lambda server: server.begin_point(key, index, values, started, facts))

    def commit(
        self,
        key: str,
        seconds: Sequence[Second],
        events: Sequence[tuple[int | None, Event]] = (),
        undecided_bits: int = 0,
        facts: Mapping[int, Mapping[str, Any]] | None = None,
        now: int | None = None,
    ) -> None:
        """Write what a second brought, to the file and to the server."""
        super().commit(key, seconds, events, undecided_bits, facts, now)
        self._too(lambda server: server.commit(key, seconds, events, undecided_bits, facts, now))

    def end_point(
        self,
        key: str,
        index: int,
        ended: int,
        ended_by: EndedBy,
        after_decision: Tally | None = None,
        facts: Mapping[str, Any] | None = None,
    ) -> None:
        """End a point, in the file and on the server."""
        super().end_point(key, index, ended, ended_by, after_decision, facts)
        self._too(lambda server: server.end_point(key, index, ended, ended_by, after_decision, facts))

    def end_sitting(self, key: str, index: int, ended: int, status: Status) -> None:
        """End a sitting, in the file and on the server."""
        super().end_sitting(key, index, ended, status)
        self._too(lambda server: server.end_sitting(key, index, ended, status))

    def end_run(
        self,
        key: str,
        ended: int,
        status: Status,
        ended_by: EndedBy,
        verdict: Verdict | None,
        stated: Mapping[str, Any] | None,
    ) -> str:
        """End a run, in the file and on the server, and hand it over for good if the server is there."""
        digest = super().end_run(key, ended, status, ended_by, verdict, stated)
        self._too(lambda server: server.end_run(key, ended, status, ended_by, verdict, stated))
        return digest

    def add_note(self, key: str, note: Note) -> None:
        """Add words to a record; only where the server is there, since the record is its."""
        self._reached().add_note(key, note)

    def close(self) -> None:
        """Hand over what is left if the server is there, and close."""
        self.reach()
        if self._behind and self._waiting():
            self._tell(f"what the server lacks lies in {self.buffer} and is handed over by the next run")
        if self._server is not None:
            self._server.close()
            self._server = None
        super().close()

    # --- reading

    def runs(self, limit: int | None = None, serial_number: str | None = None) -> list[RunLine]:
        """List the server's runs."""
        return self._reached().runs(limit, serial_number)

    def find(self, ref: str) -> str:
        """Give the key of a run on the server."""
        return self._reached().find(ref)

    def load_head(self, key: str) -> Run:
        """Give a run without its seconds and events, from the file where that has it."""
        try:
            return super().load_head(key)
        except NoSuchRun:
            if self._server is None:
                raise
            return self._server.load_head(key)

    def load(self, key: str) -> Any:
        """Give a whole run, from the file where that has it."""
        return super().load(key) if self._has(key) else self._reached().load(key)

    def digest(self, key: str) -> str | None:
        """Give the digest that was stored when the run ended."""
        return super().digest(key) if self._has(key) else self._reached().digest(key)

    def listed(self, key: str) -> RunLine:
        """Give a run as lists show it."""
        return super().listed(key) if self._has(key) else self._reached().listed(key)

    def earlier_runs(
        self, serial_number: str, before_key: str, requirement: Mapping[str, Any], model: str | None = None
    ) -> list[RunLine]:
        """List earlier runs of a unit; with the server away, those that were there when this one began."""
        try:
            return self._reached().earlier_runs(serial_number, before_key, requirement, model)
        except StoreLost:
            if before_key in self._earlier:
                return self._earlier[before_key]
            raise

    def _reached(self) -> Store:
        if self._server is None:
            raise StoreLost(
                "the shared store cannot be reached", "check that the server runs and the address is right"
            )
        return self._server

    def _has(self, key: str) -> bool:
        try:
            super().load_head(key)
        except NoSuchRun:
            return False
        return True

    def _waiting(self) -> bool:
        with self._reading() as connection:
            return connection.execute(select(t.run.c.id).limit(1)).first() is not None

    def _fetch(self, key: str) -> None:
        with self._reached()._reading() as reader, self._writing() as writer:
            copy_run(reader, writer, key, authoritative=False)


def open_for_bench(address: str | Path, buffer: Path, tell: Tell = _keep_quiet, busy_s: float = 5.0) -> Store:
    """Open a store to measure into: a file as it is, a server with a local file before it.

    Parameters
    ----------
    address
        As for `open_store`.
    buffer
        The local file, used with a server only. What an earlier run left in it is handed over now.
    tell
        Is given a sentence when the server goes away and when it is back.

    Raises
    ------
    StoreError
        If the file cannot be used, or the server's tables are of another revision. A server that is
        away is no error.
    """
    if is_sqlite(parse_url(address)):
        return open_store(address, busy_s=busy_s)
    store = SharedStore(buffer, str(address), tell, busy_s=busy_s)
    try:
        store.reach_or_refuse()
        if store.behind:
            tell(f"the shared store cannot be reached: the record goes into {store.buffer} until it is back")
    except BaseException:
        super(SharedStore, store).close()
        raise
    return store
