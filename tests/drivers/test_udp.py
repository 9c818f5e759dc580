"""The UDP link against a separate process: datagrams, and what is lost of them."""

from __future__ import annotations

import socket
from collections.abc import Callable
from contextlib import suppress
from typing import Any

import pytest
from pydantic import ValidationError

from drivers.contract import LinkLost, OpenFailed, SendRefused
from drivers.links.udp import UdpLink, UdpSection

Start = Callable[..., str]


def udp(**keys: Any) -> UdpLink:
    return UdpLink(UdpSection(**keys))


def receive(link: UdpLink, size: int = 70_000, timeout: float = 10.0) -> bytes:
    room = bytearray(size)
    return bytes(room[: link.receive(memoryview(room), timeout)])


@pytest.fixture
def unused(own_port: Callable[[socket.SocketKind], int]) -> int:
    return own_port(socket.SOCK_DGRAM)


def test_a_lost_datagram_is_bytes_lost_and_nothing_else(device: Start) -> None:
    port = device("udp", "--drop", 1, 3)
    with udp(host="127.0.0.1", port=port, message_bytes=500) as link:
        assert link.traits.message_bytes == 500
        for number in range(5):
            assert link.send(memoryview(bytes([number]) * 500), 1.0) == 500
        assert [receive(link)[0] for _ in range(3)] == [0, 2, 4]
        assert link.receive(memoryview(bytearray(9)), 0.1) == 0


def test_a_datagram_longer_than_the_buffer_is_given_out_in_pieces(device: Start) -> None:
    with udp(host="127.0.0.1", port=device("udp"), message_bytes=1000) as link:
        sent = bytes(range(250)) * 4
        link.send(memoryview(sent), 1.0)
        link.send(memoryview(b"next"), 1.0)
        got = b"".join(receive(link, 300) for _ in range(4))
        assert got == sent
        assert receive(link, 300) == b"next"


def test_the_largest_datagram_goes_through_and_a_longer_one_is_refused(device: Start) -> None:
    with udp(host="127.0.0.1", port=device("udp"), message_bytes=65_507) as link:
        assert link.send(memoryview(bytes(65_507)), 1.0) == 65_507
        assert len(receive(link)) == 65_507
        with pytest.raises(SendRefused, match="do not fit"):
            link.send(memoryview(bytes(65_508)), 1.0)


def test_an_empty_datagram_is_neither_bits_nor_an_end(unused: int) -> None:
    with udp(local_port=unused) as link, socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as peer:
        peer.connect(("127.0.0.1", unused))
        peer.send(b"")
        peer.send(b"after")
        assert receive(link) == b"after"


def test_without_a_host_the_first_sender_is_the_device_and_no_other_is_heard(unused: int) -> None:
    kinds = (socket.AF_INET, socket.SOCK_DGRAM)
    with udp(local_port=unused) as link, socket.socket(*kinds) as peer, socket.socket(*kinds) as stranger:
        assert link.send(memoryview(b"to nobody"), 0.05) == 0
        assert link.describe()["peer"] == "nobody yet"
        peer.connect(("127.0.0.1", unused))
        peer.send(b"one")
        assert receive(link) == b"one"
        assert link.describe()["peer"] == f"127.0.0.1:{peer.getsockname()[1]}"
        stranger.connect(("127.0.0.1", unused))
        with suppress(ConnectionRefusedError):  # the system may already say that nobody listens to it
            stranger.send(b"noise")
        peer.send(b"two")
        assert receive(link) == b"two"
        link.send(memoryview(b"back"), 1.0)
        peer.settimeout(10)
        assert peer.recv(100) == b"back"


def test_nobody_at_the_other_end_is_a_lost_link_with_its_address(unused: int) -> None:
    with udp(host="127.0.0.1", port=unused) as link:
        link.send(memoryview(b"x"), 1.0)
        with pytest.raises(LinkLost) as caught:
            receive(link)
    assert caught.value.what == f"nobody receives datagrams at 127.0.0.1:{unused}"


def test_datagrams_that_this_computer_dropped_are_counted(unused: int) -> None:
    with udp(local_port=unused) as link, socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as peer:
        if "buffer_overrun" not in link.health():
            pytest.skip("this system does not count them")
        peer.connect(("127.0.0.1", unused))
        sent = 4000
        for _ in range(sent):
            peer.send(bytes(8000))  # 32 MB, more than any receive buffer that is asked for
        got = 0
        while link.receive(memoryview(bytearray(70_000)), 0.1):
            got += 1
        peer.send(b"and now?")
        assert receive(link) == b"and now?"
        assert link.health()["buffer_overrun"] == sent - got > 0


def test_a_local_port_in_use_is_named(device: Start) -> None:
    port = device("udp")
    link = udp(host="127.0.0.1", port=5310, local_host="127.0.0.1", local_port=port)
    with pytest.raises(OpenFailed) as caught:
        link.open()
    assert caught.value.what == f"127.0.0.1:{port} is in use by another program"


@pytest.mark.parametrize(
    "keys", [{}, {"host": "localhost"}, {"port": 9}, {"message_bytes": 65_508, "local_port": 9}]
)
def test_keys_that_do_not_go_together_are_refused(keys: dict[str, Any]) -> None:
    with pytest.raises(ValidationError):
        UdpSection(**keys)
