"""A modem as a process of its own: over a pseudo-terminal, a socket or an RFC 2217 server, and as bad as it is told.

Prints where it can be reached: a port's path or a number. Options are one JSON object on the command line:
  over           pty (default), socket, rfc2217 (pyserial's own server code)
  name           pty: a symbolic link to the port, made anew when the port comes back
  path           what it does with data:
                 loop          gives them back after `delay_s` (default 0)
                 local-echo    gives each byte back at once, and again from the far end after `delay_s`
                 text-echo     gives back text as a terminal does: control characters mangled
                 seven-bits    gives back seven bits of each byte
                 silent        nothing
                 reversed      the bits of each byte in the other order
                 inverted      the other polarity
                 generator     sends PRBS9 by itself, all the time
                 own-pattern   answers every byte with one of its own PRBS9
                 anew          answers every byte with one of PRBS15 made by itself: known errors do not return
                 stuck         takes no data at all
                 small-buffer  takes at most 600 bytes at a time, and loses what comes beyond within 50 ms
                 blocks        sends on 64 bytes at a time, and keeps what is left
                 heartbeat     a loop, and a word every 0.1 s
  flip, drop     bits (least significant first) and bytes of the data that are turned over, lost
  close_after    closes after so many bytes of data; with `away_s` it comes back after so long
  commands       {line: answer}: it begins in command mode; an answer CONNECT or OK to the last one begins data
  answer_after_s every answer comes so much later
  leave          words in the data that end data mode, answered with OK
  log            file of every command that was heard
"""

from __future__ import annotations

import json
import os
import select
import socket
import sys
import threading
import time
import tty
from collections import deque
from contextlib import suppress

REVERSED = bytes(int(f"{byte:08b}"[::-1], 2) for byte in range(256))


def register(stages: tuple[int, int], inverted: bool):
    """Bytes of a register pattern, least significant bit first."""
    state = [1] * stages[1]
    out = list(state)
    while True:
        while len(out) < 8:
            bit = state[-stages[0]] ^ state[-stages[1]]
            state = [*state[1:], bit]
            out.append(bit)
        yield sum((bit ^ inverted) << place for place, bit in enumerate(out[:8]))
        del out[:8]


