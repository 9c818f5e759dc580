"""What can go wrong with a store, each with one line what it is and one line what to do.

StoreError
├── NoSuchRun         no run of that name
├── AmbiguousRun      an ending that several runs have
├── WrongRevision     older than this version (upgrade it) or newer (it is not touched)
└── StoreLost         it was there and cannot be reached now: locked, server gone, disk gone
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager

from sqlalchemy import exc


class StoreError(Exception):
    """The store cannot do what was asked; one line `what` is wrong and one line of `advice`."""

    def __init__(self, what: str, advice: str = "") -> None:
        super().__init__(what)
        self.what = what
        self.advice = advice


class NoSuchRun(StoreError):
    """There is no run of that name."""


class AmbiguousRun(StoreError):
    """Several runs have keys with that ending."""


class WrongRevision(StoreError):
    """The store's tables are older or newer than this version of bitassay."""


class StoreLost(StoreError):
    """The store cannot be reached now; the same call may work later."""


_SQLITE = (
    ("database is locked", "is locked by another program", "close it, or wait until it is done", True),
    ("database table is locked", "is locked by another program", "close it, or wait until it is done", True),
    ("readonly database", "is read-only", "check the rights of the file and of its folder", False),
    ("read-only", "is read-only", "check the rights of the file and of its folder", False),
    ("not a database", "is not a database", "name another file; this one is left as it is", False),
    (
        "malformed",
        "is damaged",
        "restore a backup; `sqlite3 FILE .recover` saves what can still be read",
        False,
    ),
    ("disk is full", "does not fit: the disk is full", "free some space", True),
    ("unable to open", "cannot be opened", "check the path and the rights of its folder", True),
    ("disk i/o error", "cannot be read or written: the disk gave an error", "check disk and mounts", True),
    ("permission denied", "may not be used by this user", "check the rights", False),
)


def explain(error: Exception, place: str) -> StoreError:
    """Put a database's error into our words.

    Parameters
    ----------
    error
        What SQLAlchemy or the driver below it raised.
    place
        The store's address, without a password.
    """
    cause = getattr(error, "orig", None) or error
    words = " ".join(str(cause).split())
    for needle, what, advice, lost in _SQLITE:
        if needle in words.lower():
            return (StoreLost if lost else StoreError)(f"the store {place} {what}", advice)
    if isinstance(error, exc.IntegrityError):
        return StoreError(
            f"the store {place} holds that part of the record already: {words}",
            "another process may be writing the same run; `bitassay runs` shows it",
        )
    if isinstance(error, exc.DBAPIError) and (
        error.connection_invalidated or isinstance(error, exc.OperationalError | exc.InterfaceError)
    ):
        return StoreLost(
            f"the store {place} cannot be reached ({_briefly(words)})",
            "check user, password and database in the address"
            if "FATAL" in words
            else "check that its server runs, the network, and the address",
        )
    return StoreError(f"the store {place} failed: {words}", "check the address and the user's rights on it")


def _briefly(words: str) -> str:
    """Leave what a server's driver says beyond the cause out: addresses that stand there already, and advice."""
    words = re.sub(r"Multiple connection attempts failed.*", "", words)
    words = re.sub(r"Is the server running.*?(\?|$)", "", words)
    words = re.sub(r"^connection failed: |connection to server (at|on) .*?(failed|closed)(: |$)", "", words)
    words = re.sub(r"^connection to server .*? failed: ", "", words)
    return re.split(r"This probably means|\(Background on", words)[0].strip(" :;.") or "no answer"


@contextmanager
def explained(place: str) -> Iterator[None]:
    """Turn whatever the database raises inside into a `StoreError`."""
    try:
        yield
    except (exc.SQLAlchemyError, OSError) as error:
        raise explain(error, place) from error
