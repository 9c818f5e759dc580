"""Real stores: a SQLite file always, PostgreSQL where BITASSAY_TEST_POSTGRES names a server."""

from __future__ import annotations

import contextlib
import glob
import os
import pwd
import shutil
import socket
import subprocess
import tempfile
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import text

from harness.record import Event, Second, Sitting, Tally
from harness.store import Store, open_store, this_host

T0 = 1_780_000_000_000_000_000  # ns, some day
SERVER = os.environ.get("BITASSAY_TEST_POSTGRES", "")


@pytest.fixture
def postgres() -> Iterator[str]:
    """Give the address of an empty PostgreSQL store: a schema of its own, dropped afterwards."""
    if not SERVER:
        pytest.skip(
            "BITASSAY_TEST_POSTGRES names no PostgreSQL server, for example postgresql://postgres@host/db"
        )
    import psycopg

    name = f"bitassay_test_{uuid.uuid4().hex}"
    with psycopg.connect(SERVER.replace("+psycopg", ""), autocommit=True) as connection:
        connection.execute(f'CREATE SCHEMA "{name}"')
        yield f"{SERVER}{'&' if '?' in SERVER else '?'}options=-csearch_path%3D{name}"
        connection.execute(f'DROP SCHEMA "{name}" CASCADE')


