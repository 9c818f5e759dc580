"""What was required, read from a record's settings, and the plan that decides it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

from harness.assess.words import ratio
from harness.record import Run
from harness.statistics.conditions import Condition, curve_along
from harness.statistics.objectives import Objectives
from harness.statistics.plans import Plan, make_plan


@dataclass(frozen=True, slots=True)
class Requirement:
    """The profile's ``[requirement]``."""

    ber: float
    confidence: float = 0.95
    plan: str = "fixed"
    accept_errors: int = 0
    margin: float = 2.0
    producer_risk: float = 0.05
    max_slips: int = 0
    max_unaligned_ratio: float = 0.001
    lost_link: Literal["fail", "undecided"] = "fail"
    clustered: Literal["pass", "undecided"] = "pass"
    count: Literal["bits", "events"] = "bits"
    event_gap_bits: int = 64
    objectives: Objectives | None = None
    standard: Literal["G.821", "G.826"] = "G.821"
    block_bits: int | None = None

    def make_plan(self) -> Plan:
        """Build the plan afresh; it holds what it has seen."""
        return make_plan(
            self.plan,
            self.ber,
            confidence=self.confidence,
            accept_errors=self.accept_errors,
            margin=self.margin,
            producer_risk=self.producer_risk,
        )


def requirement_at(
    requirement: Requirement | None, settings: Mapping[str, Any], values: Mapping[str, float]
) -> Requirement | None:
    """Give the requirement where it holds at a point: in a plain run always, else where it is named."""
    if requirement is None or not (settings.get("sweep") or settings.get("search")):
        return requirement
    at = (settings.get("requirement") or {}).get("at") or {}
    named = bool(at) and all(values.get(name) == value for name, value in at.items())
    return requirement if named else None


def requirement_of(settings: Mapping[str, Any]) -> Requirement | None:
    """Read the requirement of a run's resolved settings; None where nothing was required."""
    section = settings.get("requirement")
    if not section or section.get("ber") is None:
        return None
    known = set(Requirement.__dataclass_fields__)
    values = {key: value for key, value in section.items() if key in known and value is not None}
    asked = section.get("availability")
    if asked:
        names = {"esr": "esr", "sesr": "sesr", "bber": "bber", "availability": "available"}
        ratios = {ours: asked[key] for ours, key in names.items() if asked.get(key) is not None}
        values["objectives"] = Objectives(**ratios)
        values["standard"] = asked.get("standard", "G.821")
        values["block_bits"] = asked.get("block_bits")
    return Requirement(**values)


def units_of(run: Run) -> dict[str, str]:
    """Give each instrument's unit, as found at the points or else as the profile states it."""
    sections = run.settings.get("instruments") or {}
    units = {name: str(section.get("unit") or "") for name, section in sections.items()}
    for point in run.points:
        units.update({name: str(unit) for name, unit in (point.facts.get("units") or {}).items() if unit})
    return units


def curve_axis(settings: Mapping[str, Any]) -> str:
    """Name the instrument along which a run's curves run; empty where it has none."""
    search, sweep = settings.get("search") or {}, settings.get("sweep") or {}
    if search.get("instrument"):
        return str(search["instrument"])
    instruments = settings.get("instruments") or {}
    axes = sweep.get("axes") or [sweep]
    return curve_along(
        [
            Condition(
                str(axis["instrument"]),
                str((instruments.get(axis["instrument"]) or {}).get("quantity") or "").casefold(),
                _how_many(axis.get("values")),
            )
            for axis in axes
            if axis.get("instrument")
        ]
    )


def _how_many(values: Any) -> int:
    """Count the values of an axis, listed or from start to stop."""
    if not isinstance(values, Mapping):
        return len(values or ())
    return int(abs(float(values["stop"]) - float(values["start"])) / float(values["step"]) + 1e-9) + 1


def required_sensitivity(run: Run) -> str:
    """Say which sensitivity is required: ``sensitivity at BER 1e-6 at least 54 dB``; empty where none is."""
    asked = (run.settings.get("requirement") or {}).get("sensitivity_at_least")
    if asked is None:
        return ""
    sweep: Mapping[str, Any] = run.settings.get("sweep") or {}
    search: Mapping[str, Any] = run.settings.get("search") or {}
    unit = units_of(run).get(curve_axis(run.settings), "")
    ber = sweep.get("sensitivity_ber") or search.get("ber")
    at = f" at BER {ratio(float(ber))}" if ber else ""
    return f"sensitivity{at} at least {float(asked):g} {unit}".rstrip()
