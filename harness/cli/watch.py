"""What is seen while a run goes on: the terminal view where there is a terminal for it, else plain lines."""

from __future__ import annotations

import sys
import threading
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from typing import TYPE_CHECKING, TextIO

from harness.assess.words import count, duration, local_time, ratio
from harness.cli.failure import warn
from harness.cli.view.ink import writable

if TYPE_CHECKING:
    from harness.bench.run import Progress
    from harness.cli.view.sheet import Sheet
    from harness.cli.view.terminal import LivePage

LINE_EVERY_S = 5.0
BACK = "the store can be reached again"
EVENTS_AT_ONCE = 4  # said between two lines
PAUSE_S = 1.0  # a pause that is shorter is not told
QUIET_S = 1.5  # without news from the bench for so long, the run is being closed


class Watcher:
    """Sees nothing: for --quiet and --json."""

    drawn_on: TextIO | None = None  # the terminal that a page was drawn on, for the final one

    def start(self) -> None:
        """Begin."""

    def started(self, key: str) -> None:
        """Take the run's key."""

    def tick(self, progress: Progress) -> None:
        """Take the state of the run, several times a second; never waits."""

    def waiting(self, why: str) -> None:
        """Take why nothing can be known for now; empty: it can be known again."""

    def pausing(self, what: str) -> None:
        """Take what is waited for while nothing is measured; empty: nothing any more."""

    def notice(self, words: str) -> None:
        """Say something that is not about the device, such as that the store is away; may come from any thread."""
        warn(words)

    def stop(self) -> None:
        """End; nothing is shown any more."""


class LineWatcher(Watcher):
    """A plain line every few seconds, on standard error.

    A thread of its own writes: a reader that takes nothing, or has gone, must not hold up the run.
    """

    def __init__(self, stream: TextIO, every_s: float = LINE_EVERY_S) -> None:
        self._stream = stream
        self._every_s = every_s
        self._latest: Progress | None = None
        self._key = ""
        self._why = ""
        self._pause = ("", 0.0)  # what is waited for, and since when
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._run, name="lines", daemon=True)

    def start(self) -> None:
        """Begin to write."""
        self._thread.start()

    def started(self, key: str) -> None:
        """Take the run's key, to be written first."""
        self._key = key

    def tick(self, progress: Progress) -> None:
        """Take the state of the run."""
        self._latest = progress

    def waiting(self, why: str) -> None:
        """Take why nothing can be known for now."""
        self._why = why

    def pausing(self, what: str) -> None:
        """Take what is waited for; said once it has taken as long as a line takes to come."""
        self._pause = (what, time.monotonic())

    def stop(self) -> None:
        """End, with what is being written; a reader that takes nothing is not waited for."""
        self._over.set()
        self._thread.join(1.0)

    def _run(self) -> None:
        try:
            said, why, paused = False, "", ("", 0.0)
            events_said = 0
            next_at = time.monotonic() + self._every_s
            over = False
            shown: Progress | None = None
            while not over:
                over = self._over.wait(0.05)
                if self._key and not said:
                    said = True
                    self._say(f"run {self._key}")
                if self._why != why:
                    why = self._why
                    self._say(why or BACK)
                now = time.monotonic()
                pause = self._pause
                if pause[0] and pause != paused and now - pause[1] >= self._every_s:
                    paused = pause
                    self._say(f"{local_time(time.time_ns())}  {pause[0]}")
                latest = self._latest
                if latest is not None and latest is not shown and now >= next_at and not over:
                    if shown is None or shown.point.started != latest.point.started:
                        events_said = 0
                    next_at, shown = now + self._every_s, latest
                    for line in event_lines(latest, events_said):
                        self._say(line)
                    events_said = sum(len(way.point.events) for way in (latest, *latest.beside))
                    self._say(f"{local_time(time.time_ns())}  {progress_line(latest, time.time_ns())}")
        except (OSError, ValueError):
            return  # nobody reads any more: the run goes on unseen

    def _say(self, line: str) -> None:
        self._stream.write(writable(line, self._stream.encoding) + "\n")
        self._stream.flush()


