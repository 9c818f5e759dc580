"""The terminal itself: whether it can show a page, and the thread that keeps the page of a run up to date.

A page that goes on stands on the terminal's second screen, so that it never scrolls anything away and comes
out whole however the window is resized; at the end the first screen is back, with all that stood there, and
the final page is written below. Drawing has a thread of its own: a terminal that takes nothing (a slow line,
Ctrl-S) never holds up the run.
"""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable
from typing import TextIO

from rich.console import Console, Group
from rich.control import Control
from rich.screen import Screen

from harness.cli.view.ink import signs_for
from harness.cli.view.notebook import Notebook
from harness.cli.view.sheet import Sheet

EVERY_S = 0.25
SMALLEST = (40, 10)  # columns and rows


def can_show(stream: TextIO) -> bool:
    """Whether a stream is a terminal that can show a page."""
    try:
        if not stream.isatty():
            return False
    except ValueError:  # closed
        return False
    console = Console(file=stream)
    width, height = size_of(stream)
    return (
        not console.is_dumb_terminal
        and bool(os.environ.get("TERM") or os.name == "nt")
        and not console.legacy_windows
        and width >= SMALLEST[0]
        and height >= SMALLEST[1]
    )


def size_of(stream: TextIO) -> tuple[int, int]:
    """Give a terminal's columns and rows as they are now; 80 and 24 where it does not say."""
    try:
        columns, rows = os.get_terminal_size(stream.fileno())
    except (OSError, ValueError):
        return 80, 24
    return columns or 80, rows or 24


def print_page(sheet: Sheet, stream: TextIO, *, lines_below: int = 0) -> None:
    """Write a page that stays; where it fits it leaves room for a prompt, and for `lines_below` more."""
    width, height = size_of(stream)
    console = Console(file=stream, width=width, height=height, highlight=False, markup=False, emoji=False)
    for line in Notebook(width, height - 1 - lines_below, signs_for(stream.encoding)).draw(sheet, whole=True):
        console.print(line, no_wrap=True, overflow="ignore", crop=False)


class LivePage:
    """Keeps a page up to date on a terminal, from a thread of its own.

    Parameters
    ----------
    fill
        Fills the sheet for a time of day, UTC ns; called by the drawing thread.
    """

    def __init__(self, stream: TextIO, fill: Callable[[int], Sheet]) -> None:
        self._stream = stream
        self._fill = fill
        self._console = Console(file=stream, highlight=False, markup=False, emoji=False)
        self._signs = signs_for(stream.encoding)
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._run, name="view", daemon=True)
        self.defect: BaseException | None = None

    def start(self) -> None:
        """Begin drawing."""
        self._thread.start()

    def stop(self) -> None:
        """Give the terminal back as it was."""
        self._over.set()
        self._thread.join()

    def _run(self) -> None:
        try:
            with self._console.screen(hide_cursor=True):
                while True:
                    self._draw()
                    if self._over.wait(EVERY_S):
                        return
        except (OSError, ValueError):
            pass  # the terminal went away: the run goes on without it
        except BaseException as error:  # a page that cannot be drawn must not end a run
            self.defect = error

    def _draw(self) -> None:
        width, height = size_of(self._stream)
        self._console.size = (width, height)
        lines = Notebook(width, height, self._signs).draw(self._fill(time.time_ns()))
        with self._console:  # one write, from the top left, over what stands there: nothing flickers
            self._console.control(Control.home())
            self._console.print(Screen(Group(*lines)), end="", no_wrap=True, overflow="crop")
