"""The serial link over pseudo-terminals and pyserial's URLs, with a separate process as device."""

from __future__ import annotations

import errno
import os
import random
import struct
import subprocess
import sys
import threading
import time
import tty
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from drivers.contract import LinkLost, OpenFailed
from drivers.links import line_counts, port_faults
from drivers.links.line_counts import LineCounts, modem_lines, port_counts
from drivers.links.serial import SerialLink, SerialSection

Start = Callable[..., str]


def serial(port: str, **keys: Any) -> SerialLink:
    return SerialLink(SerialSection(port=port, **keys))


def failure(link: SerialLink) -> OpenFailed:
    with pytest.raises(OpenFailed) as caught:
        link.open()
    assert caught.value.advice
    assert "\n" not in caught.value.what + caught.value.advice
    return caught.value


def receive(link: SerialLink, count: int) -> bytes:
    got, room = bytearray(), bytearray(1000)
    while len(got) < count and (arrived := link.receive(memoryview(room), 10.0)):
        got += room[:arrived]
    return bytes(got)


def receive_on(link: SerialLink) -> None:
    while link.receive(memoryview(bytearray(1000)), 20.0):
        pass


def send_all(link: SerialLink, data: bytes) -> None:
    left = memoryview(data)
    while len(left):
        left = left[link.send(left, 5.0) :]


class Pair:
    """A pseudo-terminal whose other end the test holds."""

    def __init__(self) -> None:
        self.master, self._slave = os.openpty()
        tty.setraw(self.master)
        self.port = os.ttyname(self._slave)
        self.plugged = True

    def unplug(self) -> None:
        if self.plugged:
            self.plugged = False
            os.close(self.master)
            os.close(self._slave)


@pytest.fixture
def pair() -> Iterator[Pair]:
    made = Pair()
    yield made
    made.unplug()


FLIPS = (0, 777, 79_999)
DROPS = (1000, 5000, 5001)


def mangled(data: bytes) -> bytes:
    out = bytearray(data)
    for bit in FLIPS:
        out[bit // 8] ^= 1 << bit % 8
    for byte in reversed(DROPS):
        del out[byte]
    return bytes(out)


@pytest.mark.parametrize("kind", ["pty", "socket://", "rfc2217://"])
def test_known_bits_flipped_known_bytes_lost_and_then_the_device_is_gone(kind: str, device: Start) -> None:
    data = random.Random(21).randbytes(10_000)
    faults = ("--flip", *FLIPS, "--drop", *DROPS, "--close-after", len(data))
    if kind == "pty":
        port = device("pty", *faults)
    else:
        port = f"{kind}127.0.0.1:{device('tcp' if kind == 'socket://' else 'rfc2217', *faults)}"
    expected = mangled(data)
    with serial(port) as link:
        sender = threading.Thread(target=send_all, args=(link, data))
        sender.start()
        assert receive(link, len(expected)) == expected
        sender.join()
        with pytest.raises(LinkLost) as caught:
            receive_on(link)
    assert port in caught.value.what
    assert caught.value.advice


def test_an_unplugged_port_is_called_gone_by_receiver_and_sender(pair: Pair) -> None:
    port = pair.port
    with serial(port) as link:
        pair.unplug()  # the name of a pseudo-terminal goes with its master, as an adapter's does
        with pytest.raises(LinkLost) as caught:
            receive_on(link)
        assert "hung up" in caught.value.what or "has gone" in caught.value.what
        with pytest.raises(LinkLost):
            send_all(link, b"x")
        link.park()
        link.health()


def test_the_name_that_vanished_tells_unplugged_from_hung_up(tmp_path: Path) -> None:
    vanished = port_faults.gone(str(tmp_path / "ttyUSB0"), OSError(errno.EIO, "x"))
    assert "has gone: the adapter was unplugged" in vanished.what
    there = tmp_path / "ttyUSB1"
    there.touch()
    assert "was hung up" in port_faults.gone(str(there), None).what
    assert "no space left" in port_faults.gone(str(there), OSError(errno.ENOSPC, "x")).what


def test_a_second_reader_of_the_port_is_found_out(pair: Pair) -> None:
    master, port = pair.master, pair.port
    thief = subprocess.Popen(
        [
            sys.executable,
            "-c",
            f"""
import os
fd = os.open({port!r}, os.O_RDWR | os.O_NOCTTY)
print(flush=True)
while True:
    os.read(fd, 5)
""",
        ],
        stdout=subprocess.PIPE,
    )
    done = threading.Event()

    def feed() -> None:
        while not done.is_set():
            os.write(master, b"telemetry!")
            time.sleep(0.001)

    feeder = threading.Thread(target=feed)
    try:
        assert thief.stdout is not None
        thief.stdout.readline()
        feeder.start()
        with serial(port, exclusive=False) as link, pytest.raises(LinkLost) as caught:
            receive_on(link)
    finally:
        done.set()
        feeder.join()
        thief.kill()
        thief.communicate()
    assert f"another program reads from {port}" in caught.value.what


def test_a_port_that_is_open_elsewhere_is_busy_until_it_is_closed(pair: Pair) -> None:
    port = pair.port
    with serial(port):
        assert failure(serial(port)).what == f"{port} is in use by another program"
    with serial(port):
        pass


def test_another_program_that_holds_a_device_is_named(pair: Pair) -> None:
    port = pair.port
    fd = os.open(port, os.O_RDWR | os.O_NOCTTY)
    try:
        assert port_faults.holder_of(fd) is None
        code = (
            f"import os, time; os.open({port!r}, os.O_RDWR | os.O_NOCTTY); print(flush=True); time.sleep(60)"
        )
        holder = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE)
        assert holder.stdout is not None
        holder.stdout.readline()
        try:
            assert str(port_faults.holder_of(fd)).endswith(f"(process {holder.pid})")
        finally:
            holder.kill()
            holder.communicate()
    finally:
        os.close(fd)


