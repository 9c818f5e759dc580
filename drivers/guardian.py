"""A small process that outlives the run: when the run dies without a goodbye, it makes the instruments safe.

    run                                     guardian
    ───                                     ────────
    locks the file, starts the guardian ──► holds the lock, reads what to make safe, waits
    writes "bye" at its end ──────────────► goes away
    dies (SIGKILL, a crash) ──end of pipe─► makes every instrument safe, logs it, goes away

It has a session of its own, so that Ctrl-C and a closed terminal do not reach it, and holds neither
standard output nor standard error. The lock on its file lasts as long as it does: whoever wants to use
the instruments again waits for it. Nothing helps when the computer itself loses power: for that an
instrument needs a time-out of its own.
"""

from __future__ import annotations

import fcntl
import json
import os
import select
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import IO, Any, Self

from drivers.contract import DriverError, Instrument
from drivers.registry import UnknownDriver, instrument_class

_GOODBYE = b"bye\n"
_TRY_FOR_S = 30.0  # an instrument may still be busy with the dead run's connection
_TRY_EVERY_S = 1.0
_START_WITHIN_S = 30.0
_LOOK_EVERY_S = 1.0
_LOCK_WITHIN_S = 0.5  # whoever only looks whether it is free holds it for a moment


class Guardian:
    """The run's end of the pipe.

    Use `start`; then `dismiss` on every way out on which the run made the instruments safe itself.
    """

    def __init__(self, process: subprocess.Popen[bytes], log: Path) -> None:
        self._process = process
        self.log = log

    @classmethod
    def start(cls, instruments: Mapping[str, tuple[str, Mapping[str, Any]]], lock_path: Path) -> Guardian:
        """Start a guardian for these instruments.

        Parameters
        ----------
        instruments
            Name -> driver's name and its section as JSON values. The guardian itself leaves out those that
            need a person, and those that end with the run.
        lock_path
            Its lock and its log in one file, which is begun anew.

        Raises
        ------
        DriverError
            If another guardian holds the file, or none can be started.
        """
        lock_path = Path(lock_path).absolute()
        description = json.dumps({name: list(entry) for name, entry in instruments.items()})
        try:
            lock_path.parent.mkdir(parents=True, exist_ok=True)
            held = open(lock_path, "a+b")  # noqa: SIM115 - handed to the guardian
        except OSError as error:
            raise DriverError(
                f"the guardian's file {lock_path} cannot be written ({error.strerror})",
                "choose another place for the store",
            ) from error
        with held:
            if not _lock(held, _LOCK_WITHIN_S):
                raise DriverError(
                    f"another run, or its guardian, still holds {lock_path}",
                    "wait until it has ended: it may be making the instruments safe",
                )
            held.truncate(0)
            process = _spawn(held.fileno())
        guardian = cls(process, lock_path)
        guardian._brief(description)
        return guardian

    def _brief(self, description: str) -> None:
        """Tell it what to make safe, and wait until it watches: only then may anything be set."""
        pipe = self._process.stdin
        assert pipe is not None
        with suppress(OSError):  # it may have ended at once
            pipe.write(description.encode() + b"\n")
            pipe.flush()
        ends = time.monotonic() + _START_WITHIN_S
        while not last_words(self.log):
            if not self.alive or time.monotonic() >= ends:
                self.dismiss()
                raise DriverError(
                    "the guardian, which makes the instruments safe if the run is killed, did not start",
                    f"see that {sys.executable} can run -m drivers.guardian",
                )
            time.sleep(0.01)

    @property
    def alive(self) -> bool:
        """Whether it still watches."""
        return self._process.poll() is None

    def dismiss(self) -> None:
        """Say goodbye and wait until it has gone; may be called twice."""
        pipe = self._process.stdin
        assert pipe is not None
        if not pipe.closed:
            with suppress(OSError):  # it may have died
                pipe.write(_GOODBYE)
                pipe.flush()
            with suppress(OSError):
                pipe.close()
        try:
            self._process.wait(10)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()

    def abandon(self) -> None:
        """Close the pipe without a goodbye: the guardian makes the instruments safe itself."""
        assert self._process.stdin is not None
        with suppress(OSError):
            self._process.stdin.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.dismiss()


def wait_for_guardian(lock_path: Path, timeout: float) -> bool:
    """Wait until no guardian holds the file; False at time-out. True where there is no such file."""
    try:
        with open(lock_path, "rb") as file:
            return _lock(file, timeout)
    except FileNotFoundError:
        return True


