"""Assembling a report: all sections, in the order in which a reader asks."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.words import STATUS
from harness.report.document import Document, Entries, Section, harmless
from harness.report.material import Material
from harness.report.phrases import moment, unit_name
from harness.report.sections.conditions import conditions_section, link_section
from harness.report.sections.counts import (
    availability_section,
    clustering_section,
    counts_section,
    course_section,
)
from harness.report.sections.deviations import deviation_section
from harness.report.sections.formalities import (
    cautions_section,
    digests_section,
    record_digest,
    signature_section,
    versions_section,
)
from harness.report.sections.requirement import (
    boundaries_section,
    bounds_section,
    requirement_section,
    retest_section,
    unit_section,
    verdict_section,
)
from harness.report.sections.summary import summary
from harness.report.sections.sweep import search_entries, sweep_section


def assemble(material: Material) -> Document:
    """Make the one document that all forms of a report show."""
    sections = (
        summary(material),
        unit_section(material),
        requirement_section(material),
        verdict_section(material),
        _with_search(sweep_section(material), material),
        bounds_section(material),
        retest_section(material),
        conditions_section(material),
        link_section(material),
        counts_section(material),
        availability_section(material),
        clustering_section(material),
        course_section(material),
        deviation_section(material),
        cautions_section(),
        signature_section(material),
        boundaries_section(material),
        versions_section(material),
        digests_section(material),
    )
    run = material.run
    return harmless(
        Document(
            kind="Bit error ratio report",
            title=run.title or "Bit error ratio measurement",
            subject=unit_name(run.device),
            date=moment(run.started),
            reference=("run", run.key),
            banners=tuple(_banners(material)),
            sections=tuple(s for s in sections if s is not None),
            digests=(("record", record_digest(material)), ("profile", material.profile_digest)),
            program=material.program,
        )
    )


def _with_search(section: Section | None, material: Material) -> Section | None:
    search: Entries | None = search_entries(material)
    if section is None or search is None:
        return section
    return Section(section.title, (search, *section.blocks))


def _banners(material: Material) -> Iterator[str]:
    for what in material.broken:
        yield f"THE RECORD DOES NOT HOLD: {what}. Do not use this report; look for another copy of the record."
    for note in material.void_notes:
        yield f"VOID: “{note.text}” — {note.who}, {moment(note.at)}. This run is not to be relied on."
    if material.run.status in ("running", "cut"):
        yield f"PRELIMINARY: {STATUS[material.run.status]}; figures may still change."
