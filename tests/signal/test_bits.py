"""Packing, counting and finding bits, against plain Python."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.signal import bits


def plainly(data: bytes, order: str) -> list[int]:
    shifts = range(8) if order == "lsb" else range(7, -1, -1)
    return [(byte >> shift) & 1 for byte in data for shift in shifts]


@pytest.mark.parametrize("order", ["lsb", "msb"])
@given(data=st.binary(max_size=200))
def test_unpack_gives_bits_in_travelling_order_and_pack_takes_them_back(order, data):
    unpacked = bits.unpack(data, order)
    assert unpacked.tolist() == plainly(data, order)
    assert bits.pack(unpacked, order).tobytes() == data


@pytest.mark.parametrize("order", ["lsb", "msb"])
@given(data=st.binary(max_size=200))
def test_positions_of_ones_are_those_a_loop_finds(order, data):
    expected = [i for i, bit in enumerate(plainly(data, order)) if bit]
    assert bits.positions_of_ones(np.frombuffer(data, dtype=np.uint8), order).tolist() == expected


@given(data=st.binary(max_size=300), skip=st.integers(0, 9))
def test_count_of_ones_does_not_depend_on_alignment_or_length(data, skip):
    piece = np.frombuffer(data, dtype=np.uint8)[skip:]
    assert bits.count_ones(piece) == sum(byte.bit_count() for byte in data[skip:])
    assert bits.count_ones(piece[::2]) == sum(byte.bit_count() for byte in data[skip::2])


@pytest.mark.parametrize("share", [0, 1e-5, 1e-3, 0.1, 0.5, 1])
@pytest.mark.parametrize("size", [4095, 4096, 100_000, 300_001])
def test_count_of_ones_in_large_buffers_is_the_sum_of_their_bits(share, size):
    rng = np.random.default_rng(1)
    ones = (rng.random(8 * size) < share).astype(np.uint8)
    assert bits.count_ones(np.packbits(ones)) == int(ones.sum())


@given(data=st.binary(min_size=1, max_size=50))
def test_swapping_the_order_turns_one_reading_into_the_other(data):
    swapped = bits.swap_order(np.frombuffer(data, dtype=np.uint8))
    assert bits.unpack(swapped, "lsb").tolist() == plainly(data, "msb")


@given(value=st.integers(0, 2**200), count=st.integers(0, 200))
def test_ints_and_bits_are_two_writings_of_one_thing(value, count):
    low = value % 2**count
    written = bits.bits_of_int(value, count)
    assert written.tolist() == [(low >> i) & 1 for i in range(count)]
    assert bits.int_of_bits(written) == low