def last_words(lock_path: Path) -> tuple[str, ...]:
    """What the last guardian logged, a line each; empty where there was none."""
    try:
        return tuple(Path(lock_path).read_text(encoding="utf-8").splitlines())
    except FileNotFoundError:
        return ()


def _lock(file: IO[bytes], timeout: float) -> bool:
    ends = time.monotonic() + timeout
    while True:
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            if time.monotonic() >= ends:
                return False
            time.sleep(0.05)
        else:
            return True


def _spawn(lock: int) -> subprocess.Popen[bytes]:
    here = str(Path(__file__).resolve().parent.parent)
    paths = os.environ.get("PYTHONPATH")
    environment = {**os.environ, "PYTHONPATH": f"{here}{os.pathsep}{paths}" if paths else here}
    try:
        return subprocess.Popen(
            [sys.executable, "-m", "drivers.guardian", str(lock), str(os.getpid())],
            stdin=subprocess.PIPE,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            pass_fds=(lock,),
            start_new_session=True,
            env=environment,
        )
    except OSError as error:
        raise DriverError(
            f"the guardian cannot be started ({error.strerror})", "see that Python can run"
        ) from error


class _Watch:
    """The guardian's end: its pipe, its log, and what it does when the run has died."""

    def __init__(self, lock: int, run: int) -> None:
        self._log = os.fdopen(lock, "ab", buffering=0)
        self._run = run

    def note(self, text: str) -> None:
        """Add a line to the log."""
        stamp = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
        self._log.write(f"{stamp} {text}\n".encode())

    def until_the_run_ends(self) -> tuple[dict[str, Any], bool]:
        """Read what to make safe, wait, and tell whether the run said goodbye."""
        received = b""
        while not received.endswith(b"\n" + _GOODBYE):
            ready = select.select([0], [], [], _LOOK_EVERY_S)[0]
            if ready:
                data = os.read(0, 65_536)
                if not data:
                    break
                received += data
            elif os.getppid() != self._run:
                break  # a child of the run may still hold the pipe open, but the run itself is gone
        first, whole, rest = received.partition(b"\n")
        # Without its end the run died while it started the guardian, and had set nothing yet.
        described = json.loads(first) if whole else {}
        return described, rest == _GOODBYE

    def make_safe(self, described: Mapping[str, Sequence[Any]]) -> None:
        """Make every instrument safe, one after another, and try again those that did not go there."""
        left = self._instruments(described)
        ends = time.monotonic() + _TRY_FOR_S
        while left:
            left = {name: instrument for name, instrument in left.items() if not self._went(name, instrument)}
            if left and time.monotonic() >= ends:
                self.note(f"gave up on {', '.join(left)}: check by hand")
                return
            if left:
                time.sleep(_TRY_EVERY_S)
        self.note("done")

    def _instruments(self, described: Mapping[str, Sequence[Any]]) -> dict[str, Instrument]:
        found: dict[str, Instrument] = {}
        for name, (driver, section) in described.items():
            try:
                kind = instrument_class(driver)
                if not kind.unattended:
                    self.note(f"{name}: set by hand, and nobody can be told")
                    continue
                if not kind.lasting:
                    continue
                found[name] = kind(kind.Section.model_validate(section))
            except (UnknownDriver, ValueError) as error:
                self.note(f"{name}: cannot be made safe ({' '.join(str(error).split())})")
        instruments = list(found.values())
        for instrument in instruments:
            instrument.attach(None, [other for other in instruments if other is not instrument])
        return found

    def _went(self, name: str, instrument: Instrument) -> bool:
        try:
            instrument.make_safe()
        except DriverError as error:
            self.note(f"{name}: not yet safe: {error.what}")
            return False
        except Exception as error:  # whatever a plug-in does, the others must still be made safe
            self.note(f"{name}: not yet safe: {type(error).__name__}: {' '.join(str(error).split())}")
            return False
        finally:
            with suppress(Exception):
                instrument.close()
        self.note(f"{name}: safe at {getattr(instrument.section, 'safe', 'its safe value')}")
        return True


def main(lock: int, run: int) -> None:
    """Watch over a run."""
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)
    watch = _Watch(lock, run)
    watch.note(f"watching process {run}")
    described, goodbye = watch.until_the_run_ends()
    if goodbye:
        watch.note("dismissed")
        return
    several = "1 instrument" if len(described) == 1 else f"{len(described)} instruments"
    watch.note(f"process {run} left without a goodbye: making {several} safe")
    watch.make_safe(described)


if __name__ == "__main__":
    main(int(sys.argv[1]), int(sys.argv[2]))
