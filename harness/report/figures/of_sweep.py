"""The figure of a sweep: the points with their bounds, the fitted curve, theory, and the sensitivity."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from harness.assess.assessment import PointAssessment
from harness.assess.curve import Curve as Assessed
from harness.assess.requirement import curve_axis
from harness.assess.words import count, percent, ratio
from harness.report.document import Figure
from harness.report.figures.drawings import Curve, CurvePoint, CurveSeries, Floats
from harness.report.material import Material
from harness.report.phrases import with_unit

_STEPS = 160


def curve_of(material: Material) -> Figure | None:
    """Draw BER against the condition that was stepped; none without a stepped condition."""
    axis = _axis(material)
    if not axis:
        return None
    series = tuple(_series(material, axis))
    points = [p for s in series for p in s.points]
    if not points:
        return None
    target = material.section("sweep").get("sensitivity_ber")
    theory, label = _theory(material, [p.at for p in points])
    unit = material.units.get(axis)
    drawing = Curve(
        axis=f"{axis}, {unit}" if unit else axis,
        series=series,
        theory=theory,
        theory_label=label,
        target=float(target) if target else None,
    )
    fitted = any(s.fit is not None for s in series)
    title = f"BER against {axis}" + (", with the fitted curve" if fitted else "")
    return Figure(title, _words(points), drawing)


def _axis(material: Material) -> str:
    """Give the axis along which curves run: see `curve_axis`."""
    curves: Sequence[Assessed] = material.assessment.curves
    if curves:
        return curves[0].instrument
    named = curve_axis(material.run.settings)
    return str(named or next((name for m in material.points for name in m.point.values), ""))


def _series(material: Material, axis: str) -> list[CurveSeries]:
    curves: Sequence[Assessed] = material.assessment.curves
    if curves:
        return [_assessed(material, curve) for curve in curves]
    groups: dict[str, list[CurvePoint]] = {}
    for m in material.points:
        if axis in m.point.values:
            rest = {name: value for name, value in m.point.values.items() if name != axis}
            groups.setdefault(_label(material, rest), []).append(_point(m.assessed, axis))
    return [CurveSeries(label, tuple(sorted(points, key=lambda p: p.at))) for label, points in groups.items()]


def _assessed(material: Material, curve: Assessed) -> CurveSeries:
    points = tuple(_point(p, curve.instrument) for p in curve.points)
    fit = curve.fit
    drawn: tuple[Floats, Floats] | None = None
    sensitivity = None
    if fit is not None:
        sensitivity = (fit.value, fit.lower, fit.upper)
        at = np.linspace(min(p.at for p in points), max(p.at for p in points), _STEPS)
        values = [fit.ber(float(x)) for x in at]
        known = [v for v in values if v is not None]
        if fit.fitted and len(known) == len(values):
            drawn = at, np.array(known, dtype=np.float64)
    return CurveSeries(_label(material, curve.at), points, drawn, sensitivity)


def _label(material: Material, rest: Mapping[str, float]) -> str:
    return ", ".join(
        f"{name} {with_unit(value, material.units.get(name, ''))}" for name, value in rest.items()
    )


def _point(p: PointAssessment, axis: str) -> CurvePoint:
    at = float(p.values[axis])
    if p.bounds is None or not p.tally.compared:
        return CurvePoint(at, None, 0.0, 1.0, 0)
    return CurvePoint(at, p.ber, p.bounds.lower, p.bounds.upper, p.tally.errors)


def _theory(material: Material, xs: list[float]) -> tuple[tuple[Floats, Floats] | None, str]:
    given = material.section("sweep").get("theory")
    if not given:
        return None, ""
    from harness.statistics import theory

    at = np.linspace(min(xs), max(xs), _STEPS)
    ebn0 = given["ebn0_db"] + given["slope"] * (at - given["value"])
    values = np.array([theory.ber(given["modulation"], float(e)) for e in ebn0])
    return (at, values), f"theory, {theory.parse_modulation(given['modulation']).title}"


def _words(points: list[CurvePoint]) -> str:
    bers = [p.ber for p in points if p.ber]
    said = [count(len(points), "point") + (f", BER {ratio(min(bers))} to {ratio(max(bers))}" if bers else "")]
    clean = sum(p.ber == 0 for p in points)
    lost = sum(p.ber is None for p in points)
    if clean:
        said.append(f"{clean} without an error (only an upper bound)")
    if lost:
        said.append(f"{lost} never aligned")
    return "; ".join(said)


def curve_words(material: Material) -> tuple[str, ...]:
    """Say what the fit found and what it rests on."""
    curves: Sequence[Assessed] = material.assessment.curves
    said: list[str] = []
    for curve in curves:
        name = f"{label}: " if (label := _label(material, curve.at)) else ""
        said += [f"{name}{words}" for words in _about(curve)]
    return tuple(said)


def _without_a_curve(curve: Assessed) -> str | None:
    """Say between which values the target is surely crossed, whatever the curve's shape."""
    sure = curve.sure
    if (
        sure is None
        or curve.contrary
        or curve.target_ber is None
        or (sure.under is None and sure.over is None)
    ):
        return None
    ends = [(sure.under, "under"), (sure.over, "over")]
    sides = [f"{side} it at {with_unit(value, curve.unit)}" for value, side in ends if value is not None]
    target = f"BER {ratio(curve.target_ber)}"
    return f"without any curve, levels as set ({percent(sure.confidence)}, {target}): {', '.join(sides)}"


def _about(curve: Assessed) -> list[str]:
    said = []
    fit = curve.fit
    if fit is not None:
        if fit.words:
            said.append(fit.words)
        if fit.fitted and fit.stretch is not None:
            floor = f", a floor at {ratio(fit.floor)}" if fit.floor > 0 else ", no floor"
            said.append(
                f"fitted by maximum likelihood on the counts: stretch {fit.stretch:.3g} (1 for a textbook curve), "
                f"level scatter {fit.scatter_db or 0.0:.2g} dB a point{floor}"
            )
        if fit.goodness is not None:
            bad = "; the curve does not fit these points" if fit.goodness < 0.01 else ""
            said.append(f"goodness of fit, p-value {fit.goodness:.2g}{bad}")
        if fit.only_worse:
            said.append(f"{count(len(fit.only_worse), 'point')} far above the target BER enter only as worse")
    if (sides := _without_a_curve(curve)) is not None:
        said.append(sides)
    if curve.level_at_value is not None:
        sure = f" ± {2 * curve.level_uncertainty_db:.2f} dB (k = 2)" if curve.level_uncertainty_db else ""
        said.append(f"level at the device's port there: {curve.level_at_value:.2f} dBm{sure}")
    if curve.theory_db is not None:
        side = "worse" if curve.theory_db > 0 else "better"
        said.append(f"{abs(curve.theory_db):.2g} dB {side} than the textbook curve at the target BER")
    return [*said, *curve.remarks]