def test_flow_control_that_holds_hangs_nothing(pair: Pair) -> None:
    master, port = pair.master, pair.port
    with serial(port, flow="xonxoff") as link:
        assert not link.traits.transparent
        os.write(master, b"\x13")  # XOFF
        time.sleep(0.05)
        taken = 0
        while count := link.send(memoryview(bytes(4096)), 0.1):
            taken += count
            assert taken < 1 << 20
        os.set_blocking(master, False)
        with pytest.raises(BlockingIOError):
            os.read(master, 10)
        os.write(master, b"\x11")  # XON
        time.sleep(0.05)
        assert link.send(memoryview(b"on we go"), 10.0) == 8
        os.write(master, b"\x13")
        while link.send(memoryview(bytes(4096)), 0.1):
            pass
    # and closing did not wait either


def test_line_settings_left_by_the_last_program_lose_no_byte(pair: Pair) -> None:
    master, port = pair.master, pair.port
    subprocess.run(
        ["stty", "-F", port, "sane", "ignpar", "brkint", "parmrk", "istrip", "inlcr", "igncr"], check=True
    )
    with serial(port) as link:
        os.write(master, bytes(range(256)))
        assert receive(link, 256) == bytes(range(256))
        send_all(link, bytes(range(256)))
        assert os.read(master, 1000) == bytes(range(256))
        # What a pseudo-terminal cannot show: a break would flush, a byte with a framing error would vanish.
        told = subprocess.run(["stty", "-F", port, "-a"], check=True, capture_output=True, text=True).stdout
        assert {"-ignpar", "-brkint", "-parmrk", "-istrip", "-inpck"} <= set(told.replace(";", " ").split())


@pytest.mark.parametrize(
    ("keys", "rate_bps"),
    [
        ({"baud": 115_200}, 92_160),
        ({"baud": 9600, "parity": "even"}, 9600 * 8 / 11),
        ({"baud": 9600, "stop_bits": 2}, 9600 * 8 / 11),
        ({"baud": 300, "stop_bits": 1.5}, 300 * 8 / 10.5),
        ({"baud": 9600, "data_bits": 7, "parity": "odd"}, 9600 * 7 / 10),
    ],
)
def test_the_payload_rate_follows_from_the_framing(keys: dict[str, Any], rate_bps: float) -> None:
    section = SerialSection(port="/dev/ttyUSB0", **keys)
    assert SerialLink(section).rate_bps == pytest.approx(rate_bps, rel=1e-12)
    assert SerialLink(section, 100.0).rate_bps == 100.0
    assert SerialLink(section, 1e9).rate_bps == pytest.approx(rate_bps, rel=1e-12)
    assert SerialLink(SerialSection(port="socket://localhost:1", **keys)).rate_bps is None


def test_the_framing_reaches_the_port(pair: Pair) -> None:
    port = pair.port
    keys = {"baud": 19_200, "data_bits": 8, "parity": "odd", "stop_bits": 2}
    with serial(port, **keys) as link:
        told = subprocess.run(["stty", "-F", port, "-a"], check=True, capture_output=True, text=True).stdout
        assert link.describe()["framing"] == "19200 baud 8O2"
        assert link.describe()["flow"] == "none"
    words = told.replace(";", " ").split()
    assert {"19200", "cs8", "parodd", "cstopb", "-crtscts", "hupcl", "-ixon", "-icanon", "-opost"} <= set(
        words
    )


def test_lines_follow_the_profile_before_opening_and_when_parked() -> None:
    # pyserial's loop connects RTS with CTS and DTR with DSR.
    with serial("loop://") as link:
        assert (link.lines()["CTS"], link.lines()["DSR"]) == (False, False)
    with serial("loop://", rts=True, dtr=True) as link:
        assert (link.lines()["CTS"], link.lines()["DSR"]) == (True, True)
        assert link.health() == {"cts_changes": 0, "dcd_changes": 0}
        link.park()
        link.park()
        assert (link.lines()["CTS"], link.lines()["DSR"]) == (False, False)
        assert link.health() == {"cts_changes": 1, "dcd_changes": 0}
        assert link.health() == {"cts_changes": 1, "dcd_changes": 0}
    with serial("loop://", rts=True, dtr=True, park_dtr=True) as link:
        link.park()
        assert (link.lines()["CTS"], link.lines()["DSR"]) == (False, True)
    assert link.health() == {}


