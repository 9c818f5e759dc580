"""What a lot's report is assembled from: of each run what its lot says of it, and one run whole for the set-up.

Records are taken one by one and let go again: a lot of nights is more than a computer's memory holds.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

from harness.assess.compare import condition_differences
from harness.assess.lot import LotRun, LotSummary, serial_of, summarise
from harness.report.material import Material
from harness.report.sections.deviations import deviations

_GIVEN_BY_THE_LOT = ("device.serial_number=", "device.lot=")  # overrides that deviate from nothing
_SAID_OF_THE_LOT = ("Earlier tries", "The record", "Notes added afterwards")


@dataclass(frozen=True)
class Kept:
    """What is kept of a run of a lot once its record is let go."""

    run: LotRun
    key: str
    unit: str
    ended: int | None  # UTC, ns
    record_digest: str | None  # None: the run has not ended
    profile_text: str
    settings: Mapping[str, Any]
    deviations: tuple[str, ...]
    computers: tuple[str, ...]  # their names

    @property
    def profile_digest(self) -> str:
        """SHA-256 of the profile's text as given."""
        return hashlib.sha256(self.profile_text.encode("utf-8", "surrogatepass")).hexdigest()


@dataclass(frozen=True)
class LotMaterial:
    """Everything that a lot's report says something about."""

    summary: LotSummary
    runs: tuple[Kept, ...]  # all of them, oldest first
    pattern: Material  # a whole run: the newest that counts, which the set-up is told by
    written: int  # UTC, ns
    program: str
    differences: Mapping[str, tuple[str, ...]] = field(default_factory=dict)  # unit -> how its set-up differs

    @property
    def counting(self) -> Iterator[Kept]:
        """The runs that count, in the order of the units."""
        by_key = {kept.key: kept for kept in self.runs}
        yield from (by_key[unit.run] for unit in self.summary.units)

    @property
    def digest(self) -> str:
        """SHA-256 over the lines "record's digest, two spaces, run's key", by key, each ended by a line feed."""
        lines = sorted((kept.key, kept.record_digest or "none") for kept in self.runs)
        text = "".join(f"{digest}  {key}\n" for key, digest in lines)
        return hashlib.sha256(text.encode()).hexdigest()


def gather(name: str, materials: Iterable[Material], *, written: int, program: str) -> LotMaterial | None:
    """Gather what a lot's report needs; None where there is no run.

    Parameters
    ----------
    materials
        One for each run, oldest first; each is asked for when the one before has been let go.
    written
        When the report is written, UTC, ns.
    program
        Name and version of what writes it.
    """
    runs: list[Kept] = []
    whole: Material | None = None
    for material in materials:
        kept = _kept(material)
        runs.append(kept)
        if whole is None or kept.run.standing == "measured":
            whole = material
    if whole is None:
        return None
    size = next((s for kept in reversed(runs) if (s := (kept.settings.get("lot") or {}).get("size"))), None)
    summary = summarise(name, size, [kept.run for kept in runs])
    made = LotMaterial(summary, tuple(runs), whole, written, program)
    names = (serial_of(whole.assessment), "this one")
    differences = {
        kept.unit: tuple(condition_differences(whole.settings, kept.settings, names))
        for kept in made.counting
        if kept.run.standing == "measured"
    }
    found = {unit: said for unit, said in differences.items() if said}
    return LotMaterial(summary, made.runs, whole, written, program, found)


def _kept(material: Material) -> Kept:
    settings = material.settings
    target = (settings.get("sweep") or {}).get("sensitivity_ber") or (settings.get("search") or {}).get("ber")
    asked = settings.get("requirement")
    run = LotRun(
        assessment=material.assessment,
        requirement=None if not asked else {**asked, "sensitivity_ber": target},
        void="; ".join(note.text for note in material.void_notes),
        broken=material.broken,
    )
    return Kept(
        run=run,
        key=material.run.key,
        unit=serial_of(material.assessment),
        ended=material.run.ended,
        record_digest=material.kept_digest,
        profile_text=material.run.profile_text,
        settings=settings,
        deviations=tuple(_deviations(material)),
        computers=tuple(str(s.host.get("name") or "unnamed") for s in material.run.sittings),
    )


def _deviations(material: Material) -> Iterator[str]:
    """Say what deviates from the profile beyond what a lot brings with it."""
    for title, items in deviations(material):
        if title in _SAID_OF_THE_LOT:
            continue
        for item in items:
            if title == "Overrides of the profile":
                if not item.startswith(_GIVEN_BY_THE_LOT):
                    yield f"overridden: {item}"
            else:
                yield item
