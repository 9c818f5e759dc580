"""The search for a sensitivity: what it finds, what it spends, and that it goes on where it was."""

import math

import numpy as np
import pytest
from scipy.special import ndtr

from harness.statistics.bracket import bracket_of
from harness.statistics.curve import CurvePoint, fit_curve
from harness.statistics.search import Found, SearchSpace, next_step

TARGET = 1e-6
TRUTH = 50 - 10.5298  # attenuation at which the device of these tests has a BER of 1e-6


def ber_at(attenuation_db):
    return float(ndtr(-math.sqrt(2) * 10 ** ((50 - attenuation_db) / 20)))


def measured(rng, value, errors, bits, scatter_db=0.0, lost_over=0.05):
    """A point measured until so many errors or bits, exactly as a bench would: the last error ends it."""
    p = ber_at(value + scatter_db * rng.standard_normal())
    if p > lost_over:
        return CurvePoint(value, 0, 0, aligned=False)
    # The wait for the last error is a sum of exponential ones (p is small, or its error lies in the third digit).
    needed = errors + rng.gamma(errors) / max(p, 1e-30)
    if needed <= bits:
        return CurvePoint(value, int(needed), errors)
    return CurvePoint(value, bits, int(min(rng.poisson(bits * p), errors - 1)))


def search(rng, space, scatter_db=0.0, most=80):
    points = []
    for _ in range(most):
        step = next_step(space, points)
        if isinstance(step, Found):
            return step, points
        assert space.low <= step.value <= space.high
        assert step.bits <= math.ceil(3 * step.errors / TARGET)  # no point waits longer, come what may
        points.append(measured(rng, step.value, step.errors, step.bits, scatter_db))
    raise AssertionError("the search does not end")


@pytest.mark.parametrize("resolution", [0.0, 0.5])
def test_the_crossing_is_found_within_the_width_asked(resolution):
    """Five searches: at a true 0.95, 2 or fewer that hold the truth come once in 900."""
    rng = np.random.default_rng(1)
    space = SearchSpace(20, 60, TARGET, width=0.5, rising=True, resolution=resolution)
    held = 0
    for _ in range(5):
        found, points = search(rng, space)
        assert found.complete
        assert found.fit.upper - found.fit.lower <= 0.5
        assert found.bits == sum(p.bits for p in points)
        held += found.fit.lower <= TRUTH <= found.fit.upper
        if resolution:
            assert all(abs((p.x - 20) / resolution - round((p.x - 20) / resolution)) < 1e-6 for p in points)
    assert held >= 3


def test_it_needs_less_than_half_of_the_bits_of_a_sweep():
    """Fifteen equally spaced points around the crossing, each until so many errors or bits.

    Of sweeps whose bounds are as narrow as those the search was asked for, the cheapest is taken.
    """
    rng = np.random.default_rng(2)
    width = 0.4
    space = SearchSpace(34, 44, TARGET, width=width, rising=True)
    spent = np.median([search(rng, space, scatter_db=0.03)[0].bits for _ in range(3)])
    cheapest = math.inf
    for errors, bits in ((300, 10**7), (300, 3 * 10**7), (100, 10**8)):
        widths, costs = [], []
        for _ in range(3):
            points = [measured(rng, x, errors, bits, 0.03) for x in np.linspace(34, 44, 15).tolist()]
            fit = fit_curve(points, TARGET, rising=True)
            widths.append(math.inf if fit.lower is None or fit.upper is None else fit.upper - fit.lower)
            costs.append(sum(p.bits for p in points))
        if np.median(widths) <= width:
            cheapest = min(cheapest, float(np.median(costs)))
    print(f"search {spent:.3g} bits, cheapest sweep {cheapest:.3g}")
    assert spent < cheapest / 2 < math.inf


