"""What every link driver has to do, whatever it carries bytes over: the contract of drivers/contract.py."""

from __future__ import annotations

import os
import random
import socket
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from drivers.contract import EndOfStream, Interrupted, Link, LinkError, LinkLost
from drivers.registry import link_class

ECHOING = (
    "loopback",
    "tcp",
    "tcp listening",
    "udp",
    "process",
    "pty",
    "socket://",
    "rfc2217://",
    "loop://",
)
KINDS = (*ECHOING, "capture")

Start = Callable[..., str]


@pytest.fixture(scope="module")
def free_port(own_port: Callable[[socket.SocketKind], int]) -> int:
    return own_port(socket.SOCK_STREAM)


@pytest.fixture
def make(device: Start, lasting_device: Start, free_port: int, tmp_path: Path) -> Callable[[str], Link]:
    def settings(kind: str) -> tuple[str, dict[str, Any]]:
        if kind == "loopback":
            return "loopback", {}
        if kind == "tcp":
            return "tcp", {"host": "127.0.0.1", "port": int(lasting_device("tcp"))}
        if kind == "tcp listening":
            lasting_device("connect", "--port", free_port)
            return "tcp", {"host": "127.0.0.1", "port": free_port, "listen": True}
        if kind == "udp":
            return "udp", {"host": "127.0.0.1", "port": int(lasting_device("udp"))}
        if kind == "process":
            return "process", {"command": [sys.executable, "-c", ECHO]}
        if kind == "pty":
            return "serial", {"port": device("pty")}
        if kind == "socket://":
            return "serial", {"port": f"socket://127.0.0.1:{lasting_device('tcp')}"}
        if kind == "rfc2217://":
            return "serial", {"port": f"rfc2217://127.0.0.1:{lasting_device('rfc2217')}"}
        if kind == "loop://":
            return "serial", {"port": "loop://"}
        path = tmp_path / "received.bin"
        path.write_bytes(random.Random(3).randbytes(5000))
        return "capture", {"path": path}

    def made(kind: str) -> Link:
        name, keys = settings(kind)
        driver = link_class(name)
        return driver(driver.Section(**keys))

    return made


ECHO = """
import os
while data := os.read(0, 65536):
    while data:
        data = data[os.write(1, data):]
"""


@pytest.fixture(params=KINDS)
def link(request: pytest.FixtureRequest, make: Callable[[str], Link]) -> Link:
    return make(request.param)


@pytest.fixture(params=ECHOING)
def echo(request: pytest.FixtureRequest, make: Callable[[str], Link]) -> Link:
    return make(request.param)


@pytest.fixture(params=[kind for kind in ECHOING if kind != "rfc2217://"])
def quick_echo(request: pytest.FixtureRequest, make: Callable[[str], Link]) -> Link:
    """Without the one that takes seconds to open and close, where it can show nothing of its own."""
    return make(request.param)


def send_all(link: Link, data: bytes) -> None:
    left = memoryview(data)
    while len(left):
        left = left[link.send(left[: link.traits.message_bytes], 1.0) :]


def receive_exactly(link: Link, count: int, size: int = 4096) -> bytes:
    got = bytearray()
    room = bytearray(size)
    while len(got) < count:
        arrived = link.receive(memoryview(room), 10.0)
        assert arrived, f"only {len(got)} of {count} bytes came"
        got += room[:arrived]
    return bytes(got)


def in_thread(work: Callable[[], Any]) -> tuple[threading.Thread, list[BaseException]]:
    raised: list[BaseException] = []

    def run() -> None:
        try:
            work()
        except BaseException as error:
            raised.append(error)

    thread = threading.Thread(target=run, daemon=True)
    thread.start()
    return thread, raised


def test_a_link_that_was_never_opened_bears_everything_but_use(link: Link) -> None:
    link.park()
    link.park()
    link.close()
    link.close()
    assert all(isinstance(words, str) for words in link.describe().values())
    assert isinstance(dict(link.health()), dict)
    assert isinstance(dict(link.lines()), dict)
    for use in (
        lambda: link.receive(memoryview(bytearray(9)), 0.01),
        lambda: link.send(memoryview(b"x"), 0.01),
    ):
        with pytest.raises(LinkError) as caught:
            use()
        assert caught.value.what
        assert caught.value.advice
        assert "\n" not in caught.value.what + caught.value.advice
    link.interrupt()
    with pytest.raises(Interrupted):
        link.receive(memoryview(bytearray(9)), 0.01)


def test_what_goes_in_comes_out_whole_and_in_order(echo: Link) -> None:
    data = random.Random(1).randbytes(20_000)
    with echo:
        _, raised = in_thread(lambda: send_all(echo, data))
        assert receive_exactly(echo, len(data)) == data
        assert not raised


def test_every_byte_value_comes_back_and_a_buffer_of_one_byte_suffices(quick_echo: Link) -> None:
    data = bytes(range(256))
    with quick_echo:
        send_all(quick_echo, data)
        assert receive_exactly(quick_echo, len(data), size=1) == data


def test_it_opens_again_after_closing(echo: Link) -> None:
    for round_number in range(2):
        echo.open()
        data = bytes([round_number]) * 100
        send_all(echo, data)
        assert receive_exactly(echo, 100) == data
        echo.close()
        echo.close()


