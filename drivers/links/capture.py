"""The capture link: bytes that were received elsewhere, from a file."""

from __future__ import annotations

import os
import stat
from collections.abc import Mapping
from io import FileIO
from pathlib import Path

from pydantic import Field

from drivers.contract import EndOfStream, Interrupted, Link, LinkLost, OpenFailed, Section, Traits


class CaptureSection(Section):
    """Keys of a capture link."""

    path: Path = Field(description="The file with the received bytes, first byte first.")


class CaptureLink(Link):
    """A file of received bytes; it only receives, and ends with the file."""

    Section = CaptureSection
    section: CaptureSection
    traits = Traits(sends=False, finite=True)

    def __init__(self, section: CaptureSection, nominal_bps: float | None = None) -> None:
        super().__init__(section, nominal_bps)
        self._file: FileIO | None = None
        self._size = 0
        self._interrupted = False

    def open(self) -> None:
        """Open the file at its first byte.

        Raises
        ------
        OpenFailed
            Missing, no regular file, or no permission.
        """
        self.close()
        self._interrupted = False
        path = self.section.path
        try:
            # Looked at before opening: opening a named pipe would wait for a writer, perhaps for good.
            if not stat.S_ISREG(os.stat(path).st_mode):
                kind = "a folder" if path.is_dir() else "no regular file"
                raise OpenFailed(f"the capture {path} is {kind}", "give the path of a file of received bytes")
            self._file = FileIO(path, "rb")
            self._size = os.fstat(self._file.fileno()).st_size
        except FileNotFoundError:
            raise OpenFailed(
                f"the capture {path} does not exist", f"check `path`; it is read from {Path.cwd()}"
            ) from None
        except PermissionError:
            raise OpenFailed(
                f"no permission to read the capture {path}", "change the file's permissions, or copy it"
            ) from None
        except (OSError, ValueError) as error:
            raise OpenFailed(f"the capture {path} cannot be read ({error})", "check `path`") from None

    def close(self) -> None:
        """Close the file; may be called twice."""
        if self._file is not None:
            self._file.close()
            self._file = None

    def receive(self, buffer: memoryview, timeout: float) -> int:  # noqa: ARG002 - a file never keeps one waiting
        """Read the next bytes; raises `EndOfStream` after the last."""
        if self._interrupted:
            raise Interrupted
        if self._file is None:
            raise LinkLost(f"the capture {self.section.path} is not open", "open the link before using it")
        if not buffer.nbytes:
            return 0
        try:
            count = self._file.readinto(buffer)
        except OSError as error:
            raise LinkLost(
                f"the capture {self.section.path} could not be read on ({error.strerror})",
                "check the disk it lies on, or copy it to another",
            ) from None
        if count:
            return count
        what = "is empty" if self._size == 0 else "is at its end"
        raise EndOfStream(f"the capture {self.section.path} {what}")

    def interrupt(self) -> None:
        """From any thread: `receive` raises `Interrupted` until the next `open`."""
        self._interrupted = True

    def describe(self) -> Mapping[str, str]:
        """The file and its size."""
        words = {"path": str(self.section.path)}
        if self._file is not None:
            words["bytes"] = str(self._size)
        return words