@pytest.fixture(params=["sqlite", "postgres"])
def address(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Give the address of a store that does not exist yet, on each kind of database."""
    if request.param == "postgres":
        return str(request.getfixturevalue("postgres"))
    return str(tmp_path / "results" / "runs.sqlite")


@pytest.fixture(scope="session")
def empty(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give an empty SQLite store to copy: making the tables takes longer than most tests."""
    path = tmp_path_factory.mktemp("empty") / "empty.sqlite"
    open_store(path).close()
    return path


@pytest.fixture
def store(address: str, empty: Path) -> Iterator[Store]:
    if address.endswith(".sqlite"):
        Path(address).parent.mkdir()
        shutil.copy(empty, address)
    with open_store(address) as store:
        yield store


@pytest.fixture
def sqlite(tmp_path: Path) -> str:
    return str(tmp_path / "runs.sqlite")


@pytest.fixture
def make_second() -> Callable[..., Second]:
    """Make a second with random errors at known places."""

    def make(index: int, point: int = 0, sitting: int = 0, errors: int = 3, bits: int = 48_000) -> Second:
        rng = np.random.default_rng(1000 + index)
        first = index * bits
        positions = np.sort(rng.choice(bits, errors, replace=False)).astype(np.int64) + first
        ones = rng.random(errors) < 0.5
        lost = int(ones.sum())
        return Second(
            point=point,
            sitting=sitting,
            index=index,
            at=T0 + index * 10**9,
            duration_ns=10**9,
            sent=bits,
            tally=Tally(bits, bits, 0, errors, lost, errors - lost),
            first_bit=first,
            positions=positions,
            ones_lost=ones,
            stretches=((bits, True),),
        )

    return make


@pytest.fixture
def begin() -> Callable[..., str]:
    """Begin a run with its first sitting and point."""

    def begin(store: Store, *, key: str | None = None, started: int = T0, **changes: Any) -> str:
        head: dict[str, Any] = {
            "title": "Wader-9 acceptance",
            "command": "measure",
            "profile_text": "title = 'Wader-9 acceptance'\n",
            "overrides": ["stop.seconds=60"],
            "settings": {"requirement": {"ber": 1e-6, "confidence": 0.95}},
            "device": {"model": "Wader-9", "serial_number": "0031"},
        }
        key = store.begin_run(key=key, started=started, **(head | changes))
        store.begin_sitting(key, Sitting(0, started, None, this_host(), {"bitassay": "0.1.0"}))
        store.begin_point(key, 0, {}, started)
        return key

    return begin


@pytest.fixture
def finish() -> Callable[..., str]:
    """End a run, its point and its sitting; gives the digest."""

    def finish(
        store: Store,
        key: str,
        *,
        status: Any = "completed",
        verdict: Any = "PASS",
        point: int = 0,
        sitting: int = 0,
    ) -> str:
        by: Any = {"completed": "plan", "interrupted": "interrupted", "failed": "fault"}[status]
        store.end_point(key, point, T0 + 10**11, by)
        store.end_sitting(key, sitting, T0 + 10**11, status)
        return store.end_run(key, T0 + 10**11, status, by, verdict, {"errors": 9, "ber": 1e-6})

    return finish


@pytest.fixture
def filled(
    begin: Callable[..., str], finish: Callable[..., str], make_second: Callable[..., Second]
) -> Callable[..., str]:
    """Make a whole run with seconds and events; gives its key."""

    def filled(store: Store, *, seconds: int = 5, end: bool = True, **changes: Any) -> str:
        key = begin(store, **changes)
        for k in range(seconds):
            store.commit(key, [make_second(k)], [(0, Event("line", k, f"event {k}", T0 + k, {"n": k}))], k)
        if end:
            finish(store, key)
        return key

    return filled


def same_second(a: Second, b: Second) -> bool:
    return (
        np.array_equal(a.positions, b.positions)
        and np.array_equal(a.ones_lost, b.ones_lost)
        and all(
            getattr(a, name) == getattr(b, name)
            for name in Second.__dataclass_fields__
            if name not in ("positions", "ones_lost")
        )
    )


@pytest.fixture
def equal_seconds() -> Callable[..., bool]:
    """Tell whether two lists of seconds are the same, arrays included."""

    def equal(left: Any, right: Any) -> bool:
        return len(left) == len(right) and all(map(same_second, left, right))

    return equal


PROGRAMS = os.environ.get("BITASSAY_TEST_POSTGRES_BIN") or next(
    iter(sorted(glob.glob("/usr/lib/postgresql/*/bin"), reverse=True)), ""
)


class Server:
    """A PostgreSQL server of one's own, to be stopped and started."""

    def __init__(self, folder: Path, port: int) -> None:
        self._folder, self._data, self._port = folder, f"{folder}/data", port
        self.address = f"postgresql+psycopg://postgres@127.0.0.1:{self._port}/postgres"
        # The server refuses to run as root.
        self._user = pwd.getpwnam("postgres").pw_uid if os.geteuid() == 0 else None
        if self._user is not None:
            os.chown(folder, self._user, -1)
        self._do(
            "initdb", "-D", self._data, "-U", "postgres", "-A", "trust", "-N", "--locale=C", "-E", "UTF8"
        )
        self.start()

    def _do(self, program: str, *arguments: str) -> None:
        command = [f"{PROGRAMS}/{program}", *arguments]
        quiet = subprocess.DEVNULL
        subprocess.run(command, check=True, user=self._user, cwd=self._folder, stdout=quiet, stderr=quiet)

    @property
    def running(self) -> bool:
        return Path(self._data, "postmaster.pid").exists()

    def start(self) -> None:
        options = f"-p {self._port} -c listen_addresses=127.0.0.1 -k {self._folder} -c fsync=off"
        self._do("pg_ctl", "-D", self._data, "-l", f"{self._folder}/log", "-w", "-o", options, "start")

    def stop(self, how: str = "immediate") -> None:
        with contextlib.suppress(subprocess.CalledProcessError):
            self._do("pg_ctl", "-D", self._data, "-m", how, "-w", "stop")


@pytest.fixture(scope="session")
def the_server(own_port: Callable[[socket.SocketKind], int]) -> Iterator[Server]:
    if not PROGRAMS:
        pytest.skip("the programs of a PostgreSQL server are not on this machine")
    folder = Path(tempfile.mkdtemp(prefix="bitassay-pg-"))
    try:
        server = Server(folder, own_port(socket.SOCK_STREAM))
        yield server
        server.stop()
    finally:
        shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture
def server(the_server: Server) -> Server:
    """Give the server, running and without a run."""
    if not the_server.running:
        the_server.start()
    with open_store(the_server.address) as store, store._writing() as connection:
        for table in ("note", "event", "second", "point", "sitting", "run"):
            connection.execute(text(f"DELETE FROM {table}"))
    return the_server
