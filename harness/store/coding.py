"""How a second's error positions and stretches lie in a row, and how JSON does.

Positions are stored as gaps, the first from the second's first bit, each as a base-128 number: seven
bits a byte, least significant first, the top bit set where more follow. At a BER of 1e-3 that is two
bytes an error. Kinds are one bit an error, least significant bit first. A stretch is twice its bits,
plus one where it is aligned, in the same base-128 numbers.
"""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

Stretches = tuple[tuple[int, bool], ...]


def pack_numbers(values: NDArray[np.int64]) -> bytes:
    """Write numbers of at least 0, shape (k,), as base-128 numbers."""
    if not len(values):
        return b""
    rest = values.astype(np.uint64)
    sizes = np.ones(len(rest), dtype=np.int64)
    above = rest >> np.uint64(7)
    while above.any():
        sizes += above > 0
        above >>= np.uint64(7)
    starts = np.cumsum(sizes) - sizes
    out = np.zeros(int(sizes.sum()), dtype=np.uint8)
    for k in range(int(sizes.max())):
        has = sizes > k
        digit = ((rest[has] >> np.uint64(7 * k)) & np.uint64(0x7F)).astype(np.uint8)
        more = (sizes[has] > k + 1).astype(np.uint8) << 7
        out[starts[has] + k] = digit | more
    return out.tobytes()


def unpack_numbers(data: bytes) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Read base-128 numbers.

    Returns
    -------
    values, ends
        The numbers, shape (k,), and behind which byte each one ends, shape (k,).

    Raises
    ------
    ValueError
        If the last one is cut, or one is longer than 63 bits.
    """
    raw = np.frombuffer(data, dtype=np.uint8)
    if not len(raw):
        return np.empty(0, np.int64), np.empty(0, np.int64)
    ends = np.flatnonzero(raw < 0x80) + 1
    if not len(ends) or ends[-1] != len(raw):
        raise ValueError("the last number is cut")
    starts = np.concatenate(([0], ends[:-1]))
    sizes = ends - starts
    if sizes.max() > 9:
        raise ValueError("a number is too long")
    values = np.zeros(len(ends), dtype=np.int64)
    for k in range(int(sizes.max())):
        has = sizes > k
        values[has] |= (raw[starts[has] + k] & 0x7F).astype(np.int64) << (7 * k)
    return values, ends


def pack_positions(positions: NDArray[np.int64], first_bit: int) -> bytes | None:
    """Write a second's error positions; None where there are none.

    Raises
    ------
    ValueError
        If they do not ascend from `first_bit` on.
    """
    if not len(positions):
        return None
    places = np.concatenate(([first_bit], positions)).astype(np.int64)
    gaps: NDArray[np.int64] = places[1:] - places[:-1]
    if gaps[0] < 0 or (len(gaps) > 1 and gaps[1:].min() <= 0):
        raise ValueError("error positions must ascend from the second's first bit on")
    return pack_numbers(gaps)


def unpack_positions(blobs: Sequence[bytes | None], first_bits: Sequence[int]) -> list[NDArray[np.int64]]:
    """Read the positions of many seconds in one go.

    Parameters
    ----------
    blobs, first_bits
        One for each second.

    Returns
    -------
    list of arrays, each of shape (k,): ascending received bits.
    """
    sizes = np.fromiter((len(b) if b else 0 for b in blobs), dtype=np.int64, count=len(blobs))
    gaps, ends = unpack_numbers(b"".join(b for b in blobs if b))
    byte_ends = np.cumsum(sizes)
    upto = np.searchsorted(ends, byte_ends, side="right")
    if len(ends) and not np.array_equal(ends[upto[sizes > 0] - 1], byte_ends[sizes > 0]):
        raise ValueError("a second's last position is cut")
    since = np.concatenate(([0], upto[:-1])) if len(upto) else upto
    total = np.cumsum(gaps)
    before = np.concatenate(([0], total))[since]
    shift = np.asarray(first_bits, dtype=np.int64) - before
    places = total + np.repeat(shift, upto - since)
    return [places[a:b] for a, b in zip(since.tolist(), upto.tolist(), strict=True)]


def pack_kinds(ones_lost: NDArray[np.bool_]) -> bytes | None:
    """Write which errors are ones received as zeros; None where there are no errors."""
    return np.packbits(ones_lost, bitorder="little").tobytes() if len(ones_lost) else None


def unpack_kinds(data: bytes | None, count: int) -> NDArray[np.bool_]:
    """Read them again; shape (count,).

    Raises
    ------
    ValueError
        If there are fewer than `count`.
    """
    if not count:
        return np.empty(0, dtype=np.bool_)
    raw = np.frombuffer(data or b"", dtype=np.uint8)
    if len(raw) != (count + 7) // 8:
        raise ValueError("there are not as many kinds as positions")
    return np.unpackbits(raw, count=count, bitorder="little").view(np.bool_)


def pack_stretches(stretches: Stretches, received: int) -> bytes | None:
    """Write a second's stretches; None for the ordinary one, wholly aligned."""
    if stretches == ((received, True),):
        return None
    return pack_numbers(np.array([2 * bits + aligned for bits, aligned in stretches], dtype=np.int64))


def unpack_stretches(data: bytes | None, received: int) -> Stretches:
    """Read them again."""
    if data is None:
        return ((received, True),)
    return tuple((v >> 1, bool(v & 1)) for v in unpack_numbers(data)[0].tolist())


def to_json(value: Any) -> str:
    """Write JSON text that every database takes; NaN and infinities become null."""
    return json.dumps(_plain(value), separators=(",", ":"), allow_nan=False)


def _plain(value: Any) -> Any:
    if isinstance(value, dict) or hasattr(value, "items"):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [_plain(v) for v in value]
    if isinstance(value, np.ndarray | np.generic):
        return _plain(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if value is None or isinstance(value, str | int | float | bool):
        return value
    return str(value)


def clean(text: str) -> str:
    """Make text that every database takes: no NUL, no lone halves of a surrogate pair."""
    return text.replace("\0", "\u2400").encode("utf-8", "backslashreplace").decode()
