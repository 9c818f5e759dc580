"""Phrases that several sections share: names of units and points, times, values with their units."""

from __future__ import annotations

from collections.abc import Mapping

from harness.assess.assessment import PointAssessment
from harness.assess.words import count, duration, local_date, percent, ratio
from harness.report.material import Material, Measured
from harness.statistics import notation


def number(value: int) -> str:
    """Write a count with its digits in threes."""
    return f"{value:,}".replace(",", "\u202f")


def digits(value: float | None) -> str:
    """Write a ratio with six digits: what a reader needs to compute it again."""
    if value is None:
        return "none"
    return notation.ratio(value, 6)


def moment(at_ns: int | None) -> str:
    """Write a local date and time with its offset; nothing where there is none."""
    return local_date(at_ns)


def span(started: int, ended: int | None) -> str:
    """Say from when to when, and how long that is."""
    if ended is None:
        return f"since {moment(started)}"
    return f"{moment(started)} to {moment(ended)} ({duration((ended - started) / 1e9)})"


def unit_name(device: Mapping[str, str]) -> str:
    """Name the unit: model and serial number as far as they are known."""
    model, serial = device.get("model", ""), device.get("serial_number", "")
    return " ".join(word for word in (model, serial) if word) or "unnamed unit"


def with_unit(value: float, unit: str) -> str:
    """Write a value with its unit."""
    return f"{value:g} {unit}".rstrip()


def point_name(measured: Measured) -> str:
    """Name a point by its direction, or by what was set."""
    direction = measured.facts.get("direction")
    if direction:
        return f"{direction} direction"
    units = measured.units
    named = [
        f"{name} {with_unit(value, units.get(name, ''))}" for name, value in measured.point.values.items()
    ]
    return ", ".join(named) or "the run"


def point_label(measured: Measured) -> str:
    """Name a point as shortly as a figure's margin wants it."""
    direction = measured.facts.get("direction")
    if direction:
        return str(direction)
    units = measured.units
    return ", ".join(with_unit(v, units.get(n, "")) for n, v in measured.point.values.items())


def ber_name(material: Material) -> str:
    """Name the ratio: behind a device's error control it is what that left over."""
    control = material.run.device.get("error_control", "none").lower()
    if control == "arq":
        return "residual BER"
    return "BER after error correction" if control == "fec" else "BER"


def bounds_words(p: PointAssessment) -> str:
    """Say the two-sided bounds."""
    if p.bounds is None or not p.tally.compared:
        return "no bit was compared: every ratio is possible"
    b = p.bounds
    return f"{ratio(b.lower)} to {ratio(b.upper)} at {percent(b.confidence)} confidence (two-sided)"


def deciding_words(p: PointAssessment) -> str:
    """Say the one-sided bound that decides."""
    if p.bounds is None or not p.tally.compared:
        return ""
    b = p.bounds
    side = "at or under" if b.side == "upper" else "at or over"
    over = rejected_over(p)
    held = f"; the plan rejects on a bound over {over}" if over else ""
    return f"{side} {ratio(b.value)} at {percent(b.deciding_confidence)} confidence (one-sided){held}"


def rejected_over(p: PointAssessment) -> str:
    """Say what a rejecting plan's lower bound is held against: not the requirement, but that by the margin."""
    if p.bounds is None or p.plan is None or p.bounds.side != "lower":
        return ""
    good = float(p.plan["ber"]) / float(p.plan["margin"])
    return f"{ratio(good)} (the requirement by the margin)" if p.bounds.value >= good else ""


def on_bits(p: PointAssessment) -> str:
    """Say how many errors in how many bits."""
    t = p.tally
    if not t.received:
        return "not a single bit came"
    if not t.compared:
        return f"none: the pattern was not found in the {count(t.received, 'bit')} that came"
    errors = count(t.errors, "error") if t.errors else "no error"
    return f"{errors} in {count(t.compared, 'compared bit')}"


def fault_words(material: Material) -> str:
    """Say what failed, in the fault's own words; empty where nothing did."""
    return "; ".join(e.text for m in material.points for e in m.assessed.events if e.kind == "fault")
