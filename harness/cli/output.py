"""What every command shares when it prints: JSON, the store that is meant, numbers on lines."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from harness.store import Store


def print_json(document: Mapping[str, Any]) -> None:
    """Print one JSON object on standard output; NaN is a defect, not a value."""
    json.dump(document, sys.stdout, allow_nan=False, indent=1, ensure_ascii=False)
    sys.stdout.write("\n")


def print_listing(head: Mapping[str, Any], name: str, items: Sequence[Mapping[str, Any]]) -> None:
    """Print one JSON object whose long list has an item a line: indenting tens of thousands takes its time."""
    encode = json.JSONEncoder(allow_nan=False, ensure_ascii=False).encode
    lines = [f" {encode(key)}: {encode(value)}," for key, value in head.items()]
    rows = ",\n".join(f"  {encode(item)}" for item in items)
    listed = f"[\n{rows}\n ]" if items else "[]"
    sys.stdout.write("\n".join(["{", *lines, f" {encode(name)}: {listed}", "}", ""]))


def store_url(option: str | None) -> str:
    """Say which store is meant: the option, else BITASSAY_STORE, else results/runs.sqlite here."""
    from harness.store import default_url

    return default_url(option, os.environ, Path.cwd())


def open_reading(option: str | None) -> Store:
    """Open the store to read; it is not made where there is none."""
    from harness.store import open_store

    return open_store(store_url(option), create=False)


def open_writing(option: str | None) -> Store:
    """Open the store to write, made if need be."""
    from harness.store import open_store

    return open_store(store_url(option), create=True)


def open_for_measuring(option: str | None, tell: Callable[[str], None] | None = None) -> Store:
    """Open the store for a bench: a server that goes away in mid-run is no end of the run.

    What the server has not taken stands in results/handover.sqlite, and is handed over when it is back. `tell` is
    given a sentence when it goes and when it is back; left out, that is a line on standard error.
    """
    from harness.cli.failure import warn
    from harness.store import open_for_bench

    return open_for_bench(store_url(option), Path.cwd() / "results" / "handover.sqlite", tell or warn)


def store_place(option: str | None) -> str:
    """Say where the store is, without a password."""
    url = store_url(option)
    if "://" not in url:
        return url
    from sqlalchemy.engine import make_url

    return make_url(url).render_as_string(hide_password=True)


def new_store(option: str | None) -> Path | None:
    """Say which store will be made though it was named, so that a mistyped name is seen; None where none is."""
    if option is None and not os.environ.get("BITASSAY_STORE"):
        return None
    path = store_url(option).removeprefix("sqlite:///")
    return None if "://" in path or Path(path).exists() else Path(path)


def lock_folder(url: str) -> Path:
    """Say where guardians keep their files: beside a SQLite store, else in results/ here."""
    path = url.removeprefix("sqlite:///") if url.startswith("sqlite:///") else url
    return Path(path).parent if "://" not in path else Path.cwd() / "results"


def missing_default(option: str | None) -> bool:
    """Whether the store in its default place is meant, and none is there yet."""
    if option is not None or os.environ.get("BITASSAY_STORE"):
        return False
    return not (Path.cwd() / "results" / "runs.sqlite").exists()
