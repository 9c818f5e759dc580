"""The TCP link against a separate process: its ends, its faults and their words."""

from __future__ import annotations

import random
import socket
import threading
import time
from collections.abc import Callable
from typing import Any

import pytest
from pydantic import ValidationError

from drivers.contract import EndOfStream, Interrupted, LinkLost, OpenFailed, SendRefused
from drivers.links.tcp import TcpLink, TcpSection

Start = Callable[..., str]


def tcp(port: object, **keys: Any) -> TcpLink:
    return TcpLink(TcpSection(host=keys.pop("host", "127.0.0.1"), port=port, **keys))  # type: ignore[arg-type]


@pytest.fixture
def unused(own_port: Callable[[socket.SocketKind], int]) -> int:
    return own_port(socket.SOCK_STREAM)


def failure(link: TcpLink) -> OpenFailed:
    with pytest.raises(OpenFailed) as caught:
        link.open()
    assert caught.value.advice
    assert "\n" not in caught.value.what + caught.value.advice
    return caught.value


def test_known_bits_come_back_flipped_and_known_bytes_missing(device: Start) -> None:
    data = random.Random(11).randbytes(50_000)
    port = device("tcp", "--flip", 0, 77, 399_999, "--drop", 1000, 49_000)
    expected = bytearray(data)
    for bit in (0, 77, 399_999):
        expected[bit // 8] ^= 1 << bit % 8
    del expected[49_000], expected[1000]
    got = bytearray()
    with tcp(port) as link:
        thread = threading.Thread(target=lambda: [send_all(link, data), link.finish_sending()])
        thread.start()
        with pytest.raises(EndOfStream) as caught:
            receive_on(link, got)
        thread.join()
    assert got == expected
    assert f"127.0.0.1:{port} closed its side" in caught.value.what


def send_all(link: TcpLink, data: bytes) -> None:
    left = memoryview(data)
    while len(left):
        left = left[link.send(left, 5.0) :]


def receive_on(link: TcpLink, got: bytearray) -> None:
    room = bytearray(4096)
    while count := link.receive(memoryview(room), 10.0):
        got += room[:count]


def test_half_closing_keeps_the_way_back_open(device: Start) -> None:
    with tcp(device("tcp", "--late", "0.2")) as link:
        link.send(memoryview(b"last words"), 1.0)
        link.finish_sending()
        link.finish_sending()
        with pytest.raises(SendRefused):
            link.send(memoryview(b"x"), 1.0)
        got = bytearray()
        with pytest.raises(EndOfStream):
            receive_on(link, got)
        assert got == b"last words"


def test_a_refused_connection_names_host_and_port(unused: int) -> None:
    error = failure(tcp(unused))
    assert error.what == f"127.0.0.1:{unused} refused the connection"
    assert "device's side" in error.advice


def test_a_name_that_cannot_be_resolved_is_named() -> None:
    error = failure(tcp(5310, host="wader-9.invalid"))
    assert "wader-9.invalid:5310" in error.what
    assert "`host`" in error.advice
    assert "cannot be resolved" in failure(tcp(5310, host="..")).what


def test_an_address_without_an_answer_ends_in_time() -> None:
    # A listener whose backlog is full lets further connections wait.
    with socket.socket() as server, socket.socket() as first, socket.socket() as second:
        server.bind(("127.0.0.1", 0))
        server.listen(0)
        port = server.getsockname()[1]
        for taken in (first, second):
            taken.setblocking(False)
            taken.connect_ex(("127.0.0.1", port))
        time.sleep(0.05)
        error = failure(tcp(port, connect_timeout_s=0.3))
    assert error.what == f"127.0.0.1:{port} did not answer within 0.3 s"
    assert "connect_timeout_s" in error.advice


def test_a_reset_is_a_lost_link_for_receiver_and_sender(device: Start) -> None:
    port = device("tcp", "--reset")
    with tcp(port) as link:
        link.send(memoryview(b"x"), 1.0)
        with pytest.raises(LinkLost) as caught:
            link.receive(memoryview(bytearray(9)), 10.0)
        assert f"127.0.0.1:{port} broke the connection off" in caught.value.what
        with pytest.raises(LinkLost):
            send_all(link, bytes(1 << 24))


def test_listening_without_a_caller_ends_in_time_and_names_the_address(unused: int) -> None:
    error = failure(tcp(unused, listen=True, connect_timeout_s=0.1))
    assert error.what == f"no device connected to 127.0.0.1:{unused} within 0.1 s"


def test_listening_at_a_port_in_use_or_a_foreign_address_says_so(device: Start) -> None:
    port = device("tcp")
    assert failure(tcp(port, listen=True)).what == f"127.0.0.1:{port} is in use by another program"
    assert "no address of this computer" in failure(tcp(5310, host="192.0.2.1", listen=True)).what


def test_interrupt_ends_waiting_for_a_caller(unused: int) -> None:
    link = tcp(unused, listen=True, connect_timeout_s=600)
    raised: list[BaseException] = []

    def run() -> None:
        try:
            link.open()
        except BaseException as error:
            raised.append(error)

    thread = threading.Thread(target=run, daemon=True)
    thread.start()
    time.sleep(0.1)
    link.interrupt()
    thread.join(30)
    assert [type(error) for error in raised] == [Interrupted]


def test_a_caller_that_was_accepted_is_the_only_one(device: Start, unused: int) -> None:
    device("connect", "--port", unused)
    with tcp(unused, listen=True) as link:
        assert link.describe()["role"] == "listening"
        with socket.socket() as second:
            assert second.connect_ex(("127.0.0.1", unused)) != 0


def test_draining_waits_while_the_device_takes_nothing(device: Start) -> None:
    with tcp(device("tcp", "--mute")) as link:
        while link.send(memoryview(bytes(1 << 20)), 0.2):
            pass
        assert not link.drain(0.1)


def test_both_directions_at_once_carry_everything(device: Start) -> None:
    data = random.Random(12).randbytes(8_000_000)
    got = bytearray()
    with tcp(device("tcp")) as link:
        thread = threading.Thread(target=lambda: [send_all(link, data), link.finish_sending()])
        thread.start()
        with pytest.raises(EndOfStream):
            receive_on(link, got)
        thread.join()
    assert got == data


@pytest.mark.parametrize(
    "keys", [{"host": ""}, {"port": 0}, {"port": 65536}, {"connect_timeout_s": 0}, {"x": 1}]
)
def test_keys_out_of_range_are_refused(keys: dict[str, Any]) -> None:
    with pytest.raises(ValidationError):
        TcpSection(**{"host": "localhost", "port": 5310, **keys})
