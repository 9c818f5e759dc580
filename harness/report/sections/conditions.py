"""Conditions and instruments, with identities and calibration; pattern, link and topology."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from harness.assess.words import count, duration, rate, value_words
from harness.report.document import Block, Column, Entries, Entry, Listing, Paragraph, Section, Table
from harness.report.material import Material, Measured
from harness.report.phrases import digits, point_name, with_unit

_TOPOLOGY = {
    "far-end-loop": "far-end loop: sent and received at the same end, both directions in series",
    "two-port": "two ports: sent at one end, received at the other",
    "one-way": "one way: sent or received only",
}
_ORDER = {"lsb": "least significant bit of a byte first", "msb": "most significant bit of a byte first"}
_HIDDEN = ("topology", "driver", "receive", "sends", "receives")
_COVERAGE = "uncertainties are expanded, k = 2"


def conditions_section(material: Material) -> Section | None:
    """Tell of instruments, levels and losses; none where there were no instruments and no level."""
    m = next((m for m in material.points if m.facts.get("instruments") or m.facts.get("level")), None)
    correction = material.section("correction")
    settings: Mapping[str, Any] = material.section("instruments")
    if m is None and not settings and not correction.get("losses"):
        return None
    blocks: list[Block] = []
    if settings:
        blocks.append(_instruments(material, m))
    if m is not None and not material.swept:
        set_to = tuple(_set(m))
        if set_to:
            blocks.append(Entries(set_to))
    if correction.get("losses"):
        blocks.append(_losses(correction["losses"]))
    overdue = dict.fromkeys(str(text) for x in material.points for text in x.facts.get("overdue", ()))
    if overdue:
        blocks.append(Listing(tuple(overdue), "against"))
    limits = tuple(_power_limits(material.section("level")))
    if limits:
        blocks.append(Listing(limits))
    return Section("Conditions and instruments", tuple(blocks))


def _instruments(material: Material, m: Measured | None) -> Table:
    facts: Mapping[str, Any] = m.facts if m is not None else {}
    who = facts.get("instruments") or {}
    calibration = facts.get("calibration") or {}
    due, certificates = calibration.get("due") or {}, calibration.get("certificates") or {}
    tables = (material.section("correction").get("tables")) or {}
    rows = []
    for name, section in material.section("instruments").items():
        table = tables.get(name) or {}
        unit = material.units.get(name, "")
        limits = section.get("limits")
        allowed = " to ".join(f"{v:g}" for v in limits) if limits else "not stated"
        calibrated = [
            f"calibrated {table['calibrated']}" if table.get("calibrated") else "",
            f"due {due.get(name) or table.get('due')}" if due.get(name) or table.get("due") else "",
            f"certificate {certificates.get(name) or table.get('certificate')}"
            if certificates.get(name) or table.get("certificate")
            else "",
        ]
        words = ", ".join(text for text in calibrated if text) or "no calibration stated"
        identity = str(who.get(name) or "did not say")
        rows.append((name, identity, str(section.get("driver", "")), f"{allowed} {unit}".strip(), words))
    columns = tuple(Column(c, False) for c in ("instrument", "identity", "driver", "limits", "calibration"))
    return Table("", columns, tuple(rows))


def _set(m: Measured) -> Iterator[Entry]:
    units, readings = m.units, m.facts.get("readings") or {}
    for name in m.facts.get("instruments") or {}:
        value = m.point.values.get(name)
        said = []
        if value is not None:
            said.append(f"set to {with_unit(value, units.get(name, ''))}")
        if name in readings:
            said.append(f"reads {with_unit(float(readings[name]), units.get(name, ''))}")
        if said:
            yield Entry(name, (", ".join(said),))
    level = m.facts.get("level")
    if level:
        yield Entry("level at the port", (level_words(level), _COVERAGE))


def level_words(level: Mapping[str, Any]) -> str:
    """Write the level at the device's port with its expanded uncertainty."""
    return f"{float(level['dbm']):.2f} dBm ± {2 * float(level['uncertainty_db']):.2f} dB"


def _losses(losses: list[Mapping[str, Any]]) -> Table:
    rows = tuple(
        (
            str(loss.get("name", "")),
            f"{float(loss.get('loss_db', 0)):.2f} ± {2 * float(loss.get('uncertainty_db') or 0):.2f}",
            str(loss.get("calibrated") or "not stated"),
            str(loss.get("due") or "not stated"),
        )
        for loss in losses
    )
    columns = (
        Column("on the way to the device", False),
        Column("loss, dB"),
        Column("calibrated", False),
        Column("due", False),
    )
    return Table("", columns, rows, _COVERAGE)


