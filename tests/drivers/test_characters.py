"""Payload in characters of 5 to 7 bits: every bit arrives, in order, and a dialogue stays readable."""

from __future__ import annotations

import os
import random
import threading
import tty
from collections.abc import Iterator

import pytest

from drivers.contract import Link
from drivers.dialogue import Step, run_dialogue
from drivers.links.characters import Regrouper
from drivers.links.serial import SerialLink, SerialSection


def bits_of(groups: bytes, width: int) -> list[int]:
    """One bit at a time, least significant first: slow and plain."""
    return [group >> place & 1 for group in groups for place in range(width)]


@pytest.mark.parametrize("width", [5, 6, 7, 8])
def test_regrouping_keeps_the_bits_in_order_whatever_the_pieces(width: int) -> None:
    rng = random.Random(width)
    data = rng.randbytes(1001)
    there, back = Regrouper(8, width), Regrouper(width, 8)
    characters, payload, place = b"", b"", 0
    while place < len(data):
        size = rng.choice((0, 1, 2, 7, 50))
        characters += there.regroup(data[place : place + size])
        place += size
    assert bits_of(characters, width) == bits_of(data, 8)[: len(characters) * width]
    assert len(characters) == 8 * len(data) // width
    assert there.waiting_bits == 8 * len(data) % width
    for character in characters:
        payload += back.regroup(
            bytes([character | 0x80 if width < 8 else character])
        )  # a stray high bit is no bit
    assert payload == data[: len(payload)]
    assert len(payload) == len(characters) * width // 8


@pytest.fixture
def terminal() -> Iterator[tuple[int, str]]:
    master, slave = os.openpty()
    tty.setraw(master)
    yield master, os.ttyname(slave)
    os.close(master)
    os.close(slave)


def receive(link: Link, count: int, size: int) -> bytes:
    got, room = bytearray(), bytearray(size)
    while len(got) < count and (arrived := link.receive(memoryview(room), 10.0)):
        got += room[:arrived]
    return bytes(got)


@pytest.mark.parametrize("size", [1, 100])
@pytest.mark.parametrize("width", [5, 7])
def test_a_stream_goes_through_short_characters_bit_by_bit(
    terminal: tuple[int, str], width: int, size: int
) -> None:
    master, port = terminal
    data = random.Random(31).randbytes(35 * 40)  # whole characters of 5 and of 7 bits
    seen = bytearray()

    def echo() -> None:
        while len(seen) < 8 * len(data) // width:
            got = os.read(master, 100)
            seen.extend(got)
            os.write(master, got)

    with SerialLink(SerialSection(port=port, data_bits=width)) as link:
        assert not link.traits.whole_bytes
        device = threading.Thread(target=echo, daemon=True)
        device.start()
        left = memoryview(data)
        got = b""
        while len(left):
            count = link.send(left[:size], 10.0)
            left = left[count:]
            got += receive(link, (len(data) - len(left)) * 8 // width * width // 8 - len(got), size)
        assert link.drain(10.0)
        device.join(10)
    assert got == data
    assert max(seen) < 1 << width
    assert bits_of(bytes(seen), width) == bits_of(data, 8)


def test_a_dialogue_over_short_characters_is_spoken_in_characters(terminal: tuple[int, str]) -> None:
    master, port = terminal
    heard = []

    def modem() -> None:
        heard.append(os.read(master, 100))
        os.write(master, b"\r\nOK\r\n")

    with SerialLink(SerialSection(port=port, data_bits=7, parity="even")) as link:
        device = threading.Thread(target=modem, daemon=True)
        device.start()
        run_dialogue(link, [Step(send="AT+DATA=1\r", expect="OK", timeout_s=20)], threading.Event())
        device.join(10)
        assert heard == [b"AT+DATA=1\r"]
        link.send(memoryview(b"\xff" * 7), 1.0)
        assert os.read(master, 100) == b"\x7f" * 8
