"""Bounds and plans against published tables, and against other libraries where those are right."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.proportion import proportion_confint
from statsmodels.stats.rates import confint_poisson

from harness.statistics.bounds import bits_needed, clopper_pearson, garwood, lower_bound, upper_bound
from harness.statistics.plans import make_plan
from harness.statistics.plans.recursion import Stairs, corners, walk
from harness.statistics.tails import chance_at_most, chance_over


def test_nist_sematech_example_of_a_binomial_interval() -> None:
    """NIST/SEMATECH e-Handbook of Statistical Methods, 7.2.4: 4 defective of 20, 90 %."""
    found = clopper_pearson(4, 20, 0.90)
    assert found.lower == pytest.approx(0.071354, abs=5e-7)
    assert found.upper == pytest.approx(0.401029, abs=1.2e-6)  # the page's last digit is one off


@pytest.mark.parametrize(
    ("confidence", "factors"),
    [
        (0.95, (2.996, 4.744, 6.296, 7.754, 9.154, 10.513)),
        (0.99, (4.605, 6.638, 8.406, 10.045, 11.605, 13.108)),
    ],
)
def test_bits_times_ratio_are_half_the_tabled_chi_square_values(confidence: float, factors) -> None:
    """Any table of the chi-square distribution, at 2, 4, ... 12 degrees of freedom (common practice)."""
    for errors, factor in enumerate(factors):
        assert bits_needed(1e-9, confidence, errors) * 1e-9 == pytest.approx(factor, abs=5.01e-4)
        assert garwood(errors, 10**9, 2 * confidence - 1).upper * 1e9 == pytest.approx(factor, abs=5.01e-4)


MIL_HDBK_781A = [
    # margin, duration in 1 / the required ratio, accept at most, producer's risk, consumer's risk
    (1.5, 45.0, 36, 0.120, 0.099),
    (1.5, 29.9, 25, 0.109, 0.214),
    (1.5, 21.5, 17, 0.197, 0.196),
    (1.5, 8.1, 6, 0.298, 0.301),
    (2.0, 18.8, 13, 0.096, 0.106),
    (2.0, 12.4, 9, 0.098, 0.209),
    (2.0, 7.8, 5, 0.199, 0.210),
    (2.0, 3.7, 2, 0.283, 0.285),
    (3.0, 9.3, 5, 0.094, 0.099),
    (3.0, 5.4, 3, 0.109, 0.213),
    (3.0, 4.3, 2, 0.175, 0.197),
    (3.0, 1.1, 0, 0.307, 0.333),
]


@pytest.mark.parametrize(("margin", "duration", "accepts", "producer", "consumer"), MIL_HDBK_781A)
def test_fixed_duration_plans_of_mil_hdbk_781a(margin, duration, accepts, producer, consumer) -> None:
    """MIL-HDBK-781A, fixed-duration test plans: true risks (the table from memory; Poisson sums agree)."""
    ber = 1e-9
    bits = round(duration / ber)
    assert chance_over(accepts, bits, ber / margin) == pytest.approx(producer, abs=5.01e-4)
    assert chance_at_most(accepts, bits, ber) == pytest.approx(consumer, abs=5.01e-4)
    # The same test as a staircase with one corner, by the recursion of the sequential plans.
    stairs = Stairs((bits,) * (accepts + 1), (*(0,) * (accepts + 1), bits))
    assert walk(corners(stairs), ber / margin).rejection == pytest.approx(producer, abs=5.01e-4)
    assert walk(corners(stairs), ber).acceptance == pytest.approx(consumer, abs=5.01e-4)
    # Asked for at the table's own confidence, our plan is of the table's length.
    plan = make_plan("fixed", ber, 1 - consumer, accepts, margin=margin)
    assert plan.bits * ber == pytest.approx(duration, abs=0.06)
    assert plan.producer_risk == pytest.approx(producer, abs=0.004)


def test_scipy_and_statsmodels_agree_where_they_are_right() -> None:
    """SciPy's and statsmodels' Clopper-Pearson limits lose digits at large counts; up to 1e5 bits they hold."""
    rng = np.random.default_rng(4)
    for _ in range(60):
        bits = int(10 ** rng.uniform(0.5, 5))
        errors = int(rng.integers(1, bits))
        confidence = float(rng.choice([0.8, 0.95, 0.99]))
        ours = clopper_pearson(errors, bits, confidence)
        theirs = stats.binomtest(errors, bits).proportion_ci(confidence, "exact")
        assert ours.lower == pytest.approx(float(theirs.low), rel=1e-8)
        assert ours.upper == pytest.approx(float(theirs.high), rel=1e-8)
        low, high = proportion_confint(errors, bits, alpha=1 - confidence, method="beta")
        assert (ours.lower, ours.upper) == pytest.approx((low, high), rel=1e-8)


def test_statsmodels_agrees_with_garwood() -> None:
    for errors in (1, 4, 60, 5000):
        low, high = confint_poisson(errors, 10**9, method="exact-c", alpha=0.05)
        ours = garwood(errors, 10**9, 0.95)
        assert (ours.lower, ours.upper) == pytest.approx((low, high), rel=1e-9)


@pytest.mark.parametrize(("errors", "accepts"), [(7, 12), (0, 0), (30, 30)])
def test_the_curtailed_plans_distribution_is_the_negative_binomial(errors: int, accepts: int) -> None:
    """Bits up to error number E + 1: SciPy's negative binomial distribution."""
    plan = make_plan("curtailed", 1e-3, accept_errors=accepts)
    for true in (5e-4, 1e-3, 3e-3):
        for point in plan.stopping_distribution(true)[:-1]:
            expected = stats.nbinom.cdf(point.bits - accepts - 1, accepts + 1, true)
            assert point.rejected == pytest.approx(float(expected), rel=1e-9, abs=1e-14)


def test_bounds_of_inverse_sampling_agree_with_the_negative_binomial() -> None:
    """Error number 4 at bit 1000: the tails of SciPy's negative binomial distribution equal the risk."""
    lower, upper = lower_bound(4, 1000, 0.975), upper_bound(3, 999, 0.975)
    assert float(stats.nbinom.cdf(996, 4, lower)) == pytest.approx(0.025, rel=1e-9)
    assert float(stats.nbinom.sf(995, 4, upper)) == pytest.approx(0.025, rel=1e-9)