class PageWatcher(Watcher):
    """The terminal view."""

    def __init__(
        self, stream: TextIO, title: str, device: Mapping[str, str], interrupted: threading.Event
    ) -> None:
        self.drawn_on = stream
        self._title = title
        self._device = device
        self._interrupted = interrupted
        self._latest: tuple[Progress, float] | None = None
        self._waiting: tuple[str, int] | None = None  # why, and since when (UTC, ns)
        self._pause = ("", 0.0)  # what is waited for, and since when
        self._notices: list[str] = []
        # The newest decided second of the point under way, and when it was first seen.
        self._newest: tuple[tuple[int, int], float] = ((0, -1), time.monotonic())
        self._live: LivePage | None = None

    def start(self) -> None:
        """Begin to draw."""
        from harness.cli.view.terminal import LivePage

        assert self.drawn_on is not None
        self._live = LivePage(self.drawn_on, self._fill)
        self._live.start()

    def tick(self, progress: Progress) -> None:
        """Take the state of the run; the drawing thread shows it."""
        now = time.monotonic()
        index = progress.point.recent[-1][0] if progress.point.recent else -1
        newest = (progress.point.started, index)  # a new point waits for no second of the one before
        if newest != self._newest[0]:
            self._newest = (newest, now)
        self._latest = (progress, now)

    def waiting(self, why: str) -> None:
        """Take why nothing can be known for now: the page stands still, and says so."""
        since = self._waiting[1] if self._waiting else time.time_ns()
        self._waiting = (why, since) if why else None

    def pausing(self, what: str) -> None:
        """Take what is waited for: it stands on the page in place of what is still to do."""
        self._pause = (what, time.monotonic())

    def notice(self, words: str) -> None:
        """Write it at the page's foot, and once more below it when the page has gone."""
        if self._live is None:
            warn(words)
        else:
            self._notices.append(words)

    def stop(self) -> None:
        """Give the terminal back as it was."""
        if self._live is not None:
            self._live.stop()
            self._live = None
        while self._notices:
            warn(self._notices.pop(0))

    def _fill(self, now_ns: int) -> Sheet:
        page = self._filled(now_ns)
        return replace(page, foot=(*self._notices[-1:], *page.foot))

    def _filled(self, now_ns: int) -> Sheet:
        from harness.cli.view.sheet import sheet_before, sheet_of_progress

        pause, since = self._pause
        pause = pause if time.monotonic() - since >= PAUSE_S else ""
        if self._latest is None:
            return sheet_before(self._title, self._device, now_ns, pause)
        progress, at = self._latest
        waiting = self._waiting
        if waiting is not None:
            return sheet_of_progress(progress, waiting[1], closing=waiting[0])
        closing = ""
        if self._interrupted.is_set():
            closing = "interrupted: what was measured is being closed and kept"
        elif not pause and time.monotonic() - at > QUIET_S:
            closing = "nothing more is sent; what is still on its way is waited for"
        behind_s = max(0, int(time.monotonic() - self._newest[1] - 1.0))  # a second takes a second
        return sheet_of_progress(progress, now_ns, closing=closing, behind_s=behind_s, pause=pause)


def event_lines(progress: Progress, said: int) -> list[str]:
    """Say what happened since so many events had been said, each in a line with its time of day."""
    ways = (progress, *progress.beside)
    named = [
        (event, f"{way.point.facts.get('direction')}: " if progress.beside else "")
        for way in ways
        for event in way.point.events
    ]
    new = sorted(named, key=lambda pair: pair[0].at or 0)[said:]
    lines = [f"{local_time(event.at):>8}  {name}{event.text}" for event, name in new[-EVENTS_AT_ONCE:]]
    if len(new) > EVENTS_AT_ONCE:
        lines.insert(0, f"{'':>8}  … {count(len(new) - EVENTS_AT_ONCE, 'further event')}")
    return lines


def progress_line(progress: Progress, now_ns: int) -> str:
    """Say the state of a run in one line."""
    from harness.cli.view.entries import point_name
    from harness.cli.view.forecast import still_to_do

    p = progress.point
    of_all = f" of {progress.visits}" if progress.visits > progress.number else ""
    at = f" ({point_name(p)})" if p.values else ""
    point = f"point {progress.number + 1}{of_all}{at}, " if progress.visits != 1 else ""
    after = f"{point}after {duration(round(progress.elapsed_s))}: "
    parts: list[str] = []
    for way in (progress, *progress.beside):
        counted = _counted(way)
        name = way.point.facts.get("direction") if progress.beside else None
        parts += [f"{name}: {counted[0]}" if name else counted[0], *counted[1:]]
    parts[0] = after + parts[0]
    if p.plan is not None or progress.stop.any:
        last = next((w for w in (progress, *progress.beside) if not w.outlook.decided), progress)
        parts.append(still_to_do(last, now_ns)[0])
    return " · ".join(parts)


def _counted(progress: Progress) -> list[str]:
    """Say what was counted in one direction, and what speaks against it."""
    from harness.cli.view.sheet import against_words

    p, t = progress.point, progress.point.tally
    parts = [
        f"{count(t.errors, 'error')} in {count(t.compared, 'bit')}, BER {ratio(p.ber)}"
        if t.compared
        else "nothing compared yet"
    ]
    if t.unaligned:
        parts.append(f"{count(t.unaligned, 'bit')} unaligned")
    if p.slip_count:
        parts.append(count(p.slip_count, "slip"))
    return parts + [f"cannot pass any more: {why}" for why in against_words(progress)]


@contextmanager
def watcher(
    *,
    quiet: bool,
    title: str = "",
    device: Mapping[str, str] | None = None,
    interrupted: threading.Event | None = None,
    plain: bool = False,
) -> Iterator[Watcher]:
    """Choose what watches a run: nothing, the terminal view, or plain lines on standard error.

    `plain`: lines also on a terminal, where a person is asked things that a page would hide.
    """
    view = _chosen(quiet, plain, title, device or {}, interrupted or threading.Event())
    view.start()
    try:
        yield view
    finally:
        view.stop()


def _chosen(
    quiet: bool, plain: bool, title: str, device: Mapping[str, str], interrupted: threading.Event
) -> Watcher:
    if quiet:
        return Watcher()
    terminal = None if plain else terminal_among(sys.stderr, sys.stdout)
    if terminal is None:
        return Watcher() if sys.stderr is None else LineWatcher(sys.stderr)
    return PageWatcher(terminal, title, device, interrupted)


def terminal_among(*streams: TextIO | None) -> TextIO | None:
    """Find the first stream that is a terminal fit for a page; rich is not imported where there is none."""
    for stream in streams:
        try:
            if stream is None or not stream.isatty():  # None: it was closed before the start
                continue
        except ValueError:
            continue
        from harness.cli.view.terminal import can_show

        if can_show(stream):
            return stream
    return None
