"""The store itself: opened by its address, made where there is none, closed on every way out."""

from __future__ import annotations

from pathlib import Path
from types import TracebackType
from typing import Self

from sqlalchemy import URL

from .connect import (
    DATABASE_ERRORS,
    check_revision,
    create_tables,
    is_sqlite,
    make_engine,
    parse_url,
    place_of,
    prepare_file,
    reading,
    revision_of,
    use_wal,
)
from .errors import StoreError, explain
from .writing import Writing


class Store(Writing):
    """The database of records. Threads may share it; use it as a context manager."""

    def __init__(self, url: URL, busy_s: float) -> None:
        super().__init__(make_engine(url, busy_s), place_of(url))
        self.url = url

    def close(self) -> None:
        """Close all connections; may be called twice."""
        self._engine.dispose()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def open_store(address: str | Path, create: bool = True, busy_s: float = 5.0) -> Store:
    """Open a store.

    Parameters
    ----------
    address
        A path, ``sqlite:///PATH``, or ``postgresql+psycopg://USER@HOST/DATABASE``.
    create
        Make the folder, the file and the tables where there are none.
    busy_s
        How long to wait for a database that another program has locked, or for a server to answer.

    Raises
    ------
    StoreError
        If it cannot be opened, is somebody else's, or of another revision.
    """
    url = parse_url(address)
    if is_sqlite(url):
        prepare_file(url, create)
    store = Store(url, busy_s)
    try:
        if is_sqlite(url):
            use_wal(store._engine, store.place)
        with reading(store._engine) as connection:
            found = revision_of(connection, store.place)
        if found is None:
            if not create:
                raise StoreError(f"the store {store.place} is empty", "check --store and BITASSAY_STORE")
            create_tables(store._engine, store.place)
        else:
            check_revision(found, store.place)
    except DATABASE_ERRORS as error:
        store.close()
        raise explain(error, store.place) from error
    except BaseException:
        store.close()
        raise
    return store
