"""A sweep or a search as a curve: points in order of the condition, fit, sensitivity, drift and hysteresis."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from statistics import NormalDist
from typing import Any

from harness.assess.assessment import PointAssessment
from harness.assess.requirement import curve_axis
from harness.assess.words import percent, ratio
from harness.statistics.bracket import Bracket, bracket_of
from harness.statistics.comparing import compare_counts
from harness.statistics.conditions import rises_with
from harness.statistics.curve import CurveFit, CurvePoint, fit_curve

DEFAULT_CONFIDENCE = 0.95
NOTICEABLE = 0.99  # confidence at which drift and hysteresis are called


@dataclass(frozen=True, slots=True)
class Curve:
    """The points of one axis, all else being equal, with what was fitted to them."""

    instrument: str
    unit: str
    at: Mapping[str, float]  # the other axes' values
    points: tuple[PointAssessment, ...]  # in order of the axis
    fit: CurveFit | None
    target_ber: float | None
    level_at_value: float | None = None  # dBm at the device's port at the sensitivity
    level_uncertainty_db: float | None = None  # standard uncertainty, of the set-up
    level_bounds: tuple[float | None, float | None] = (None, None)  # dBm, the set-up's uncertainty included
    theory_db: float | None = None  # how far the sensitivity lies from the textbook curve; positive: worse
    remarks: tuple[str, ...] = field(default=())
    bracket: Bracket | None = None  # of a search: what is sure without a curve
    sure: Bracket | None = None  # the same of every curve with a target, at its confidence
    contrary: str = ""  # why its direction cannot be believed; no verdict rests on it then

    def sensitivity(self) -> dict[str, Any] | None:
        """JSON of the sensitivity; None where no target was set."""
        if self.target_ber is None or self.fit is None:
            return None
        return {
            "ber": self.target_ber,
            "instrument": self.instrument,
            "value": self.fit.value,
            "unit": self.unit,
            "lower": self.fit.lower,
            "upper": self.fit.upper,
            "confidence": self.fit.confidence,
            "goodness": self.fit.goodness,
            "scatter_db": self.fit.scatter_db,
            "floor": self.fit.floor,
            "level_dbm": self.level_at_value,
            "level_uncertainty_db": self.level_uncertainty_db,
            "level_lower_dbm": self.level_bounds[0],
            "level_upper_dbm": self.level_bounds[1],
            "theory_distance_db": self.theory_db,
            "words": " ".join([self.fit.words, *(r for r in self.remarks if "extrapolated" in r)]),
            **({"at": dict(self.at)} if self.at else {}),
            **self._of_the_search(),
        }

    def _of_the_search(self) -> dict[str, Any]:
        if self.bracket is None:
            return {}
        sure = {"under": self.bracket.under, "over": self.bracket.over, "confidence": self.bracket.confidence}
        return {"bits": sum(p.tally.received for p in self.points), "without_a_curve": sure}


def curves_of(settings: Mapping[str, Any], points: Sequence[PointAssessment]) -> list[Curve]:
    """Sort a sweep's points into curves along one axis, one for each setting of the others."""
    name = curve_axis(settings)
    if not name:
        return []
    groups: dict[tuple[tuple[str, float], ...], list[PointAssessment]] = {}
    for point in points:
        if name not in point.values or not _was_measured(point):
            continue
        rest = tuple(sorted((key, value) for key, value in point.values.items() if key != name))
        groups.setdefault(rest, []).append(point)
    return [_curve(settings, name, dict(rest), group) for rest, group in groups.items()]


def _was_measured(point: PointAssessment) -> bool:
    """Whether a point says anything: it was measured to its end, be it without a single aligned bit.

    Nothing does whose conditions did not stay where they were set.
    """
    return (
        point.ended_by is not None
        and not point.moved
        and (point.tally.compared > 0 or point.ended_by not in ("interrupted", "fault"))
    )


