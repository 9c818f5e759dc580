"""`bitassay measure`: one run, watched, with its exit status."""

from __future__ import annotations

import os
import signal
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, TextIO

from harness.assess.assessment import Assessment
from harness.cli.failure import FAIL, FAULT, INTERRUPTED, PASS, TERMINATED, UNDECIDED, UserError, warn
from harness.cli.output import (
    lock_folder,
    new_store,
    open_for_measuring,
    open_reading,
    print_json,
    store_place,
    store_url,
)
from harness.cli.view.ink import writable

if TYPE_CHECKING:
    from harness.bench.run import RunResult
    from harness.cli.watch import Watcher
    from harness.profile import Profile
    from harness.record import Run


class Ending:
    """Turns Ctrl-C and SIGTERM into a proper end of the run, and remembers which it was."""

    def __init__(self) -> None:
        self.event = threading.Event()
        self.status: int | None = None

    def _catch(self, number: int, _frame: FrameType | None) -> None:
        if self.status is None:
            self.status = INTERRUPTED if number == signal.SIGINT else TERMINATED
            self.event.set()
            return
        sys.stderr.write("bitassay: closing the run, one moment\n")

    @contextmanager
    def caught(self) -> Iterator[None]:
        """Catch both signals in here."""
        before = {number: signal.signal(number, self._catch) for number in (signal.SIGINT, signal.SIGTERM)}
        try:
            yield
        finally:
            for number, handler in before.items():
                signal.signal(number, handler)


def exit_status(a: Assessment, ending: int | None, failed: bool) -> int:
    """Give the exit status: 130 or 143, then 4, then the verdict."""
    if ending is not None:
        return ending
    received = a.whole.tally.received
    if (
        failed
        or a.status == "failed"
        or (received == 0 and a.whole.ended_by is not None and not _only_sends(a))
    ):
        return FAULT
    if a.verdict is None:
        return PASS if a.whole.tally.compared or _only_sends(a) else UNDECIDED
    return {"PASS": PASS, "FAIL": FAIL, "UNDECIDED": UNDECIDED}[a.verdict]


def _only_sends(a: Assessment) -> bool:
    link = a.whole.facts.get("link") or {}
    return link.get("receives") is False


class Log:
    """Appends every event with its time to a file."""

    def __init__(self, path: Path | None) -> None:
        self._file: TextIO | None = None
        if path is not None:
            try:
                path.parent.mkdir(parents=True, exist_ok=True)
                self._file = path.open("a", encoding="utf-8", buffering=1)
            except OSError as error:
                raise UserError(
                    f"{path}: {error.strerror}", "choose a file that can be written for --log"
                ) from error

    def line(self, text: str) -> None:
        """Write a line; a log that can no longer be written never harms the run."""
        if self._file is None:
            return
        try:
            self._file.write(f"{time.strftime('%Y-%m-%dT%H:%M:%S%z')} {text}\n")
        except (OSError, ValueError):
            warn("the log can no longer be written; the run goes on")
            self._file = None

    def close(self) -> None:
        """Close the file."""
        if self._file is not None:
            self._file.close()


@contextmanager
def standing_in_for_the_reader() -> Iterator[None]:
    """Let a reader that has gone (`| head`, a closed terminal) change nothing about the exit status."""
    try:
        yield
    except OSError:
        with open(os.devnull, "w", encoding="utf-8") as nowhere:
            for stream in (sys.stdout, sys.stderr):
                with suppress(OSError, ValueError):
                    os.dup2(nowhere.fileno(), stream.fileno())


@dataclass(frozen=True, slots=True)
class Manner:
    """How a run is carried out and printed."""

    store: str | None
    as_json: bool
    quiet: bool
    log: Path | None
    silent: bool = False  # print no result at all: the caller prints one for many runs


def measure(profile: str, overrides: Sequence[str], manner: Manner) -> int:
    """Carry out one run and print its result."""
    from harness.profile import load_profile

    loaded = load_profile(Path(profile), overrides)
    if loaded.sweep is not None or loaded.search is not None:
        section = "sweep" if loaded.sweep is not None else "search"
        raise UserError(
            f"{profile} has a [{section}]: it is more than one point", "use `bitassay sweep` for it"
        )
    _outside_its_lot(loaded)
    return carry_out(loaded, "measure", manner)


def sweep(profile: str, overrides: Sequence[str], manner: Manner) -> int:
    """Carry out a sweep or a search and print its result."""
    from harness.profile import load_profile

    loaded = load_profile(Path(profile), overrides)
    if loaded.sweep is None and loaded.search is None:
        raise UserError(
            f"{profile} has no [sweep] and no [search]", "use `bitassay measure` for one point, or add one"
        )
    _outside_its_lot(loaded)
    return carry_out(loaded, "sweep", manner)


