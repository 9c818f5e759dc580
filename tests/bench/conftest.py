"""Fixtures for the bench: points that were measured, without a bench."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from harness.assess.accumulate import Accumulator
from harness.assess.assessment import PointAssessment
from harness.assess.point import Facts, assess_point
from harness.record import Second, Tally


@pytest.fixture
def measured() -> Callable[..., PointAssessment]:
    """Make a point: its values, bits compared, errors, seconds; no bits compared: it was never aligned."""

    def make(
        values: dict[str, float], bits: int, errors: int, seconds: float = 1.0, unaligned: int = 0
    ) -> PointAssessment:
        acc = Accumulator(None, 48_000.0)
        tally = Tally(bits + unaligned, bits, unaligned, errors, errors, 0)
        stretches = tuple((n, aligned) for n, aligned in ((bits, True), (unaligned, False)) if n)
        second = Second(
            0, 0, 0, 0, int(seconds * 1e9), bits, tally, positions_complete=False, stretches=stretches
        )
        acc.add(second)
        about = Facts(values, "completed", "bits", 0, 1, Tally(), "PRBS15", "lsb", 48_000.0, None)
        return assess_point(acc, about, quick=True)

    return make
