"""What belongs to a sweep: its points, the curve with its fit, and the sensitivity."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from harness.assess.words import count, percent, ratio
from harness.report.document import Block, Column, Entries, Entry, Listing, Paragraph, Section, Table
from harness.report.figures.of_sweep import curve_of, curve_words
from harness.report.material import Material
from harness.report.phrases import digits, number, point_label
from harness.report.sections.conditions import point_level

_ROWS = 400  # of the table of points


def sensitivity_words(material: Material) -> list[str]:
    """Say where the BER that was looked for is reached, for each curve; nothing where none was looked for."""
    a = material.assessment
    found = [a.sensitivity] if a.sensitivity else a.more.get("sensitivities", ())
    return [_sensitivity(one) for one in found]


def _sensitivity(found: Mapping[str, Any]) -> str:
    at = ", ".join(f"{name} {value:g}" for name, value in (found.get("at") or {}).items())
    name = f"{at}: sensitivity" if at else "sensitivity"
    target = ratio(found.get("ber"))
    unit = f" {found['unit']}" if found.get("unit") else ""
    if found.get("value") is None:
        return f"{name}: a BER of {target} cannot be placed by this sweep{_sides(found, unit)}"
    return f"{name}: BER {target} at {found['value']:.4g}{unit}{_sides(found, unit)}"


def _sides(found: Mapping[str, Any], unit: str) -> str:
    lower, upper = found.get("lower"), found.get("upper")
    sure = f" at {percent(float(found['confidence']))} confidence" if found.get("confidence") else ""
    if lower is None and upper is None:
        return ", without bounds" if found.get("value") is not None else ""
    if lower is None:
        return f", at most {upper:.4g}{unit}{sure}, no bound below"
    if upper is None:
        return f", at least {lower:.4g}{unit}{sure}, no bound above"
    return f", {lower:.4g} to {upper:.4g}{unit}{sure}"


def sweep_section(material: Material) -> Section | None:
    """Give the curve and the sensitivity; none where conditions were not stepped."""
    if not material.swept:
        return None
    blocks: list[Block] = []
    blocks += [Paragraph(_sentence(words)) for words in sensitivity_words(material)]
    figure = curve_of(material)
    if figure is not None:
        blocks.append(figure)
    words = curve_words(material)
    if words:
        blocks.append(Listing(words))
    blocks.append(_points(material))
    remarks = _remarks(material)
    if remarks:
        blocks.append(Listing(remarks))
    return Section("The curve", tuple(blocks))


def _remarks(material: Material) -> tuple[str, ...]:
    """Collect the points' remarks, equal ones said once with all their points."""
    by_text: dict[str, list[str]] = {}
    for m in material.points:
        known = (*(m.assessed.bounds.remarks if m.assessed.bounds else ()), *m.facts.get("overdue", ()))
        for remark in m.assessed.remarks:
            if remark not in known:
                by_text.setdefault(remark, []).append(point_label(m))
    return tuple(
        f"{remark} (at {', '.join(names)})" if len(names) < len(material.points) else remark
        for remark, names in by_text.items()
    )


def _sentence(text: str) -> str:
    return f"{text[0].upper()}{text[1:]}." if text else ""


def _points(material: Material) -> Table:
    names = list(dict.fromkeys(name for m in material.points for name in m.point.values))
    units = material.units
    leveled = any(point_level(m) for m in material.points)
    judged = any(m.assessed.verdict for m in material.points)
    columns = [Column(f"{name}, {units[name]}" if units.get(name) else name) for name in names]
    columns += [Column("level, dBm")] if leveled else []
    columns += [Column(c) for c in ("bits compared", "errors", "BER", "lower", "upper", "unaligned")]
    columns += [Column("slips")] if any(m.assessed.slip_count for m in material.points) else []
    columns += [Column("verdict", False)] if judged else []
    slips = any(m.assessed.slip_count for m in material.points)
    rows = []
    for m in material.points[:_ROWS]:
        p = m.assessed
        mark = " (reference)" if m.facts.get("reference") else ""
        mark += " (moved meanwhile: does not count)" if p.moved else ""
        row = [f"{m.point.values[n]:g}" if n in m.point.values else "" for n in names]
        row[0] = row[0] + mark if row else ""
        row += [point_level(m)] if leveled else []
        row += [
            number(p.tally.compared),
            number(p.tally.errors),
            digits(p.ber) if p.tally.compared else "never aligned",
        ]
        row += [digits(p.bounds.lower), digits(p.bounds.upper)] if p.bounds and p.tally.compared else ["", ""]
        row += [number(p.tally.unaligned)]
        row += [number(p.slip_count)] if slips else []
        row += [p.verdict or ""] if judged else []
        rows.append(tuple(row))
    sure = next((m.assessed.bounds.confidence for m in material.points if m.assessed.bounds), None)
    note = f"bounds two-sided at {percent(sure)} confidence, each point by itself" if sure else ""
    if len(material.points) > _ROWS:
        note += f"; {number(len(material.points) - _ROWS)} more points stand in `bitassay export --points`"
    return Table("", tuple(columns), tuple(rows), note)


def search_entries(material: Material) -> Entries | None:
    """Tell what a search was asked for; none where there was none."""
    search = material.section("search")
    if not search:
        return None
    words = (
        f"{search.get('instrument')} between {search.get('low'):g} and {search.get('high'):g} for a BER of "
        f"{ratio(search.get('ber'))}, to within {search.get('resolution'):g}"
    )
    used = sum(m.assessed.tally.compared for m in material.points)
    return Entries((Entry("search", (words, f"{count(used, 'bit')} used")),))
