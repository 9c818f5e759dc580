"""The curve of a sweep: BER over attenuation or level, and the sensitivity at a target BER with its bounds.

Points surely over 100 times the target, and points that were never aligned, enter only as "worse than ten
times the target": where a device's curve is of another family, such points would drag the fit along.
A floor is fitted only where it raises twice the log-likelihood by 2.71. Bounds are where the profile
likelihood has fallen by 1.92 (at 95 %), by more where few points carry it: the level scatter is estimated
from them too, as a standard deviation in Student's t.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import fdtrc, gammaincinv, stdtrit

from harness.statistics.curve_fit import Best, Profile, anchored, fit_bend, fit_floor, fit_plain
from harness.statistics.curve_model import LEAST_STRETCH, MOST_STRETCH, Array, Counts, Shape, telling_points
from harness.statistics.notation import ratio

FARTHEST = 100  # times the target BER: what lies surely above is not fitted
WORSE = 10  # times the target BER: all that such points say
FLOOR_GAIN = 2.71  # of twice the log-likelihood
BAD_FIT = 0.01
_LOST_BER = 0.05  # a link that is never aligned may have no worse a BER than this


@dataclass(frozen=True, slots=True)
class CurvePoint:
    """One point of a sweep."""

    x: float  # dB or dBm
    bits: int  # compared
    errors: int
    aligned: bool = True  # False: never; its counts say nothing


@dataclass(frozen=True, slots=True)
class CurveFit:
    """A fitted curve; levels in the sweep's own unit."""

    target_ber: float
    confidence: float
    rising: bool | None  # BER rises with x; None: the points do not tell
    value: float | None  # x at which the curve reaches the target
    lower: float | None  # of the two bounds on x, the smaller; None: no bound on that side
    upper: float | None
    fitted: bool  # False: no curve stands behind `lower` and `upper`, at best the two bracketing points
    x0: float | None = None  # where the curve without its floor is Q(sqrt 2)
    stretch: float | None = None  # 1 for a textbook curve in dB
    floor: float = 0.0
    scatter_db: float | None = None
    goodness: float | None = None  # p-value of the family; None where too few points could tell
    bracket: tuple[float | None, float | None] = (None, None)  # surely over, surely under the target
    used: tuple[int, ...] = ()  # indices of points whose counts are fitted
    only_worse: tuple[int, ...] = ()  # indices of points that say only "worse"
    words: str = ""

    def ber(self, x: float) -> float | None:
        """BER of the fitted curve at `x`, without scatter; None where nothing is fitted."""
        if self.x0 is None or self.stretch is None:
            return None
        sign = -1.0 if self.rising else 1.0
        return float(Shape(sign * self.x0, self.stretch, 0.0, self.floor).ber(np.array(sign * x)))


def fit_curve(
    points: Sequence[CurvePoint],
    target_ber: float,
    confidence: float = 0.95,
    rising: bool | None = None,
    unit: str = "dB",
) -> CurveFit:
    """Fit the curve and find the sensitivity.

    Parameters
    ----------
    points
        In any order; several may lie at the same x.
    target_ber
        Within 0 to 0.1.
    confidence
        Of the two-sided bounds.
    rising
        Whether BER rises with x (attenuation) or falls (level); None: found from the points.
    unit
        For the words.

    Raises
    ------
    ValueError
        If the target or a point is none.

    Notes
    -----
    The stretch lies within 1/4 to 4. With few errors and few points a side may have no bound: None, said so.
    """
    _check(points, target_ber, confidence)
    sure = _intervals(points)
    if rising is None:
        rising = _direction(points, sure)
    if rising is None:
        return CurveFit(
            target_ber,
            confidence,
            None,
            None,
            None,
            None,
            fitted=False,
            words="The points do not tell in which direction the BER changes: no sensitivity.",
        )
    sign = -1.0 if rising else 1.0
    counts, used, only_worse = _counts(points, sure, target_ber, sign)
    bracket = _bracket(points, sure, target_ber, sign)
    why = _too_little(points, counts, used, only_worse)
    if why:
        return _without_fit(target_ber, confidence, rising, bracket, used, only_worse, why)
    plain = fit_plain(counts, target_ber)
    best, floor = _with_floor(counts, plain)
    goodness = _goodness(counts, best, floor, target_ber)
    if goodness is not None and goodness < BAD_FIT:
        return _without_fit(
            target_ber,
            confidence,
            rising,
            bracket,
            used,
            only_worse,
            f"The points do not follow a curve of this family (goodness of fit {goodness:.2g})",
            goodness,
        )
    over = floor >= target_ber
    value = low = high = None
    if not over:
        at_target = anchored(best, target_ber) if floor else best
        value = sign * at_target.shape.anchor
        telling = telling_points(counts, at_target.shape)
        profile = Profile(counts, at_target, likelihood_drop(telling, confidence))
        bounds = (profile.bound(-1), profile.bound(+1))
        low, high = (None if b is None else sign * b for b in (bounds[::-1] if rising else bounds))
    shape = best.shape
    return CurveFit(
        target_ber,
        confidence,
        rising,
        value,
        low,
        high,
        fitted=True,
        x0=sign * shape.y0,
        stretch=shape.stretch,
        floor=floor,
        scatter_db=shape.scatter_db,
        goodness=goodness,
        bracket=bracket,
        used=used,
        only_worse=only_worse,
        words=_words(target_ber, confidence, value, low, high, shape, floor, unit),
    )