def _curve(
    settings: Mapping[str, Any], name: str, rest: dict[str, float], points: list[PointAssessment]
) -> Curve:
    sweep = settings.get("sweep") or {}
    target = sweep.get("sensitivity_ber")
    unit = str((points[0].facts.get("units") or {}).get(name, ""))
    confidence = float((settings.get("requirement") or {}).get("confidence") or DEFAULT_CONFIDENCE)
    fit = bracket = sure = None
    search, rising, contrary = settings.get("search"), _rises_with(settings, name), ""
    counted = [_counted(p, name) for p in points]
    if search:
        target, confidence = search["ber"], float(search["confidence"])
        fit, bracket = _searched(counted, float(target), confidence, rising is True, unit)
        sure = bracket
    elif target is not None:
        fit = fit_curve(counted, float(target), confidence, unit=unit or "dB")
        if fit.rising is None and rising is not None:  # too few points that differ: what it sets says it
            fit = fit_curve(counted, float(target), confidence, rising, unit=unit or "dB")
        contrary = _contrary(fit, rising, name)
        sure = bracket_of(counted, float(target), confidence, bool(fit.rising))
    level, uncertainty = _level(points, name, fit.value if fit else None)
    return Curve(
        instrument=name,
        unit=unit,
        at=rest,
        points=tuple(sorted(points, key=lambda p: p.values[name])),
        fit=fit,
        target_ber=target,
        level_at_value=level,
        level_uncertainty_db=uncertainty,
        level_bounds=_level_bounds(points, name, fit) if fit else (None, None),
        theory_db=_theory_distance(sweep.get("theory"), fit),
        bracket=bracket,
        sure=sure,
        contrary=contrary,
        remarks=()
        if search
        else (
            *([contrary] if contrary else []),
            *_beyond(points, name, fit),
            *_drift(points, name),
            *_hysteresis(points, name),
        ),
    )


def _rises_with(settings: Mapping[str, Any], name: str) -> bool | None:
    """Whether the BER rises with what an instrument sets; None where its quantity does not say."""
    quantity = str(((settings.get("instruments") or {}).get(name) or {}).get("quantity") or "").casefold()
    return rises_with(quantity)


def _contrary(fit: CurveFit, rising: bool | None, name: str) -> str:
    """Say that the BER goes the other way than it should; empty where it does not."""
    if rising is None or fit.rising is None or fit.rising == rising:
        return ""
    ways = ("falls", "rise") if rising else ("rises", "fall")
    return (
        f"the BER {ways[0]} as {name} goes up, and ought to {ways[1]}: the receiver is overloaded, or something "
        "else changed from point to point; no verdict rests on this sensitivity"
    )


def _searched(
    points: Sequence[CurvePoint], target: float, confidence: float, rising: bool, unit: str
) -> tuple[CurveFit, Bracket]:
    """Fit the points of a search; where no curve fits, what is sure without one bounds the crossing."""
    fit = fit_curve(points, target, confidence, rising, unit=unit or "dB")
    bracket = bracket_of(points, target, confidence, rising)
    if fit.fitted:
        return fit, bracket
    lower, upper = (bracket.under, bracket.over) if rising else (bracket.over, bracket.under)
    return replace(fit, lower=lower, upper=upper), bracket


def _counted(point: PointAssessment, name: str) -> CurvePoint:
    t = point.tally
    return CurvePoint(point.values[name], t.compared, t.errors, aligned=t.compared > 0)


def _level(
    points: Sequence[PointAssessment], name: str, value: float | None
) -> tuple[float | None, float | None]:
    """Level at the port at a value, between the points' own levels; and the set-up's uncertainty."""
    known = sorted(
        (p.values[name], float(p.facts["level"]["dbm"]), float(p.facts["level"]["uncertainty_db"]))
        for p in points
        if p.facts.get("level")
    )
    if value is None or not known:
        return None, None
    if value <= known[0][0] or len(known) == 1:
        near = known[0]
    elif value >= known[-1][0]:
        near = known[-1]
    else:
        i = next(k for k in range(1, len(known)) if value <= known[k][0])
        (x0, y0, u0), (x1, y1, u1) = known[i - 1], known[i]
        share = 0.0 if x1 == x0 else (value - x0) / (x1 - x0)
        return y0 + share * (y1 - y0), max(u0, u1)
    # Beyond the points the level runs on dB for dB, in the direction that the points show.
    falls = len(known) < 2 or known[-1][1] <= known[0][1]
    return near[1] + (near[0] - value if falls else value - near[0]), near[2]


