"""A device for tests, as a process of its own: gives bytes back over TCP, and misbehaves as it is told.

Prints its port on the first line. Options are one JSON object on the command line:
  delay_s        every byte comes back so much later
  flip           bit positions (least significant bit first) of the stream that are turned over
  lose           [m, n]: of every n bytes the first m are lost, but for the first n
  lose_every     every so many bytes one is lost
  deaf           [from, to] in bytes: bytes swallowed
  deaf_s         [from, to] in seconds after the first byte: bytes swallowed
  silent         nothing ever comes back
  noise          random bytes come back instead
  close_after    closes the connection after so many bytes
  accept_s       waits so long before it accepts
"""

from __future__ import annotations

import contextlib
import json
import random
import socket
import sys
import threading
import time
from collections import deque


class Device:
    def __init__(self, options: dict) -> None:
        self.options = options
        self.flips = sorted(options.get("flip", ()))
        self.seen = 0
        self.begun: float | None = None
        self.noise = random.Random(5)

    def treat(self, data: bytes) -> bytes:
        """What comes back for the next bytes."""
        o, first = self.options, self.seen
        self.seen += len(data)
        if self.begun is None:
            self.begun = time.monotonic()
        if o.get("silent"):
            return b""
        if o.get("noise"):
            return self.noise.randbytes(len(data))
        if "deaf_s" in o and o["deaf_s"][0] <= time.monotonic() - self.begun < o["deaf_s"][1]:
            return b""
        out = bytearray(data)
        while self.flips and self.flips[0] < 8 * self.seen:
            bit = self.flips.pop(0)
            out[bit // 8 - first] ^= 1 << (bit % 8)
        if "lose" in o:
            some, every_so_many = o["lose"]
            out = bytearray(
                b for k, b in enumerate(out, first) if k % every_so_many >= some or k < every_so_many
            )
        if "deaf" in o or "lose_every" in o:
            start, stop = o.get("deaf", (0, 0))
            every = o.get("lose_every")
            keep = bytearray()
            for offset, byte in enumerate(out):
                number = first + offset
                if start <= number < stop or (every and number % every == every - 1):
                    continue
                keep.append(byte)
            out = keep
        return bytes(out)


def serve(options: dict) -> None:
    listening = socket.create_server(("127.0.0.1", 0))
    print(listening.getsockname()[1], flush=True)
    time.sleep(options.get("accept_s", 0))
    connection, _ = listening.accept()
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    device = Device(options)
    waiting: deque[tuple[float, bytes]] = deque()
    changed = threading.Condition()
    ended = False

    def give_back() -> None:
        while True:
            with changed:
                changed.wait_for(lambda: waiting or ended)
                if not waiting:
                    break
                due, data = waiting.popleft()
            time.sleep(max(0.0, due - time.monotonic()))
            try:
                connection.sendall(data)
            except OSError:
                return
        with contextlib.suppress(OSError):
            connection.shutdown(socket.SHUT_WR)

    sender = threading.Thread(target=give_back, daemon=True)
    sender.start()
    while True:
        if "close_after" in options and device.seen >= options["close_after"]:
            time.sleep(0.3)
            break
        try:
            data = connection.recv(65536)
        except OSError:
            break
        if not data:
            break
        back = device.treat(data)
        if back:
            with changed:
                waiting.append((time.monotonic() + options.get("delay_s", 0), back))
                changed.notify()
    with changed:
        ended = True
        changed.notify()
    if "close_after" not in options:
        sender.join(10)
    connection.close()


if __name__ == "__main__":
    serve(json.loads(sys.argv[1]) if len(sys.argv) > 1 else {})
