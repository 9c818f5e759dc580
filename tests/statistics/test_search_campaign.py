"""The bounds of a search hold the crossing although its points and its end follow from what was counted."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import ndtr

from harness.statistics.bracket import bracket_of
from harness.statistics.curve import CurvePoint
from harness.statistics.gaussian import inverse_q
from harness.statistics.search import Found, SearchSpace, next_step

SEARCHES = 150
LOST_OVER = 0.05


def carry_out(rng, target: float, crossing: float, stretch: float, scatter_db: float):
    """Search against a curve of the family, with a level error of its own at each point."""
    needed_db = 20 * math.log10(inverse_q(target) / math.sqrt(2)) / stretch
    space = SearchSpace(20, 60, target, width=0.5, rising=True, resolution=0.1)
    points: list[CurvePoint] = []
    while not isinstance(step := next_step(space, points), Found):
        level = needed_db + crossing - step.value + scatter_db * rng.standard_normal()
        p = float(ndtr(-math.sqrt(2) * 10 ** (level * stretch / 20)))
        if p > LOST_OVER:
            points.append(CurvePoint(step.value, 0, 0, aligned=False))
            continue
        needed = step.errors + rng.gamma(step.errors) / max(p, 1e-30)
        if needed <= step.bits:
            points.append(CurvePoint(step.value, int(needed), step.errors))
        else:
            errors = min(int(rng.poisson(step.bits * p)), step.errors - 1)
            points.append(CurvePoint(step.value, step.bits, errors))
    return step, points


@pytest.mark.campaign
@pytest.mark.parametrize("scatter_db", [0.0, 0.1])
@pytest.mark.parametrize("target", [1e-6, 1e-3])
def test_bounds_of_searches_hold_the_crossing(target, scatter_db):
    """At a true 0.95, fewer than 133 of 150 come once in 1 000; the bracket misses far less often than in 7.

    The bracket takes a setting's level as it is: with scatter it is not judged.
    """
    rng = np.random.default_rng(7)
    held = missed = complete = 0
    spent = []
    for _ in range(SEARCHES):
        crossing, stretch = rng.uniform(25, 55), rng.choice([0.8, 1.0, 1.3])
        found, points = carry_out(rng, target, crossing, stretch, scatter_db)
        complete += found.complete
        held += bool(found.fit.lower is not None and found.fit.upper is not None) and (
            found.fit.lower <= crossing <= found.fit.upper
        )
        sure = bracket_of(points, target, 0.95, rising=True)
        missed += (sure.under is not None and sure.under > crossing) or (
            sure.over is not None and sure.over < crossing
        )
        spent.append(found.bits * target)
    print(f"{target:g}, {scatter_db} dB: {held} of {SEARCHES} hold, bracket missed {missed}", end="; ")
    print(f"{complete} complete, {np.mean(spent):.0f} bits over the target on average")
    assert complete >= 0.97 * SEARCHES
    assert held >= 133
    if not scatter_db:
        assert missed <= 7
