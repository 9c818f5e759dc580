"""The capture link: a file's bytes, at any size of buffer, and clear words where there are none."""

from __future__ import annotations

import os
import random
from pathlib import Path

import pytest

from drivers.contract import EndOfStream, OpenFailed, SendRefused
from drivers.links.capture import CaptureLink, CaptureSection


def capture(path: Path) -> CaptureLink:
    return CaptureLink(CaptureSection(path=path))


@pytest.mark.parametrize("size", [1, 7, 4096, 1 << 20])
def test_the_whole_file_comes_in_order_whatever_the_buffer(tmp_path: Path, size: int) -> None:
    data = random.Random(5).randbytes(10_001)
    path = tmp_path / "received.bin"
    path.write_bytes(data)
    got, room = bytearray(), bytearray(size)
    with capture(path) as link:
        assert link.traits.finite
        assert link.describe() == {"path": str(path), "bytes": "10001"}
        while len(got) < len(data):
            got += room[: link.receive(memoryview(room), 0.0)]
        with pytest.raises(EndOfStream, match="is at its end"):
            link.receive(memoryview(room), 0.0)
        with pytest.raises(EndOfStream):
            link.receive(memoryview(room), 0.0)
    assert got == data


def test_it_starts_at_the_first_byte_each_time_it_is_opened(tmp_path: Path) -> None:
    path = tmp_path / "received.bin"
    path.write_bytes(b"abcdef")
    link, room = capture(path), bytearray(3)
    for _ in range(2):
        with link:
            link.receive(memoryview(room), 0.0)
            assert room == b"abc"


def test_an_empty_file_ends_at_once_and_is_called_empty(tmp_path: Path) -> None:
    path = tmp_path / "empty.bin"
    path.touch()
    with capture(path) as link, pytest.raises(EndOfStream) as caught:
        link.receive(memoryview(bytearray(9)), 0.0)
    assert caught.value.what == f"the capture {path} is empty"


def test_it_does_not_send(tmp_path: Path) -> None:
    path = tmp_path / "received.bin"
    path.write_bytes(b"x")
    with capture(path) as link, pytest.raises(SendRefused):
        link.send(memoryview(b"x"), 1.0)


def test_what_is_no_readable_file_is_named_with_what_to_do(tmp_path: Path) -> None:
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    for path, words in (
        (tmp_path / "nowhere.bin", "does not exist"),
        (tmp_path, "is a folder"),
        (pipe, "is no regular file"),
        (Path("nul\0byte"), "cannot be read"),
    ):
        with pytest.raises(OpenFailed) as caught:
            capture(path).open()
        assert words in caught.value.what
        assert str(path) in caught.value.what
        assert "path" in caught.value.advice


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_a_file_that_may_not_be_read_says_so(tmp_path: Path) -> None:
    path = tmp_path / "secret.bin"
    path.write_bytes(b"x")
    path.chmod(0)
    with pytest.raises(OpenFailed, match="no permission"):
        capture(path).open()