def likelihood_drop(points: int, confidence: float) -> float:
    """By how much the log-likelihood falls at a bound.

    With a scatter known this is half the chi-square quantile, 1.92 at 95 %. Estimated from m telling points
    with a line of two parameters it is (m/2) ln(1 + t^2/(m - 2)) with Student's t of m - 2 degrees of
    freedom, exactly so for normal errors; fewer than three points count as three.
    """
    m = max(3, points)
    t = float(stdtrit(m - 2, 0.5 + confidence / 2))
    return m / 2 * math.log1p(t * t / (m - 2))


def _check(points: Sequence[CurvePoint], target_ber: float, confidence: float) -> None:
    if not 0 < target_ber <= 0.1:
        raise ValueError("the target BER of a sensitivity lies over 0, and at 0.1 or under")
    if not 0 < confidence < 1:
        raise ValueError("the confidence lies between 0 and 1")
    for point in points:
        if not math.isfinite(point.x):
            raise ValueError("a point of the sweep has no finite value")
        if not 0 <= point.errors <= point.bits:
            raise ValueError("errors lie between 0 and the bits compared")


def _intervals(points: Sequence[CurvePoint]) -> Array:
    """Bounds that hold each point's BER, at 97.5 % on either side: shape (points, 2).

    Garwood's, which are wider than need be where errors are dense. Never aligned: anything over 0.05.
    """
    found = np.empty((len(points), 2))
    for i, point in enumerate(points):
        if not point.aligned:
            found[i] = _LOST_BER, 1.0
        elif not point.bits:
            found[i] = 0.0, 1.0
        else:
            low = float(gammaincinv(point.errors, 0.025)) if point.errors else 0.0
            found[i] = low / point.bits, float(gammaincinv(point.errors + 1, 0.975)) / point.bits
    return found


def _direction(points: Sequence[CurvePoint], sure: Array) -> bool | None:
    """Whether BER rises with x: the sign of the pairs that differ surely; None where none does."""
    x = np.array([point.x for point in points])
    low, high = sure[:, 0], sure[:, 1]
    differs = low[:, None] > high[None, :]
    score = int(np.sum(np.sign(x[:, None] - x[None, :]) * differs))
    return None if score == 0 else score > 0


def _counts(
    points: Sequence[CurvePoint], sure: Array, target_ber: float, sign: float
) -> tuple[Counts, tuple[int, ...], tuple[int, ...]]:
    """Sort points into those whose counts are fitted and those that say only "worse"."""
    used: list[int] = []
    worse: list[int] = []
    for i, point in enumerate(points):
        if not point.aligned or sure[i, 0] > FARTHEST * target_ber:
            worse.append(i)
        elif point.bits:
            used.append(i)

    def levels(which: list[int]) -> Array:
        return np.array([sign * points[i].x for i in which], dtype=np.float64)

    counts = Counts(
        level=levels(used),
        bits=np.array([points[i].bits for i in used], dtype=np.float64),
        errors=np.array([points[i].errors for i in used], dtype=np.float64),
        worse=levels(worse),
        worse_ber=min(WORSE * target_ber, max(_LOST_BER, target_ber)),
    )
    return counts, tuple(used), tuple(worse)


