"""Maximum likelihood of the sweep curve: the best shape, and how far its anchor may move (profile likelihood)."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from harness.statistics.curve_model import LEAST_STRETCH, MOST_STRETCH, Array, Counts, Shape, log_likelihood
from harness.statistics.gaussian import inverse_q

MOST_SCATTER_DB = 1.0
_FARTHEST_DB = 60.0  # beyond the points: as good as no bound
_ANCHOR, _STRETCH, _SCATTER, _FLOOR, _BEND = range(5)
_TOLERANCE_DB = 5e-4
_STEADY_DB = 0.3
_GUESS_BER = 1e-4  # where a first line is anchored; any will do
_SCATTER_SCALE = 0.1  # dB: brings the parameters to like sizes for the search


@dataclass(frozen=True, slots=True)
class Best:
    """A shape and its log-likelihood."""

    shape: Shape
    log_likelihood: float


def maximise(
    counts: Counts, start: Shape, *, free: Sequence[int], most_scatter_db: float = MOST_SCATTER_DB
) -> Best:
    """Climb from `start` over the free parameters (indices of the gradient).

    A floor under an anchored BER is kept below it; scatter within 0 and `most_scatter_db`.
    """
    from scipy.optimize import minimize  # only sweeps need it, and it takes long to read

    low, high = float(counts.level.min()), float(counts.level.max())
    limits = {
        _ANCHOR: (low - _FARTHEST_DB, high + _FARTHEST_DB),
        _STRETCH: (math.log(LEAST_STRETCH), math.log(MOST_STRETCH)),
        _SCATTER: (0.0, most_scatter_db / _SCATTER_SCALE),
        _FLOOR: (-30.0, 30.0) if start.anchor_ber else (-80.0, -0.7),
        _BEND: (-0.2, 0.2),
    }

    def cost(values: Array) -> tuple[float, Array]:
        shape, scale = _placed(start, free, values)
        value, gradient = log_likelihood(counts, shape)
        return -value, -gradient[list(free)] * scale

    first = np.array([_value_of(start, name) for name in free])
    found = minimize(
        cost,
        first,
        jac=True,
        method="L-BFGS-B",
        bounds=[limits[name] for name in free],
        options={"maxiter": 60, "ftol": 1e-7, "gtol": 1e-3},
    )
    return Best(_placed(start, free, found.x)[0], -float(found.fun))


def _value_of(shape: Shape, name: int) -> float:
    if name == _FLOOR:
        if shape.anchor_ber is None:
            return math.log(max(shape.floor, 1e-34))
        share = min(max(shape.floor / shape.anchor_ber, 1e-13), 1 - 1e-9)
        return math.log(share / (1 - share))
    return (shape.anchor, math.log(shape.stretch), shape.scatter_db / _SCATTER_SCALE, 0.0, shape.bend)[name]


def _placed(shape: Shape, free: Sequence[int], values: Array) -> tuple[Shape, Array]:
    """Put free values into a shape; also how each parameter moves with its free value."""
    scale = np.ones(len(free))
    for i, (name, value) in enumerate(zip(free, values.tolist(), strict=True)):
        if name == _ANCHOR:
            shape = replace(shape, anchor=value)
        elif name == _STRETCH:
            shape = replace(shape, stretch=math.exp(value))
        elif name == _SCATTER:
            shape = replace(shape, scatter_db=max(value * _SCATTER_SCALE, 0.0))
            scale[i] = _SCATTER_SCALE
        elif name == _BEND:
            shape = replace(shape, bend=value)
        elif shape.anchor_ber is None:
            shape = replace(shape, floor=math.exp(value))
            scale[i] = shape.floor
        else:
            share = 1 / (1 + math.exp(-value))
            shape = replace(shape, floor=shape.anchor_ber * share)
            scale[i] = shape.floor * (1 - share)
    return shape, scale


def fit_plain(counts: Counts, target_ber: float, most_scatter_db: float = MOST_SCATTER_DB) -> Best:
    """Fit the curve without a floor, anchored at the target."""
    best: Best | None = None
    for anchor, stretch in _starts(counts, target_ber, counts.errors > 0):
        start = Shape(anchor, stretch, 0.05, anchor_ber=target_ber)
        found = maximise(counts, start, free=(_ANCHOR, _STRETCH, _SCATTER), most_scatter_db=most_scatter_db)
        if best is None or found.log_likelihood > best.log_likelihood:
            best = found
    assert best is not None
    return best


def _starts(counts: Counts, target_ber: float, seen: NDArray[np.bool_]) -> list[tuple[float, float]]:
    """Anchors and stretches at which to begin: a line through what the counts `seen` suggest, and 1."""
    y, u = counts.level, counts.log_argument * 20 / math.log(10)  # dB of Q's argument
    aim = 20 * math.log10(inverse_q(target_ber))
    starts: list[tuple[float, float]] = []
    if np.count_nonzero(seen) >= 2 and np.ptp(y[seen]) > 0:
        weight = np.minimum(counts.errors[seen], 100.0)
        middle_y, middle_u = np.average(y[seen], weights=weight), np.average(u[seen], weights=weight)
        off_y, off_u = y[seen] - middle_y, u[seen] - middle_u
        slope = float(np.sum(weight * off_y * off_u) / np.sum(weight * off_y * off_y))
        stretch = min(max(slope, LEAST_STRETCH * 1.01), MOST_STRETCH / 1.01)
        starts.append((float(middle_y + (aim - middle_u) / stretch), stretch))
    nearest = int(np.argmin(np.abs(u - aim)))
    starts.append((float(y[nearest] + (aim - u[nearest])), 1.0))
    return starts


def fit_floor(counts: Counts, plain: Best) -> Best | None:
    """Fit the curve with a floor, which may lie over the target; None where there can be none."""
    seen = counts.errors > 0
    if np.count_nonzero(seen) < 3:
        return None
    from_zero = Shape(plain.shape.y0, plain.shape.stretch, plain.shape.scatter_db)
    if plain.shape.scatter_db < _STEADY_DB and log_likelihood(counts, from_zero)[1][_FLOOR] <= 0:
        return None  # the points lie well on the curve, and any floor would make it worse
    ratios = (counts.errors + 0.3) / (counts.bits + 0.6)
    lowest = float(np.min(ratios))
    # The plain fit takes a floor for scatter and a flat curve: begin also from the points well above it.
    above = seen & (ratios > 4 * lowest)
    guesses = [(plain.shape.y0, plain.shape.stretch)]
    guesses += [
        (Shape(anchor, stretch, 0.0, anchor_ber=_GUESS_BER).y0, stretch)
        for anchor, stretch in _starts(counts, _GUESS_BER, above)[:1]
    ]
    best: Best | None = None
    for y0, stretch in guesses:
        start = Shape(y0, stretch, 0.05, floor=0.9 * lowest)
        found = maximise(counts, start, free=(_ANCHOR, _STRETCH, _SCATTER, _FLOOR))
        if best is None or found.log_likelihood > best.log_likelihood:
            best = found
    return best


def fit_bend(counts: Counts, best: Best) -> tuple[Best, ...]:
    """Fit two wider families from the best one: a curve that bends, and one with a scatter without limit."""
    free = (_ANCHOR, _STRETCH, _SCATTER) + ((_FLOOR,) if best.shape.floor else ())
    start = replace(best.shape, scatter_db=max(best.shape.scatter_db, 0.02))
    bent = maximise(counts, start, free=(*free, _BEND))
    if best.shape.scatter_db < 0.98 * MOST_SCATTER_DB:
        return (bent,)
    return bent, maximise(counts, start, free=free, most_scatter_db=20 * MOST_SCATTER_DB)


def anchored(best: Best, target_ber: float) -> Best:
    """Return the same curve with its anchor where it reaches the target; its floor lies below that."""
    shape = best.shape
    at_target = Shape(0.0, shape.stretch, shape.scatter_db, shape.floor, target_ber)
    off = math.log(at_target.argument / math.sqrt(2)) * 20 / math.log(10) / shape.stretch
    return Best(replace(at_target, anchor=shape.y0 + off), best.log_likelihood)


class Profile:
    """Log-likelihood over the anchor, all else at its best.

    Parameters
    ----------
    counts
        What was counted.
    best
        The maximum, anchored at the target; its floor is free where it has one.
    drop
        By how much the log-likelihood falls at a bound: 1.92 for 95 %.
    """

    def __init__(self, counts: Counts, best: Best, drop: float) -> None:
        self._counts = counts
        self._best = best
        self._drop = drop
        self._free = (_STRETCH, _SCATTER, _FLOOR) if best.shape.floor > 0 else (_STRETCH, _SCATTER)
        self._known: list[Best] = [best]

    def bound(self, sign: int) -> float | None:
        """Anchor on one side (-1 worse, +1 better) where the likelihood has fallen; None if it never does."""
        counts, at = self._counts, self._best.shape.anchor
        end = (
            float(counts.level.min()) - _FARTHEST_DB if sign < 0 else float(counts.level.max()) + _FARTHEST_DB
        )
        step, inside, fall_inside = 0.05, at, 0.0
        while True:
            outside = at + sign * step
            if (outside - end) * sign > 0:
                return None
            fall = self._fall(outside)
            if fall > self._drop:
                return self._between(inside, fall_inside, outside, fall)
            inside, fall_inside = outside, fall
            step *= 1.5 if fall > self._drop / 4 else 2.5

    def _between(self, inside: float, fall_inside: float, outside: float, fall_outside: float) -> float:
        """Close in on the bound; falls grow about as squares, so their roots are nearly straight."""
        for turn in range(40):
            if abs(outside - inside) < _TOLERANCE_DB:
                break
            a, b, c = (math.sqrt(max(v, 0.0)) for v in (fall_inside, fall_outside, self._drop))
            share = (c - a) / (b - a) if turn % 3 < 2 and b > a else 0.5
            share = min(max(share, 0.02), 0.98)
            middle = inside + share * (outside - inside)
            fall = self._fall(middle)
            if abs(fall - self._drop) < 1e-3:
                return middle
            if fall > self._drop:
                outside, fall_outside = middle, fall
            else:
                inside, fall_inside = middle, fall
        return (inside + outside) / 2

    def _fall(self, anchor: float) -> float:
        """How far the likelihood lies below its maximum with the anchor held."""
        near = min(self._known, key=lambda known: abs(known.shape.anchor - anchor)).shape
        start = replace(near, anchor=anchor, scatter_db=max(near.scatter_db, 0.02))
        found = maximise(self._counts, start, free=self._free)
        self._known.append(found)
        return self._best.log_likelihood - found.log_likelihood
