"""Bounds and bits needed, against 60-digit arithmetic that adds up the binomial terms."""

from __future__ import annotations

from fractions import Fraction
from math import comb

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.statistics.bounds import bits_needed, clopper_pearson, garwood, lower_bound, upper_bound
from harness.statistics.tails import chance_at_most, chance_over, log_chance_exactly


def counts() -> list[tuple[int, int, float]]:
    """Seeded counts of every size up to 1e18 bits, small and large ratios alike."""
    rng = np.random.default_rng(20)
    made = []
    for _ in range(200):
        bits = int(10 ** rng.uniform(0.4, 18))
        errors = min(bits - 1, int(10 ** rng.uniform(0, 4)))
        made.append((max(1, errors), bits, float(rng.choice([0.6, 0.9, 0.95, 0.99, 0.999999]))))
    made += [(3, 10**15, 0.95), (12, 10**18, 0.95), (10**18 - 7, 10**18, 0.95), (999, 1000, 0.9), (1, 2, 0.5)]
    made += [(bits - errors, bits, c) for errors, bits, c in made[:40] if bits > 2 * errors]
    return made


def relative_miss(tail, errors: int, bits: int, p: float, risk: mpmath.mpf) -> float:
    """How far p is from where P(X <= errors) = risk, relative to p: one Newton step in 60 digits."""
    with mpmath.workdps(60):
        if 2 * errors > bits:  # from the side with few terms: the other bits, the other ratio, the other tail
            few = bits - errors - 1
            q = 1 - mpmath.mpf(p)
            at_most, exactly = tail(few, bits, q)
            slope = exactly * (bits - few) / (1 - q)
            return float((1 - at_most - risk) / (-slope) / p)
        at_most, exactly = tail(errors, bits, mpmath.mpf(p))
        slope = exactly * (bits - errors) / (1 - mpmath.mpf(p))
        return float((at_most - risk) / slope / p)


def test_bounds_solve_the_binomial_tail_equation_to_1e_10(binomial_tail) -> None:
    for errors, bits, confidence in counts():
        with mpmath.workdps(60):
            risk = 1 - mpmath.mpf(repr(confidence))
            upper = upper_bound(errors, bits, confidence)
            lower = lower_bound(errors, bits, confidence)
            assert 0 < lower < errors / bits < upper < 1 or bits - errors < 100
            if (
                upper < 1 and bits - errors > 10**-5 * bits
            ):  # nearer to 1 a double has no digits for the other side
                assert abs(relative_miss(binomial_tail, errors, bits, upper, risk)) < 1e-12, (errors, bits)
                assert abs(relative_miss(binomial_tail, errors - 1, bits, lower, 1 - risk)) < 1e-12, (
                    errors,
                    bits,
                )


@pytest.mark.parametrize(("errors", "bits"), [(10**6, 10**12), (10**6, 10**18), (3 * 10**5, 10**6)])
def test_bounds_hold_for_large_counts_too(binomial_tail, errors: int, bits: int) -> None:
    risk = mpmath.mpf("0.025")
    interval = clopper_pearson(errors, bits, 0.95)
    assert abs(relative_miss(binomial_tail, errors, bits, interval.upper, risk)) < 1e-12
    assert abs(relative_miss(binomial_tail, errors - 1, bits, interval.lower, 1 - risk)) < 1e-12


@pytest.mark.campaign
@pytest.mark.parametrize(("errors", "bits"), [(10**9, 10**12), (10**9, 10**18), (10**8, 10**9)])
def test_bounds_hold_for_a_thousand_million_errors(binomial_tail, errors: int, bits: int) -> None:
    interval = clopper_pearson(errors, bits, 0.95)
    risk = mpmath.mpf("0.025")
    assert abs(relative_miss(binomial_tail, errors, bits, interval.upper, risk)) < 1e-11
    assert abs(relative_miss(binomial_tail, errors - 1, bits, interval.lower, 1 - risk)) < 1e-11


def test_the_oracle_notices_a_bound_that_is_off_in_the_eleventh_digit(binomial_tail) -> None:
    right = upper_bound(12, 10**18, 0.95)
    risk = mpmath.mpf("0.05")
    assert abs(relative_miss(binomial_tail, 12, 10**18, right * (1 + 1e-11), risk)) > 5e-12


def test_no_errors_all_errors_and_no_bits_have_their_edges() -> None:
    assert lower_bound(0, 10**9, 0.95) == 0.0
    assert upper_bound(10**9, 10**9, 0.95) == 1.0
    assert clopper_pearson(0, 0, 0.95).lower == 0.0
    assert clopper_pearson(0, 0, 0.95).upper == 1.0
    assert upper_bound(0, 10**18, 0.95) == pytest.approx(2.995732273553991e-18, rel=1e-14)
    assert lower_bound(20, 20, 0.95) == pytest.approx(0.05 ** (1 / 20), rel=1e-14)
    assert upper_bound(0, 1, 0.95) == pytest.approx(0.95, rel=1e-15)
    assert garwood(0, 0, 0.95).upper == 1.0
    assert garwood(5, 5, 0.95).upper == 1.0


@pytest.mark.parametrize(
    ("errors", "bits", "confidence", "word"),
    [
        (3, 2, 0.95, "3 errors cannot lie in 2 bits"),
        (-1, 2, 0.95, "negative"),
        (1, -2, 0.95, "negative"),
        (1.5, 3, 0.95, "whole"),
        (True, 3, 0.95, "whole"),
        (1, 3, 1.0, "confidence"),
        (1, 3, 0.0, "confidence"),
        (1, 3, float("nan"), "confidence"),
        (1, 3, 95, "0.95 for 95 %"),
    ],
)
def test_counts_that_cannot_be_are_refused_in_words(errors, bits, confidence, word) -> None:
    for bound in (clopper_pearson, upper_bound, lower_bound, garwood):
        with pytest.raises(ValueError, match=word):
            bound(errors, bits, confidence)


