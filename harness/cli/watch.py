"""What is seen while a run goes on: a plain line every few seconds, or the terminal view."""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

from harness.assess.words import count, duration, ratio

if TYPE_CHECKING:
    from harness.bench.run import Progress

LINE_EVERY_S = 5.0


class Watcher:
    """Sees nothing: for --quiet and --json."""

    def started(self, key: str) -> None:
        """Take the run's key."""

    def tick(self, progress: Progress) -> None:
        """Take the state of the run, several times a second."""


class LineWatcher(Watcher):
    """A plain line every few seconds, on standard error."""

    def __init__(self) -> None:
        self._next = time.monotonic() + LINE_EVERY_S

    def started(self, key: str) -> None:
        """Say the run's key."""
        print(f"run {key}", file=sys.stderr)

    def tick(self, progress: Progress) -> None:
        """Print a line when it is time."""
        now = time.monotonic()
        if now < self._next:
            return
        self._next = now + LINE_EVERY_S
        print(progress_line(progress), file=sys.stderr)


def progress_line(progress: Progress) -> str:
    """Say the state of a run in one line."""
    p = progress.point
    t = p.tally
    parts = [
        duration(progress.elapsed_s),
        f"{count(t.errors, 'error')} in {count(t.compared, 'bit')}",
        f"BER {ratio(p.ber)}",
    ]
    if progress.longest_bits:
        parts.append(f"{100 * t.compared / progress.longest_bits:.0f} % of the plan's longest")
    if t.unaligned:
        parts.append(f"{count(t.unaligned, 'bit')} unaligned")
    if p.slip_count:
        parts.append(count(p.slip_count, "slip"))
    if p.events:
        parts.append(p.events[-1].text)
    return " · ".join(parts)


@contextmanager
def watcher(*, quiet: bool) -> Iterator[Watcher]:
    """Choose what watches a run."""
    yield Watcher() if quiet else LineWatcher()
