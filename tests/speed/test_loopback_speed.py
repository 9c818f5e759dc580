"""What the loopback costs: bytes through it between two threads, against `numpy.copyto` of as many."""

from __future__ import annotations

import threading
import time
from contextlib import suppress

import numpy as np
import pytest

from drivers.contract import EndOfStream
from drivers.links.loopback import LoopbackLink, LoopbackSection

BUFFER_BYTES = 1 << 20
CHANNELS: list[dict[str, object]] = [
    {},
    {"model": "independent", "ber": 1e-6, "seed": 7},
    {"model": "independent", "ber": 1e-3, "seed": 7},
    {"model": "byte_loss", "every_bytes": 125_000},
    {"model": "slip", "bits": -1, "every_bits": 1_000_000},
    {"model": "burst", "burst_bits": 5, "gap_bits": 1e5},
]


def through(channel: dict[str, object], total: int) -> float:
    keys = {"channel": [channel]} if channel else {}
    sent, back = np.zeros(BUFFER_BYTES, dtype=np.uint8), np.empty(BUFFER_BYTES, dtype=np.uint8)

    def send_all() -> None:
        left = total
        while left:
            left -= link.send(memoryview(sent[: min(left, BUFFER_BYTES)]), 1.0)
        link.finish_sending()

    with LoopbackLink(LoopbackSection.model_validate(keys)) as link:
        sender = threading.Thread(target=send_all)
        start = time.perf_counter()
        sender.start()
        got = 0
        with suppress(EndOfStream):
            while True:
                got += link.receive(memoryview(back), 1.0)
        seconds = time.perf_counter() - start
        sender.join()
    return got / seconds


def test_the_loopback_against_copying(capsys: pytest.CaptureFixture[str]) -> None:
    one, other = np.zeros(64 << 20, dtype=np.uint8), np.zeros(64 << 20, dtype=np.uint8)
    start = time.perf_counter()
    for _ in range(8):
        np.copyto(other, one)
    yardstick = 8 * len(one) / (time.perf_counter() - start)
    for channel in CHANNELS:
        rate = through(channel, 256 << 20 if channel.get("model") in (None, "independent") else 32 << 20)
        with capsys.disabled():
            print(f"\nloopback {channel or 'bare'}: {rate / 1e9:.2f} GB/s, {rate / yardstick:.3f} of copyto")
