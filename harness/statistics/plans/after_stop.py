"""Bounds after a stop that the plan chose, from the exact tails of the plan's own order of outcomes.

Outcomes are ordered from low to high ratios: acceptances by bit ascending, then, where a limit fixed
beforehand ended the run, undecided ones by errors ascending, then rejections by bit descending. The upper
bound is the ratio at which outcomes up to and with the one seen have the probability of the risk, the lower
bound the one at which outcomes from the one seen on have it (Siegmund, 1978, Biometrika 65; from memory).
With this order "accepted" and "the upper bound is at or under the requirement" are the same statement.
"""

from __future__ import annotations

import math
from collections.abc import Callable

from harness.statistics.tails import logit, split_logit

_FAR = 60.0  # logits: 1e-26; no count reaches further
_NEAR_ONE = 36.0  # logits: beyond it a double shows 1


def ratio_where(chance: Callable[[float], float], risk: float, rising: bool, near: float) -> float:
    """The ratio at which `chance` equals `risk`.

    Parameters
    ----------
    chance
        A probability as a function of the true ratio, monotone.
    risk
        Over 0 and under 1.
    rising
        Whether `chance` grows with the ratio (a lower bound is wanted) or falls (an upper one).
    near
        Where to begin.

    Returns
    -------
    float
        0 or 1 where the chance never comes down to the risk: there is no bound on that side.
    """
    sign = 1.0 if rising else -1.0
    target = math.log(risk)

    def excess(u: float) -> float:
        value = chance(float(split_logit(u)[0]))
        return sign * ((math.log(value) if value > 0 else -1e6) - target)

    low = high = max(-_FAR, min(_NEAR_ONE, logit(min(max(near, 1e-25), 1 - 1e-15))))
    at_low = at_high = excess(low)
    step = 0.25
    while at_low > 0:
        if low <= -_FAR:
            return 0.0
        high, at_high = low, at_low
        low = max(-_FAR, low - step)
        at_low, step = excess(low), 2 * step
    while at_high < 0:
        if high >= _NEAR_ONE:
            return 1.0
        low, at_low = high, at_high
        high = min(_NEAR_ONE, high + step)
        at_high, step = excess(high), 2 * step
    return float(split_logit(_bracketed_root(excess, low, at_low, high, at_high))[0])


def _bracketed_root(
    function: Callable[[float], float], low: float, at_low: float, high: float, at_high: float
) -> float:
    """A root between two ends of opposite sign: false position, with bisection wherever that is slow."""
    for turn in range(200):
        width = high - low
        if width <= 4e-15 * max(1.0, abs(low)) or at_low == 0 or at_high == 0:
            break
        middle = low - at_low * width / (at_high - at_low) if turn % 3 else (low + high) / 2
        # Steps a little past the estimate close the bracket from both sides.
        nudge = 1e-15 * max(1.0, abs(middle))
        middle = min(max(middle, low + nudge), high - nudge)
        value = function(middle)
        if value < 0:
            if turn % 3:
                at_high /= 2  # Illinois: the end that stays counts for half
            low, at_low = middle, value
        else:
            if turn % 3:
                at_low /= 2
            high, at_high = middle, value
    return low if abs(at_low) < abs(at_high) else high