def _power_limits(level: Mapping[str, Any]) -> Iterator[str]:
    if level.get("damage_dbm") is not None:
        yield (
            f"the receiver's damage level is stated as {float(level['damage_dbm']):g} dBm at its port; no setting "
            "that would reach it was made"
        )
    if level.get("permitted_dbm") is not None:
        yield f"the transmitter's permitted level is stated as {float(level['permitted_dbm']):g} dBm"


def link_section(material: Material) -> Section:
    """Tell of the pattern, the link and its topology."""
    blocks: list[Block] = []
    for m in material.points[:1] if material.swept else material.points:
        if len(material.points) > 1 and not material.swept:
            blocks.append(Paragraph(f"{point_name(m)}:"))
        blocks.append(Entries(tuple(_pattern(m))))
    if not material.points:
        chosen = material.section("pattern")
        blocks.append(Entries((Entry("pattern", (str(chosen.get("name", "none")),)),)))
    link = next((m.facts.get("link") for m in material.points if m.facts.get("link")), None)
    blocks.append(Entries(tuple(_link(material, link or {}))))
    if material.section("link").get("before"):
        blocks.append(
            Paragraph(
                "A set-up dialogue is held with the device before the pattern; its bits are not counted."
            )
        )
    return Section("Pattern and link", tuple(blocks))


def _pattern(m: Measured) -> Iterator[Entry]:
    p = m.assessed
    lines = [p.pattern or "none was found"]
    if p.bit_order:
        lines.append(_ORDER.get(p.bit_order, p.bit_order))
    if p.inverted is not None:
        lines.append("received inverted" if p.inverted else "received as its name sends it, not inverted")
    if p.alternatives:
        lines.append(f"fits as well: {', '.join(p.alternatives)}")
    yield Entry("pattern", tuple(lines))
    speeds = [f"nominal {rate(p.rate_bps)}" if p.rate_bps else "", _measured_rate(m)]
    yield Entry("rate", tuple(s for s in speeds if s) or ("not known",))
    if p.delay and p.delay.get("bits") is not None:
        words = count(int(p.delay["bits"]), "bit")
        if p.delay.get("seconds") is not None:
            words += f", {duration(float(p.delay['seconds']))}"
        if p.delay.get("modulo"):
            words += f", or longer by any multiple of {count(int(p.delay['modulo']), 'bit')}"
        yield Entry("loop delay", (words,))


def _measured_rate(m: Measured) -> str:
    p = m.assessed
    return f"received at {rate(p.measured_bps)}" if p.measured_bps and p.seconds else ""


def _link(material: Material, link: Mapping[str, Any]) -> Iterator[Entry]:
    section = material.section("link")
    topology = str(link.get("topology") or section.get("topology") or "not stated")
    yield Entry("topology", (_TOPOLOGY.get(topology, topology),))
    yield Entry("driver", (str(link.get("driver") or section.get("driver") or "none"),))
    for key, value in link.items():
        if key not in _HIDDEN:
            yield Entry(str(key), (value_words(value),))
    if link.get("receive"):
        there = section.get("receive") or {}
        lines = [f"driver {there['driver']}"] if there.get("driver") else []
        lines += [f"{key}: {value_words(value)}" for key, value in link["receive"].items()]
        yield Entry("receiving port", tuple(lines))
    if section.get("pace_bps"):
        yield Entry("sent at", (rate(float(section["pace_bps"])),))
    if section.get("max_in_flight_bits"):
        yield Entry("on the way at most", (count(int(section["max_in_flight_bits"]), "bit"),))
    control = material.run.device.get("error_control")
    if control:
        yield Entry("error control", (_control(control),))


def _control(control: str) -> str:
    if control.lower() == "arq":
        return "arq: the device repeats what it received in error, so the BER is a residual one"
    if control.lower() == "fec":
        return "fec: the device corrects errors, so the BER is the one after correction"
    return control


def point_level(m: Measured) -> str:
    """Give the level at a sweep's point for its table, or nothing."""
    level = m.facts.get("level")
    return f"{float(level['dbm']):.2f}" if level else ""


def point_reading(m: Measured, name: str) -> str:
    """Give what an instrument read back at a point, or nothing."""
    reading = (m.facts.get("readings") or {}).get(name)
    return "" if reading is None else digits(float(reading)) if abs(float(reading)) < 1e-3 else f"{reading:g}"
