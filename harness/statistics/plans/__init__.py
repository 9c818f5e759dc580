"""Plans: rules that turn counts into PASS, FAIL or UNDECIDED, with risks that are stated beforehand."""

from harness.statistics.plans.drawing import PLAIN, Ink, draw_stairs
from harness.statistics.plans.making import KINDS, make_plan
from harness.statistics.plans.plan import (
    Boundary,
    Deciding,
    Decision,
    Ended,
    Plan,
    PlanError,
    Risks,
    StopBounds,
    StopChance,
)
from harness.statistics.plans.words import describe, good_unit_fails

__all__ = [
    "KINDS",
    "PLAIN",
    "Boundary",
    "Deciding",
    "Decision",
    "Ended",
    "Ink",
    "Plan",
    "PlanError",
    "Risks",
    "StopBounds",
    "StopChance",
    "describe",
    "draw_stairs",
    "good_unit_fails",
    "make_plan",
]