def _bracket(
    points: Sequence[CurvePoint], sure: Array, target_ber: float, sign: float
) -> tuple[float | None, float | None]:
    """The best point that is surely over the target, and the worst one beyond it that is surely under."""
    levels = sign * np.array([point.x for point in points])
    over = levels[sure[:, 0] > target_ber]
    best_over = float(over.max()) if len(over) else -math.inf
    under = levels[(sure[:, 1] < target_ber) & (levels > best_over)]
    return (sign * best_over if len(over) else None), (sign * float(under.min()) if len(under) else None)


def _too_little(
    points: Sequence[CurvePoint], counts: Counts, used: tuple[int, ...], only_worse: tuple[int, ...]
) -> str:
    """Why no curve can be fitted, in words; empty where one can."""
    if not any(point.aligned for point in points):
        return "No point was ever aligned"
    if not used or (counts.errors.sum() == 0 and not only_worse):
        return "No point near the target has errors"
    if len({points[i].x for i in (*used, *only_worse)}) < 2:
        return "All points lie at one value"
    return ""


def _with_floor(counts: Counts, plain: Best) -> tuple[Best, float]:
    """The curve with a floor where that is worth it; and the floor, 0 without."""
    floored = fit_floor(counts, plain)
    if floored and 2 * (floored.log_likelihood - plain.log_likelihood) >= FLOOR_GAIN:
        return floored, floored.shape.floor
    return plain, 0.0


def _goodness(counts: Counts, best: Best, floor: float, target_ber: float) -> float | None:
    """p-value of the family against a bent curve and against a scatter of over 1 dB.

    Each by the likelihood ratio, turned into an F statistic since the scatter comes from the same few
    points (exactly so for normal errors); doubled, since there are two.
    """
    at_target = anchored(best, target_ber) if 0 < floor < target_ber else best
    points = telling_points(counts, best.shape)
    left = points - 3
    if left < 1:
        return None
    gains = [2 * (wider.log_likelihood - best.log_likelihood) for wider in fit_bend(counts, at_target)]
    ratios = [left * math.expm1(max(gain, 0.0) / points) for gain in gains]
    return min(1.0, 2 * min(float(fdtrc(1, left, ratio)) for ratio in ratios))


def _without_fit(
    target_ber: float,
    confidence: float,
    rising: bool,
    bracket: tuple[float | None, float | None],
    used: tuple[int, ...],
    only_worse: tuple[int, ...],
    why: str,
    goodness: float | None = None,
) -> CurveFit:
    over, under = bracket
    low, high = (over, under) if not rising else (under, over)
    between = (
        f"the target {ratio(target_ber)} is crossed between the points at {over:g} (over) and {under:g} (under)"
        if over is not None and under is not None
        else "the points do not lie surely on both sides of the target"
    )
    return CurveFit(
        target_ber,
        confidence,
        rising,
        None,
        low,
        high,
        fitted=False,
        goodness=goodness,
        bracket=bracket,
        used=used,
        only_worse=only_worse,
        words=f"{why}: {between}.",
    )


def _words(
    target_ber: float,
    confidence: float,
    value: float | None,
    low: float | None,
    high: float | None,
    shape: Shape,
    floor: float,
    unit: str,
) -> str:
    if value is None:
        levels_off = f"The curve levels off at a BER of {ratio(floor, 2)}"
        return f"{levels_off}, over the target {ratio(target_ber)}: no sensitivity."
    shown = [f"{b:.2f}" if b is not None else "no bound" for b in (low, high)]
    said = [
        f"BER {ratio(target_ber)} is reached at {value:.2f} {unit} ({shown[0]} to {shown[1]}, "
        f"{confidence * 100:g} %)."
    ]
    if floor:
        said.append(f"The curve levels off at a BER of {ratio(floor, 2)}.")
    if shape.scatter_db >= 0.005:
        said.append(f"Levels scatter by {shape.scatter_db:.2f} dB from point to point.")
    if min(shape.stretch / LEAST_STRETCH, MOST_STRETCH / shape.stretch) < 1.001:
        said.append("The curve is as steep or as flat as the family allows: look at the points.")
    return " ".join(said)
