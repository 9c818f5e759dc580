"""Received streams made from a seed, with everything that was done to them kept beside them."""

from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

TABLE = {  # stages added, sent inverted
    "PRBS15": ((14, 15), True),
    "PRBS20": ((3, 20), False),
    "QRSS": ((17, 20), False),
    "PRBS23": ((18, 23), True),
    "PRBS29": ((27, 29), True),
    "PRBS31": ((28, 31), True),
}
TOLERANCE = ((0.0, 33), (0.01, 44), (0.1, 96), (0.2, 200), (0.3, 489))  # bits a cut may be off, 1e-9
SPACING = ((0.0, 43), (0.01, 47), (0.1, 81), (0.2, 154), (0.3, 361))  # bits that tell two slips apart
ACQUIRED = ((0.0, 256), (0.01, 1024), (0.1, 4096), (0.2, 8192), (0.3, 16384))  # bits that are ample


def by_ber(table, ber):
    """Interpolate a table over BER, upwards."""
    x, y = zip(*table, strict=True)
    return float(np.interp(ber, x, y))


def shift_register(taps, first, count):
    """The register's sequence, one bit at a time, from its first n bits."""
    bits = [int(b) for b in first]
    n = taps[-1]
    assert len(bits) == n
    a = [n - t for t in taps]
    for i in range(count - n):
        value = 0
        for offset in a:
            value ^= bits[i + offset]
        bits.append(value)
    return np.array(bits[:count], dtype=np.uint8)


def force_ones(bits):
    """QRSS: a ONE where the next 14 bits would all be ZERO."""
    out = bits.copy()
    ones = np.concatenate([[0], np.cumsum(bits)])
    for i in range(len(bits) - 15):
        if ones[i + 15] - ones[i] == 0:
            out[i] = 1
    return out


@dataclass
class Made:
    """A stream and its truth."""

    name: str
    seed: int
    ber: float
    unit: int
    received: np.ndarray  # bits
    master: np.ndarray
    origin: int  # the pattern's place of master[0]
    offsets: list  # (index into master for bit 0, polarity turned), in order
    changes: list  # true first bit of each place but the first
    bursts: list = field(default_factory=list)  # (begin, end)
    errors: int = 0  # true
    closest: float = 0.0  # shortest clean part of a place, in stated spacings


def random_pattern_name(rng):
    name = str(rng.choice(list(TABLE)))
    if rng.random() < 0.3:
        name += "-reversed"
    if rng.random() < 0.2:
        name += "-inverted"
    return name


def master_bits(pattern, origin, count):
    """The pattern from a place on by an independent register that starts with the pattern's own state."""
    stem = pattern.name.replace("-inverted", "").replace("-reversed", "")
    taps, sent_inverted = TABLE[stem]
    if "-reversed" in pattern.name:
        n = taps[-1]
        taps = tuple(sorted({n - t for t in taps[:-1]} | {n}))
    turned = sent_inverted ^ ("-inverted" in pattern.name)
    if stem == "QRSS":
        # The state cannot be read off where ONEs are forced; the register's own bits are all but them.
        first = pattern.register.bits_from(pattern.register.window_at(origin), taps[-1])
        return force_ones(shift_register(taps, first, count + 15))[:count] ^ np.uint8(turned)
    first = pattern.bits(origin, taps[-1]) ^ np.uint8(turned)
    return shift_register(taps, first, count) ^ np.uint8(turned)


def make(parse, seed, *, name=None, ber=None, unit=None, slips=None, near=4096, spread=1.0, bursts=None):
    """A random stream; the same seed gives the same one."""
    rng = np.random.default_rng(seed)
    name = name or random_pattern_name(rng)
    pattern = parse(name)
    if ber is None:
        ber = float(rng.choice([0.0, 1e-4, 1e-3, 0.01, 0.03, 0.1, 0.2, 0.3, rng.uniform(0, 0.3)]))
    if unit is None:
        unit = int(rng.choice([1, 1, 8]))
    count = int(rng.integers(0, 11)) if slips is None else slips
    spacing = by_ber(SPACING, ber)
    lengths, offsets = [], [(0, 0)]
    long = int(rng.integers(0, count + 1)) if ber < 0.05 else 0  # a stream needs one place that can be found
    for j in range(count + 1):
        kind = rng.random()
        if kind < 0.15:
            length = rng.uniform(0.2, 3) * spacing * spread
        elif kind < 0.6:
            length = spacing * (1.2 + rng.exponential(4)) * spread
        else:
            length = rng.uniform(500, 6000) * spread
        if j == 0 or (j == count and count):
            length += 300 + 2 * spacing
        if j == long:
            length += by_ber(ACQUIRED, ber)
        lengths.append(max(int(length), unit))
        if j:
            index, turned = offsets[-1]
            what = rng.random()
            jump = int(rng.integers(1, near // unit + 1)) * unit * int(rng.choice([-1, 1]))
            if what < 0.2:
                jump = unit * int(rng.choice([-1, 1]))
            if what > 0.85:
                turned ^= 1
                if what > 0.9:
                    jump = 0
            offsets.append((index + jump, turned))
    changes = [int(x) // unit * unit for x in np.cumsum(lengths)]
    total = -(-changes.pop() // 8) * 8
    low = min(index for index, _ in offsets)
    high = max(index for index, _ in offsets)
    period = pattern.period
    origin = int(rng.integers(0, min(period, 1 << 40)))
    master = master_bits(pattern, origin, total + high - low + 64)
    offsets = [(index - low, turned) for index, turned in offsets]
    edges = [0, *changes, total]
    sent = np.concatenate(
        [master[i + a : i + b] ^ np.uint8(t) for (i, t), a, b in zip(offsets, edges, edges[1:], strict=False)]
    )
    wrong = rng.random(total) < ber
    where = []
    for _ in range(int(rng.choice([0, 0, 0, 1, 2])) if bursts is None else bursts):
        length = int(rng.choice([20, 60, 200, 1000, 3000]))
        begin = int(rng.integers(0, max(total - length, 1)))
        end = min(begin + length, total)
        wrong[begin:end] = rng.random(end - begin) < 0.5
        where.append((begin, end))
    clean = np.ones(total, dtype=bool)
    for begin, end in where:
        clean[begin:end] = False
    closest, longest = 1e9, 0.0
    for a, b in pairwise(edges):
        # Beside a burst a place must be picked out of more stretches.
        need = spacing if clean[a:b].all() else 2 * spacing
        closest = min(closest, int(clean[a:b].sum()) / need)
        runs = np.diff(np.flatnonzero(np.concatenate([[True], ~clean[a:b], [True]])))
        longest = max(longest, int(runs.max()) - 1)
    if longest < by_ber(ACQUIRED, ber):
        closest = 0.0  # bursts leave nothing that could be found
    return Made(
        name,
        seed,
        ber,
        unit,
        sent ^ wrong.astype(np.uint8),
        master,
        origin,
        offsets,
        changes,
        where,
        int(wrong.sum()),
        closest,
    )


def cuts_into_chunks(rng, length):
    """Bytes in each chunk: now and then single ones, now and then everything."""
    kind = rng.random()
    if kind < 0.15:
        return [length]
    if kind < 0.3:
        return [1] * length
    size = float(rng.choice([3, 40, 500, 5000]))
    chunks, left = [], length
    while left:
        chunk = min(left, 1 + int(rng.exponential(size)))
        chunks.append(chunk)
        left -= chunk
    return chunks
