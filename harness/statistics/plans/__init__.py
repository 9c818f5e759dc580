"""Plans: rules that turn counts into PASS, FAIL or UNDECIDED, with risks that are stated beforehand."""

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

__all__ = [
    "KINDS",
    "Boundary",
    "Deciding",
    "Decision",
    "Ended",
    "Plan",
    "PlanError",
    "Risks",
    "StopBounds",
    "StopChance",
    "make_plan",
]
