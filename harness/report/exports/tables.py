"""CSV: one row for each second, or one for each point; no cell is ever run by a spreadsheet.

Lines end as RFC 4180 has it. Text that a spreadsheet would take for a formula is led by an apostrophe.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Iterator, Sequence
from typing import TextIO

from harness.assess.words import iso
from harness.record import Second
from harness.report.harmless import cell
from harness.report.material import Material, Measured

SECOND_COLUMNS = (
    "run",
    "serial_number",
    "point",
    "direction",
    "sitting",
    "second",
    "begins",
    "seconds",
    "due",
    "bits_sent",
    "bits_received",
    "bits_compared",
    "bits_unaligned",
    "errors",
    "ones_as_zeros",
    "zeros_as_ones",
    "slips",
    "bits_lost",
    "bits_inserted",
)
POINT_COLUMNS = (
    "run",
    "title",
    "model",
    "serial_number",
    "point",
    "direction",
    "reference",
    "moved",
    "level_dbm",
    "level_uncertainty_db",
    "started",
    "ended",
    "ended_by",
    "seconds",
    "rate_bps",
    "pattern",
    "bits_sent",
    "bits_received",
    "bits_compared",
    "bits_unaligned",
    "errors",
    "ones_as_zeros",
    "zeros_as_ones",
    "slips",
    "bits_lost",
    "bits_inserted",
    "ber",
    "ber_half_wrong",
    "confidence",
    "lower",
    "upper",
    "deciding_side",
    "deciding_confidence",
    "deciding_value",
    "verdict",
    "reasons",
)


def write_seconds(material: Material, to: TextIO) -> None:
    """Write one row for each second of each point, in order; set values have a column for each instrument."""
    names = _instruments(material)
    heads = [*SECOND_COLUMNS, *_value_heads(material, names)]
    _write(to, heads, (row for m in material.points for row in _seconds(material, m, names)))


def write_points(material: Material, to: TextIO) -> None:
    """Write one row for each point, with its bounds and verdict; a plain run has one point."""
    names = _instruments(material)
    heads = [*POINT_COLUMNS, *_value_heads(material, names)]
    _write(to, heads, (_point(material, m, names) for m in material.points))


def _write(to: TextIO, heads: Sequence[str], rows: Iterable[Sequence[object]]) -> None:
    writer = csv.writer(to, lineterminator="\r\n")
    writer.writerow([cell(head) for head in heads])
    writer.writerows([cell(value) for value in row] for row in rows)


def _instruments(material: Material) -> list[str]:
    return list(dict.fromkeys(name for m in material.points for name in m.point.values))


def _value_heads(material: Material, names: Sequence[str]) -> list[str]:
    return [f"{name} ({material.units[name]})" if material.units.get(name) else name for name in names]


def _seconds(material: Material, m: Measured, names: Sequence[str]) -> Iterator[list[object]]:
    about = (material.run.key, material.run.device.get("serial_number", ""))
    values = [m.point.values.get(name) for name in names]
    direction = m.facts.get("direction", "")
    for s in m.series.seconds:
        yield [*about, m.point.index, direction, *_second(s), *values]


def _second(s: Second) -> list[object]:
    t = s.tally
    return [
        s.sitting,
        s.index,
        iso(s.at),
        s.duration_ns / 1e9,
        s.due,
        s.sent,
        t.received,
        t.compared,
        t.unaligned,
        t.errors,
        t.ones_as_zeros,
        t.zeros_as_ones,
        s.slips,
        s.bits_lost,
        s.bits_inserted,
    ]


def _point(material: Material, m: Measured, names: Sequence[str]) -> list[object]:
    p, t, b = m.assessed, m.assessed.tally, m.assessed.bounds
    device, level = material.run.device, m.facts.get("level") or {}
    bounds: list[object] = [None] * 6
    if b is not None and t.compared:
        bounds = [b.confidence, b.lower, b.upper, b.side, b.deciding_confidence, b.value]
    return [
        material.run.key,
        material.run.title,
        device.get("model", ""),
        device.get("serial_number", ""),
        m.point.index,
        m.facts.get("direction", ""),
        bool(m.facts.get("reference", False)),
        bool(p.moved),
        level.get("dbm"),
        level.get("uncertainty_db"),
        iso(p.started),
        iso(p.ended),
        p.ended_by,
        p.seconds,
        p.rate_bps,
        p.pattern,
        p.bits_sent,
        t.received,
        t.compared,
        t.unaligned,
        t.errors,
        t.ones_as_zeros,
        t.zeros_as_ones,
        p.slip_count,
        p.bits_lost,
        p.bits_inserted,
        p.ber,
        p.ber_half_wrong,
        *bounds,
        p.verdict,
        "; ".join(p.reasons),
        *(m.point.values.get(name) for name in names),
    ]
