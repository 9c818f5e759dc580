"""Which value to measure next, so that the sensitivity is known with the fewest bits.

First by halves: a point is measured until ten errors have come (then its BER is surely over the target) or
until three times the target's reciprocal in bits has passed. Once the crossing lies between two points not
over 1.5 dB apart, points go where bits tell most: errors are cheap where the BER is some ten times the
target, and the curve (`curve`) carries what they tell to the target. Everything follows from the points
measured so far, so a search that was cut goes on where it was.

A device that drops out within a step has no point where errors are cheap: there halving goes on, with bits
enough to be sure at each point, until the crossing is bracketed without a curve (`bracket`).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from harness.statistics.bounds import lower_bound
from harness.statistics.bracket import Bracket, bracket_of
from harness.statistics.curve import FARTHEST, CurveFit, CurvePoint, fit_curve
from harness.statistics.curve_model import Shape
from harness.statistics.notation import ratio

_NEAR_DB = 1.5
_SURE_ERRORS = 10
_MARGIN = 2.0  # what mixing the alternatives costs in evidence
_SURE_BITS = 3  # over the target BER
# Where a round's points go, in multiples of the target, and how many errors each waits for; every other
# round lies between, so that no level's error is met twice.
_ROUNDS = (((30, 100), (10, 100), (3, 60), (1, 30)), ((50, 100), (17, 100), (5.5, 60), (1.7, 40)))
_ALLOWANCE = 3  # a point may take so many times the bits that its errors should need
MOST_POINTS = 60  # with levels that scatter more than what is asked for, there is no end by itself
_CLIFF_AFTER = 2  # points that went where errors should be and found no link


@dataclass(frozen=True, slots=True)
class SearchSpace:
    """What is looked for, and where."""

    low: float  # limits of the value, dB or dBm
    high: float
    target_ber: float
    width: float  # of the bounds, at which the search is done, dB
    rising: bool  # BER rises with the value (attenuation)
    resolution: float = 0.0  # values are multiples of it above `low`; 0: any
    confidence: float = 0.95
    most_bits: int | None = None  # at which the search gives up

    def __post_init__(self) -> None:
        if not (math.isfinite(self.low) and math.isfinite(self.high) and self.low < self.high):
            raise ValueError("the limits of a search are two finite values, the lower one first")
        if not (self.width > 0 and self.resolution >= 0):
            raise ValueError("the width asked is over 0, the resolution not under 0")
        if not 0 < self.target_ber <= 0.1:
            raise ValueError("the target BER of a search lies over 0, and at 0.1 or under")


@dataclass(frozen=True, slots=True)
class Step:
    """A point to measure: until `errors` have come, or `bits` have been compared."""

    value: float
    errors: int
    bits: int
    words: str


@dataclass(frozen=True, slots=True)
class Found:
    """The search is over."""

    fit: CurveFit
    bits: int
    complete: bool  # False: given up, or the target is not crossed within the limits
    words: str


def next_step(space: SearchSpace, points: Sequence[CurvePoint]) -> Step | Found:
    """Say what to measure next, from the points measured so far in their order.

    A point that never aligned counts as surely over the target.
    """
    spent = sum(point.bits for point in points)
    if space.most_bits is not None and spent >= space.most_bits:
        return _given_up(space, points, spent, f"given up after {spent:.3g} bits")
    near = _first_near(space, points)
    if near is None:
        step = _halving(space, points)
        return step if step else _given_up(space, points, spent, _nowhere(space, points))
    sure = bracket_of(points, space.target_ber, space.confidence, space.rising)
    if sure.under is not None and sure.over is not None and abs(sure.over - sure.under) <= space.width + 1e-9:
        return Found(_fit(space, points), spent, True, _sure_words(space, sure))
    if len(points) >= MOST_POINTS:
        return _given_up(space, points, spent, f"given up after {len(points)} points")
    count = len(points) - near
    if count >= _CLIFF_AFTER and (step := _on_a_cliff(space, points)) is not None:
        return step
    if count >= len(_ROUNDS[0]):
        fit = _fit(space, points)
        if fit.lower is not None and fit.upper is not None and fit.upper - fit.lower <= space.width:
            return Found(fit, spent, True, fit.words)
    return _refining(space, points, count)


def _fit(space: SearchSpace, points: Sequence[CurvePoint]) -> CurveFit:
    return fit_curve(points, space.target_ber, space.confidence, space.rising)


def _given_up(space: SearchSpace, points: Sequence[CurvePoint], spent: int, why: str) -> Found:
    fit = _fit(space, points)
    aligned = any(point.aligned for point in points)
    return Found(fit, spent, False, f"{why}. {fit.words}" if aligned else why)


def _quality(space: SearchSpace, value: float) -> float:
    return -value if space.rising else value


def _over(space: SearchSpace, point: CurvePoint) -> bool:
    if not point.aligned:
        return True
    return point.bits > 0 and lower_bound(point.errors, point.bits, 0.975) > space.target_ber


def _bracket(space: SearchSpace, points: Sequence[CurvePoint]) -> tuple[float | None, float | None]:
    """Qualities between which the crossing lies: the best that is over, the worst beyond that is not."""
    over = [_quality(space, p.x) for p in points if _over(space, p)]
    best = max(over, default=-math.inf)
    under = [_quality(space, p.x) for p in points if not _over(space, p) and _quality(space, p.x) > best]
    return (best if over else None), (min(under) if under else None)


def _first_near(space: SearchSpace, points: Sequence[CurvePoint]) -> int | None:
    """After how many points the halving was done; None: not yet."""
    for count in range(2, len(points) + 1):
        over, under = _bracket(space, points[:count])
        if over is not None and under is not None and under - over <= max(_NEAR_DB, space.resolution) + 1e-9:
            return count
    return None


def _halving(space: SearchSpace, points: Sequence[CurvePoint]) -> Step | None:
    """The middle of where the crossing may lie; an end where only it is left; None where there is none."""
    ends = sorted((_quality(space, space.low), _quality(space, space.high)))
    over, under = _bracket(space, points)
    low, high = ends[0] if over is None else over, ends[1] if under is None else under
    middle = (low + high) / 2
    if high - low <= max(_NEAR_DB, space.resolution):
        if over is None and under is not None:
            middle = ends[0]
        elif under is None and over is not None:
            middle = ends[1]
    value = _placed(space, middle)
    if any(abs(point.x - value) < 1e-9 for point in points):
        # The grid has nothing between: the end that is not tried yet, or nothing.
        value = _placed(space, ends[0] if over is None else ends[1])
        if any(abs(point.x - value) < 1e-9 for point in points):
            return None
    bits = math.ceil(_SURE_BITS / space.target_ber)
    return Step(value, _SURE_ERRORS, bits, "looking for the crossing by halves")


def _nowhere(space: SearchSpace, points: Sequence[CurvePoint]) -> str:
    over, under = _bracket(space, points)
    if not any(point.aligned for point in points):
        return "nothing was ever aligned at any value tried, up to the limit"
    if under is None:
        return "the BER is over the target at every value tried, up to the limit"
    if over is None:
        return "the BER is not over the target at any value tried, up to the limit"
    return "no further value lies between the two points that bracket the target"


def _refining(space: SearchSpace, points: Sequence[CurvePoint], count: int) -> Step:
    """The next point of the present round, where the curve so far expects its BER."""
    order, place = divmod(count, len(_ROUNDS[0]))
    times, errors = _ROUNDS[order % len(_ROUNDS)][place]
    errors *= 1 << min(order // 2, 6)  # rounds grow: a search for narrow bounds needs few values
    wanted = min(times * space.target_ber, 0.3)
    shape = _present_shape(space, points)
    # Where the BER is what is wanted: the same curve, anchored there.
    offset = math.log(replace(shape, anchor_ber=wanted).argument / shape.argument)
    value = _placed(space, shape.anchor + offset * 20 / math.log(10) / shape.stretch)
    bits = math.ceil(_ALLOWANCE * errors / wanted)
    return Step(value, errors, bits, f"where the BER should be {wanted:.1e}")


def _on_a_cliff(space: SearchSpace, points: Sequence[CurvePoint]) -> Step | None:
    """The next point where no errors are to be had between a link that works and none; None: they are."""
    over, under = _bracket(space, points)
    if over is None or under is None or any(_tells(space, point) for point in points):
        return None
    # A point looks at the end that works once more where the grid has nothing between, or that is near enough.
    middle = under if under - over <= max(space.width, space.resolution) else (over + under) / 2
    value = _placed(space, middle)
    if any(abs(point.x - value) < 1e-9 and _over(space, point) for point in points):
        value = _placed(space, under)
    number = len(points) + 1
    needed = math.log(number * (number + 1) / (1 - space.confidence)) + _MARGIN
    return Step(
        value, _SURE_ERRORS, math.ceil(2 * needed / space.target_ber), "at the edge of a link that drops out"
    )


def _tells(space: SearchSpace, point: CurvePoint) -> bool:
    """Whether its errors tell of the curve: it is over the target, and not hopelessly so."""
    if not point.aligned or not _over(space, point):
        return False
    return lower_bound(point.errors, point.bits, 0.975) <= FARTHEST * space.target_ber


def _sure_words(space: SearchSpace, sure: Bracket) -> str:
    return (
        f"the BER is surely under {ratio(space.target_ber)} at {sure.under:g} and over it at {sure.over:g}, whatever "
        "the curve's shape"
    )


def _present_shape(space: SearchSpace, points: Sequence[CurvePoint]) -> Shape:
    """The curve as far as it is known, in quality, never stretched beyond a half to twice the textbook's."""
    fit = _fit(space, points)
    over, under = _bracket(space, points)
    if fit.value is not None and fit.stretch is not None:
        anchor, stretch = _quality(space, fit.value), min(max(fit.stretch, 0.5), 2.0)
    else:
        known = [q for q in (over, under) if q is not None]
        anchor, stretch = sum(known) / len(known), 1.0
    if over is not None and under is not None:
        anchor = min(max(anchor, over - _NEAR_DB), under + _NEAR_DB)
    return Shape(anchor, stretch, 0.0, anchor_ber=space.target_ber)


def _placed(space: SearchSpace, quality: float) -> float:
    """The value of a quality, within the limits and on the grid."""
    value = min(max(-quality if space.rising else quality, space.low), space.high)
    if space.resolution:
        steps = round((value - space.low) / space.resolution)
        most = math.floor((space.high - space.low) / space.resolution + 1e-9)
        value = round(space.low + min(steps, most) * space.resolution, 9)
    return value
