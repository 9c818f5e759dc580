"""Going on with a run that was cut: the same profile, the same device, the guardian gone first."""

from __future__ import annotations

from pathlib import Path

from drivers.contract import DriverError
from drivers.guardian import wait_for_guardian
from harness.assess.assessment import PointAssessment
from harness.assess.run import assess
from harness.profile import Profile, ProfileError, parse_profile
from harness.record import Run

GUARDIAN_S = 60.0


def prepare(record: Run, lock: Path) -> Profile:
    """Give the profile of a cut run, read again from its record, once its guardian has gone.

    Raises
    ------
    ProfileError
        If the run cannot go on: it is still running, or its profile reads otherwise with this version.
    DriverError
        If the guardian is still busy.
    """
    if record.status == "running":
        raise ProfileError(
            f"run {record.key} is still being measured",
            "wait for it to end, or stop it; `bitassay follow` shows it",
        )
    if record.command not in ("measure", "sweep"):
        raise ProfileError(f"run {record.key} is a {record.command} and cannot go on", "start it anew")
    profile = parse_profile(record.profile_text, record.overrides, f"the profile of run {record.key}")
    if profile.resolved() != record.settings:
        raise ProfileError(
            f"the profile of run {record.key} means something else to this version of bitassay",
            "resume with the version that began it, or start a new run",
        )
    guardian = lock / f"guardian-{record.key}.log"
    if not wait_for_guardian(guardian, GUARDIAN_S):
        raise DriverError(
            "the guardian of the cut run is still making its instruments safe",
            f"wait, and see {guardian}",
        )
    return profile


def instruments_of(record: Run) -> dict[str, str]:
    """Say who answered when a run was begun: name -> identity in one line."""
    known: dict[str, str] = {}
    for point in record.points:
        known |= {n: who for n, who in (point.facts.get("instruments") or {}).items() if n not in known}
    return known


def points_done(record: Run) -> list[PointAssessment]:
    """Assess the points that a cut run has to the end already."""
    unfinished = (None, "interrupted", "fault")
    return [point for point in assess(record).points if point.ended_by not in unfinished]
