"""How fast the counter counts, as ratios to `numpy.copyto` of the same buffers in the same run.

Run as `python tests/speed/count.py [PATTERN ...]`. Copies and counts alternate, slab by slab, through a buffer
of 64 MiB, each on memory that was not touched since the last round; times are processor time of this thread,
so that other work on the machine disturbs less, and the middle of all slabs stands for each. The last table
compares with a max_len_seq of scipy and a comparison of unpacked bits.
"""

from __future__ import annotations

import sys
import time

import numpy as np
from numpy.typing import NDArray

from harness.signal.counter import Counter
from harness.signal.patterns import parse_pattern

BYTES = 1 << 26
SLAB = 1 << 21
PATTERNS = [
    *("PRBS7", "PRBS9", "PRBS11", "PRBS13", "PRBS15", "PRBS20", "QRSS", "PRBS23", "PRBS29", "PRBS31"),
    *("PRBS31-reversed", "word:1010", "word:0xA5C3"),
]


def with_errors(data: NDArray[np.uint8], ber: float, rng: np.random.Generator) -> NDArray[np.uint8]:
    """Flip bits of a copy independently."""
    out = data.copy()
    if ber >= 1e-3:
        for start in range(0, len(out), SLAB):
            part = out[start : start + SLAB]
            part ^= np.packbits(rng.random(8 * len(part), dtype=np.float32) < ber)
        return out
    at = rng.integers(0, 8 * len(out), rng.binomial(8 * len(out), ber))
    np.bitwise_xor.at(out, at >> 3, (1 << (at & 7)).astype(np.uint8))
    return out


def with_slips(name: str, count: int, every: int, unit: int, rng: np.random.Generator) -> NDArray[np.uint8]:
    """The pattern with a slip of up to 100 units after every `every` bits."""
    pattern, parts, place = parse_pattern(name), [], 1000
    for _ in range(0, 8 * count, every):
        parts.append(pattern.packed(place, every // 8, "lsb"))
        place += every + unit * int(rng.integers(1, 100))
    return np.concatenate(parts)[:count]


def ratio(name: str, data: NDArray[np.uint8], unit: int = 1, slab: int = SLAB) -> tuple[float, float]:
    """Copying time by counting time, and nanoseconds a byte."""
    copy = np.ones_like(data)
    counter = Counter(parse_pattern(name), slip_unit=unit)
    counter.feed(data[:slab])
    counts, copies = [], []
    half = len(data) // 2 // slab * slab
    for at in range(slab, half, slab):
        # The copy reads elsewhere, lest it find in the cache what was counted just now.
        began = time.thread_time()
        np.copyto(copy[half + at : half + at + slab], data[half + at : half + at + slab])
        middle = time.thread_time()
        counter.feed(data[at : at + slab])
        counts.append(time.thread_time() - middle)
        copies.append(middle - began)
    spent = float(np.median(counts))
    return float(np.median(copies)) / spent, 1e9 * spent / slab


def against_scipy(name: str, count: int) -> float:
    """How many times longer scipy's generator and an unpacked comparison take than the counter."""
    from scipy.signal import max_len_seq

    pattern = parse_pattern(name)
    assert pattern.register is not None
    data = pattern.packed(0, count, "lsb")
    counter = Counter(pattern)
    counter.feed(data[:4096])
    began = time.thread_time()
    counter.feed(data[4096:])
    ours = (time.thread_time() - began) / (count - 4096)
    some = count // 64
    began = time.thread_time()
    stages = pattern.register.stages
    expected, _ = max_len_seq(stages, taps=np.array(pattern.register.taps[:-1]), length=8 * some)
    np.count_nonzero(expected != np.unpackbits(data[:some], bitorder="little"))
    return (time.thread_time() - began) / some / ours


def main() -> None:
    """Print the tables."""
    rng = np.random.default_rng(0)
    names = sys.argv[1:] or PATTERNS
    print(f"ratio to numpy.copyto{'':12s}{'BER 0':>8s}{'1e-6':>8s}{'1e-2':>8s}")
    for name in names:
        clean = parse_pattern(name).packed(77, BYTES, "lsb")
        cells = [ratio(name, with_errors(clean, ber, rng) if ber else clean)[0] for ber in (0, 1e-6, 1e-2)]
        print(f"  {name:30s}" + "".join(f"{cell:8.2f}" for cell in cells), flush=True)
    print("a slip every 2^20 bits, BER 0: ratio, Mbit/s")
    for name, unit in (("PRBS15", 8), ("PRBS31", 8), ("PRBS31", 1)):
        share, spent = ratio(name, with_slips(name, BYTES // 4, 1 << 20, unit, rng), unit)
        print(f"  {name} slipping by {unit}: {share:.3f}, {8000 / spent:.0f}", flush=True)
    print("PRBS31 at high BER: Mbit/s")
    for ber in (0.1, 0.3):
        _, spent = ratio(
            "PRBS31", with_errors(parse_pattern("PRBS31").packed(0, BYTES // 4, "lsb"), ber, rng)
        )
        print(f"  {ber}: {8000 / spent:.0f}", flush=True)
    print("PRBS31 at BER 1e-6 in small chunks: ns a byte")
    small = with_errors(parse_pattern("PRBS31").packed(0, 1 << 22, "lsb"), 1e-6, rng)
    for slab in (64, 1024, 4096):
        print(f"  {slab} bytes: {ratio('PRBS31', small, slab=slab)[1]:.1f}", flush=True)
    print(
        f"times slower: scipy.signal.max_len_seq, unpacked comparison: {against_scipy('PRBS31', BYTES):.0f}"
    )


if __name__ == "__main__":
    main()