class Modem:
    """What comes back for what came in; knows nothing of ports."""

    def __init__(self, options: dict) -> None:
        self.options = options
        self.path = options.get("path", "loop")
        self.delay_s = options.get("delay_s", 0.0)
        self.commands = dict(options.get("commands", {}))
        self.in_data = not self.commands
        self.line = bytearray()
        self.tail = b""
        self.seen = 0
        self.busy_until = 0.0
        self.kept = b""
        self.own = register((5, 9), False)
        self.same = register((14, 15), True)
        self.begun = time.monotonic()

    def hear(self, data: bytes) -> list[tuple[float, bytes]]:
        """Give what is to be sent: (seconds from now, bytes)."""
        if not self.in_data:
            return self.obey(data)
        leave = self.options.get("leave", "").encode()
        if leave and leave in (joined := self.tail + data):
            data = data[: max(0, joined.index(leave) - len(self.tail))]
            self.in_data = False
            self.commands = {"never": ""}
            self.note(leave.decode())
            return [*self.treat(data), (0.0, b"\r\nOK\r\n")]
        self.tail = (self.tail + data)[-len(leave) :] if leave else b""
        return self.treat(data)

    def obey(self, data: bytes) -> list[tuple[float, bytes]]:
        self.line += data
        answers = []
        while (end := self.line.find(b"\r")) >= 0:
            command = self.line[:end].decode("latin-1").strip()
            del self.line[: end + 1]
            self.note(command)
            answer = self.commands.get(command, "ERROR")
            if answer:
                answers.append((self.options.get("answer_after_s", 0.0), f"\r\n{answer}\r\n".encode()))
            if (
                command in self.commands
                and command == list(self.commands)[-1]
                and answer in ("OK", "CONNECT")
            ):
                self.in_data = True
        return answers

    def note(self, words: str) -> None:
        if "log" in self.options:
            with open(self.options["log"], "a") as log:
                log.write(words + "\n")

    def treat(self, data: bytes) -> list[tuple[float, bytes]]:
        first, self.seen = self.seen, self.seen + len(data)
        late = self.delay_s
        if self.path in ("silent", "stuck", "generator"):
            return []
        if self.path == "local-echo":
            return [(0.0, data), (late, data)]
        if self.path == "text-echo":
            return [(0.0, b"".join(self.as_text(byte) for byte in data))]
        if self.path == "seven-bits":
            return [(late, bytes(byte & 0x7F for byte in data))]
        if self.path == "reversed":
            return [(late, data.translate(REVERSED))]
        if self.path == "inverted":
            return [(late, bytes(byte ^ 0xFF for byte in data))]
        if self.path == "own-pattern":
            return [(late, bytes(next(self.own) for _ in data))]
        if self.path == "anew":
            return [(late, bytes(next(self.same) for _ in data))]
        if self.path == "blocks":
            self.kept += data
            whole = len(self.kept) // 64 * 64
            data, self.kept = self.kept[:whole], self.kept[whole:]
        if self.path == "small-buffer":
            now = time.monotonic()
            if now < self.busy_until:
                return []
            data = data[:600]
            self.busy_until = now + 0.05
        out = bytearray(data)
        for bit in self.options.get("flip", ()):
            if first <= bit // 8 < first + len(out):
                out[bit // 8 - first] ^= 1 << bit % 8
        for byte in sorted(self.options.get("drop", ()), reverse=True):
            if first <= byte < first + len(out):
                del out[byte - first]
        return [(late, bytes(out))]

    @staticmethod
    def as_text(byte: int) -> bytes:
        if byte == 13:
            return b"\r\n"
        if byte < 32 or byte == 127:
            return bytes([ord("^"), byte ^ 64])
        return bytes([byte])

    def by_itself(self) -> bytes:
        """What it sends unasked, every 20 ms."""
        if self.path == "generator":
            return bytes(next(self.own) for _ in range(96))
        if self.path == "heartbeat" and time.monotonic() - self.begun > 0.1:
            self.begun = time.monotonic()
            return b"WADER-9 READY\r\n"
        return b""

    @property
    def closing(self) -> bool:
        after = self.options.get("close_after")
        return after is not None and self.seen >= after


class Mouth(threading.Thread):
    """Sends what is due, in order."""

    def __init__(self, write, modem: Modem) -> None:
        super().__init__(daemon=True)
        self.write, self.modem = write, modem
        self.waiting: deque[tuple[float, bytes]] = deque()
        self.changed = threading.Condition()
        self.over = False
        self.start()

    def say(self, pieces: list[tuple[float, bytes]]) -> None:
        now = time.monotonic()
        with self.changed:
            self.waiting.extend((now + late, data) for late, data in pieces if data)
            self.waiting = deque(sorted(self.waiting, key=lambda piece: piece[0]))
            self.changed.notify()

    def run(self) -> None:
        unasked = self.modem.path in ("generator", "heartbeat")
        while True:
            with self.changed:
                wait_s = 0.02 if unasked else None
                if self.waiting:
                    wait_s = max(0.0, self.waiting[0][0] - time.monotonic())
                if not self.over and (not self.waiting or wait_s):
                    self.changed.wait(wait_s)
                if self.over and not self.waiting:
                    return
                due = []
                while self.waiting and (self.over or self.waiting[0][0] <= time.monotonic()):
                    due.append(self.waiting.popleft()[1])
            due.append(self.modem.by_itself())
            try:
                if any(due):
                    self.write(b"".join(due))
            except OSError:
                return

    def end(self) -> None:
        """Send what is left, at once, and end."""
        with self.changed:
            self.over = True
            self.changed.notify()
        self.join(10)


def converse(read, write, modem: Modem) -> None:
    """Serve until the other side is gone, or the modem closes."""
    if modem.path == "stuck" and modem.in_data:
        threading.Event().wait()
    mouth = Mouth(write, modem)
    while not modem.closing:
        data = read()
        if not data:
            break
        mouth.say(modem.hear(data))
    mouth.end()


def over_pty(options: dict) -> None:
    announced = False
    while True:
        master, slave = os.openpty()
        tty.setraw(master)
        tty.setraw(slave)
        name = os.ttyname(slave)
        if "name" in options:
            with suppress(FileNotFoundError):
                os.unlink(options["name"])
            os.symlink(name, options["name"])
        if not announced:
            print(options.get("name", name), flush=True)
            announced = True

        def write(data: bytes, master: int = master) -> None:
            while data:
                data = data[os.write(master, data) :]

        converse(lambda master=master: os.read(master, 4096), write, Modem(options))
        # The system throws away what a closed pseudo-terminal still holds: wait until it has been read.
        while select.select([slave], [], [], 0)[0]:
            time.sleep(0.01)
        if "name" in options:
            os.unlink(options["name"])
        os.close(master)
        os.close(slave)
        if "away_s" not in options:
            return
        time.sleep(options["away_s"])
        options = {key: value for key, value in options.items() if key != "close_after"}


def over_sockets(options: dict) -> None:
    door = socket.create_server(("127.0.0.1", 0))
    print(door.getsockname()[1], flush=True)
    while True:
        connection, _ = door.accept()
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        threading.Thread(target=over_connection, args=(connection, options), daemon=True).start()


def over_connection(connection: socket.socket, options: dict) -> None:
    with connection, suppress(OSError):
        if options["over"] == "socket":
            converse(lambda: connection.recv(65536), connection.sendall, Modem(options))
            return
        import serial
        from serial.rfc2217 import PortManager

        lock = threading.Lock()

        class Telnet:
            def write(self, data: bytes) -> None:
                with lock:
                    connection.sendall(data)

        manager = PortManager(serial.serial_for_url("loop://", timeout=0.05), Telnet())

        def read() -> bytes:
            while data := connection.recv(65536):
                if payload := b"".join(manager.filter(data)):
                    return payload
            return b""

        converse(read, lambda data: Telnet().write(b"".join(manager.escape(data))), Modem(options))


if __name__ == "__main__":
    chosen = {"over": "pty", **json.loads(sys.argv[1] if len(sys.argv) > 1 else "{}")}
    over_pty(chosen) if chosen["over"] == "pty" else over_sockets(chosen)
