"""Between which two values a search has surely crossed its target, whatever the curve's shape.

All that is supposed is that errors are independent and that the BER never falls on the way to worse
conditions. At each point two things are put to the test: that the BER is at or under the target, and that it
is at or over it. The likelihood ratio, mixed over alternatives, is a non-negative supermartingale while the
supposition holds, so it ever reaches 1/a with probability a at most (Ville, 1939): wherever counting stops,
and whatever stops it. The i-th point gets the share 1/(i(i+1)) of the whole risk; these shares sum to one,
however many points there are. A point lies on one side of the crossing, so that only one of the two mistakes
can be made at it: both ends hold together with the stated confidence.

What is not covered is a level that differs from setting to setting: a point means its own, true level.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from harness.statistics.curve import CurvePoint

_OVER = (1.5, 2.0, 4.0, 30.0, 1000.0)  # alternatives, times the target
_UNDER = (0.0, 0.25, 0.5, 2 / 3)


@dataclass(frozen=True, slots=True)
class Bracket:
    """The BER is under the target at one value and over it at the other; None: at no point so surely."""

    under: float | None
    over: float | None
    confidence: float


def log_evidence(errors: int, bits: int, ber: float) -> tuple[float, float]:
    """Weigh a count against a BER.

    Returns
    -------
    tuple of float
        Logarithms of the evidence that the true BER lies over, and under, `ber`; either grows beyond ln(1/a)
        with probability a at most where that is not so.
    """
    over = [_log_ratio(errors, bits, ber, times) for times in _OVER if times * ber < 1]
    under = [_log_ratio(errors, bits, ber, times) for times in _UNDER]
    return _log_mean(over), _log_mean(under)


def _log_ratio(errors: int, bits: int, ber: float, times: float) -> float:
    if times == 0.0:
        return -math.inf if errors else -bits * math.log1p(-ber)
    return errors * math.log(times) + (bits - errors) * (math.log1p(-times * ber) - math.log1p(-ber))


def _log_mean(values: Sequence[float]) -> float:
    top = max(values, default=-math.inf)
    if top == -math.inf:
        return top
    return top + math.log(sum(math.exp(value - top) for value in values) / len(values))


def bracket_of(points: Sequence[CurvePoint], target_ber: float, confidence: float, rising: bool) -> Bracket:
    """Bracket the crossing.

    Parameters
    ----------
    points
        In the order in which they were measured. One that never aligned is surely over the target.
    rising
        Whether BER rises with x.

    Notes
    -----
    Where the ends contradict each other there is no bracket: the BER does not change in one way only.
    """
    sign = -1.0 if rising else 1.0
    over, under = -math.inf, math.inf  # in quality: more is better
    for number, point in enumerate(points, 1):
        needed = math.log(number * (number + 1) / (1 - confidence))
        more, less = (
            log_evidence(point.errors, point.bits, target_ber) if point.aligned else (math.inf, -math.inf)
        )
        if more >= needed:
            over = max(over, sign * point.x)
        if less >= needed:
            under = min(under, sign * point.x)
    if over >= under:
        return Bracket(None, None, confidence)
    return Bracket(
        sign * under if under < math.inf else None, sign * over if over > -math.inf else None, confidence
    )
