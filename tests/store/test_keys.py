"""Run keys are UUIDs of version 7 whose order is the order of time."""

from __future__ import annotations

import uuid

from hypothesis import given
from hypothesis import strategies as st

from harness.store import new_key

TIMES = st.integers(0, 2**62)


@given(TIMES)
def test_version_variant_and_time_are_where_rfc_9562_puts_them(now: int) -> None:
    key = uuid.UUID(new_key(now))
    assert key.version == 7
    assert key.variant == uuid.RFC_4122
    assert key.int >> 80 == now // 1_000_000


@given(TIMES, st.integers(1_000, 10**9))
def test_keys_sort_by_time_to_a_microsecond(now: int, later: int) -> None:
    assert new_key(now) < new_key(now + later)


def test_keys_of_one_instant_differ() -> None:
    assert len({new_key(123) for _ in range(1000)}) == 1000
