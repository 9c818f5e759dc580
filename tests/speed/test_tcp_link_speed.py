"""What the TCP link costs: its send and receive against the bare calls of a socket, with the same buffers."""

from __future__ import annotations

import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator

import pytest

from drivers.links.tcp import TcpLink, TcpSection

TOTAL_BYTES = 128 << 20
BUFFER_BYTES = 1 << 20

ECHO = """
import socket
with socket.create_server(("127.0.0.1", 0)) as server:
    print(server.getsockname()[1], flush=True)
    room = memoryview(bytearray(1 << 20))
    while True:
        connection, _ = server.accept()
        while count := connection.recv_into(room):
            connection.sendall(room[:count])
"""


@pytest.fixture
def port() -> Iterator[int]:
    process = subprocess.Popen([sys.executable, "-c", ECHO], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    yield int(process.stdout.readline())
    process.kill()
    process.communicate()


def bytes_per_second(send: Callable[[memoryview], int], receive: Callable[[memoryview], int]) -> float:
    piece, room = memoryview(bytes(BUFFER_BYTES)), memoryview(bytearray(BUFFER_BYTES))

    def send_all() -> None:
        left = TOTAL_BYTES
        while left:
            left -= send(piece[: min(BUFFER_BYTES, left)])

    sender = threading.Thread(target=send_all)
    start = time.perf_counter()
    sender.start()
    got = 0
    while got < TOTAL_BYTES:
        got += receive(room)
    sender.join()
    assert got == TOTAL_BYTES
    return TOTAL_BYTES / (time.perf_counter() - start)


def test_the_tcp_link_against_bare_socket_calls(port: int, capsys: pytest.CaptureFixture[str]) -> None:
    ratios = []
    for _ in range(2):
        with socket.create_connection(("127.0.0.1", port)) as bare:
            bare.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            yardstick = bytes_per_second(bare.send, bare.recv_into)
        with TcpLink(TcpSection(host="127.0.0.1", port=port)) as link:
            measured = bytes_per_second(
                lambda data: link.send(data, 1.0), lambda room: link.receive(room, 1.0)
            )
        ratios.append(measured / yardstick)
    with capsys.disabled():
        print(f"\nTCP link against bare socket calls: {max(ratios):.2f} (these {yardstick / 1e9:.2f} GB/s)")
