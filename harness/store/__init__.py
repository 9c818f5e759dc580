"""The store: records in and out of SQLite or PostgreSQL, and between stores."""

from .canonical import digest_of
from .connect import default_url
from .errors import AmbiguousRun, NoSuchRun, StoreError, StoreLost, WrongRevision
from .keys import new_key
from .liveness import this_host
from .moving import Copied, Upgraded, copy, upgrade
from .reading import RunLine, Tail
from .shared import SharedStore, open_for_bench
from .store import Store, open_store

__all__ = [
    "AmbiguousRun",
    "Copied",
    "NoSuchRun",
    "RunLine",
    "SharedStore",
    "Store",
    "StoreError",
    "StoreLost",
    "Tail",
    "Upgraded",
    "WrongRevision",
    "copy",
    "default_url",
    "digest_of",
    "new_key",
    "open_for_bench",
    "open_store",
    "this_host",
    "upgrade",
]
