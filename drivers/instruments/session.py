"""One VISA session to one resource: opened when first used, shared, locked, and opened anew after a fault."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from threading import RLock
from typing import Any

from drivers.contract import InstrumentLost, OpenFailed
from drivers.instruments.commands import shown


@dataclass(frozen=True, slots=True)
class Manners:
    """How one instrument wants to be talked to."""

    termination: str
    timeout_s: float
    baud: int | None = None


class VisaSession:
    """A resource that several instruments may use.

    After anything went wrong the session is dropped: an answer that comes too late must never be taken
    for the answer to the next question. `generation` counts how often it was opened, so that an
    instrument knows when to check again who is there.

    Parameters
    ----------
    backend
        What PyVISA calls it: "" (the vendor's library), "@py", "FILE@sim".
    resource
        Address, as "TCPIP::192.0.2.7::5025::SOCKET".
    """

    def __init__(self, backend: str, resource: str) -> None:
        self.backend = backend
        self.resource = resource
        self.generation = 0
        self._lock = RLock()
        self._users = 0
        self._handle: Any = None

    @property
    def key(self) -> tuple[str, str]:
        """Two instruments with the same one share a session."""
        return self.backend.casefold(), self.resource.strip().casefold()

    @contextmanager
    def hold(self, timeout_s: float) -> Iterator[None]:
        """Keep others out during several commands that belong together."""
        if not self._lock.acquire(timeout=timeout_s):
            raise InstrumentLost(
                f"{self.resource} was busy for {timeout_s:g} s", "another instrument on it may have hung"
            )
        try:
            yield
        finally:
            self._lock.release()

    def free(self, timeout_s: float) -> bool:
        """Whether nobody holds it within this time."""
        if not self._lock.acquire(timeout=timeout_s):
            return False
        self._lock.release()
        return True

    def join(self) -> None:
        """Say that one more instrument uses it."""
        with self._lock:
            self._users += 1

    def leave(self) -> None:
        """Say that an instrument no longer uses it; the last one closes it."""
        with self._lock:
            self._users = max(0, self._users - 1)
            if not self._users:
                self.drop()

    def drop(self) -> None:
        """Close what is open; the next use opens it anew."""
        with self._lock:
            handle, self._handle = self._handle, None
            if handle is not None:
                with suppress(Exception):  # it is broken already, or on its way out
                    handle.close()

    def ensure(self, manners: Manners) -> int:
        """Open if need be and return the generation.

        Raises
        ------
        OpenFailed
            The first time.
        InstrumentLost
            Later.
        """
        with self._lock:
            if self._handle is None:
                self._handle = self._opened(manners)
                self.generation += 1
            return self.generation

    def write(self, command: str, manners: Manners) -> None:
        """Send a command; raises `OpenFailed`, `InstrumentLost`."""
        with self._lock:
            self.ensure(manners)
            try:
                self._set_up(manners)
                self._handle.write_raw((command + manners.termination).encode())
            except Exception as error:
                self.drop()
                raise InstrumentLost(
                    f"{self.resource} took no command ({_words(error)})",
                    "check that it is switched on, connected, and used by no other program",
                ) from error

    def query(self, question: str, manners: Manners) -> str:
        """Ask, and give the answer without its end; raises `OpenFailed`, `InstrumentLost`."""
        with self._lock:
            self.write(question, manners)
            began = time.monotonic()
            try:
                raw: bytes = self._handle.read_raw()
            except Exception as error:
                self.drop()
                raise InstrumentLost(
                    f"{self.resource} gave no answer to {question!r} in {time.monotonic() - began:.1f} s "
                    f"({_words(error)})",
                    "check that it is switched on and knows the command; a slow one needs a longer timeout_s",
                ) from error
            return raw.decode(errors="replace").strip()

    def _set_up(self, manners: Manners) -> None:
        self._handle.timeout = round(manners.timeout_s * 1000)
        self._handle.read_termination = manners.termination

    def _opened(self, manners: Manners) -> Any:
        import pyvisa

        try:
            manager = pyvisa.ResourceManager(self.backend)
        except Exception as error:
            raise OpenFailed(
                f"no VISA library for backend {self.backend!r} ({_words(error)})",
                'install the vendor\'s VISA, or set backend = "@py"',
            ) from error
        try:
            handle = manager.open_resource(self.resource, open_timeout=round(manners.timeout_s * 1000))
            if manners.baud is not None:
                handle.set_visa_attribute(pyvisa.constants.ResourceAttribute.asrl_baud_rate, manners.baud)
        except Exception as error:
            failure = InstrumentLost if self.generation else OpenFailed
            raise failure(
                f"{self.resource} cannot be opened ({_words(error)})",
                "check address and cable, and that no other program has it open; "
                "`pyvisa-info` tells what this computer's VISA can do",
            ) from error
        return handle


def _words(error: Exception) -> str:
    """An error of the library in one short line."""
    text = str(error)
    _, _, after = text.partition("): ")  # VISA: "VI_ERROR_TMO (-1073807339): Timeout expired ..."
    return shown((after or text).rstrip(".")) or type(error).__name__
