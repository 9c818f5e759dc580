"""The first section: which unit, against what, with which verdict, how sure, on how many bits, what happened."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from harness.assess.assessment import PointAssessment
from harness.assess.words import STATUS, count, duration, how_it_ended, percent, ratio
from harness.report.document import Block, Entries, Entry, Section, Verdict
from harness.report.figures.of_counts import ruler_of
from harness.report.material import Material, Measured
from harness.report.phrases import (
    ber_name,
    bounds_words,
    deciding_words,
    fault_words,
    on_bits,
    point_name,
    span,
    unit_name,
)
from harness.report.sections.deviations import deviations
from harness.report.sections.sweep import sensitivity_words


def summary(material: Material) -> Section:
    """Answer the questions in their order."""
    found = _found(material)
    upper = (
        Entry("unit", tuple(_unit(material))),
        Entry("required", tuple(required_words(material))),
    )
    lower = (
        Entry("how sure", tuple(_how_sure(material))),
        Entry("on how many bits", tuple(_bits(material))),
        Entry(
            "meanwhile",
            tuple(_meanwhile(material, found)),
            "against" if found or len(material.run.sittings) > 1 else "plain",
        ),
    )
    blocks: list[Block] = [Entries(upper), _verdict(material), Entries(lower)]
    ruler = ruler_of(material)
    if ruler is not None:
        blocks.append(ruler)
    return Section("In short", tuple(blocks))


def _unit(material: Material) -> Iterator[str]:
    device = material.run.device
    yield unit_name(device)
    for key in ("firmware", "order"):
        if device.get(key):
            yield f"{key} {device[key]}"


def required_words(material: Material) -> Iterator[str]:
    """Say what is required and how it is decided."""
    judged = [m for m in material.points if m.assessed.plan]
    sensitivity = material.assessment.required_sensitivity
    if sensitivity:
        yield sensitivity
    if not judged:
        if not sensitivity:
            yield "nothing: this run measures only"
        return
    plan = judged[0].assessed.plan
    assert plan is not None
    where = f" at {'; '.join(point_name(m) for m in judged)}" if material.swept else ""
    yield (
        f"{ber_name(material)} at most {ratio(plan['ber'])}{where}, to be demonstrated with "
        f"{percent(plan['confidence'])} confidence"
    )
    article = "each direction decided" if len(judged) > 1 and not material.swept else "decided"
    yield f"{article} by a {plan['kind']} plan within {count(int(plan['longest_bits']), 'bit')}"


def _verdict(material: Material) -> Verdict:
    a = material.assessment
    words = "; ".join(a.reasons)
    stated = f"; the verdict stated was {a.verdict}: {words}" if a.verdict else ""
    if material.broken:
        return Verdict("NOT VALID", f"the record does not hold{stated}", "fail")
    if material.void_notes:
        return Verdict("VOID", f"{material.void_notes[0].text}{stated}", "open")
    if a.verdict == "PASS":
        return Verdict("PASS", words, "pass")
    if a.verdict == "FAIL":
        return Verdict("FAIL", words, "fail")
    if a.verdict == "UNDECIDED":
        return Verdict("UNDECIDED", words, "open")
    if a.status in ("running", "cut"):
        return Verdict("no verdict yet", STATUS[a.status], "none")
    return Verdict("no verdict", "nothing was required", "none")


def _how_sure(material: Material) -> Iterator[str]:
    if not material.points:
        yield "nothing was measured"
    elif material.swept:
        found = sensitivity_words(material)
        yield from found
        judged = [m for m in material.points if m.assessed.plan]
        for m in judged:
            yield f"{point_name(m)}: {deciding_words(m.assessed) or 'no bit was compared'}"
        if not found and not judged:
            yield "each point has bounds of its own: see “The curve”"
    else:
        for m in material.points:
            yield from _sure_of(material, m)


def _sure_of(material: Material, m: Measured) -> Iterator[str]:
    p = m.assessed
    named = f"{point_name(m)}: " if len(material.points) > 1 else ""
    if p.bounds is None or not p.tally.compared:
        yield f"{named}no bit was compared: every ratio is possible"
        return
    measured = f"{ber_name(material)} {ratio(p.ber)} measured" if p.tally.errors else "no error measured"
    sure = [deciding_words(p)] if p.verdict in ("PASS", "FAIL") else [bounds_words(p)]
    if p.verdict == "FAIL" and p.bounds.side == "upper":
        sure.append(bounds_words(p))
    yield f"{named}{'; '.join((measured, *sure))}"
    c = p.clustering
    if c is not None and c.clustered:
        if c.bounds is None:
            yield f"{named}the errors come in clusters, in too few events to bound the BER"
        else:
            yield (
                f"{named}the errors come in clusters, so these bounds are too narrow; from error events "
                f"{ratio(c.bounds['lower'])} to {ratio(c.bounds['upper'])} at "
                f"{percent(c.bounds['confidence'])} confidence"
            )
    if p.plan is not None:
        plan = p.plan
        yield (
            f"{named}risks fixed beforehand: a unit with just the BER required passes with "
            f"probability {percent(plan['consumer_risk'])}, one {plan['margin']:g} times better fails with "
            f"probability {percent(plan['producer_risk'])}"
        )


def _bits(material: Material) -> Iterator[str]:
    if material.swept:
        compared = material.assessment.whole.tally.compared
        yield f"{count(compared, 'bit')} compared at {count(len(material.points), 'point')}"
        return
    for m in material.points:
        named = f"{point_name(m)}: " if len(material.points) > 1 else ""
        p = m.assessed
        yield f"{named}{on_bits(p)}{f' in {duration(p.seconds)}' if p.seconds else ''}"
    if not material.points:
        yield "none"


def _meanwhile(material: Material, found: list[str]) -> Iterator[str]:
    a = material.assessment
    why = how_it_ended(a.status, a.ended_by)
    fault = fault_words(material) if a.status == "failed" else ""
    yield span(a.started, a.ended) + (f"; {why}" if why else "") + (f": {fault}" if fault else "")
    if found or a.whole.tally.received:
        yield ", ".join(found) if found else "no slip, no unaligned bit, no lost link"
    yield from _interruptions(material)
    said = sum(len(items) for _title, items in deviations(material))
    if said:
        yield f"{count(said, 'thing')} to know about this run: see “What deviates”"


def _interruptions(material: Material) -> Iterator[str]:
    """Say in a line how often the run stopped and went on later, and for how long where that is known."""
    pairs = list(pairwise(material.run.sittings))
    if not pairs:
        return
    known = [(after.started - before.ended) / 1e9 for before, after in pairs if before.ended is not None]
    length = f": not measured for {duration(sum(known))}" if len(known) == len(pairs) else ""
    yield f"{count(len(pairs), 'interruption')}, after which the run went on{length}"


def _found(material: Material) -> list[str]:
    points: list[PointAssessment] = [m.assessed for m in material.points]
    sums = {
        "slip": sum(p.slip_count for p in points),
        "unaligned bit": sum(p.tally.unaligned for p in points),
        "lost bit": sum(p.bits_lost for p in points),
        "inserted bit": sum(p.bits_inserted for p in points),
    }
    said = [count(amount, noun) for noun, amount in sums.items() if amount]
    links = sum(p.links_lost for p in points)
    if links:
        said.append("the link was lost once" if links == 1 else f"the link was lost {links} times")
    return said