def dropping_out(rng, step, edge, scatter_db=0.0):
    """A point of a device without errors up to an edge, and without a link beyond it."""
    if step.value + scatter_db * rng.standard_normal() > edge:
        return CurvePoint(step.value, 0, 0, aligned=False)
    return CurvePoint(step.value, step.bits, 0)


@pytest.mark.parametrize(
    "edge", [39.27, *(pytest.param(edge, marks=pytest.mark.campaign) for edge in (25.05, 58.8, 44.44))]
)
def test_a_device_that_drops_out_from_one_step_to_the_next_is_found_without_a_curve(edge):
    rng = np.random.default_rng(7)
    space = SearchSpace(20, 60, TARGET, width=0.5, rising=True, resolution=0.1)
    points = []
    while not isinstance(step := next_step(space, points), Found):
        points.append(dropping_out(rng, step, edge))
        assert len(points) < 20
    assert step.complete
    assert "whatever the curve's shape" in step.words
    sure = bracket_of(points, TARGET, space.confidence, rising=True)
    assert sure.under <= edge <= sure.over
    assert sure.over - sure.under <= space.width + 1e-9
    assert step.bits < 100 / TARGET


def test_a_search_that_gets_nowhere_ends_and_says_so():
    """Levels that scatter by more than the width asked for: no number of points is enough."""
    space = SearchSpace(20, 60, TARGET, width=0.1, rising=True)
    points = [CurvePoint(40.0, 10**7, 1000), CurvePoint(39.0, 10**8, 20)]
    points += [CurvePoint(39.5 + 0.1 * (k % 5), 10**7, 100 + 150 * (k % 3)) for k in range(57)]
    assert not isinstance(next_step(space, points), Found)
    found = next_step(space, [*points, CurvePoint(40.0, 10**7, 700)])
    assert isinstance(found, Found)
    assert not found.complete
    assert found.words.startswith("given up after 60 points. ")


def test_a_level_instead_of_an_attenuation():
    rng = np.random.default_rng(3)
    space = SearchSpace(-60, -20, TARGET, width=0.5, rising=False)
    points = []
    for _ in range(60):
        step = next_step(space, points)
        if isinstance(step, Found):
            break
        point = measured(rng, -step.value, step.errors, step.bits)
        points.append(CurvePoint(step.value, point.bits, point.errors, point.aligned))
    assert step.complete
    assert step.fit.value == pytest.approx(-TRUTH, abs=0.5)


def test_it_follows_from_the_points_alone():
    """A search that was cut anywhere goes on with the same step."""
    rng = np.random.default_rng(4)
    space = SearchSpace(20, 60, TARGET, width=0.8, rising=True)
    _, points = search(rng, space)
    for count in range(len(points)):
        assert next_step(space, points[:count]).value == points[count].x


@pytest.mark.parametrize(("low", "high", "words"), [(45, 60, "is over"), (10, 30, "not over")])
def test_a_crossing_outside_the_limits_is_said(low, high, words):
    found, points = search(np.random.default_rng(5), SearchSpace(low, high, TARGET, 0.5, rising=True))
    assert not found.complete
    assert words in found.words
    assert {p.x for p in points} & {low, high}


def test_it_gives_up_at_its_bits():
    space = SearchSpace(20, 60, TARGET, 0.01, rising=True, most_bits=10**8)
    found, points = search(np.random.default_rng(6), space)
    assert not found.complete
    assert "given up" in found.words
    assert sum(p.bits for p in points[:-1]) < 10**8


@pytest.mark.parametrize(
    "keys",
    [
        {"low": 5, "high": 5},
        {"high": math.nan},
        {"width": 0},
        {"resolution": -1},
        {"target_ber": 0},
        {"target_ber": 0.3},
    ],
)
def test_spaces_that_are_none_are_refused(keys):
    with pytest.raises(ValueError, match=r"limits|width|target"):
        SearchSpace(**({"low": 0, "high": 9, "target_ber": TARGET, "width": 1, "rising": True} | keys))
