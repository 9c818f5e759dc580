"""Files that reports and exports are written to: whole or not at all, and never over what is not ours."""

from __future__ import annotations

import os
from contextlib import suppress
from pathlib import Path

from harness.cli.failure import FAULT, UserError

# How pages, CSVs, JSON, its schema and JUnit XML of ours begin; a PDF names its author further on.
_SIGNS = (
    b'<meta name="generator" content="bitassay ',
    b"run,serial_number,point,",
    b"run,title,model,serial_number,",
    b'{\n "schema": 1,\n "run": ',
    b'"title": "A run as `bitassay',
    b'<testsuites name="bitassay"',
)
_LOOKED_AT = 4096


def may_write(path: Path) -> None:
    """See that a file can be written, and that what stands there already is a report or an export of ours.

    Raises
    ------
    UserError
        If there is no such folder, it may not be written to, or another file stands there.
    """
    folder = path.absolute().parent
    if not folder.is_dir():
        raise UserError(f"{path} cannot be written: there is no folder {folder}", "make the folder first")
    if path.is_dir():
        raise UserError(f"{path} is a folder", "give the name of a file in it")
    if not os.access(folder, os.W_OK):
        raise UserError(
            f"{path} cannot be written: the folder {folder} is not yours to write to", "choose another"
        )
    if path.is_file() and not _ours(path):
        raise UserError(
            f"{path} is there already, and is no report or export of bitassay: it was left alone",
            "give another name, or move that file away",
        )


def _ours(path: Path) -> bool:
    """Whether a file looks like one that we wrote, or is empty."""
    with path.open("rb") as file:
        start = file.read(_LOOKED_AT)
        if start.startswith(b"%PDF-"):
            return b"bitassay" in start + file.read()
    return not start or any(sign in start for sign in _SIGNS)


def write_whole(path: Path, data: bytes) -> str:
    """Write a file whole or not at all; says what was done.

    Raises
    ------
    UserError
        If it cannot be written after all.
    """
    there = path.is_file()
    part = path.with_name(f".{path.name}.part")
    try:
        if path.exists() and not there:  # a pipe, or a device such as /dev/null
            path.write_bytes(data)
        else:
            part.write_bytes(data)
            part.replace(path)
    except OSError as error:
        what = f"{path} cannot be written: {error.strerror}"
        raise UserError(what, "check the disk and the rights", FAULT) from error
    finally:
        with suppress(OSError):
            part.unlink(missing_ok=True)
    return f"{'replaced' if there else 'wrote'} {path}"
