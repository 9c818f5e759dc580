"""`bitassay measure`: one run, watched, with its exit status."""

from __future__ import annotations

import signal
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import TextIO

from harness.assess.assessment import Assessment
from harness.cli.failure import FAIL, FAULT, INTERRUPTED, PASS, TERMINATED, UNDECIDED, UserError, warn
from harness.cli.output import open_writing, print_json, store_url

LINE_EVERY_S = 5.0


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


def measure(
    profile: str, overrides: Sequence[str], store: str | None, *, as_json: bool, quiet: bool, log: Path | None
) -> int:
    """Carry out one run and print its result."""
    from harness.bench.run import Hooks, MeasureRun
    from harness.cli.page import page
    from harness.cli.watch import watcher
    from harness.profile import load_profile

    loaded = load_profile(Path(profile), overrides)
    ending, log_file = Ending(), Log(log)
    where = store_url(store)
    with open_writing(store) as opened, ending.caught():
        try:
            with watcher(quiet=quiet or as_json) as view:
                log_file.line(f"begins: {loaded.title or profile}; store {where}")
                hooks = Hooks(
                    interrupted=ending.event, started=view.started, tick=view.tick, log=log_file.line
                )
                result = MeasureRun(loaded, opened, hooks).run()
            status = exit_status(result.assessment, ending.status, result.fault is not None)
            log_file.line(f"ends: run {result.key}, exit status {status}")
        finally:
            log_file.close()
    if as_json:
        print_json(result.assessment.to_json())
    elif quiet:
        print(f"{result.assessment.verdict or 'measured'} {result.key}")
    else:
        print("\n".join(page(result.assessment, where)))
    if result.fault is not None:
        sys.stdout.flush()
        warn(result.fault[0])
        print(f"  {result.fault[1] or '`bitassay check` proves the path before a run'}", file=sys.stderr)
    elif status == FAULT:
        warn("not a single bit came")
        print("  check that something is sent to this port, and the profile's link", file=sys.stderr)
    return status
