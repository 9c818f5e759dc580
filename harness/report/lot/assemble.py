"""Assembling a lot's report: all sections, in the order in which a reader asks."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

from harness.assess.lot import serial_of
from harness.report.document import Document, Paragraph, Section, harmless
from harness.report.lot.material import LotMaterial
from harness.report.lot.sections import (
    broken_words,
    deviations_section,
    lot_signatures,
    lot_summary,
    pass_rate_section,
    records_section,
    spread_section,
    tries_section,
    units_section,
)
from harness.report.phrases import moment
from harness.report.sections.conditions import conditions_section, link_section
from harness.report.sections.formalities import cautions_section, versions_section
from harness.report.sections.requirement import boundaries_section, requirement_section


def assemble_lot(material: LotMaterial) -> Document:
    """Make the one document that all forms of a lot's report show."""
    whole = material.pattern
    sections = (
        lot_summary(material),
        units_section(material),
        spread_section(material),
        requirement_section(whole),
        pass_rate_section(material),
        tries_section(material),
        _as_measured(conditions_section(whole), material),
        _as_measured(link_section(whole), material),
        deviations_section(material),
        cautions_section(),
        lot_signatures(material),
        boundaries_section(whole),
        _on_computers(versions_section(whole), material),
        records_section(material),
    )
    lot = material.summary
    return harmless(
        Document(
            kind="Lot report",
            title=whole.run.title or "Bit error ratios of a lot",
            subject=_subject(material),
            date=moment(material.runs[0].run.assessment.started),
            reference=("lot", lot.name),
            banners=tuple(_banners(material)),
            sections=tuple(s for s in sections if s is not None),
            digests=(("lot", material.digest), ("profile", whole.profile_digest)),
            program=material.program,
        )
    )


def _subject(material: LotMaterial) -> str:
    """Name the lot by its units' model, as far as it is one, and its name."""
    models = {kept.run.assessment.device.get("model", "") for kept in material.runs}
    lot = f"lot {material.summary.name or 'without a name'}"
    model = models.pop() if len(models) == 1 else ""
    return f"{model}, {lot}" if model else f"L{lot[1:]}"


def _as_measured(section: Section | None, material: LotMaterial) -> Section | None:
    """Say of which unit a section tells, and whether the others were set up alike."""
    if section is None or len(material.summary.units) < 2:
        return section
    others = (
        "others were set up differently, see “What deviates”"
        if material.differences
        else "the profile's settings were the same for the others"
    )
    return _opened(section, f"Of unit {serial_of(material.pattern.assessment)}; {others}.")


def _on_computers(section: Section, material: LotMaterial) -> Section:
    """Say of which unit a section tells, and on which computers the others were measured."""
    if len(material.summary.units) < 2:
        return section
    names = dict.fromkeys(name for kept in material.runs for name in kept.computers)
    where = f"measured on the same computer as the others: {next(iter(names), 'unnamed')}"
    if len(names) > 1:
        where = f"the lot was measured on several computers: {', '.join(names)}"
    return _opened(section, f"Of unit {serial_of(material.pattern.assessment)}; {where}.")


def _opened(section: Section, words: str) -> Section:
    return replace(section, blocks=(Paragraph(words, "aside"), *section.blocks))


def _banners(material: LotMaterial) -> Iterator[str]:
    for kept in material.runs:
        if kept.run.broken:
            yield broken_words(kept)
    if any(not u.same_requirement for u in material.summary.units):
        yield "NOT ONE LOT: its units were not all measured against the same requirement."
    if any(kept.run.assessment.status == "running" for kept in material.runs):
        yield "PRELIMINARY: a run goes on; figures may still change."
