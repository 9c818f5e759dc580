"""What a report is assembled from: the record, its assessment, and whether the record is still whole."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.requirement import Requirement, requirement_at, requirement_of, units_of
from harness.assess.run import assess
from harness.assess.verify import contradictions
from harness.record import Note, Point, Run
from harness.report.series import Series, series_of
from harness.statistics.plans import Plan

_LOOSE = 1e-9  # relative: a bound solved on another machine may differ in its last digits


@dataclass(frozen=True)
class Measured:
    """A point: as recorded, as assessed, and the requirement where one holds there."""

    point: Point
    assessed: PointAssessment
    requirement: Requirement | None
    units: Mapping[str, str]  # of the instruments

    @cached_property
    def series(self) -> Series:
        """The seconds as columns."""
        return series_of(self.point)

    @cached_property
    def plan(self) -> Plan | None:
        """The plan afresh, for its words and its stairs."""
        return self.requirement.make_plan() if self.requirement else None

    @property
    def facts(self) -> Mapping[str, Any]:
        """What was found at the point beside numbers."""
        return self.point.facts


@dataclass(frozen=True)
class Material:
    """Everything that a report says something about."""

    run: Run
    assessment: Assessment
    points: tuple[Measured, ...]
    kept_digest: str | None  # stored when the run ended
    digest: str | None  # of the record as it is now; None where it was not computed
    written: int  # UTC, ns
    program: str
    units: Mapping[str, str]  # of the instruments

    @property
    def settings(self) -> Mapping[str, Any]:
        """The profile as resolved."""
        return self.run.settings

    def section(self, name: str) -> Mapping[str, Any]:
        """Give a section of the resolved profile; empty where there is none."""
        return self.run.settings.get(name) or {}

    @property
    def profile_digest(self) -> str:
        """SHA-256 of the profile's text as given."""
        return hashlib.sha256(self.run.profile_text.encode("utf-8", "surrogatepass")).hexdigest()

    @property
    def swept(self) -> bool:
        """Whether conditions were stepped; two directions at once are no sweep."""
        return self.assessment.sweep and not any("direction" in m.facts for m in self.points)

    @property
    def void_notes(self) -> tuple[Note, ...]:
        """Notes that mark the record as void."""
        return tuple(note for note in self.run.notes if note.void)

    @cached_property
    def broken(self) -> tuple[str, ...]:
        """Say what shows that the record is not what it was when the run ended; empty where it holds."""
        said = []
        if self.kept_digest is not None and self.digest is not None and self.kept_digest != self.digest:
            said.append("its SHA-256 digest is not the one that was kept when the run ended")
        said.extend(_differences(self.run, self.assessment))
        said.extend(contradictions(self.run))
        return tuple(said)


def material_of(
    run: Run, kept_digest: str | None, digest: str | None, *, written: int, program: str
) -> Material:
    """Gather what a report needs; assesses the record.

    Parameters
    ----------
    kept_digest
        As stored when the run ended.
    digest
        Of the record as it is now.
    written
        When the report is written, UTC, ns.
    program
        Name and version of what writes it.
    """
    assessment = assess(run)
    requirement = requirement_of(run.settings)
    units = units_of(run)
    points = tuple(
        Measured(point, assessed, requirement_at(requirement, run.settings, point.values), units)
        for point, assessed in zip(run.points, assessment.points, strict=True)
    )
    return Material(run, assessment, points, kept_digest, digest, written, program, units)


def _differences(run: Run, derived: Assessment) -> list[str]:
    """Name the weightiest numbers that were stated at the run's end and do not follow from its record."""
    if run.stated is None:
        return []
    now = derived.to_json()
    keys = ("verdict", "errors", "bits_compared", "bits_received", "bits_unaligned", "ber")
    said = [
        f"{key} was stated as {run.stated[key]}, and {now[key]} follows from the record"
        for key in keys
        if key in run.stated and not _same(run.stated[key], now[key])
    ]
    one, other = (_deciding(document) for document in (run.stated, now))
    if not _same(one, other):
        said.append(f"the deciding bound was stated as {one}, and {other} follows from the record")
    if run.verdict != derived.verdict:
        said.append(f"the verdict was kept as {run.verdict}, and {derived.verdict} follows from the record")
    return said


def _deciding(document: Mapping[str, Any]) -> Any:
    bounds = document.get("bounds")
    return bounds["deciding"]["value"] if bounds else None


def _same(one: Any, other: Any) -> bool:
    if isinstance(one, float) and isinstance(other, float):
        return abs(one - other) <= _LOOSE * max(abs(one), abs(other))
    return bool(one == other)
