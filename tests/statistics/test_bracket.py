"""What is sure of a search without any curve: the evidence is never too strong, wherever counting stops."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.statistics.bracket import bracket_of, log_evidence
from harness.statistics.curve import CurvePoint

TARGET = 1e-4


@pytest.mark.parametrize("times", [1.0, 0.8])
def test_the_evidence_that_a_ber_is_over_seldom_ever_gets_strong_where_it_is_not(times):
    """Looked at after every error, when it is strongest, over 150 errors; at most 1 in 20 by theory."""
    rng = np.random.default_rng(1)
    strong = 0
    for _ in range(300):
        bits = np.cumsum(rng.geometric(times * TARGET, 150))
        strong += any(
            log_evidence(k, int(n), TARGET)[0] >= math.log(20) for k, n in enumerate(bits.tolist(), 1)
        )
    assert strong <= 30  # 15 expected at most; more than 30 by chance in 0.02 %


@pytest.mark.parametrize("times", [1.0, 1.3])
def test_the_evidence_that_a_ber_is_under_seldom_ever_gets_strong_where_it_is_not(times):
    """Looked at just before every error, when it is strongest."""
    rng = np.random.default_rng(2)
    strong = 0
    for _ in range(300):
        bits = np.cumsum(rng.geometric(times * TARGET, 150))
        strong += any(
            log_evidence(k, int(n) - 1, TARGET)[1] >= math.log(20) for k, n in enumerate(bits.tolist())
        )
    assert strong <= 30


def test_the_evidence_is_the_mean_of_likelihood_ratios():
    """One alternative after another, with the binomial likelihoods themselves."""
    k, n, p = 3, 50_000, TARGET
    over, under = log_evidence(k, n, p)

    def ratio(times):
        return times**k * ((1 - times * p) / (1 - p)) ** (n - k)

    assert math.exp(over) == pytest.approx(sum(map(ratio, (1.5, 2, 4, 30, 1000))) / 5, rel=1e-9)
    assert math.exp(under) == pytest.approx(sum(map(ratio, (0.25, 0.5, 2 / 3))) / 4, rel=1e-9)
    assert log_evidence(0, n, p)[1] == pytest.approx(
        math.log((sum(((1 - t * p) / (1 - p)) ** n for t in (0, 0.25, 0.5, 2 / 3))) / 4)
    )
    assert log_evidence(5, 10, 0.45)[0] > log_evidence(4, 10, 0.45)[0]  # alternatives over 1 are left out


def crossing_search(rng, crossing: float) -> list[CurvePoint]:
    """Halve between 0 and 16 dB against a BER that rises tenfold in 1 dB, 40 errors or 16/target bits a point."""
    low, high, points = 0.0, 16.0, []
    for _ in range(8):
        x = (low + high) / 2
        p = min(TARGET * 10 ** (x - crossing), 0.4)
        needed, most = 40 + int(rng.gamma(40) / p), round(16 / TARGET)
        if needed <= most:
            points.append(CurvePoint(x, needed, 40))
        else:
            points.append(CurvePoint(x, most, int(rng.binomial(most, p))))
        ratio = points[-1].errors / points[-1].bits
        low, high = (low, x) if ratio > TARGET else (x, high)
    return points


@pytest.mark.parametrize("rising", [True, False])
def test_the_crossing_lies_in_the_bracket_and_the_bracket_is_narrow(rising):
    """The shares of the risk are a bound, so that far fewer than 5 in 100 miss."""
    rng = np.random.default_rng(3)
    missed, widths = 0, []
    for _ in range(200):
        crossing = rng.uniform(2, 14)
        points = crossing_search(rng, crossing)
        if not rising:
            crossing, points = -crossing, [CurvePoint(-p.x, p.bits, p.errors) for p in points]
        found = bracket_of(points, TARGET, 0.95, rising)
        if found.under is None or found.over is None:
            continue
        inside = found.under <= crossing <= found.over if rising else found.over <= crossing <= found.under
        missed += not inside
        widths.append(abs(found.over - found.under))
    assert missed <= 10
    assert len(widths) > 140  # the others halve on where 16/target bits do not tell
    assert np.median(widths) < 2.5


def test_a_lost_point_is_over_and_ends_that_contradict_each_other_are_none():
    good, bad = CurvePoint(10.0, 10**6, 0), CurvePoint(20.0, 0, 0, aligned=False)
    found = bracket_of([good, bad], TARGET, 0.95, rising=True)
    assert (found.under, found.over) == (10.0, 20.0)
    turned = bracket_of([good, bad], TARGET, 0.95, rising=False)
    assert (turned.under, turned.over) == (None, None)
    assert bracket_of([], TARGET, 0.95, rising=True).under is None


def test_later_points_have_smaller_shares_of_the_risk():
    just = CurvePoint(10.0, round(5.5 / TARGET), 0)  # enough for the first share of one half of 0.05
    assert bracket_of([just], TARGET, 0.95, rising=True).under == 10.0
    far = CurvePoint(30.0, 100, 40)
    assert bracket_of([far, far, just], TARGET, 0.95, rising=True).under is None
