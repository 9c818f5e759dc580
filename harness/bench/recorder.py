"""The recorder's thread: every write to the store happens here, so a stalled disk stalls nothing else."""

from __future__ import annotations

import queue
import threading
from collections.abc import Callable
from typing import Any

from harness.store import Store, StoreError

Job = Callable[[Store], Any]


class _Asked:
    """A job whose caller waits for the answer."""

    def __init__(self, job: Job) -> None:
        self.job = job
        self.done = threading.Event()
        self.answer: Any = None
        self.error: BaseException | None = None


class Recorder(threading.Thread):
    """Carries out jobs on the store, in order."""

    def __init__(self, store: Store) -> None:
        super().__init__(name="recorder", daemon=True)
        self._store = store
        self._jobs: queue.Queue[_Asked | None] = queue.Queue()
        self.fault: StoreError | None = None
        self.defect: BaseException | None = None

    @property
    def failed(self) -> bool:
        """Whether a write went wrong."""
        return self.fault is not None or self.defect is not None

    @property
    def waiting(self) -> int:
        """Writes that wait for the store."""
        return self._jobs.qsize()

    def put(self, job: Job) -> None:
        """Leave a job to be done in its turn; what goes wrong is found in `fault`."""
        self._jobs.put(_Asked(job))

    def ask(self, job: Job) -> Any:
        """Have a job done in its turn and wait for its answer; raises what it raised."""
        asked = _Asked(job)
        self._jobs.put(asked)
        asked.done.wait()
        if asked.error is not None:
            raise asked.error
        return asked.answer

    def finish(self) -> None:
        """Do what is left, then end the thread."""
        self._jobs.put(None)
        self.join()

    def run(self) -> None:
        """Work until `finish`."""
        while (asked := self._jobs.get()) is not None:
            try:
                asked.answer = asked.job(self._store)
            except StoreError as error:
                asked.error = error
                self.fault = self.fault or error
            except BaseException as error:
                asked.error = error
                self.defect = self.defect or error
            asked.done.set()
