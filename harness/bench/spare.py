"""Time that is left over before ``finish_by``: points that matter and have few errors are visited again."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from harness.assess.assessment import PointAssessment
from harness.bench.schedule import ENOUGH_ERRORS
from harness.bench.terms import StopRules
from harness.bench.visits import Visit
from harness.profile.sweeps import Sweep

AGAIN = "there is time left before the sweep shall be over"
LEAST_S = 10.0  # less is not worth a visit
AT_ONCE = 4  # the time is shared among so many points at most
SURELY_UNDER = 30.0  # bits over the target BER without an error: more tell nothing of the sensitivity


@dataclass(slots=True)
class _Sum:
    """What the visits to one setting have together."""

    values: dict[str, float]
    bits: int = 0
    errors: int = 0


def visit_again(
    sweep: Sweep, done: Sequence[PointAssessment], seconds: float, number: int, errors: int | None = None
) -> Visit | None:
    """Choose the setting that more bits would tell most of; None where none would, or time is too short.

    With a target BER those are the settings nearest to it, else those with the fewest errors.

    Parameters
    ----------
    seconds
        That are left.
    number
        Of the visit.
    errors
        The profile's own limit of errors for a point.
    """
    if seconds < LEAST_S:
        return None
    sums: dict[tuple[tuple[str, float], ...], _Sum] = {}
    for point in done:
        # A point on which a plan decides is never measured again: that would be a second try.
        if point.plan is None and not point.facts.get("reference") and not point.moved:
            found = sums.setdefault(tuple(sorted(point.values.items())), _Sum(dict(point.values)))
            found.bits += point.tally.compared
            found.errors += point.tally.errors
    enough = min(ENOUGH_ERRORS, errors or ENOUGH_ERRORS)
    target = sweep.sensitivity_ber
    open_ = [s for s in sums.values() if s.bits and s.errors < enough and not _is_settled(s, target)]
    if not open_:
        return None
    chosen = min(open_, key=lambda s: _distance(s, target))
    share = max(LEAST_S, seconds / min(AT_ONCE, len(open_)))
    return Visit(
        number,
        chosen.values,
        stop=StopRules(None, min(share, seconds), enough - chosen.errors),
        facts={"again": True},
    )


def _is_settled(found: _Sum, target: float | None) -> bool:
    return target is not None and not found.errors and found.bits * target > SURELY_UNDER


def _distance(found: _Sum, target: float | None) -> float:
    """How little a setting tells: from the target, in the logarithm of BER, or by the errors that it has."""
    if target is None:
        return float(found.errors)
    return abs(math.log((found.errors + 0.5) / found.bits / target))
