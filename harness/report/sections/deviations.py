"""What deviates from the profile, and what else a reader must know of how the run was made: all of it, openly."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from harness.assess.tries import UNKNOWN, unknown
from harness.assess.words import STATUS, count, duration, note_words
from harness.record import Event
from harness.report.document import Block, Listing, Paragraph, Section
from harness.report.material import Material
from harness.report.phrases import moment, point_name

_LISTED = 12  # of a kind


def deviations(material: Material) -> list[tuple[str, tuple[str, ...]]]:
    """Collect (what it is about, sentences); empty where there is nothing to say."""
    groups = [
        ("The record", tuple(_record(material))),
        ("Notes added afterwards", tuple(_notes(material))),
        ("Overrides of the profile", tuple(_overrides(material))),
        ("Interruptions", tuple(_interruptions(material))),
        ("This computer", tuple(_host(material))),
        ("Link", tuple(_link(material))),
        ("Conditions", tuple(_conditions(material))),
        ("Limits of the record", tuple(_limits(material))),
        ("Earlier tries", tuple(_tries(material))),
    ]
    return [(title, items) for title, items in groups if items]


def deviation_section(material: Material) -> Section:
    """Say what deviates, or that nothing does."""
    groups = deviations(material)
    if not groups:
        text = (
            "Nothing deviates: the profile was carried out as given, in one sitting, without overrides; this "
            "computer kept up, and no note was added."
        )
        return Section("What deviates", (Paragraph(text),))
    blocks: list[Block] = []
    for title, items in groups:
        blocks.append(Paragraph(f"{title}.", "aside"))
        blocks.append(Listing(items, "against" if title == "The record" else "plain"))
    return Section("What deviates", tuple(blocks))


def _events(material: Material, *kinds: str) -> Iterator[tuple[str, Event]]:
    several = len(material.points) > 1
    for m in material.points:
        for event in m.assessed.events:
            if event.kind in kinds:
                yield f"{point_name(m)}: " if several else "", event


def _listed(pairs: Iterator[tuple[str, Event]]) -> Iterator[str]:
    found = list(pairs)
    for name, event in found[:_LISTED]:
        yield f"{name}{event.text}" + (f", {moment(event.at)}" if event.at else "")
    if len(found) > _LISTED:
        yield f"and {count(len(found) - _LISTED, 'more event')} of this kind"


def _record(material: Material) -> Iterator[str]:
    for what in material.broken:
        yield f"the record does not hold: {what}"
    if material.run.status in ("running", "cut"):
        yield f"{STATUS[material.run.status]}; every figure here is preliminary"


def _notes(material: Material) -> Iterator[str]:
    for note in material.run.notes:
        mark = "marked VOID: " if note.void else ""
        yield f"{mark}{note_words(note)}"


def _overrides(material: Material) -> Iterator[str]:
    run = material.run
    # `bitassay lot` gives each unit its serial number and its lot's name: in a lot that is no deviation.
    of_lot = (
        f"device.serial_number={run.device.get('serial_number')}",
        f"device.lot={run.device.get('lot')}",
    )
    yield from run.overrides[:-2] if tuple(run.overrides[-2:]) == of_lot else run.overrides


def _interruptions(material: Material) -> Iterator[str]:
    run = material.run
    ends = [*(s.started for s in run.sittings[2:]), None]
    for (before, after), until in zip(pairwise(run.sittings), ends, strict=False):
        out = _on_the_way(material, after.started, until)
        if before.ended is not None:
            gap = duration((after.started - before.ended) / 1e9)
            yield (
                f"not measured for {gap}: sitting {before.index + 1} ended {moment(before.ended)} "
                f"({before.status}), sitting {after.index + 1} began {moment(after.started)}{out}"
            )
        else:
            yield (
                f"sitting {before.index + 1} was cut; sitting {after.index + 1} began "
                f"{moment(after.started)}{out}"
            )
        if before.host.get("name") != after.host.get("name"):
            yield (
                f"sitting {after.index + 1} ran on another computer: {after.host.get('name', 'unnamed')}, "
                f"before {before.host.get('name', 'unnamed')}"
            )
        changed = [
            f"{name} {before.versions.get(name, 'none')} → {version}"
            for name, version in after.versions.items()
            if before.versions.get(name) != version
        ]
        if changed:
            yield f"versions changed before sitting {after.index + 1}: {', '.join(changed)}"
    yield from _listed(_events(material, "undecided"))
    faults = list(_events(material, "fault"))
    if run.status == "interrupted" or (run.status == "failed" and not faults):
        yield STATUS[run.status]
    yield from _listed(iter(faults))
    yield from _listed(_events(material, "guard", "stopped"))


def _on_the_way(material: Material, began: int, until: int | None) -> str:
    """Say what was out when the sitting before was stopped: the events of going on, in the sitting begun then."""
    said = [
        f"; {name}{event.text.partition('; ')[2]}"
        for name, event in _events(material, "resumed")
        if event.at is not None and event.at >= began and (until is None or event.at < until)
    ]
    return "".join(said)


def _host(material: Material) -> Iterator[str]:
    overruns = list(_events(material, "host_overrun"))
    if overruns:
        bits = sum(int(event.data.get("bits", 0)) for _name, event in overruns)
        yield (
            f"it could not keep up {len(overruns)} times: {count(bits, 'bit')} counted as unaligned, "
            "not the device's fault"
        )
    yield from _listed(_events(material, "host_stalled"))


def _link(material: Material) -> Iterator[str]:
    yield from _listed(_events(material, "link_lost", "link_back", "link", "never_returned", "line"))
    for m in material.points:
        p = m.assessed
        name = f"{point_name(m)}: " if len(material.points) > 1 else ""
        if p.inverted:
            yield f"{name}the pattern was received inverted"
        if p.alternatives:
            yield f"{name}these patterns fit as well: {', '.join(p.alternatives)}"


def _conditions(material: Material) -> Iterator[str]:
    said = []
    for m in material.points:
        said += [str(text) for text in m.facts.get("overdue", ())]
    yield from dict.fromkeys(said)
    notes = [
        (name, event)
        for name, event in _events(material, "instrument")
        if not any(word in event.text for word in (" set to ", " made safe at "))
    ]
    yield from _listed(iter(notes))


def _limits(material: Material) -> Iterator[str]:
    cut = list(_events(material, "positions_cut", "events_cut", "skipped"))
    yield from _listed(iter(cut))


def _tries(material: Material) -> Iterator[str]:
    if any(unknown(m.facts) for m in material.points):
        yield UNKNOWN
    tries = max((int(m.facts.get("earlier_tries_count", 0)) for m in material.points), default=0)
    if tries:
        yield f"this unit was tested {tries} {'time' if tries == 1 else 'times'} before against this requirement"
