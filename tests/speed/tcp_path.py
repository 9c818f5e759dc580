"""The whole measuring path over TCP on this machine, against a bare send/receive loop with the same buffers.

Run as `python tests/speed/tcp_path.py`; prints the ratio of the two rates, in turn, several times.
"""

from __future__ import annotations

import socket
import statistics
import tempfile
import threading
import time
from multiprocessing import get_context
from pathlib import Path

from harness.bench.run import BenchRun, Hooks
from harness.profile import parse_profile
from harness.store import open_store

CHUNK = 256 << 10
BITS = 8 * (512 << 20)
ROUNDS = 5


def echo(pipe) -> None:
    """Give everything back, one connection after another."""
    listening = socket.create_server(("127.0.0.1", 0))
    pipe.send(listening.getsockname()[1])
    buffer = memoryview(bytearray(CHUNK))
    while True:
        connection, _ = listening.accept()
        with connection:
            while count := connection.recv_into(buffer):
                connection.sendall(buffer[:count])


def bare(port: int) -> float:
    """Send and receive the same number of bytes, nothing else; bit/s."""
    connection = socket.create_connection(("127.0.0.1", port))
    total = BITS // 8
    out, into = bytearray(CHUNK), memoryview(bytearray(CHUNK))

    def send() -> None:
        left = total
        while left:
            left -= connection.send(memoryview(out)[: min(CHUNK, left)])

    begun = time.perf_counter()
    thread = threading.Thread(target=send)
    thread.start()
    got = 0
    while got < total:
        got += connection.recv_into(into)
    took = time.perf_counter() - begun
    thread.join()
    connection.close()
    return BITS / took


def measured(port: int, folder: Path, pattern: str) -> float:
    """Carry out a run of as many bits; bit/s of its measuring time."""
    profile = parse_profile(
        f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {port}\n'
        f'[pattern]\nname = "{pattern}"\n[stop]\nbits = {BITS}\n'
    )
    with open_store(folder / "speed.sqlite") as store:
        result = BenchRun(profile, store, Hooks(), lock=folder, command="measure").run()
    whole = result.assessment.whole
    assert whole.tally.compared == BITS, whole
    assert whole.tally.errors == 0
    return BITS / whole.seconds


def main() -> None:
    context = get_context("spawn")
    here, there = context.Pipe()
    process = context.Process(target=echo, args=(there,), daemon=True)
    process.start()
    port = here.recv()
    with tempfile.TemporaryDirectory() as folder:
        for pattern in ("PRBS15", "PRBS31"):
            ratios = []
            for _ in range(ROUNDS):
                yardstick = bare(port)
                ours = measured(port, Path(folder), pattern)
                ratios.append(ours / yardstick)
                print(f"{pattern}: bare {yardstick / 1e9:.2f} Gbit/s, measured {ours / 1e9:.2f} Gbit/s")
            print(f"{pattern}: ratio {statistics.median(ratios):.2f} (median of {ROUNDS})")
    process.kill()


if __name__ == "__main__":
    main()
