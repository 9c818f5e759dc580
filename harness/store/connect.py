"""Opening a store: its address, the database's settings, and whether its tables are the ones we know."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import URL, Connection, Engine, create_engine, event, inspect, make_url, text
from sqlalchemy.exc import ArgumentError, SQLAlchemyError

from . import schema
from .errors import StoreError, WrongRevision, explain

REVISION_TABLE = "bitassay_revision"
TABLE_LOCK = 0x62697461  # PostgreSQL: the advisory lock under which tables are made


def default_url(option: str | None, environ: Mapping[str, str], cwd: Path) -> str:
    """Say which store is meant: the option, else BITASSAY_STORE, else results/runs.sqlite under `cwd`."""
    return option or environ.get("BITASSAY_STORE") or str(cwd / "results" / "runs.sqlite")


def parse_url(address: str | Path) -> URL:
    """Read a store's address: a path, or ``sqlite:///PATH``, or ``postgresql+psycopg://…``.

    Raises
    ------
    StoreError
        If it is neither.
    """
    words = str(address)
    advice = "give a path, sqlite:///PATH or postgresql+psycopg://USER@HOST/DATABASE"
    if "://" not in words:
        return URL.create("sqlite", database=words)
    try:
        url = make_url(words)
    except (ArgumentError, ValueError):
        raise StoreError("the store's address cannot be read", advice) from None
    if url.drivername in ("postgresql", "postgres", "postgresql+psycopg"):
        return url.set(drivername="postgresql+psycopg")
    if url.drivername in ("sqlite", "sqlite+pysqlite") and url.database and url.database != ":memory:":
        return url.set(drivername="sqlite")
    raise StoreError(f"{url.render_as_string()} is no store that bitassay can use", advice)


def place_of(url: URL) -> str:
    """Name a store without its password."""
    return str(url.database) if is_sqlite(url) else url.render_as_string(hide_password=True)


def is_sqlite(url: URL) -> bool:
    """Whether the store is a file."""
    return url.get_backend_name() == "sqlite"


def make_engine(url: URL, busy_s: float) -> Engine:
    """Make an engine; nothing is opened yet.

    Parameters
    ----------
    busy_s
        How long to wait for a database that another program has locked, or for a server to answer.
    """
    if is_sqlite(url):
        engine = create_engine(url, connect_args={"timeout": busy_s})
        event.listen(engine, "connect", _set_up_sqlite)
        event.listen(engine, "begin", _begin_sqlite)
        return engine
    try:
        return create_engine(
            url,
            pool_pre_ping=True,
            connect_args={
                "connect_timeout": max(2, round(busy_s)),
                "client_encoding": "utf8",
                "application_name": "bitassay",
                # A server that vanishes must be noticed within seconds, not hours.
                "keepalives_idle": 5,
                "keepalives_interval": 5,
                "keepalives_count": 3,
                "tcp_user_timeout": 15_000,
            },
        )
    except ModuleNotFoundError:
        raise StoreError(
            "a store on PostgreSQL needs psycopg, which is not installed",
            "install it with: pip install 'bitassay[postgres]'",
        ) from None


def _set_up_sqlite(connection: Any, _record: Any) -> None:
    # We begin transactions ourselves, see below: Python's module begins none before a SELECT.
    connection.isolation_level = None
    connection.execute("PRAGMA foreign_keys=ON")
    connection.execute("PRAGMA synchronous=FULL")  # NORMAL may lose the last commits when power fails


def _begin_sqlite(connection: Connection) -> None:
    # A writer takes its lock at once: turning a reader into a writer later can fail without waiting.
    write = connection.get_execution_options().get("bitassay_write", False)
    connection.exec_driver_sql("BEGIN IMMEDIATE" if write else "BEGIN")


@contextmanager
def writing(engine: Engine) -> Iterator[Connection]:
    """Give a transaction that writes."""
    with engine.connect() as plain:
        connection = plain.execution_options(bitassay_write=True)
        with connection.begin():
            yield connection


@contextmanager
def reading(engine: Engine) -> Iterator[Connection]:
    """Give a transaction that reads, and sees one state of the store throughout."""
    with engine.connect() as plain:
        connection = plain
        if engine.dialect.name == "postgresql":
            connection = plain.execution_options(isolation_level="REPEATABLE READ", postgresql_readonly=True)
        with connection.begin():
            yield connection


def prepare_file(url: URL, create: bool) -> None:
    """Make the folder of a new file store, and see that the file can be one.

    Raises
    ------
    StoreError
    """
    path = Path(str(url.database))
    try:
        if path.is_dir():
            raise StoreError(f"{path} is a folder, not a store", f"name a file in it: {path / 'runs.sqlite'}")
        if path.exists():
            return
        if not create:
            raise StoreError(f"there is no store at {path}", "check --store and BITASSAY_STORE")
        path.parent.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise explain(error, str(path)) from None


def use_wal(engine: Engine, place: str) -> None:
    """Switch SQLite's write-ahead log on, so that readers and the writer do not wait for each other.

    Raises
    ------
    StoreError
        If the file system cannot do it: the pragma says so by giving the old mode back.
    """
    raw = engine.raw_connection()
    try:
        mode = raw.cursor().execute("PRAGMA journal_mode").fetchone()
        if mode is None or mode[0] != "wal":
            mode = raw.cursor().execute("PRAGMA journal_mode=WAL").fetchone()
        if mode is None or mode[0] != "wal":
            raise StoreError(
                f"the store {place} cannot use a write-ahead log here",
                "put it on a local disk; network shares cannot do it",
            )
    finally:
        raw.close()


def revision_of(connection: Connection, place: str) -> str | None:
    """Give the revision of the store's tables, or None where there are none yet.

    Raises
    ------
    StoreError
        If the database is somebody else's.
    """
    names = set(inspect(connection).get_table_names())
    if REVISION_TABLE in names:
        rows = connection.execute(text(f"SELECT version_num FROM {REVISION_TABLE}")).all()
        if len(rows) == 1:
            return str(rows[0][0])
        raise StoreError(f"the store {place} does not say its revision", "restore a backup")
    ours = set(schema.metadata.tables)
    if names & ours or (names and connection.dialect.name == "sqlite"):
        raise StoreError(
            f"{place} is a database of another program", "name another one; this one is left as it is"
        )
    return None


def check_revision(found: str, place: str) -> None:
    """See that the tables are those that this version knows.

    Raises
    ------
    WrongRevision
    """
    if found > schema.HEAD:
        raise WrongRevision(
            f"the store {place} is of a newer revision ({found}; this version knows {schema.HEAD})",
            "use the newer bitassay that made it; this one does not touch it",
        )
    if found < schema.HEAD:
        raise WrongRevision(
            f"the store {place} is of an older revision ({found}; this version needs {schema.HEAD})",
            "run: bitassay store upgrade",
        )


def migrate(connection: Connection, target: str = "head") -> None:
    """Bring the tables to a revision, inside the connection's transaction."""
    from alembic import command
    from alembic.config import Config

    config = Config()
    config.set_main_option("script_location", "harness.store:migrations")
    config.set_main_option("path_separator", "os")
    config.attributes["connection"] = connection
    command.upgrade(config, target)


def create_tables(engine: Engine, place: str) -> None:
    """Make the tables of a fresh store; two programs may do it at once."""
    with writing(engine) as connection:
        if engine.dialect.name == "postgresql":
            connection.execute(text(f"SELECT pg_advisory_xact_lock({TABLE_LOCK})"))
        if revision_of(connection, place) is None:
            migrate(connection)


DATABASE_ERRORS = (SQLAlchemyError, OSError, sqlite3.Error)
