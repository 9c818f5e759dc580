"""Expected pattern, compare and count from memory, against `numpy.copyto` of the same 64 MiB and others' tools.

Run as `python tests/speed/generation.py [PATTERN ...]`; prints ratios of rates (1 is as fast as copying).
Every figure is the best of several rounds in which the yardstick and the work take turns, in processor time of
this thread, so that other work on the machine disturbs less.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from harness.signal.patterns import ROW_BYTES, Pattern, known_patterns, parse_pattern

SIZE = 64 << 20
SLAB = 1024 << 10
ROUNDS = 7
BERS = (0.0, 1e-6, 1e-2)
START = 77  # an odd place, so that nothing is aligned by luck


def best(
    yardstick: Callable[[], object], work: Callable[[], object], rounds: int = ROUNDS
) -> tuple[float, float]:
    """Least seconds of each, taken in turn."""
    times = [float("inf"), float("inf")]
    for _ in range(rounds):
        for i, task in enumerate((yardstick, work)):
            began = time.thread_time()
            task()
            times[i] = min(times[i], time.thread_time() - began)
    return times[0], times[1]


def with_errors(clean: NDArray[np.uint8], ber: float) -> tuple[NDArray[np.uint8], int]:
    """A copy in which a share of the bits is wrong, and how many are."""
    data = clean.copy()
    if ber == 0:
        return data, 0
    rng = np.random.default_rng(1)
    gaps = rng.geometric(ber, int(8 * len(data) * ber * 1.1) + 100)
    at = np.cumsum(gaps) - 1
    at = at[at < 8 * len(data)]
    np.bitwise_xor.at(data, at >> 3, np.uint8(1) << (at & 7).astype(np.uint8))
    return data, len(at)


def count_errors(pattern: Pattern, data: NDArray[np.uint8], scratch: NDArray[np.uint8]) -> int:
    """The plain way to count: slab by slab, and ONEs only in rows where something differs."""
    reader = pattern.reader(START, "lsb")
    words = scratch.view(np.uint64).reshape(-1, ROW_BYTES // 8)
    errors = 0
    for start in range(0, len(data), SLAB):
        touched = reader.compare(data[start : start + SLAB], scratch)
        if len(touched):
            errors += int(np.bitwise_count(words[touched]).sum())
    return errors


def against_copying(names: list[str]) -> None:
    print(f"{'pattern':28s} {'copy':>9s}" + "".join(f"  BER {ber:<6g}" for ber in BERS) + "   new reader")
    scratch, target = np.zeros(SLAB, np.uint8), np.zeros(SIZE, np.uint8)
    for name in names:
        pattern = parse_pattern(name)
        clean = pattern.packed(START, SIZE, "lsb")
        line = ""
        for ber in BERS:
            data, errors = with_errors(clean, ber)
            counted = count_errors(pattern, data, scratch)
            assert counted == errors, (name, ber, counted, errors)
            copying, counting = best(
                lambda data=data: np.copyto(target, data),  # type: ignore[misc]
                lambda data=data, pattern=pattern: count_errors(pattern, data, scratch),  # type: ignore[misc]
            )
            line += f"  {copying / counting:10.2f}"
        rate = SIZE / copying / 1e9
        began = time.perf_counter()
        for place in range(200):
            pattern.reader(10_007 * place, "lsb")
        made = (time.perf_counter() - began) / 200
        print(f"{name:28s} {rate:6.1f} GB/s{line}   {1e6 * made:6.1f} µs", flush=True)


def against_max_len_seq(megabytes: int = 2) -> None:
    """PRBS31 with one error in a million bits, against `scipy.signal.max_len_seq` and an unpacked compare."""
    from scipy.signal import max_len_seq

    pattern = parse_pattern("PRBS31")
    count = 8 * (megabytes << 20)
    data, errors = with_errors(pattern.packed(START, 64 << 20, "lsb"), 1e-6)
    received = np.unpackbits(data[: megabytes << 20], bitorder="little")
    state = np.ones(31, dtype=np.int8)

    def theirs() -> int:
        expected, _ = max_len_seq(31, state=state, length=count, taps=[28])
        return int(np.count_nonzero(expected.astype(np.uint8) != received))

    scratch = np.zeros(SLAB, np.uint8)
    slow, quick = best(theirs, lambda: count_errors(pattern, data, scratch), rounds=3)
    ratio = (len(data) / quick) / ((megabytes << 20) / slow)
    print(
        f"PRBS31 at BER 1e-6 ({errors} errors) against max_len_seq with an unpacked compare: {ratio:.0f} times"
    )


if __name__ == "__main__":
    rows = [row.name + suffix for row in known_patterns() for suffix in ("", "-reversed")]
    against_copying(sys.argv[1:] or [*rows, "PRBS31-inverted", "word:1010", "word:0xA5", "word:0x123456789"])
    against_max_len_seq()
