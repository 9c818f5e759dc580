"""A programmable attenuator as a program of its own: lines of text over TCP, every command in its log.

Prints its port, or with --serial the name of its terminal. Commands: *IDN?, ATT x, ATT?, SYST:ERR?.
Faults are asked for by options, and `FAULT name value` on a connection turns one on later, so that a
test can break it in mid-run.
"""

from __future__ import annotations

import argparse
import os
import pty
import socket
import sys
import threading
import time
import tty
from pathlib import Path


class Attenuator:
    def __init__(self, options: argparse.Namespace) -> None:
        self.options = options
        self.value = options.start
        self.errors: list[str] = list(options.stale)
        self.commands = 0
        self.lock = threading.Lock()
        self.log = Path(options.log)
        self.log.touch()

    def answer(self, line: str) -> str | None:
        with self.lock:
            with self.log.open("a", encoding="utf-8") as log:
                log.write(f"{time.time():.6f} {line}\n")
            self.commands += 1
            if self.options.die_after is not None and self.commands > self.options.die_after:
                os._exit(1)
            return self.act(line)

    def act(self, line: str) -> str | None:
        options = self.options
        head, _, rest = line.partition(" ")
        if head == "FAULT":
            name, _, value = rest.partition(" ")
            kept = getattr(options, name)
            setattr(options, name, value if isinstance(kept, str) or kept is None else type(kept)(value))
            return None
        if line == "*IDN?":
            return options.identity
        if line == "SYST:ERR?":
            return self.errors.pop(0) if self.errors else '+0,"No error"'
        if line == "ATT?":
            return options.answer or f"{self.value + options.offset:+.4E}"
        if head == "ATT":
            if options.refuse:
                self.errors.append(options.refuse)
            elif not options.stuck:
                self.value = float(rest)
            return None
        self.errors.append(f'-113,"Undefined header; {line}"')
        return None


def serve(connection: socket.socket, device: Attenuator) -> None:
    with connection, connection.makefile("rb") as lines:
        for raw in lines:
            answer = device.answer(raw.decode().strip())
            if answer is None or device.options.mute:
                continue
            if device.options.late:
                time.sleep(device.options.late)
            try:
                connection.sendall(answer.encode() + b"\n")
            except OSError:
                return


def serve_terminal(device: Attenuator) -> None:
    """The same on a serial port, which is a pseudo-terminal here."""
    ours, theirs = pty.openpty()
    tty.setraw(theirs)
    print(os.ttyname(theirs), flush=True)
    with os.fdopen(ours, "r+b", buffering=0) as port:
        pending = b""
        while True:
            pending += port.read(100)
            while b"\n" in pending:
                line, _, pending = pending.partition(b"\n")
                answer = device.answer(line.decode().strip())
                if answer is not None:
                    port.write(answer.encode() + b"\n")


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--log", required=True)
    parser.add_argument("--identity", default="Fictional Bench,SA-95,0042,1.3")
    parser.add_argument("--start", type=float, default=0.0)
    parser.add_argument("--late", type=float, default=0.0)
    parser.add_argument("--offset", type=float, default=0.0)
    parser.add_argument("--answer", default="")
    parser.add_argument("--refuse", default="")
    parser.add_argument("--stale", action="append", default=[])
    parser.add_argument("--stuck", default="")
    parser.add_argument("--mute", default="")
    parser.add_argument("--die-after", type=int, dest="die_after")
    parser.add_argument("--serial", action="store_true")
    options = parser.parse_args()
    device = Attenuator(options)
    if options.serial:
        serve_terminal(device)
    listener = socket.create_server(("127.0.0.1", 0))
    print(listener.getsockname()[1], flush=True)
    sys.stdout.close()
    while True:
        connection, _ = listener.accept()
        threading.Thread(target=serve, args=(connection, device), daemon=True).start()


main()