def _level_bounds(
    points: Sequence[PointAssessment], name: str, fit: CurveFit
) -> tuple[float | None, float | None]:
    """Bounds on the sensitivity in dBm: those of the fit, and the set-up's uncertainty, added by squares."""
    level, uncertainty = _level(points, name, fit.value)
    if level is None or uncertainty is None:
        return None, None
    expanded = NormalDist().inv_cdf(0.5 + fit.confidence / 2) * uncertainty
    ends = [_level(points, name, bound)[0] for bound in (fit.lower, fit.upper)]
    low = min((end for end in ends if end is not None and end <= level), default=None)
    high = max((end for end in ends if end is not None and end >= level), default=None)
    return (
        None if low is None else level - math.hypot(level - low, expanded),
        None if high is None else level + math.hypot(high - level, expanded),
    )


def _theory_distance(mapping: Mapping[str, Any] | None, fit: CurveFit | None) -> float | None:
    """By how many dB the device needs more than the textbook says, at the target BER."""
    if not mapping or fit is None or fit.value is None:
        return None
    from harness.statistics import theory

    needed = theory.ebn0_db(str(mapping["modulation"]), fit.target_ber)
    has = float(mapping["ebn0_db"]) + float(mapping["slope"]) * (fit.value - float(mapping["value"]))
    return has - needed if math.isfinite(has - needed) else None


def _beyond(points: Sequence[PointAssessment], name: str, fit: CurveFit | None) -> list[str]:
    """Say where a sensitivity lies outside of what was measured."""
    if fit is None or fit.value is None:
        return []
    values = [p.values[name] for p in points]
    if min(values) <= fit.value <= max(values):
        return []
    return [
        f"the curve reaches BER {ratio(fit.target_ber)} outside of the values measured ({min(values):g} to "
        f"{max(values):g}): the sensitivity is extrapolated"
    ]


def _drift(points: Sequence[PointAssessment], name: str) -> list[str]:
    """Compare the visits to the reference point, the first with the last."""
    visits = [p for p in points if p.facts.get("reference") and p.tally.compared]
    if len(visits) < 2:
        return []
    chance = _chance(visits[0], visits[-1])
    if chance > 1 - NOTICEABLE:
        return []
    return [
        f"the reference point at {visits[0].values[name]:g} drifted: {_then(visits[0], visits[-1], chance)}"
    ]


def _hysteresis(points: Sequence[PointAssessment], name: str) -> list[str]:
    """Compare points that were visited on the way up and on the way down.

    The risk of calling hysteresis where there is none is shared among the values, however many there are.
    """
    visited: dict[float, list[PointAssessment]] = {}
    for point in points:
        if point.tally.compared and not (point.facts.get("reference") or point.facts.get("again")):
            visited.setdefault(point.values[name], []).append(point)
    pairs = {value: (group[0], group[1]) for value, group in sorted(visited.items()) if len(group) == 2}
    chances = {value: _chance(*pair) for value, pair in pairs.items()}
    called = [value for value, chance in chances.items() if chance <= (1 - NOTICEABLE) / len(pairs)]
    if not called:
        return []
    worst = max(called, key=lambda value: _apart(*pairs[value]))
    words = _then(*pairs[worst], chances[worst])
    if len(called) == 1:
        return [f"{worst:g}, up against down, shows hysteresis: {words}"]
    return [
        f"{len(called)} of {len(pairs)} values, up against down, show hysteresis, most at {worst:g}: {words}"
    ]


def _chance(a: PointAssessment, b: PointAssessment) -> float:
    """Probability that two visits with one BER differ as much or more."""
    compared = compare_counts(a.tally.errors, a.tally.compared, b.tally.errors, b.tally.compared, NOTICEABLE)
    return min(1.0, 2 * min(compared.p_value, compared.p_value_better))


def _apart(a: PointAssessment, b: PointAssessment) -> float:
    first, second = ((p.tally.errors + 0.5) / p.tally.compared for p in (a, b))
    return abs(math.log(first / second))


def _then(a: PointAssessment, b: PointAssessment, chance: float) -> str:
    return f"BER {ratio(a.ber)}, then {ratio(b.ber)} (by chance alone {percent(chance)})"
