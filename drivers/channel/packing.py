"""Bits inside bytes, for stages that cut or turn them: flipping, shifting, packing in either bit order."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from drivers.channel.stage import BitOrder, Bytes


def numpy_order(order: BitOrder) -> Literal["little", "big"]:
    """Name the bit order as numpy does."""
    return "little" if order == "lsb" else "big"


def unpack(data: Bytes, order: BitOrder) -> Bytes:
    """Bits of `data` in the order in which they travel, one in each element."""
    return np.unpackbits(data, bitorder=numpy_order(order))


def pack(bits: Bytes, order: BitOrder) -> Bytes:
    """Whole bytes from bits; a last partial byte is filled with ZEROs."""
    return np.packbits(bits, bitorder=numpy_order(order))


def flip(data: Bytes, bits: NDArray[np.int64], order: BitOrder) -> None:
    """Flip single bits of `data` in place; `bits` are distinct and counted from its first bit."""
    if not len(bits):
        return
    if len(bits) * 4 > len(data):  # many: a mask of the whole stretch costs less than single flips
        mask = np.zeros(len(data) * 8, dtype=np.uint8)
        mask[bits] = 1
        data ^= pack(mask, order)
        return
    within = (bits & 7).astype(np.uint8)
    if order == "msb":
        within = np.uint8(7) - within
    np.bitwise_xor.at(data, bits >> 3, np.left_shift(np.uint8(1), within))


def flip_stretch(data: Bytes, start: int, end: int, order: BitOrder) -> None:
    """Flip the bits from `start` up to `end` of `data` in place."""
    first, last = -(-start // 8), end // 8
    if first >= last:
        flip(data, np.arange(start, end, dtype=np.int64), order)
        return
    data[first:last] ^= 0xFF
    edges = [np.arange(start, first * 8), np.arange(last * 8, end)]
    for edge in edges:
        flip(data, edge.astype(np.int64), order)


def delay_bits(data: Bytes, before: int, bits: int, order: BitOrder) -> Bytes:
    """Shift a non-empty stream by 1 to 7 bits: as many bytes come out, the last `bits` bits stay behind.

    Parameters
    ----------
    data
        Bytes, shape (n,).
    before
        The byte whose last `bits` bits come first.
    bits
        How far to shift.
    order
        Which bit of a byte goes first.
    """
    previous = np.empty_like(data)
    previous[0] = before
    previous[1:] = data[:-1]
    up, down = np.uint8(bits), np.uint8(8 - bits)
    if order == "lsb":
        return (data << up) | (previous >> down)
    return (data >> up) | (previous << down)
