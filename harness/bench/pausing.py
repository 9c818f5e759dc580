"""While nothing is measured: says what is waited for, and gives the store signs of life.

Instruments warm up and settle for minutes or hours. A watcher should see why nothing happens, and other hosts
take a run that says nothing for two minutes to be cut.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

SIGN_OF_LIFE_S = 30.0
FAR_S = 12 * 3600.0  # beyond it a time of day makes no sense


class Pausing:
    """The pauses of a run.

    Parameters
    ----------
    say
        Takes what is waited for, and an empty text when the run goes on.
    sign_of_life
        Called every half minute, from a thread of its own.
    cancel
        Ends waiting when set.
    """

    def __init__(
        self, say: Callable[[str], None], sign_of_life: Callable[[], None], cancel: threading.Event
    ) -> None:
        self._say = say
        self._sign_of_life = sign_of_life
        self._cancel = cancel

    @contextmanager
    def during(self, what: str) -> Iterator[None]:
        """Say so, and live, while something takes its time."""
        over = threading.Event()
        thread = threading.Thread(target=self._live, args=(over,), name="sign of life", daemon=True)
        self._say(what)
        thread.start()
        try:
            yield
        finally:
            over.set()
            thread.join()
            self._say("")

    def wait(self, seconds: float, what: str) -> None:
        """Wait so long, or until the run is to end."""
        if seconds <= 0:
            return
        until = time.strftime("%H:%M:%S", time.localtime(time.time() + seconds))
        with self.during(f"{what} until {until}" if seconds < FAR_S else what):
            self._cancel.wait(seconds)

    def _live(self, over: threading.Event) -> None:
        while not over.wait(SIGN_OF_LIFE_S):
            self._sign_of_life()
