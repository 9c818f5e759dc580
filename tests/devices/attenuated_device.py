"""A bench as a process of its own: a SCPI attenuator on one TCP port, and behind it a device that echoes on another.

Prints both ports: the attenuator's, the echo's. The device's bit error ratio follows the attenuator:
BPSK in Gaussian noise, Q(sqrt(2) 10^((x0_db - attenuation)/20)), and one half beyond `deaf_db`'s BER limits.
Options are one JSON object on the command line:
  log            file of every line that the attenuator got, with the time before it
  x0_db          attenuation at which Eb/N0 is 0 dB (default 40)
  start_db       attenuation at power-on (default 0)
  deaf_above     beyond this BER nothing comes back
  delay_s        every byte comes back so much later
  lag_s          the echo follows the attenuator so much later
  leak           the echo takes no notice of the attenuator
  scatter_db     level scatter: each setting is off by a normal error of its own
  drift_db       with every setting the device gets worse by so much
  seed           of errors and scatter (default 1)
  identity       what *IDN? is answered with
  late_s         every answer comes so much later
  answer         what ATT? is answered with, in place of the number
  refuse         goes into the error queue at every setting, which is not carried out
  offset_db      what ATT? reads is off by so much
  fault_from     `answer`, `refuse`, `offset_db`, `late_s` begin after so many settings (default 0)
  count          file that holds how many bytes reached the echo, in all connections so far
  falls_back_s   so long after a setting it falls back to `start_db` by itself, as after a power failure
  falls_back_at  the settings after which it does, counted from 1 (default: every one)
  mute_after_s   so long after the first setting the attenuator answers nothing any more
  die_after      the whole bench ends when it is set once more than so many times
"""

from __future__ import annotations

import json
import math
import os
import socket
import sys
import threading
import time
from collections import deque
from pathlib import Path

import numpy as np


class Bench:
    def __init__(self, options: dict) -> None:
        self.options = options
        self.lock = threading.Lock()
        self.value = float(options.get("start_db", 0.0))
        self.history: list[tuple[float, float]] = [(-math.inf, self.value)]
        self.errors: list[str] = []
        self.settings = 0
        self.seen = 0
        self.rng = np.random.default_rng(options.get("seed", 1))
        self.scattered: float = 0.0
        self.log = open(options["log"], "a", buffering=1) if "log" in options else None  # noqa: SIM115

    # -- the attenuator

    def faulty(self) -> bool:
        return self.settings > self.options.get("fault_from", 0)

    def answer(self, line: str) -> str | None:
        with self.lock:
            if self.log is not None:
                self.log.write(f"{time.time():.6f} {line}\n")
            head, _, rest = line.partition(" ")
            if head == "PRETEND":  # of the test, not of the device: be another one from now on
                self.options["identity"] = rest
                return "done"
            if line == "*IDN?":
                return self.options.get("identity", "Fictional Bench,SA-95,0042,1.3")
            if line == "SYST:ERR?":
                return self.errors.pop(0) if self.errors else '+0,"No error"'
            if line == "ATT?":
                return self.read_back()
            if head == "ATT":
                self.set(float(rest))
                return None
            self.errors.append(f'-113,"Undefined header; {line}"')
            return None

    def read_back(self) -> str:
        if self.faulty() and self.options.get("answer"):
            return str(self.options["answer"])
        off = self.options.get("offset_db", 0.0) if self.faulty() else 0.0
        return f"{self.value + off:+.4E}"

    def set(self, value: float) -> None:
        self.settings += 1
        if self.settings > self.options.get("die_after", math.inf):
            os._exit(1)
        if self.faulty() and self.options.get("refuse"):
            self.errors.append(self.options["refuse"])
            return
        self.value = value
        self.scattered = self.options.get("scatter_db", 0.0) * float(self.rng.normal())
        self.history.append((time.monotonic(), value + self.scattered))
        after = self.options.get("falls_back_s")
        if after and self.settings in self.options.get("falls_back_at", [self.settings]):
            threading.Timer(after, self.fall_back, [self.settings]).start()

    def fall_back(self, number: int) -> None:
        with self.lock:
            if number == self.settings:
                self.value = float(self.options.get("start_db", 0.0))
                self.history.append((time.monotonic(), self.value))

    def mute(self) -> bool:
        after = self.options.get("mute_after_s", math.inf)
        return len(self.history) > 1 and time.monotonic() > self.history[1][0] + after

    def late(self) -> float:
        return self.options.get("late_s", 0.0) if self.faulty() else 0.0

    # -- the device behind it

    def ber(self) -> float:
        if self.options.get("leak"):
            return 0.0
        now = time.monotonic() - self.options.get("lag_s", 0.0)
        with self.lock:
            value = next(value for at, value in reversed(self.history) if at <= now)
        x0 = self.options.get("x0_db", 40.0) - self.settings * self.options.get("drift_db", 0.0)
        amplitude = 10 ** ((x0 - value) / 20)
        return 0.5 * math.erfc(amplitude)

    def through(self, data: bytes) -> bytes:
        """What comes back for bytes that pass the attenuator now."""
        self.seen += len(data)
        if "count" in self.options:
            Path(self.options["count"]).write_text(str(self.seen))
        ber = self.ber()
        if ber > self.options.get("deaf_above", 1.0):
            return b""
        bits = 8 * len(data)
        count = int(self.rng.binomial(bits, ber))
        if not count:
            return data
        out = np.frombuffer(bytearray(data), dtype=np.uint8)
        at = self.rng.choice(bits, size=count, replace=False)
        np.bitwise_xor.at(out, at >> 3, (1 << (at & 7)).astype(np.uint8))
        return out.tobytes()


def talk(connection: socket.socket, bench: Bench) -> None:
    with connection, connection.makefile("rb") as lines:
        for raw in lines:
            answer = bench.answer(raw.decode().strip())
            if answer is None or bench.mute():
                continue
            time.sleep(bench.late())
            try:
                connection.sendall(answer.encode() + b"\n")
            except OSError:
                return


def echo(connection: socket.socket, bench: Bench) -> None:
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    delay = bench.options.get("delay_s", 0.0)
    waiting: deque[tuple[float, bytes]] = deque()
    changed = threading.Condition()
    over = threading.Event()

    def give_back() -> None:
        while True:
            with changed:
                changed.wait_for(lambda: waiting or over.is_set())
                if not waiting:
                    return
                due, data = waiting.popleft()
            time.sleep(max(0.0, due - time.monotonic()))
            try:
                connection.sendall(data)
            except OSError:
                return

    if delay:
        threading.Thread(target=give_back, daemon=True).start()
    while True:
        try:
            data = connection.recv(65_536)
        except OSError:
            break
        if not data:
            break
        back = bench.through(data)
        if not back:
            continue
        if delay:
            with changed:
                waiting.append((time.monotonic() + delay, back))
                changed.notify()
            continue
        try:
            connection.sendall(back)
        except OSError:
            break
    with changed:
        over.set()
        changed.notify()
    connection.close()


def listen(door: socket.socket, serve, bench: Bench) -> None:
    while True:
        connection, _ = door.accept()
        threading.Thread(target=serve, args=(connection, bench), daemon=True).start()


def main(options: dict) -> None:
    bench = Bench(options)
    doors = [socket.create_server(("127.0.0.1", 0)) for _ in range(2)]
    print(*(door.getsockname()[1] for door in doors), flush=True)
    threading.Thread(target=listen, args=(doors[0], talk, bench), daemon=True).start()
    listen(doors[1], echo, bench)


if __name__ == "__main__":
    main(json.loads(sys.argv[1]))
