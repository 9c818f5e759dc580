"""Devices for the drivers' tests: separate processes, reached over what they print first."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from functools import cache
from pathlib import Path

import pytest

DEVICE = Path(__file__).with_name("device.py")

Start = Callable[..., str]


@pytest.fixture
def device() -> Iterator[Start]:
    """Start device.py with arguments; gives back where it can be reached."""
    with ExitStack() as stack:
        yield lambda *arguments: start(stack, arguments)


@pytest.fixture(scope="module")
def lasting_device() -> Iterator[Start]:
    """The same, but one device serves all tests of a file that ask with the same arguments."""
    with ExitStack() as stack:
        yield cache(lambda *arguments: start(stack, arguments))


def start(stack: ExitStack, arguments: tuple[object, ...]) -> str:
    process = subprocess.Popen(
        [sys.executable, str(DEVICE), *map(str, arguments)], stdout=subprocess.PIPE, text=True
    )
    stack.callback(stop, process)
    assert process.stdout is not None
    return process.stdout.readline().strip()


def stop(process: subprocess.Popen[str]) -> None:
    process.kill()
    process.wait()
    assert process.stdout is not None
    process.stdout.close()