def test_a_pseudo_terminal_has_neither_lines_nor_counts_and_that_is_no_fault(pair: Pair) -> None:
    port = pair.port
    with serial(port, rts=True, dtr=True) as link:
        assert link.lines() == {}
        assert link.health() == {}
        link.park()


def test_counts_are_read_as_the_kernel_lays_them_out(monkeypatch: pytest.MonkeyPatch) -> None:
    # struct serial_icounter_struct, linux/serial.h: cts, dsr, rng, dcd, rx, tx, frame, overrun, parity, brk,
    # buf_overrun, then nine reserved ints.
    answers = [range(10, 30), range(20, 40)]

    def answer(fd: int, request: int, room: bytearray) -> int:
        assert request == 0x545D
        struct.pack_into("20i", room, 0, *answers.pop(0))
        return 0

    monkeypatch.setattr("fcntl.ioctl", answer)
    assert port_counts(0) == {
        "cts_changes": 10,
        "dsr_changes": 11,
        "ring_changes": 12,
        "dcd_changes": 13,
        "received": 14,
        "sent": 15,
        "framing": 16,
        "overrun": 17,
        "parity": 18,
        "break": 19,
        "buffer_overrun": 20,
    }


def test_counts_are_those_since_opening_and_bear_the_kernels_wrapping(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    names = ("framing", "parity", "overrun", "break", "buffer_overrun", "cts_changes", "dcd_changes")
    answers = [dict.fromkeys(names, 2**31 - 1), dict.fromkeys(names, -(2**31) + 4) | {"parity": 2**31 - 1}]
    monkeypatch.setattr(line_counts, "port_counts", lambda fd: answers.pop(0))
    counts = LineCounts(3, {}).look({})
    assert counts == dict.fromkeys(names, 5) | {"parity": 0}


def test_lines_that_a_remote_port_tells_late_are_counted_from_then_on() -> None:
    counts = LineCounts(None, {})
    assert counts.look({}) == {}
    assert counts.look({"CTS": True, "DCD": False}) == {"cts_changes": 0, "dcd_changes": 0}
    assert counts.look({"CTS": False, "DCD": False}) == {"cts_changes": 1, "dcd_changes": 0}
    assert counts.look({}) == {"cts_changes": 1, "dcd_changes": 0}
    assert counts.look({"CTS": False, "DCD": True}) == {"cts_changes": 1, "dcd_changes": 1}


def test_lines_that_cannot_be_asked_for_are_none() -> None:
    class Mute:
        @property
        def cts(self) -> bool:
            raise OSError(errno.ENOTTY, "no lines")

    assert modem_lines(Mute()) == {}


def test_what_is_no_port_is_named_with_what_to_do(tmp_path: Path) -> None:
    error = failure(serial("/dev/ttyWADER9"))
    assert error.what == "there is no port /dev/ttyWADER9"
    assert "there are: " in error.advice or "no serial port" in error.advice
    plain = tmp_path / "notes.txt"
    plain.touch()
    assert failure(serial(str(plain))).what == f"{plain} is no serial port"
    assert "socket://HOST:PORT" in failure(serial("socket://127.0.0.1:99999")).advice
    assert failure(serial("COM3")).what == "there is no port COM3"


def test_what_is_wrong_with_an_url_is_said(device: Start) -> None:
    assert failure(serial("socket://127.0.0.1:1")).what == "socket://127.0.0.1:1 refused the connection"
    assert failure(serial("rfc2217://127.0.0.1:1")).what == "rfc2217://127.0.0.1:1 refused the connection"
    assert "no kind of port gopher://" in failure(serial("gopher://x")).what
    assert "hwgrep://wader-9" in failure(serial("hwgrep://wader-9")).what
    assert "no complete address" in failure(serial("socket://127.0.0.1")).what
    raw = f"rfc2217://127.0.0.1:{device('tcp', '--mute')}?timeout=0.3"
    assert "not as an RFC 2217 server" in failure(serial(raw)).what


def test_no_permission_names_the_group_that_has_it(tmp_path: Path) -> None:
    port = tmp_path / "ttyUSB0"
    port.touch()
    error = port_faults.failed_to_open(str(port), OSError(errno.EACCES, "x"))
    assert error.what == f"no permission to use {port}"
    assert error.advice


def test_a_baud_rate_that_the_port_does_not_take_says_so() -> None:
    error = port_faults.failed_to_open(
        "/dev/ttyUSB0", ValueError("Failed to set custom baud rate (12345): x")
    )
    assert "does not take these settings" in error.what
    assert "`baud`" in error.advice


@pytest.mark.parametrize(
    "keys",
    [{"data_bits": 9}, {"stop_bits": 3}, {"parity": "both"}, {"flow": "dtr"}, {"baud": 0}, {"port": ""}],
)
def test_keys_out_of_range_are_refused(keys: dict[str, Any]) -> None:
    with pytest.raises(ValidationError):
        SerialSection(**{"port": "/dev/ttyUSB0", **keys})
