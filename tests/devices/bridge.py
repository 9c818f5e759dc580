"""A device with two ports: what goes into one comes out of the other, both ways, with known bits turned over.

Prints both ports. Options as JSON: `flip` (there) and `flip_back` are bit positions; `drop_after` closes both
connections once, after so many bytes there, and listens again after `away_s`; with `echo` the first port also
gives back what goes into it.
"""

from __future__ import annotations

import contextlib
import json
import socket
import sys
import threading
import time


def carry(
    source: socket.socket, sink: socket.socket, flips: list[int], drop_after: int | None, echo: bool = False
) -> None:
    seen = 0
    while True:
        try:
            data = bytearray(source.recv(65536))
        except OSError:
            return
        if not data:
            return
        for bit in flips:
            if seen <= bit // 8 < seen + len(data):
                data[bit // 8 - seen] ^= 1 << (bit % 8)
        seen += len(data)
        if drop_after is not None and seen >= drop_after:
            for end in (source, sink):
                with contextlib.suppress(OSError):
                    end.shutdown(socket.SHUT_RDWR)
                end.close()
            return
        try:
            sink.sendall(data)
            if echo:
                source.sendall(data)
        except OSError:
            return


def main(options: dict) -> None:
    doors = [socket.create_server(("127.0.0.1", 0)) for _ in range(2)]
    ports = [door.getsockname()[1] for door in doors]
    print(*ports, flush=True)
    drop_after = options.get("drop_after")
    while True:
        ends = [door.accept()[0] for door in doors]
        back = threading.Thread(target=carry, args=(ends[1], ends[0], options.get("flip_back", []), None))
        back.start()
        carry(ends[0], ends[1], options.get("flip", []), drop_after, options.get("echo", False))
        back.join()
        if drop_after is not None:
            for door in doors:
                door.close()
            time.sleep(options.get("away_s", 0))
            doors = [socket.create_server(("127.0.0.1", port)) for port in ports]
            drop_after = None


if __name__ == "__main__":
    main(json.loads(sys.argv[1]))
