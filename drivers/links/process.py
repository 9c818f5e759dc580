"""The process link: any program that reads standard input and writes standard output is the device."""

from __future__ import annotations

import errno
import fcntl
import os
import selectors
import shlex
import signal
import struct
import subprocess
import termios
from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path
from threading import Lock, Thread
from time import monotonic, sleep

from pydantic import Field

from drivers.contract import EndOfStream, LinkError, LinkLost, OpenFailed, Section, SendRefused, Traits
from drivers.links.descriptor import DescriptorLink

_PIPE_BYTES = 1 << 20  # asked for; the system may give less
_KEPT_BYTES = 8192  # of what the program writes to standard error
_EXIT_WAIT_S = 1.0  # between the end of its output and its exit status


class ProcessSection(Section):
    """Keys of a process link."""

    command: tuple[str, ...] = Field(
        min_length=1, description="The program and its arguments, as a list; no shell reads it."
    )
    cwd: Path | None = Field(None, description="Folder to start it in; left out: the present one.")
    environment: dict[str, str] = Field(
        default_factory=dict, description="Environment variables beside this process's own."
    )
    stop_timeout_s: float = Field(
        2.0, ge=0, le=60, description="Time to end by itself after being asked to, before it is killed."
    )


class ProcessLink(DescriptorLink):
    """A program of one's own as device, over its standard input and output."""

    Section = ProcessSection
    section: ProcessSection
    traits = Traits(ends_with_input=True)

    def __init__(self, section: ProcessSection, nominal_bps: float | None = None) -> None:
        super().__init__(section, nominal_bps)
        self._process: subprocess.Popen[bytes] | None = None
        self._input: int | None = None
        self._output = -1
        self._complaints = _Complaints()

    @property
    def label(self) -> str:
        """The command line."""
        words = " ".join(shlex.join(self.section.command).split())
        return words if len(words) <= 80 else words[:77] + "..."

    def open(self) -> None:
        """Start the program, in a process group of its own.

        Raises
        ------
        OpenFailed
            No such program, no permission, no such folder.
        """
        self.close()
        waker = self._begin()
        try:
            process = subprocess.Popen(
                self.section.command,
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=subprocess.PIPE,
                bufsize=0,
                cwd=self.section.cwd,
                env={**os.environ, **self.section.environment},
                start_new_session=True,  # a Ctrl-C at our terminal is ours; and its children can be ended too
            )
        except (OSError, ValueError) as error:
            waker.close()
            raise self._not_started(error) from None
        assert process.stdin is not None
        assert process.stdout is not None
        assert process.stderr is not None
        self._process = process
        self._input, self._output = process.stdin.fileno(), process.stdout.fileno()
        for fd in (self._input, self._output):
            os.set_blocking(fd, False)
            if hasattr(fcntl, "F_SETPIPE_SZ"):
                with suppress(OSError):
                    fcntl.fcntl(fd, fcntl.F_SETPIPE_SZ, _PIPE_BYTES)
        self._complaints = _Complaints()
        self._complaints.listen(process.stderr.fileno(), waker.fileno())
        self._attach(self._output, self._input)

    def _not_started(self, error: OSError | ValueError) -> OpenFailed:
        program = self.section.command[0]
        if isinstance(error, FileNotFoundError):
            if self.section.cwd is not None and not self.section.cwd.is_dir():
                return OpenFailed(f"the folder {self.section.cwd} does not exist", "correct `cwd`")
            return OpenFailed(
                f"the program {program} was not found",
                f"install it or give its path; relative paths start at {self.section.cwd or Path.cwd()}",
            )
        if isinstance(error, PermissionError):
            return OpenFailed(
                f"no permission to run {program}", f"make it executable: chmod +x {shlex.quote(program)}"
            )
        if isinstance(error, OSError) and error.errno == errno.ENOEXEC:
            return OpenFailed(
                f"{program} is no program that this system can run",
                "start a script through its interpreter, or give it a first line that names one",
            )
        return OpenFailed(f"the program {program} could not be started ({error})", "check `command`")

    def close(self) -> None:
        """End the program and whatever it started in its group; may be called twice."""
        if self._waker is not None:
            self._waker.wake()  # ends the listening to standard error
        self._complaints.end()
        process, self._process = self._process, None
        self._detach()
        if process is None:
            return
        self._close_input(process)
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        process.stderr.close()
        with suppress(ProcessLookupError, PermissionError):
            os.killpg(process.pid, signal.SIGTERM)
        deadline = monotonic() + self.section.stop_timeout_s
        while not _has_exited(process) and monotonic() < deadline:
            sleep(0.005)
        # The leader has not been waited for yet, so its group's number cannot belong to anybody else.
        with suppress(ProcessLookupError, PermissionError):
            os.killpg(process.pid, signal.SIGKILL)
        process.wait()

    def _close_input(self, process: subprocess.Popen[bytes]) -> None:
        self._input = None
        if process.stdin is not None and not process.stdin.closed:
            with suppress(OSError):
                process.stdin.close()

    def send(self, data: memoryview, timeout: float) -> int:
        """Hand over bytes; see the contract."""
        if self._process is not None and self._input is None:
            raise SendRefused(f"the input of {self.label} is closed already", "open the link again")
        return super().send(data, timeout)

    def drain(self, timeout: float) -> bool:
        """Wait until the program has read every byte; False at time-out."""
        pipe = self._input
        return pipe is None or self._wait_until(lambda: not _unread_bytes(pipe), timeout)

    def finish_sending(self) -> None:
        """Close the program's standard input."""
        if self._process is None or self._input is None:
            return
        if self._writing is not None:
            self._writing.close()
            self._writing = None
        self._close_input(self._process)

    def describe(self) -> Mapping[str, str]:
        """Command and process number."""
        words = {"command": self.label}
        if self._process is not None:
            words["pid"] = str(self._process.pid)
        return words

    def _read(self, buffer: memoryview) -> int:
        return os.readv(self._output, [buffer])

    def _write(self, data: memoryview) -> int:
        assert self._input is not None
        return os.write(self._input, data)

    def _ended(self) -> LinkError | EndOfStream:
        status = self._status()
        if status == 0:
            return EndOfStream(f"{self.label} has ended (exit status 0)")
        if status is None:
            return EndOfStream(f"{self.label} closed its output", "see why the program no longer writes")
        return self._failed(status)

    def _broken(self, error: OSError) -> LinkError:
        if error.errno != errno.EPIPE:
            return LinkLost(f"the pipe to {self.label} failed ({error.strerror})", "run again")
        status = self._status()
        if status:
            return self._failed(status)
        how = "closed its input" if status is None else "has ended (exit status 0)"
        return SendRefused(
            f"{self.label} {how} and takes nothing any more", "see why the program stopped reading"
        )

    def _status(self) -> int | None:
        """Exit status, negative for a signal; None while it runs. Waits a moment: output ends before exit."""
        process = self._process
        if process is None:
            return None
        deadline = monotonic() + _EXIT_WAIT_S
        while not _has_exited(process):
            if monotonic() > deadline or (self._waker is not None and self._waker.woken):
                return None
            sleep(0.002)
        return _exit_status(process)

    def _failed(self, status: int) -> LinkLost:
        if status < 0:
            with suppress(ValueError):
                return self._lost(f"was ended by {signal.Signals(-status).name}")
            return self._lost(f"was ended by signal {-status}")
        return self._lost(f"ended with exit status {status}")

    def _lost(self, how: str) -> LinkLost:
        words = self._complaints.last_line()
        said = f'; its last words were "{words}"' if words else ""
        return LinkLost(
            f"{self.label} {how}{said}", "run the command by itself in a terminal to see what it says"
        )


