"""How long acquisition takes and how often it succeeds, for every pattern, and identification among all of them.

Run as `python tests/speed/acquisition.py [TRIALS]`; the yardstick is one real FFT of 32 768 points in this
run, and times are processor time of this thread, so that other work on the machine disturbs less.
"""

from __future__ import annotations

import sys
import time

import numpy as np

from harness.signal.acquire import Acquirer
from harness.signal.identify import identify
from harness.signal.patterns import known_patterns, parse_pattern

SETTINGS = [(8192, 0.3), (512, 0.0), (2048, 0.2), (8192, 0.5)]  # bits of a stretch, BER


def yardstick() -> float:
    """Seconds of one FFT, best of many."""
    values = np.random.default_rng(0).normal(size=32_768)
    times = []
    for _ in range(50):
        began = time.thread_time()
        np.fft.rfft(values)
        times.append(time.thread_time() - began)
    return min(times)


def acquisition(name: str, trials: int, unit: float) -> None:
    pattern = parse_pattern(name)
    rng = np.random.default_rng(1)
    began = time.thread_time()
    acquirer = Acquirer(pattern)
    acquirer.search(pattern.bits(5, 4096))
    first = time.thread_time() - began
    line = ""
    for count, ber in SETTINGS:
        found = 0
        times = []
        for _ in range(trials):
            place = int(rng.integers(pattern.period or 10**5))
            errors = (rng.random(count) < ber).astype(np.uint8)
            stream = pattern.bits(place, count) ^ errors ^ np.uint8(rng.integers(2))
            began = time.thread_time()
            found += acquirer.search(stream) is not None
            times.append(time.thread_time() - began)
        middle, longest = np.median(times), max(times)
        line += f" | {found:5d} {1e3 * middle:6.2f} ms ({middle / unit:5.1f}) {1e3 * longest:6.2f}"
    print(f"{name:18s} {1e3 * first:6.1f} ms{line}", flush=True)


def identification(unit: float) -> None:
    rng = np.random.default_rng(2)
    times = []
    for row in known_patterns():
        for suffix in ("", "-reversed"):
            sent = parse_pattern(row.name + suffix).packed(12_345, 1024, "lsb")
            received = sent ^ np.packbits(rng.random(8 * len(sent)) < 0.2)
            began = time.thread_time()
            found = identify(received, order="lsb")
            times.append(time.thread_time() - began)
            assert row.name + suffix in (found.pattern, *found.alternatives)
    middle = float(np.median(times))
    print(
        f"identify, one bit order, 8192 bits at BER 0.2: {1e3 * middle:.0f} ms ({middle / unit:.0f}), "
        f"longest {1e3 * max(times):.0f} ms"
    )


if __name__ == "__main__":
    number = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    unit = yardstick()
    print(f"yardstick {1e3 * unit:.2f} ms; of {number} trials: found, median (in yardsticks), longest in ms")
    print(
        "pattern            first search"
        + "".join(f" | {count} bits, BER {ber:g}" for count, ber in SETTINGS)
    )
    for known in known_patterns():
        for end in ("", "-reversed"):
            acquisition(known.name + end, number, unit)
    for other in ("word:1010", "word:0xA5", "word:0x123456789ABCDEF", "bernoulli:0.4"):
        acquisition(other, number, unit)
    identification(unit)
