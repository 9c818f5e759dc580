"""From a requirement to its plan."""

from __future__ import annotations

from harness.statistics.plans.curtailed import CurtailedPlan
from harness.statistics.plans.fixed import FixedPlan
from harness.statistics.plans.plan import Plan, PlanError, check_requirement
from harness.statistics.plans.sequential import SequentialPlan

KINDS = ("fixed", "curtailed", "sequential")


def make_plan(
    kind: str,
    ber: float,
    confidence: float = 0.95,
    accept_errors: int = 0,
    margin: float = 2.0,
    producer_risk: float = 0.05,
) -> Plan:
    """Make a plan that demonstrates `ber` with `confidence`.

    Parameters
    ----------
    kind
        "fixed", "curtailed" or "sequential".
    ber
        The required ratio, over 0 and under 1.
    confidence
        One minus the consumer's risk: the probability that a unit exactly at the requirement fails.
    accept_errors
        Fixed and curtailed: the most errors with which it accepts. A sequential plan finds its own.
    margin
        How many times better than required a good unit is.
    producer_risk
        Sequential: the probability with which a good unit may fail.

    Raises
    ------
    PlanError
        For what no plan can be made of.

    Examples
    --------
    >>> make_plan("fixed", 1e-6).bits
    2995731
    """
    check_requirement(ber, confidence, margin, producer_risk)
    if kind == "fixed":
        return FixedPlan(ber, confidence, margin, producer_risk, accept_errors)
    if kind == "curtailed":
        return CurtailedPlan(ber, confidence, margin, producer_risk, accept_errors)
    if kind == "sequential":
        return SequentialPlan(ber, confidence, margin, producer_risk)
    raise PlanError(f"there is no plan named {kind!r}", f"choose one of {', '.join(KINDS)}")
