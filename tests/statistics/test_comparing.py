"""Comparing two counts: against sums over all outcomes, and by how often the test is wrong."""

import math

import mpmath as mp
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import binom, fisher_exact, poisson

from harness.statistics.comparing import compare_counts, compare_seconds

FEW = settings(max_examples=50, deadline=None)
COUNTS = st.integers(0, 60)
BITS = st.integers(60, 10**9)


@FEW
@given(COUNTS, BITS, COUNTS, BITS)
def test_p_value_is_the_binomial_sum(errors_a, bits_a, errors_b, bits_b):
    found = compare_counts(errors_a, bits_a, errors_b, bits_b)
    with mp.workdps(30):
        share = mp.mpf(bits_b) / (bits_a + bits_b)
        total = errors_a + errors_b
        exact = mp.fsum(
            mp.binomial(total, k) * share**k * (1 - share) ** (total - k) for k in range(errors_b, total + 1)
        )
    assert found.p_value == pytest.approx(float(exact), rel=1e-10)


@FEW
@given(COUNTS, BITS, COUNTS, BITS, st.sampled_from([0.8, 0.95, 0.99]))
def test_worse_and_the_lower_bound_are_the_same_statement(errors_a, bits_a, errors_b, bits_b, confidence):
    found = compare_counts(errors_a, bits_a, errors_b, bits_b, confidence)
    if abs(found.p_value - (1 - confidence)) > 1e-9:
        assert found.worse == (found.lower_one_sided > 1)
    if abs(found.p_value_better - (1 - confidence)) > 1e-9:
        assert found.better == (found.upper_one_sided is not None and found.upper_one_sided < 1)
    assert not (found.worse and found.better)
    assert found.lower <= found.lower_one_sided
    if found.ratio is not None and found.upper is not None:
        assert found.lower <= found.ratio <= found.upper


@FEW
@given(COUNTS, BITS, COUNTS, BITS)
def test_swapping_the_two_turns_the_ratio_over(errors_a, bits_a, errors_b, bits_b):
    one, other = (
        compare_counts(errors_a, bits_a, errors_b, bits_b),
        compare_counts(errors_b, bits_b, errors_a, bits_a),
    )
    assert one.p_value == other.p_value_better
    if one.lower > 0:
        assert other.upper == pytest.approx(1 / one.lower, rel=1e-9)
    else:
        assert other.upper is None


def test_the_bounds_are_where_the_tails_are_half_the_risk():
    """10 in 1e6 against 30 in 2e6: at either bound on the ratio r, B's share is 2r/(1+2r)."""
    found = compare_counts(10, 10**6, 30, 2 * 10**6, 0.9)
    low = 2 * found.lower / (1 + 2 * found.lower)
    high = 2 * found.upper / (1 + 2 * found.upper)
    assert binom.sf(29, 40, low) == pytest.approx(0.05, rel=1e-9)
    assert binom.cdf(30, 40, high) == pytest.approx(0.05, rel=1e-9)
    assert found.ratio == pytest.approx(1.5)


def test_equal_units_are_accused_within_the_risk_and_the_ratio_is_covered():
    """All pairs of counts of mean 5 and 10 (at twice the bits), weighed by their Poisson chance."""
    accused = held = seen = 0.0
    for a in range(17):
        for b in range(1, 26):
            weight = float(poisson.pmf(a, 5) * poisson.pmf(b, 10))
            if weight < 1e-5:
                continue
            found = compare_counts(a, 10**9, b, 2 * 10**9)
            seen += weight
            accused += weight * found.worse
            held += weight * (found.lower <= 1 and (found.upper is None or found.upper >= 1))
    assert seen > 0.998
    assert 0.01 < accused <= 0.05
    assert held >= 0.95 - (1 - seen)


def test_four_times_as_many_errors_are_found_worse():
    found = compare_counts(25, 10**9, 100, 10**9)
    assert found.worse
    assert found.words.startswith("B is worse than A: its BER is 4 times A's")
    assert "by chance alone (p = " in found.words
    assert compare_counts(100, 10**9, 25, 10**9).better


def test_large_ratios_are_written_out():
    assert "1\u202f080 times A's" in compare_counts(1, 10**9, 1080, 10**9).words


def test_without_errors_nothing_is_shown_and_nothing_is_infinite():
    found = compare_counts(0, 10**9, 0, 10**9)
    assert (found.ratio, found.lower, found.upper, found.p_value) == (None, 0.0, None, 1.0)
    assert not found.worse
    assert "No difference shown" in found.words
    clean = compare_counts(0, 10**9, 12, 10**9)
    assert clean.worse
    assert (clean.ratio, clean.upper) == (None, None)
    assert clean.lower > 1


def test_counts_to_1e18_keep_their_digits():
    found = compare_counts(10**9, 10**18, 10**9 + 200_000, 10**18)
    assert found.ratio == pytest.approx(1.0002, rel=1e-12)
    # 2e5 over the standard deviation of the difference, sqrt(2e9): 4.47 deviations.
    assert found.p_value == pytest.approx(3.87e-6, rel=0.02)
    assert found.lower < 1.0002 < found.upper


@FEW
@given(st.integers(0, 30), st.integers(30, 90), st.integers(0, 30), st.integers(30, 90))
def test_seconds_are_compared_by_the_exact_test_of_fisher(errored_a, seconds_a, errored_b, seconds_b):
    found = compare_seconds(errored_a, seconds_a, errored_b, seconds_b)
    table = [[errored_b, seconds_b - errored_b], [errored_a, seconds_a - errored_a]]
    assert found.p_value == pytest.approx(fisher_exact(table, alternative="greater").pvalue, rel=1e-9)
    assert found.p_value_better == pytest.approx(fisher_exact(table, alternative="less").pvalue, rel=1e-9)


@pytest.mark.parametrize(
    "counts", [(1, 0, 1, 10), (-1, 10, 1, 10), (11, 10, 1, 10), (1, 10, 1, 0), (1, 10, 20, 10)]
)
@pytest.mark.parametrize("compare", [compare_counts, compare_seconds])
def test_counts_that_are_none_are_refused(counts, compare):
    with pytest.raises(ValueError, match=r"nothing to compare|lies between"):
        compare(*counts)


@pytest.mark.parametrize("confidence", [0.0, 1.0, math.nan])
def test_confidence_lies_between(confidence):
    with pytest.raises(ValueError, match="confidence"):
        compare_counts(1, 10, 1, 10, confidence)
