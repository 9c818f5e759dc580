"""The device in the drivers' tests: a process of its own that echoes bytes, badly if asked to.

Run as a script. The first line on standard output is where to reach it.
"""

from __future__ import annotations

import argparse
import os
import select
import socket
import sys
import threading
import time
import tty
from collections.abc import Callable
from contextlib import suppress


class Mangler:
    """Flips given bits and drops given bytes of the stream; counted from its first byte."""

    def __init__(self, flip: list[int], drop: list[int], close_after: int | None) -> None:
        self.flip, self.drop, self.close_after = flip, drop, close_after
        self.seen = 0

    def __call__(self, data: bytes) -> bytes:
        out = bytearray(data)
        start, end = self.seen, self.seen + len(data)
        for bit in self.flip:
            if start <= bit // 8 < end:
                out[bit // 8 - start] ^= 1 << bit % 8
        for byte in sorted(self.drop, reverse=True):
            if start <= byte < end:
                del out[byte - start]
        self.seen = end
        return bytes(out)

    @property
    def done(self) -> bool:
        return self.close_after is not None and self.seen >= self.close_after


def say(words: object) -> None:
    print(words, flush=True)


def echo_connection(connection: socket.socket, mangle: Mangler, late: float = 0.0) -> None:
    with connection:
        while data := connection.recv(65536):
            time.sleep(late)
            connection.sendall(mangle(data))
            if mangle.done:
                return


def serve_tcp(args: argparse.Namespace) -> None:
    with socket.create_server(("127.0.0.1", args.port)) as server:
        say(server.getsockname()[1])
        while True:
            connection, _ = server.accept()
            if args.mute:
                threading.Event().wait()
            if args.reset:
                connection.recv(1)
                linger = (1).to_bytes(4, sys.byteorder) + bytes(4)
                connection.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, linger)
                connection.close()
                continue
            threading.Thread(
                target=echo_connection, args=(connection, mangler(args), args.late), daemon=True
            ).start()


def connect_tcp(args: argparse.Namespace) -> None:
    say("")
    while True:
        try:
            echo_connection(socket.create_connection(("127.0.0.1", args.port)), mangler(args))
        except OSError:
            time.sleep(0.02)


def serve_udp(args: argparse.Namespace) -> None:
    server = socket.socket(socket.AF_INET, socket.SOCK_DGRAM)
    server.bind(("127.0.0.1", args.port))
    say(server.getsockname()[1])
    lose = set(args.drop)
    for number in range(1 << 62):
        data, sender = server.recvfrom(65536)
        if number not in lose:
            server.sendto(data, sender)


def serve_pty(args: argparse.Namespace) -> None:
    master, slave = os.openpty()
    tty.setraw(master)
    tty.setraw(slave)
    say(os.ttyname(slave))
    mangle = mangler(args)
    if args.mute:
        threading.Event().wait()
    answer = answerer(args.modem)
    while True:
        data = os.read(master, 65536)
        out = answer(data) if answer else mangle(data)
        while out:
            out = out[os.write(master, out) :]
        if args.modem == "talkative":
            time.sleep(0.05)
            os.write(master, b"WADER-9 at your service")
        if mangle.done:
            # The system throws away what a closed pseudo-terminal still holds: wait until it has been read.
            while select.select([slave], [], [], 0)[0]:
                time.sleep(0.01)
            return


def answerer(kind: str | None) -> Callable[[bytes], bytes] | None:
    """Make a modem that answers commands: what it says to a line that ends in a carriage return."""
    if kind is None:
        return None
    heard = bytearray()
    lines = 0

    def answer(data: bytes) -> bytes:
        nonlocal lines
        heard.extend(data)
        out = bytearray(data) if kind == "echoing" else bytearray()
        while (end := heard.find(b"\r")) >= 0:
            lines += 1
            command = bytes(heard[:end])
            del heard[: end + 1]
            if kind == "silent" or (kind == "second-time" and lines < 2):
                continue
            if kind == "late":
                time.sleep(0.4)
            word = b"ERROR" if kind == "error" or not command.startswith(b"AT") else b"OK"
            if kind == "echoing" and command == b"ATOK":
                word = b"ERROR"
            out += b"\r\n" + word + b"\r\n"
            if kind == "connecting" and command.startswith(b"ATD"):
                out += b"CONNECT 9600\r\nnoise and more"
        return bytes(out)

    return answer


def serve_rfc2217(args: argparse.Namespace) -> None:
    with socket.create_server(("127.0.0.1", args.port)) as server:
        say(server.getsockname()[1])
        while True:
            connection, _ = server.accept()
            threading.Thread(target=serve_one_rfc2217, args=(connection, mangler(args)), daemon=True).start()


def serve_one_rfc2217(connection: socket.socket, mangle: Mangler) -> None:
    import serial
    from serial.rfc2217 import PortManager

    class Answers:
        def write(self, data: bytes) -> None:
            connection.sendall(data)

    manager = PortManager(serial.serial_for_url("loop://", timeout=0.05), Answers())
    with connection, suppress(OSError):
        while data := connection.recv(65536):
            payload = b"".join(manager.filter(data))
            connection.sendall(b"".join(manager.escape(mangle(payload))))
            if mangle.done:
                break


def mangler(args: argparse.Namespace) -> Mangler:
    return Mangler(args.flip, args.drop, args.close_after)


def main() -> None:
    parser = argparse.ArgumentParser()
    kinds = {
        "tcp": serve_tcp,
        "connect": connect_tcp,
        "udp": serve_udp,
        "pty": serve_pty,
        "rfc2217": serve_rfc2217,
    }
    parser.add_argument("kind", choices=kinds)
    parser.add_argument("--port", type=int, default=0)
    parser.add_argument("--flip", type=int, nargs="*", default=[])
    parser.add_argument("--drop", type=int, nargs="*", default=[])
    parser.add_argument("--close-after", type=int)
    parser.add_argument("--late", type=float, default=0.0)
    parser.add_argument("--mute", action="store_true")
    parser.add_argument("--reset", action="store_true")
    parser.add_argument("--modem")
    args = parser.parse_args()
    kinds[args.kind](args)


if __name__ == "__main__":
    main()