def test_opening_an_open_link_starts_afresh(quick_echo: Link) -> None:
    quick_echo.open()
    quick_echo.open()
    with quick_echo:
        send_all(quick_echo, b"hello")
        assert receive_exactly(quick_echo, 5) == b"hello"


def test_receiving_waits_as_long_as_asked_where_nothing_comes(echo: Link) -> None:
    room = memoryview(bytearray(100))
    with echo:
        start = time.monotonic()
        assert echo.receive(room, 0.15) == 0
        assert time.monotonic() - start >= 0.14
        assert echo.receive(room, 0.0) == 0


def test_no_bytes_and_no_room_are_neither_an_end_nor_a_fault(link: Link) -> None:
    with link:
        assert link.receive(memoryview(bytearray()), 0.01) == 0
        if link.traits.sends:
            assert link.send(memoryview(b""), 0.01) == 0


def test_interrupt_wakes_a_waiting_receiver_and_lasts_until_the_next_open(echo: Link) -> None:
    echo.open()
    thread, raised = in_thread(lambda: echo.receive(memoryview(bytearray(100)), 600.0))
    time.sleep(0.05)
    echo.interrupt()
    thread.join(30)
    assert [type(error) for error in raised] == [Interrupted]
    for _ in range(2):
        with pytest.raises(Interrupted):
            echo.receive(memoryview(bytearray(100)), 1.0)
        with pytest.raises(Interrupted):
            echo.send(memoryview(b"x"), 1.0)
    echo.close()
    with echo:
        send_all(echo, b"again")
        assert receive_exactly(echo, 5) == b"again"


def test_interrupt_wakes_sender_and_receiver_at_once(echo: Link) -> None:
    # Nobody reads what comes back, so the way fills up and the sender waits for room (datagrams never do).
    piece = memoryview(bytes(min(65_536, echo.traits.message_bytes or 65_536)))

    def go_on_sending() -> None:
        while True:
            echo.send(piece, 600.0)

    echo.open()
    sender, from_sender = in_thread(go_on_sending)
    time.sleep(0.3)
    receiver, from_receiver = in_thread(
        lambda: [echo.receive(memoryview(bytearray(1)), 600.0) for _ in range(10**9)]
    )
    time.sleep(0.05)
    echo.interrupt()
    sender.join(30)
    receiver.join(30)
    assert [type(error) for error in (*from_sender, *from_receiver)] == [Interrupted, Interrupted]
    echo.close()


def test_a_sender_without_room_is_told_so_in_time(quick_echo: Link) -> None:
    if quick_echo.traits.message_bytes is not None:
        pytest.skip("datagrams are always taken")
    piece = memoryview(bytes(1 << 20))
    with quick_echo:
        taken = 0
        while count := quick_echo.send(piece, 0.2):
            taken += count
            assert taken < 1 << 30, "it takes without end, though nobody reads"


def test_a_with_block_closes_on_an_exception(link: Link) -> None:
    with pytest.raises(KeyError), link:
        raise KeyError
    with pytest.raises(LinkError):
        link.receive(memoryview(bytearray(9)), 0.01)


@pytest.mark.skipif(not os.path.isdir("/proc/self/fd"), reason="needs /proc to count open files")
def test_opening_and_closing_leaves_no_file_and_no_thread_behind(link: Link) -> None:
    link.open()
    link.close()
    files, threads = len(os.listdir("/proc/self/fd")), threading.active_count()
    link.open()
    link.close()
    assert len(os.listdir("/proc/self/fd")) == files
    assert threading.active_count() == threads


def test_draining_says_that_all_has_left_where_the_device_reads(quick_echo: Link) -> None:
    with quick_echo:
        send_all(quick_echo, bytes(1000))
        receive_exactly(quick_echo, 1000)
        assert quick_echo.drain(10.0)


@pytest.mark.parametrize("kind", ["tcp", "pty", "socket://", "rfc2217://", "process"])
def test_a_closing_device_ends_the_link_after_its_last_byte(kind: str, device: Start) -> None:
    data = random.Random(2).randbytes(3000)
    if kind == "process":
        name, keys = "process", {"command": ["head", "-c", "3000"]}
    elif kind == "pty":
        name, keys = "serial", {"port": device("pty", "--close-after", 3000)}
    elif kind == "tcp":
        name, keys = "tcp", {"host": "127.0.0.1", "port": device("tcp", "--close-after", 3000)}
    else:
        server = device(kind.replace("socket://", "tcp").removesuffix("://"), "--close-after", 3000)
        name, keys = "serial", {"port": f"{kind}127.0.0.1:{server}"}
    driver = link_class(name)
    with driver(driver.Section(**keys)) as link:
        send_all(link, data)
        if kind != "pty":  # the system throws away what a closed pseudo-terminal holds
            time.sleep(0.2)  # so the device has ended before anybody looks
        assert receive_exactly(link, 3000) == data
        with pytest.raises((EndOfStream, LinkLost)) as caught:
            receive_exactly(link, 1)
        if name == "serial":
            assert isinstance(caught.value, LinkLost)
            assert keys["port"] in caught.value.what
