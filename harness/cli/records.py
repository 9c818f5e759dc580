"""`bitassay runs`, `show`, `verify` and `store`: what the store holds."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from typing import TYPE_CHECKING

from harness.assess.words import count, local_date, note_words
from harness.cli.failure import FAULT
from harness.cli.output import (
    missing_default,
    new_store,
    open_reading,
    print_json,
    print_listing,
    store_place,
    store_url,
)

if TYPE_CHECKING:
    from harness.record import Run
    from harness.store import RunLine


def runs(store: str | None, limit: int | None, *, as_json: bool) -> int:
    """List runs, newest first."""
    from harness.assess.words import iso

    lines = []
    if not missing_default(store):  # nothing was measured here yet: that is no fault
        with open_reading(store) as opened:
            lines = opened.runs(limit)
    if as_json:
        listing = [
            {
                "run": r.run,
                "title": r.title,
                "started": iso(r.started),
                "status": r.status,
                "verdict": r.verdict,
                "void": r.void,
                "serial_number": r.serial_number,
            }
            for r in lines
        ]
        print_listing({"schema": 1}, "runs", listing)
        return 0
    if not lines:
        print(f"no runs yet in {store_place(store)}")
        return 0
    print(f"{'run':<36}  {'started':<25}  {'status':<11} {'verdict':<9}  {'unit':<10}  title")
    for r in lines:
        print(
            f"{r.run:<36}  {local_date(r.started):<25}  {r.status:<11} {_verdict(r.verdict, r.void):<9}  "
            f"{r.serial_number or '-':<10}  {r.title}"
        )
    return 0


def _verdict(verdict: str | None, void: bool) -> str:
    return "VOID" if void else verdict or "-"


def show(run: str, store: str | None, *, as_json: bool) -> int:
    """Show a run."""
    from harness.assess.run import assess
    from harness.cli.page import print_page

    with open_reading(store) as opened:
        record = opened.load(opened.find(run))
    assessment = assess(record)
    if as_json:
        print_json(assessment.to_json())
    else:
        print_page(assessment, store_place(store))
    return 0


def verify(run: str, store: str | None, *, as_json: bool) -> int:
    """Derive every number again and compare."""
    from harness.assess.run import notes_json
    from harness.assess.verify import differences
    from harness.store import digest_of

    with open_reading(store) as opened:
        key = opened.find(run)
        record = opened.load(key)
        digest = opened.digest(key)
        listed = opened.listed(key)
    void = [note for note in record.notes if note.void]
    found = [*differences(record), *_misfiled(record, listed)]
    if digest is not None and digest_of(record) != digest:
        found.append("the record's SHA-256 digest is not the one that was kept when the run ended")
    if as_json:
        document = {"schema": 1, "run": key, "holds": not found, "differences": found, "digest": digest}
        print_json({**document, "void": bool(void), "notes": notes_json(record)})
    elif found:
        print(f"run {key} does NOT hold: {count(len(found), 'difference')}")
        for line in found:
            print(f"  {line}")
        print("do not use this record; look for another copy of the store (`bitassay store copy`, backups)")
    else:
        seconds = sum(len(point.seconds) for point in record.points)
        print(f"run {key} holds: every number follows from its {count(seconds, 'second')}")
        if digest is not None:
            print(f"digest {digest}")
    if not as_json:
        for note in void:
            print(f"it is VOID: {note_words(note)}")
    return FAULT if found else 0


def _misfiled(record: Run, line: RunLine) -> Iterator[str]:
    """Name what the store's own list says otherwise: earlier tries of a unit are looked for there."""
    required = record.settings.get("requirement") or {}
    own = (record.device.get("serial_number"), record.device.get("model"), required.get("ber"))
    listed = (line.serial_number, line.model, line.requirement_ber)
    for name, in_record, in_list in zip(
        ("serial_number", "model", "requirement.ber"), own, listed, strict=True
    ):
        if (in_record or None) != (in_list or None):
            yield f"{name}: the record says {in_record}, the store's list {in_list}"


def upgrade(store: str | None) -> int:
    """Upgrade a store."""
    from harness.store import upgrade as carry_out

    url = store_url(store)
    done = carry_out(url)
    if done.found == done.now:
        print(f"{done.place} has this version's layout already")
    else:
        print(f"{done.place} went from layout {done.found} to {done.now}")
    if done.backup is not None:
        print(f"the backup is {done.backup}")
    return 0


def copy(source: str, target: str) -> int:
    """Copy records between stores."""
    from harness.store import copy as carry_out

    new = new_store(target)
    done = carry_out(source, target)
    if new is not None:
        print(f"new store at {new}", file=sys.stderr)
    print(
        f"{count(len(done.new), 'new run')}, {len(done.continued)} continued, {done.unchanged} unchanged; "
        f"{count(done.seconds, 'second')} and {count(done.events, 'event')} copied"
    )
    for keys, words in (
        (done.behind, "has more in the target than in the source, and was left alone"),
        (done.diverged, "differs between the two, and was left alone: look at both before you trust either"),
        (done.unsound, "does not match its own digest: it was copied as it is"),
    ):
        for key in keys:
            print(f"run {key} {words}")
    return FAULT if done.diverged or done.unsound else 0


def note(run: str, text: str, store: str | None, *, void: bool) -> int:
    """Add words to a record, or mark it void; the record itself stays as it is."""
    import getpass
    import time

    from harness.cli.failure import UserError
    from harness.cli.output import open_writing
    from harness.record import Note

    if not text.strip():
        raise UserError("a note needs words", 'write why, for example "the cable was loose"')
    with open_reading(store) as opened:
        key = opened.find(run)
    with open_writing(store) as opened:
        opened.add_note(key, Note(time.time_ns(), getpass.getuser(), text.strip(), void))
    print(f"{'marked void' if void else 'noted'}: run {key}")
    return 0
