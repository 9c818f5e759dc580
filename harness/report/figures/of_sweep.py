"""The figure of a sweep: the points with their bounds, the fitted curve, theory, and the sensitivity."""

from __future__ import annotations

from typing import Any

import numpy as np

from harness.assess.words import ratio
from harness.report.document import Figure
from harness.report.figures.drawings import Curve, CurvePoint, CurveSeries, Floats
from harness.report.material import Material, Measured
from harness.report.phrases import on_bits, point_name, units_of, with_unit

_STEPS = 160


def curve_of(material: Material) -> Figure | None:
    """Draw BER against the condition that was stepped; none without a stepped condition."""
    names = list(dict.fromkeys(n for m in material.points for n in m.point.values))
    if not names:
        return None
    axis = names[-1]  # the fastest of several
    groups: dict[str, list[CurvePoint]] = {}
    units: dict[str, str] = {}
    for m in material.points:
        units.update(units_of(m))
        if axis in m.point.values:
            groups.setdefault(_group(m, axis), []).append(_point(m, axis))
    series = tuple(CurveSeries(label, tuple(points)) for label, points in groups.items())
    xs = [p.at for s in series for p in s.points]
    found = material.assessment.sensitivity or {}
    target = found.get("ber") or material.section("sweep").get("sensitivity_ber")
    theory, label = _theory(material, xs) if len(groups) == 1 else (None, "")
    drawing = Curve(
        axis=f"{axis}, {units[axis]}" if units.get(axis) else axis,
        series=series,
        fit=_fit(material, xs) if len(groups) == 1 else None,
        theory=theory,
        theory_label=label,
        target=float(target) if target else None,
        sensitivity=(found.get("value"), found.get("lower"), found.get("upper")) if found else None,
    )
    words = "; ".join(f"{point_name(m)}: {on_bits(m.assessed)}" for m in material.points)
    return Figure(f"BER against {axis}", words, drawing)


def _group(m: Measured, axis: str) -> str:
    units = units_of(m)
    return ", ".join(f"{n} {with_unit(v, units.get(n, ''))}" for n, v in m.point.values.items() if n != axis)


def _point(m: Measured, axis: str) -> CurvePoint:
    p = m.assessed
    at = float(m.point.values[axis])
    if p.bounds is None or not p.tally.compared:
        return CurvePoint(at, None, 0.0, 1.0, 0)
    return CurvePoint(at, p.ber, p.bounds.lower, p.bounds.upper, p.tally.errors)


def _fit(material: Material, xs: list[float]) -> tuple[Floats, Floats] | None:
    """Draw the fitted curve from its own parameters, over the points' reach."""
    curve: Any = getattr(material.assessment, "curve", None)
    if curve is None or not getattr(curve, "fitted", False):
        return None
    at = np.linspace(min(xs), max(xs), _STEPS)
    values = [curve.ber(float(x)) for x in at]
    if any(v is None for v in values):
        return None
    return at, np.array(values, dtype=np.float64)


def _theory(material: Material, xs: list[float]) -> tuple[tuple[Floats, Floats] | None, str]:
    given = material.section("sweep").get("theory")
    if not given or not xs:
        return None, ""
    from harness.statistics import theory

    at = np.linspace(min(xs), max(xs), _STEPS)
    ebn0 = given["ebn0_db"] + given["slope"] * (at - given["value"])
    values = np.array([theory.ber(given["modulation"], float(e)) for e in ebn0])
    return (at, values), f"theory, {theory.parse_modulation(given['modulation']).title}"


def curve_words(material: Material) -> tuple[str, ...]:
    """Say what the fit found, in its own words."""
    curve: Any = getattr(material.assessment, "curve", None)
    words = getattr(curve, "words", "")
    said = [str(words)] if words else []
    found = material.assessment.sensitivity or {}
    if found.get("theory_distance_db") is not None:
        said.append(
            f"distance to theory at BER {ratio(found.get('ber'))}: {found['theory_distance_db']:.3g} dB"
        )
    return tuple(said)
