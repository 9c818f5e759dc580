"""Ratios in sentences are written as people write them."""

from __future__ import annotations

import numpy as np
import pytest

from harness.statistics.notation import ratio


@pytest.mark.parametrize(
    ("value", "digits", "written"),
    [
        (1e-6, 3, "1e-6"),
        (1.2345e-6, 3, "1.23e-6"),
        (1.2345e-6, 6, "1.2345e-6"),
        (9.999e-7, 3, "1e-6"),
        (0.0001, 3, "1e-4"),
        (5e-5, 1, "5e-5"),
        (1e-10, 1, "1e-10"),
        (0.01, 3, "0.01"),
        (0.5, 3, "0.5"),
        (0.0, 3, "0"),
    ],
)
def test_no_exponent_has_a_leading_zero(value, digits, written):
    assert ratio(value, digits) == written


def test_what_is_written_is_the_value_to_its_digits():
    rng = np.random.default_rng(5)
    for value in 10 ** rng.uniform(-15, 0, 2_000):
        for digits in (1, 2, 3, 6):
            assert float(ratio(value, digits)) == pytest.approx(value, rel=0.5000001 * 10 ** (1 - digits))