def _outside_its_lot(loaded: Profile) -> None:
    """Say that a run is no part of the lot that its profile describes."""
    if loaded.lot is None or loaded.device.get("lot"):
        return
    name = (loaded.lot.name or loaded.title).strip()
    warn(f"this run is not part of lot {name}: `bitassay lot` measures its units")


def resume(run: str, manner: Manner) -> int:
    """Go on with a run that was cut; one that is completed is printed again."""
    from harness.bench.resumption import prepare

    with open_reading(manner.store) as opened:
        record = opened.load(opened.find(run))
        if record.status == "completed":
            warn("this run is complete: there is nothing to go on with")
            return _print_again(record, manner)
        profile = prepare(record, lock_folder(store_url(manner.store)))
    return carry_out(profile, record.command, manner, cut=record)


def _print_again(record: Run, manner: Manner) -> int:
    from harness.assess.run import assess
    from harness.cli.page import print_page

    assessment = assess(record)
    if manner.as_json:
        print_json(assessment.to_json())
    elif manner.quiet:
        print(f"{assessment.verdict or 'measured'} {record.key}")
    else:
        print_page(assessment, store_place(manner.store), None)
    return exit_status(assessment, None, False)


def carry_out(loaded: Profile, command: str, manner: Manner, cut: Run | None = None) -> int:
    """Carry out a profile, watched, and print its result."""
    from harness.bench.conditions import attended, caution
    from harness.bench.run import BenchRun, Hooks
    from harness.cli.watch import watcher

    if words := caution(loaded):
        print(words, file=sys.stderr)
    as_json, quiet = manner.as_json, manner.quiet
    ending, log_file = Ending(), Log(manner.log)
    where = store_place(manner.store)
    new = None if quiet or as_json else new_store(manner.store)
    views: list[Watcher] = []

    def of_the_store(words: str) -> None:
        (views[0].notice if views else warn)(words)
        log_file.line(words)

    with open_for_measuring(manner.store, of_the_store) as opened, ending.caught():
        if new is not None:
            print(f"new store at {new}", file=sys.stderr)
        try:
            with watcher(
                quiet=quiet or as_json,
                title=loaded.title,
                device=loaded.device,
                interrupted=ending.event,
                plain=attended(loaded),
            ) as view:
                views.append(view)
                log_file.line(f"begins: {loaded.title or loaded.name}; store {where}")
                hooks = Hooks(
                    interrupted=ending.event,
                    started=view.started,
                    tick=view.tick,
                    log=log_file.line,
                    pausing=view.pausing,
                )
                bench = BenchRun(
                    loaded, opened, hooks, lock=lock_folder(store_url(manner.store)), command=command, cut=cut
                )
                result = bench.run()
            status = exit_status(result.assessment, ending.status, result.fault is not None)
            log_file.line(f"ends: run {result.key}, exit status {status}")
        finally:
            log_file.close()
    if manner.silent:
        with standing_in_for_the_reader():
            print(_in_a_line(result.assessment), file=sys.stderr)
            _say_what_failed(result, status)
        return status
    with standing_in_for_the_reader():
        _print_result(result, status, where, view.drawn_on, as_json=as_json, quiet=quiet)
    return status


def _print_result(
    result: RunResult, status: int, where: str, drawn_on: TextIO | None, *, as_json: bool, quiet: bool
) -> None:
    from harness.cli.page import print_page

    if as_json:
        print_json(result.assessment.to_json())
    elif quiet:
        print(f"{result.assessment.verdict or 'measured'} {result.key}")
    else:
        print_page(result.assessment, where, drawn_on)
    sys.stdout.flush()
    _say_what_failed(result, status)


def _in_a_line(a: Assessment) -> str:
    """Say how one of many runs came out: a pass shortly, anything else with its reasons."""
    serial = a.device.get("serial_number")
    why = f": {'; '.join(a.reasons)}" if a.verdict in ("FAIL", "UNDECIDED") else ""
    words = f"{f'{serial} ' if serial else ''}{a.verdict or 'measured'}{why} (run {a.run})"
    return writable(words, None if sys.stderr is None else sys.stderr.encoding)


def _say_what_failed(result: RunResult, status: int) -> None:
    if result.fault is not None:
        warn(result.fault[0])
        print(f"  {result.fault[1] or '`bitassay check` proves the path before a run'}", file=sys.stderr)
    elif status == FAULT:
        warn("not a single bit came")
        print("  check that something is sent to this port, and the profile's link", file=sys.stderr)
