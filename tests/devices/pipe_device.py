"""A device for tests as a program of its own: gives standard input back on standard output, with its own ways.

Options are one JSON object on the command line:
  keep         bytes that it keeps back until its input ends; -1: all of them
  linger_s     the last byte of what it was given comes so much later
  invent       [before, value]: before so many bytes a byte of this value is made up, again and again: a list
  lose         bytes that are swallowed, by number
  twice        [n, m]: once n bytes have come, the last m of them are given out again
  append       once so many bytes have come, [n, hexadecimal] is given out too
  farewell     written when the input ends
  dies         exit status with which it ends then, with what it kept
"""

from __future__ import annotations

import json
import os
import select
import sys
import time


class Device:
    def __init__(self, options: dict) -> None:
        self.options = options
        self.seen = 0
        self.kept = bytearray()
        self.last = bytearray()

    def treat(self, data: bytes) -> bytes:
        o, out = self.options, bytearray()
        invented = dict(o.get("invent", ()))
        lost = set(o.get("lose", ()))
        end, more = o.get("append", (-1, ""))
        for byte in data:
            if self.seen in invented:
                out.append(invented[self.seen])
            if self.seen not in lost:
                out.append(byte)
            self.seen += 1
            if "twice" in o and self.seen <= o["twice"][0]:
                self.last.append(byte)
                if self.seen == o["twice"][0]:
                    out += self.last[-o["twice"][1] :]
            if self.seen == end:
                out += bytes.fromhex(more)
        return bytes(out)

    def give(self, data: bytes) -> None:
        keep = self.options.get("keep", 0)
        self.kept += data
        free = 0 if keep < 0 else max(0, len(self.kept) - keep)
        write(bytes(self.kept[:free]))
        del self.kept[:free]


def write(data: bytes) -> None:
    while data:
        data = data[os.write(1, data) :]


def main(options: dict) -> None:
    device, linger_s = Device(options), options.get("linger_s")
    late = b""
    while True:
        if late and not select.select([0], [], [], linger_s)[0]:
            device.give(late)
            late = b""
            continue
        data = os.read(0, 65536)
        if not data:
            break
        data = late + device.treat(data)
        late = data[-1:] if linger_s else b""
        device.give(data[: len(data) - len(late)])
    if "dies" in options:
        sys.exit(options["dies"])
    write(bytes(device.kept) + late + options.get("farewell", "").encode())
    time.sleep(options.get("linger_s") or 0)


if __name__ == "__main__":
    main(json.loads(sys.argv[1]))