class _Complaints:
    """Keeps the end of what the program writes to standard error, so that a full pipe never stops it."""

    def __init__(self) -> None:
        self._lock = Lock()
        self._kept = bytearray()
        self._thread: Thread | None = None

    def listen(self, fd: int, waker_fd: int) -> None:
        """Read until the program closes it or the waker wakes."""
        self._thread = Thread(target=self._read_on, args=(fd, waker_fd), name="standard error", daemon=True)
        self._thread.start()

    def _read_on(self, fd: int, waker_fd: int) -> None:
        os.set_blocking(fd, False)
        with selectors.DefaultSelector() as selector:
            selector.register(waker_fd, selectors.EVENT_READ)
            selector.register(fd, selectors.EVENT_READ)
            while True:
                ready = {key.fd for key, _ in selector.select()}
                if fd in ready:
                    with suppress(BlockingIOError):
                        piece = os.read(fd, 65536)
                        if not piece:
                            return
                        with self._lock:
                            self._kept += piece
                            del self._kept[:-_KEPT_BYTES]
                if waker_fd in ready:
                    return  # also while it goes on complaining

    def end(self) -> None:
        """Wait for the reading to end, which the waker or the program brings about."""
        if self._thread is not None:
            self._thread.join()
            self._thread = None

    def last_line(self) -> str:
        """Last line that is not blank, once all has been read of a program that has ended."""
        if self._thread is not None:
            self._thread.join(0.2)
        with self._lock:
            lines = [line.strip() for line in self._kept.decode("utf-8", "replace").splitlines()]
        words = next((line for line in reversed(lines) if line), "")
        return "".join(c if c.isprintable() else "?" for c in words)[:200]


def _has_exited(process: subprocess.Popen[bytes]) -> bool:
    """Whether it has ended; it stays to be waited for, so that its number is not given away."""
    if not hasattr(os, "waitid"):
        return process.poll() is not None
    if process.returncode is not None:
        return True
    return os.waitid(os.P_PID, process.pid, os.WEXITED | os.WNOHANG | os.WNOWAIT) is not None


def _exit_status(process: subprocess.Popen[bytes]) -> int:
    if not hasattr(os, "waitid") or process.returncode is not None:
        return process.wait()
    result = os.waitid(os.P_PID, process.pid, os.WEXITED | os.WNOWAIT)
    assert result is not None
    return result.si_status if result.si_code == os.CLD_EXITED else -result.si_status


def _unread_bytes(fd: int) -> int:
    try:
        count: int = struct.unpack("i", fcntl.ioctl(fd, termios.FIONREAD, bytes(4)))[0]
    except OSError:
        return 0
    return count
