"""Retests: the risk of passing in the end."""

import numpy as np
import pytest

from harness.statistics.retests import joint_risk, retest_risk, retest_words, risk_for_each


def test_three_tries_at_five_per_cent_are_fourteen():
    assert retest_risk(0.05, 1) == pytest.approx(0.05, rel=1e-15)
    assert retest_risk(0.05, 3) == pytest.approx(1 - 0.95**3, rel=1e-14)
    assert "14.3 %" in retest_words(0.05, 3)
    assert "test 3 of unit 0031" in retest_words(0.05, 3, "unit 0031")


def test_a_first_try_needs_no_words():
    assert retest_words(0.05, 1) == ""


def test_different_risks_multiply():
    assert joint_risk([0.05, 0.1, 0.01]) == pytest.approx(1 - 0.95 * 0.9 * 0.99, rel=1e-14)
    assert joint_risk([0.05, 0.05, 0.05]) == retest_risk(0.05, 3)
    assert joint_risk([]) == 0
    assert joint_risk([1.0, 0.05]) == 1


def test_small_risks_keep_their_digits():
    assert retest_risk(1e-18, 3) == pytest.approx(3e-18, rel=1e-12)


def test_each_try_may_have_so_much_for_all_to_keep_the_risk():
    assert retest_risk(risk_for_each(0.05, 4), 4) == pytest.approx(0.05, rel=1e-13)


def test_simulated_retests_agree():
    """A unit at the requirement, tried until it passes or three times: 1e5 units, four standard errors."""
    rng = np.random.default_rng(2)
    passed = (rng.random((100_000, 3)) < 0.05).any(axis=1).mean()
    assert passed == pytest.approx(retest_risk(0.05, 3), abs=4 * (0.1426 * 0.8574 / 1e5) ** 0.5)


@pytest.mark.parametrize(("risk", "tries"), [(0.05, 0), (0.05, -1), (0.05, 1.5), (-0.1, 2), (1.1, 2)])
def test_risks_and_tries_that_are_none_are_refused(risk, tries):
    with pytest.raises(ValueError, match=r"at least one try|lies between"):
        retest_risk(risk, tries)