@pytest.mark.parametrize(
    ("ber", "confidence", "errors"),
    [
        (0.0, 0.95, 0),
        (1.0, 0.95, 0),
        (float("nan"), 0.95, 0),
        (-1e-6, 0.95, 0),
        (1e-6, 1.0, 0),
        (1e-6, 0.9, -1),
        (1e-6, 0.9, 1.5),
    ],
)
def test_bits_are_not_counted_for_what_cannot_be(ber, confidence, errors) -> None:
    with pytest.raises(ValueError, match="must"):
        bits_needed(ber, confidence, errors)


@given(st.integers(0, 400), st.integers(1, 10**6), st.floats(0.5, 0.9999))
@settings(max_examples=60, deadline=None)
def test_bounds_enclose_the_ratio_and_grow_with_errors(errors: int, bits: int, confidence: float) -> None:
    errors = min(errors, bits - 1)
    here, more = clopper_pearson(errors, bits, confidence), clopper_pearson(errors + 1, bits, confidence)
    assert here.lower <= errors / bits <= here.upper
    assert here.lower < more.lower
    assert here.upper < more.upper or more.upper == 1.0
    assert upper_bound(errors, bits + 1, confidence) < upper_bound(errors, bits, confidence)


def exact_tail(errors: int, bits: int, ber: Fraction) -> Fraction:
    return sum(
        (comb(bits, k) * ber**k * (1 - ber) ** (bits - k) for k in range(errors + 1)), start=Fraction(0)
    )


@pytest.mark.parametrize("errors", [0, 1, 2, 7, 25])
@pytest.mark.parametrize("ber", ["0.5", "0.3", "0.1", "0.02", "0.9"])
@pytest.mark.parametrize("confidence", ["0.95", "0.75", "0.3", "0.999"])
def test_bits_needed_are_the_fewest_in_whole_number_arithmetic(errors, ber, confidence) -> None:
    bits = bits_needed(float(ber), float(confidence), errors)
    risk = 1 - Fraction(confidence)
    assert exact_tail(errors, bits, Fraction(ber)) <= risk
    assert exact_tail(errors, bits - 1, Fraction(ber)) > risk


def test_a_tie_counts_as_demonstrated() -> None:
    assert bits_needed(0.5, 0.75) == 2  # two bits without error: exactly one chance in four


@pytest.mark.parametrize("ber", ["1e-6", "1e-9", "1e-12", "1e-15", "1e-17"])
@pytest.mark.parametrize("errors", [0, 3, 50, 2000])
def test_bits_needed_are_the_fewest_to_the_single_bit_at_any_ratio(binomial_tail, ber, errors) -> None:
    bits = bits_needed(float(ber), 0.95, errors)
    with mpmath.workdps(60):
        risk = mpmath.mpf("0.05")
        assert binomial_tail(errors, bits, mpmath.mpf(ber))[0] <= risk
        assert binomial_tail(errors, bits - 1, mpmath.mpf(ber))[0] > risk


def test_bits_needed_take_a_million_errors() -> None:
    bits = bits_needed(1e-9, 0.95, 10**6)
    assert upper_bound(10**6, bits, 0.95) <= 1e-9 * (1 + 1e-14)
    assert upper_bound(10**6, bits - 10**9, 0.95) > 1e-9


def test_chances_add_up_to_one_and_keep_small_tails(binomial_tail) -> None:
    k = np.arange(41)
    assert float(np.exp(log_chance_exactly(k, 40, 0.3)).sum()) == pytest.approx(1.0, abs=1e-14)
    for errors, bits, ber in [(0, 10, 0.2), (5, 40, 0.3), (12, 10**15, 3e-15), (60, 10**12, 1e-10)]:
        low, high = chance_at_most(errors, bits, ber), chance_over(errors, bits, ber)
        exact = binomial_tail(errors, bits, mpmath.mpf(ber))[0]
        assert low + high == pytest.approx(1.0, abs=1e-13)
        assert float(low / exact - 1) == pytest.approx(0.0, abs=1e-12)
    assert chance_at_most(3, 10**15, 1e-13) == pytest.approx(
        float(binomial_tail(3, 10**15, mpmath.mpf(1e-13))[0]), rel=1e-12
    )
    assert (chance_at_most(-1, 5, 0.1), chance_over(-1, 5, 0.1)) == (0.0, 1.0)
    assert (chance_at_most(5, 5, 0.1), chance_over(5, 5, 0.1)) == (1.0, 0.0)
    assert (chance_at_most(2, 5, 0.0), chance_at_most(2, 5, 1.0)) == (1.0, 0.0)


def test_garwood_is_the_limit_of_clopper_and_pearson_for_small_ratios() -> None:
    for errors in (0, 1, 5, 300):
        exact, limit = clopper_pearson(errors, 10**14, 0.95), garwood(errors, 10**14, 0.95)
        assert limit.upper == pytest.approx(exact.upper, rel=1e-11)
        assert limit.lower == pytest.approx(exact.lower, rel=1e-11)
        assert garwood(errors, 10**4, 0.95).upper > clopper_pearson(errors, 10**4, 0.95).upper
