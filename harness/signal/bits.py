"""Bits and bytes: packing in either bit order, counting ones and finding them, on whole buffers."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder

_NUMPY_ORDER: dict[BitOrder, Literal["little", "big"]] = {"lsb": "little", "msb": "big"}


_ROW_BYTES = 4096  # looked at as one when ONEs are counted


def as_bytes(data: bytes | bytearray | memoryview | NDArray[np.uint8]) -> NDArray[np.uint8]:
    """See any buffer of bytes as an array of shape (n,), without a copy."""
    if isinstance(data, np.ndarray):
        return data
    return np.frombuffer(data, dtype=np.uint8)


def unpack(data: bytes | bytearray | memoryview | NDArray[np.uint8], order: BitOrder) -> NDArray[np.uint8]:
    """Bits in the order in which they travel.

    Parameters
    ----------
    data
        n bytes.
    order
        Which bit of a byte comes first: ``"lsb"`` or ``"msb"``.

    Returns
    -------
    NDArray[np.uint8]
        0 and 1, shape (8n,).
    """
    return np.unpackbits(as_bytes(data), bitorder=_NUMPY_ORDER[order])


def pack(bits: NDArray[np.uint8], order: BitOrder) -> NDArray[np.uint8]:
    """Bytes of bits (0 and 1, shape (m,)); a last partial byte is filled with ZEROs. Inverse of `unpack`."""
    return np.packbits(bits, bitorder=_NUMPY_ORDER[order])


def swap_order(data: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """The same bytes with the bits of each in the opposite order."""
    return np.packbits(np.unpackbits(data, bitorder="little"), bitorder="big")


def count_ones(data: NDArray[np.uint8]) -> int:
    """Count the ONEs in n bytes; fastest where the buffer is contiguous, 8-byte aligned and mostly ZERO."""
    whole = len(data) // _ROW_BYTES * _ROW_BYTES
    if not data.flags.c_contiguous:
        whole = 0
    count = int(np.bitwise_count(data[whole:]).sum(dtype=np.int64))
    if whole:
        rows = data[:whole].view(np.uint64).reshape(-1, _ROW_BYTES // 8)
        touched = np.flatnonzero(np.bitwise_or.reduce(rows, axis=1))
        if 2 * len(touched) < len(rows):
            rows = rows[touched]
        # A row's ONEs fit into 16 bits, and adding bytes up in 16 bits is the quickest.
        count += int(np.add.reduce(np.bitwise_count(rows), axis=1, dtype=np.uint16).sum(dtype=np.int64))
    return count


def positions_of_ones(data: NDArray[np.uint8], order: BitOrder) -> NDArray[np.int64]:
    """Where the ONEs of n bytes are, counted in bits from the first, ascending, shape (k,).

    Only bytes that hold a ONE are unpacked, so the cost follows the number of ONEs where they are rare.
    """
    at = np.flatnonzero(data)
    if len(at) == 0:
        return np.empty(0, dtype=np.int64)
    rows, columns = np.nonzero(np.unpackbits(data[at, None], axis=1, bitorder=_NUMPY_ORDER[order]))
    found: NDArray[np.int64] = at[rows].astype(np.int64) * 8 + columns
    return found


def bits_of_int(value: int, count: int) -> NDArray[np.uint8]:
    """The lowest `count` bits of an int, bit 0 first, as 0 and 1."""
    raw = (value & ((1 << count) - 1)).to_bytes((count + 7) // 8, "little")
    return np.unpackbits(np.frombuffer(raw, dtype=np.uint8), count=count, bitorder="little")


def int_of_bits(bits: NDArray[np.uint8]) -> int:
    """The int whose bit i is ``bits[i]``; inverse of `bits_of_int`."""
    return int.from_bytes(np.packbits(bits, bitorder="little").tobytes(), "little")
