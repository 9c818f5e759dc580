"""Positions, kinds, stretches and JSON come back from their bytes as they went in."""

from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.store.coding import (
    clean,
    pack_kinds,
    pack_numbers,
    pack_positions,
    pack_stretches,
    to_json,
    unpack_kinds,
    unpack_numbers,
    unpack_positions,
    unpack_stretches,
)


def plain_pack(values: list[int]) -> bytes:
    """Base-128 numbers the slow way."""
    out = bytearray()
    for value in values:
        while value >= 128:
            out.append(value & 127 | 128)
            value >>= 7
        out.append(value)
    return bytes(out)


@given(st.lists(st.integers(0, 2**63 - 1), max_size=50))
def test_numbers_are_the_textbook_base_128_and_come_back(values: list[int]) -> None:
    data = pack_numbers(np.array(values, dtype=np.int64))
    assert data == plain_pack(values)
    back, ends = unpack_numbers(data)
    assert back.tolist() == values
    assert (ends[-1] if values else 0) == len(data)


@given(st.lists(st.tuples(st.integers(0, 2**60), st.sets(st.integers(0, 2**40), max_size=20)), max_size=20))
def test_positions_of_many_seconds_come_back_at_once(seconds: list[tuple[int, set[int]]]) -> None:
    arrays = [np.array(sorted(first + k for k in errors), dtype=np.int64) for first, errors in seconds]
    firsts = [first for first, _ in seconds]
    blobs = [pack_positions(a, first) for a, first in zip(arrays, firsts, strict=True)]
    back = unpack_positions(blobs, firsts)
    assert [b.tolist() for b in back] == [a.tolist() for a in arrays]
    assert [blob is None for blob in blobs] == [not len(a) for a in arrays]


def test_positions_that_do_not_ascend_are_refused() -> None:
    for wrong in ([5, 5], [6, 5], [3]):
        with pytest.raises(ValueError, match="must ascend"):
            pack_positions(np.array(wrong), 4)


@pytest.mark.parametrize("data", [b"\x80", b"\x01\xff", b"\x80" * 9 + b"\x01"])
def test_damaged_numbers_are_noticed(data: bytes) -> None:
    with pytest.raises(ValueError, match="number"):
        unpack_numbers(data)


def test_a_second_whose_positions_are_cut_is_noticed() -> None:
    with pytest.raises(ValueError, match="cut"):
        unpack_positions([b"\x81", b"\x01"], [0, 0])


@given(st.lists(st.booleans(), max_size=40))
def test_kinds_come_back(kinds: list[bool]) -> None:
    data = pack_kinds(np.array(kinds, dtype=np.bool_))
    assert unpack_kinds(data, len(kinds)).tolist() == kinds


def test_kinds_that_do_not_fit_the_positions_are_noticed() -> None:
    for data, count in ((None, 1), (b"\1", 9), (b"\1\1", 8)):
        with pytest.raises(ValueError, match="not as many kinds"):
            unpack_kinds(data, count)


@given(st.lists(st.tuples(st.integers(0, 2**50), st.booleans()), max_size=10), st.integers(0, 2**50))
def test_stretches_come_back(pairs: list[tuple[int, bool]], received: int) -> None:
    stretches = tuple(pairs)
    assert unpack_stretches(pack_stretches(stretches, received), received) == stretches


def test_the_ordinary_stretch_takes_no_room() -> None:
    assert pack_stretches(((48_000, True),), 48_000) is None
    assert pack_stretches((), 0) == b""


def test_json_takes_numbers_of_numpy_and_knows_no_nan() -> None:
    value = {"n": np.int64(3), "x": np.float64(0.5), "bad": float("nan"), "a": np.arange(3), "t": (1, None)}
    assert json.loads(to_json(value)) == {"n": 3, "x": 0.5, "bad": None, "a": [0, 1, 2], "t": [1, None]}


def test_text_that_no_database_takes_is_made_harmless() -> None:
    assert clean("a\0b\udc80c") == "a\u2400b\\udc80c"
    assert clean("Übergröße ✓") == "Übergröße ✓"
