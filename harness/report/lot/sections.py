"""The sections that only a lot's report has: the lot in short, its units, its pass rate, tries, and records."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.lot import FAR, LEAST_SENSITIVITIES, OUTLIER_RISK, Unit, judged_point
from harness.assess.lot_words import number, pass_words, spread_words, verdict_word
from harness.assess.words import count, percent, ratio
from harness.report.document import (
    Block,
    Column,
    Entries,
    Entry,
    Listing,
    Paragraph,
    Section,
    Signatures,
    Table,
    Verbatim,
    Verdict,
)
from harness.report.figures.of_lot import bers_of, sensitivities_of
from harness.report.lot.material import Kept, LotMaterial
from harness.report.phrases import digits, span
from harness.report.sections.summary import required_words
from harness.statistics.retests import retest_words

_LISTED = 12


def required_ber(material: LotMaterial) -> float | None:
    """Give the BER that is required; None where none is."""
    plan = judged_point(material.pattern.assessment).plan
    return float(plan["ber"]) if plan else None


def lot_summary(material: LotMaterial) -> Section:
    """Answer in the order in which a reader asks: which lot, against what, how it came out, what stands out."""
    lot = material.summary
    upper = (
        Entry("lot", tuple(_which(material))),
        Entry("required of each unit", tuple(_required(material))),
    )
    outstanding = [f"{u.serial_number}: {text}" for u in lot.units for text in u.remarks]
    lower = [
        Entry("pass rate", tuple(pass_words(lot)) or ("no unit was judged",)),
        Entry("spread", tuple(spread_words(lot)) or ("nothing to compare",)),
        Entry(
            "standing out",
            _some(outstanding) or ("no unit stands out from the others",),
            "against" if outstanding else "plain",
        ),
        Entry("meanwhile", tuple(_meanwhile(material))),
    ]
    return Section("In short", (Entries(upper), _verdict(material), Entries(tuple(lower))))


def _which(material: LotMaterial) -> Iterator[str]:
    lot = material.summary
    measured = count(len(lot.units), "unit")
    whole = f" of {number(lot.size)}" if lot.size else ", out of a lot whose size the profile does not state"
    yield f"{lot.name or 'without a name'}: {measured}{whole}"
    models = dict.fromkeys(kept.run.assessment.device.get("model", "") for kept in material.runs)
    yield f"model {', '.join(m for m in models if m) or 'not stated'}"
    for key in ("firmware", "order", "customer"):
        values = dict.fromkeys(kept.run.assessment.device.get(key, "") for kept in material.counting)
        known = [value for value in values if value]
        if known:
            yield f"{key} {', '.join(known[:_LISTED])}"


def _required(material: LotMaterial) -> Iterator[str]:
    yield from required_words(material.pattern)
    plan = judged_point(material.pattern.assessment).plan
    if plan:
        yield (
            "risks, for each unit by itself: one with just the BER required passes with "
            f"probability {percent(plan['consumer_risk'])}, one {plan['margin']:g} times better fails with "
            f"probability {percent(plan['producer_risk'])}"
        )


def _verdict(material: LotMaterial) -> Verdict:
    lot = material.summary
    words = "; ".join(lot.reasons)
    if any(u.standing == "not valid" for u in lot.units):
        return Verdict("NOT VALID", words, "fail")
    if lot.verdict == "PASS":
        each = "each by its own run" if len(lot.units) > 1 else "the only one of the lot"
        return Verdict("ALL PASSED", f"{count(len(lot.units), 'unit')}, {each}", "pass")
    if lot.verdict == "FAIL":
        return Verdict(f"{lot.failed} FAILED", words, "fail")
    if lot.verdict == "UNDECIDED":
        return Verdict("OPEN", words, "open")
    return Verdict("no verdict", "nothing was required", "none")


def _some(items: list[str]) -> tuple[str, ...]:
    left = len(items) - _LISTED
    return (*items[:_LISTED], *([f"and {left} more: see “Units”"] if left > 0 else []))


def _meanwhile(material: LotMaterial) -> Iterator[str]:
    lot = material.summary
    ended = [kept.ended for kept in material.runs]
    until = None if None in ended else max(e for e in ended if e is not None)
    yield f"{count(len(material.runs), 'run')}, {span(material.runs[0].run.assessment.started, until)}"
    if lot.tries:
        runs = "1 run does" if len(lot.tries) == 1 else f"{len(lot.tries)} runs do"
        yield f"{runs} not count: see “Tries that do not count”"
    slips = sum(u.slips for u in lot.units)
    unaligned = sum(kept.run.assessment.whole.tally.unaligned for kept in material.counting)
    lost = sum(kept.run.assessment.whole.links_lost for kept in material.counting)
    said = [count(slips, "slip")] if slips else []
    said += [count(unaligned, "unaligned bit")] if unaligned else []
    said += [count(lost, "lost link")] if lost else []
    yield ", ".join(said) if said else "no slip, no unaligned bit, no lost link in the runs that count"


def units_section(material: LotMaterial) -> Section:
    """List every unit with its verdict and numbers."""
    lot = material.summary
    blocks: list[Block] = [_units(material)]
    said = tuple(f"{u.serial_number}: {text}" for u in lot.units for text in u.remarks)
    if said:
        blocks.append(Listing(said))
    failed = [kept for kept in material.counting if kept.run.assessment.verdict in ("FAIL", "UNDECIDED")]
    reasons = [
        f"{kept.unit}, {kept.run.assessment.verdict}: {'; '.join(kept.run.assessment.reasons)}"
        for kept in failed
        if kept.run.standing == "measured"
    ]
    if reasons:
        blocks += [Paragraph("Why units did not pass:"), Listing(tuple(reasons))]
    return Section("Units", tuple(blocks))


def _units(material: LotMaterial) -> Table:
    lot = material.summary
    swept = any(u.sensitivity is not None for u in lot.units)
    counted = any(u.ber is not None for u in lot.units) or not swept
    judged = any(u.verdict is not None or u.standing != "measured" for u in lot.units)
    again = any(u.tries > 1 for u in lot.units)
    slipped = any(u.slips for u in lot.units)
    unit = f", {lot.unit}" if lot.unit else ""
    columns = [Column("unit", False)]
    columns += [Column("verdict", False)] if judged else []
    columns += [Column(c) for c in (f"sensitivity{unit}", "lower", "upper")] if swept else []
    columns += [Column(c) for c in ("errors", "bits compared")]
    columns += [Column(c) for c in ("BER", "lower", "upper")] if counted else []
    columns += [Column("slips")] if slipped else []
    columns += [Column("tries")] if again else []
    rows = []
    for u in lot.units:
        row = [f"{u.serial_number} ({u.direction})" if u.direction else u.serial_number]
        row += [verdict_word(u)] if judged else []
        row += [_value(v) for v in (u.sensitivity, u.sensitivity_lower, u.sensitivity_upper)] if swept else []
        row += [number(u.errors), number(u.bits)]
        row += _ratios(u) if counted else []
        row += [number(u.slips)] if slipped else []
        row += [number(u.tries)] if again else []
        rows.append(tuple(row))
    note = f"bounds two-sided at {percent(lot.confidence)} confidence, each unit by itself"
    if any(u.direction for u in lot.units):
        note += "; of the two directions the one with more errors a bit"
    if swept and not counted:
        note += "; errors and bits are sums over all points of a unit's sweep"
    return Table("", tuple(columns), tuple(rows), note)


def _value(value: float | None) -> str:
    return "" if value is None else f"{value:.2f}"


def _ratios(u: Unit) -> list[str]:
    if u.lower is None:
        return ["never aligned" if u.standing == "measured" and not u.bits else "", "", ""]
    return [digits(u.ber), digits(u.lower), digits(u.upper)]


def spread_section(material: LotMaterial) -> Section | None:
    """Show how units spread, and say by what rule one stands out; none where there is nothing to show."""
    lot = material.summary
    asked = (material.pattern.section("requirement")).get("sensitivity_at_least")
    figures = [
        *sensitivities_of(lot, None if asked is None else float(asked)),
        *bers_of(lot, required_ber(material)),
    ]
    if not figures:
        return None
    rules = []
    if lot.ber_spread:
        rules.append(
            "A unit stands out by its BER where an exact test of its errors against those of all the others "
            "together finds them to differ; the risk that any unit of an even lot is called out is "
            f"{percent(OUTLIER_RISK)} in all, shared among the units. The test takes errors as independent and "
            "the length of each run as given."
        )
    if lot.sensitivity_spread:
        rules.append(
            f"A unit stands out by its sensitivity where it lies more than {FAR:g} robust standard deviations from "
            f"the median (Iglewicz and Hoaglin, 1993), from {LEAST_SENSITIVITIES} units on."
        )
    return Section("Spread", (*figures, *(Paragraph(rule, "aside") for rule in rules)))


def pass_rate_section(material: LotMaterial) -> Section | None:
    """Give the pass rate with its bounds, and say what it is a rate of; none where nothing was judged."""
    lot = material.summary
    if not lot.judged:
        return None
    rows = [_rate("in the end", lot.passed, lot.judged, lot.pass_rate_lower, lot.pass_rate_upper)]
    if lot.first_judged:
        rows.append(
            _rate(
                "at the first try",
                lot.first_passed,
                lot.first_judged,
                lot.first_rate_lower,
                lot.first_rate_upper,
            )
        )
    columns = (Column("passed", False), Column("units"), Column("rate"), Column("lower"), Column("upper"))
    blocks: list[Block] = [
        Table("", columns, tuple(rows), f"bounds two-sided at {percent(lot.confidence)} confidence"),
        Paragraph(
            "In this lot the rate is what was counted. The bounds (Clopper and Pearson, 1934) speak of the "
            "production that the units came from, and take them as drawn from it at random. Undecided units have "
            "not passed; void and unfinished ones are left out."
        ),
        Paragraph(
            f"To compute them again: bitassay bounds {lot.judged - lot.passed} {lot.judged} --confidence "
            f"{lot.confidence:g} gives those of the share that did not pass",
            "aside",
        ),
    ]
    plan = judged_point(material.pattern.assessment).plan
    if plan and len(lot.units) > 1:
        expected = plan["consumer_risk"] * len(lot.units)
        blocks.append(
            Paragraph(
                f"The consumer's risk is each unit's own: of {len(lot.units)} units that all had just the BER "
                f"{ratio(plan['ber'])}, {expected:.2g} would be expected to pass."
            )
        )
    return Section("Pass rate", tuple(blocks))


def _rate(name: str, passed: int, judged: int, lower: float, upper: float) -> tuple[str, ...]:
    return (name, f"{passed} of {judged}", percent(passed / judged), percent(lower), percent(upper))


def tries_section(material: LotMaterial) -> Section:
    """Say openly which runs do not count, and what measuring again does to the risk."""
    lot = material.summary
    if not lot.tries:
        text = "There are none: every unit was measured once, no run is void, and none was broken off."
        return Section("Tries that do not count", (Paragraph(text),))
    blocks: list[Block] = []
    plan = judged_point(material.pattern.assessment).plan
    again = [u for u in lot.units if u.tries > 1]
    if plan and again:
        most = max(again, key=lambda u: u.tries)
        words = retest_words(plan["consumer_risk"], most.tries, f"unit {most.serial_number}")
        blocks.append(Paragraph(words, "against"))
    blocks.append(
        Paragraph("A unit counts by its last completed run that is not void. Every other run was a try:")
    )
    columns = tuple(
        Column(c, False) for c in ("unit", "began (UTC)", "verdict", "run", "why it does not count")
    )
    rows = tuple(
        (t.serial_number, t.started[:16].replace("T", " "), t.verdict or "none", t.run, t.why)
        for t in lot.tries
    )
    blocks.append(Table("", columns, rows))
    return Section("Tries that do not count", tuple(blocks))


def deviations_section(material: LotMaterial) -> Section:
    """Say what deviates from the profile, unit by unit, equal words once."""
    by_text: dict[str, list[str]] = {}
    for kept in material.counting:
        for text in kept.deviations:
            units = by_text.setdefault(text, [])
            if kept.unit not in units:
                units.append(kept.unit)
    for unit, differences in material.differences.items():
        for text in differences:
            by_text.setdefault(f"set up differently: {text}", []).append(unit)
    if not by_text:
        text = (
            "Nothing deviates: every unit was measured as the profile says and with the same set-up, in one sitting; "
            "this computer kept up."
        )
        return Section("What deviates", (Paragraph(text),))
    whole = len(material.summary.units)
    items = [f"{_all_of(names, whole)}: {text}" for text, names in by_text.items()]
    return Section("What deviates", (Listing(tuple(items)),))


def _all_of(names: list[str], units: int) -> str:
    if len(names) == units > 1:
        return "every unit"
    more = f" and {len(names) - _LISTED} more" if len(names) > _LISTED else ""
    return ", ".join(names[:_LISTED]) + more


def lot_signatures(material: LotMaterial) -> Section:
    """Give lines to sign on."""
    operators = dict.fromkeys(kept.run.assessment.device.get("operator", "") for kept in material.counting)
    customers = dict.fromkeys(kept.run.assessment.device.get("customer", "") for kept in material.counting)
    roles = (
        ("measured by", ", ".join(name for name in operators if name)),
        ("checked by", ""),
        ("accepted by", ", ".join(name for name in customers if name)),
    )
    text = (
        "Signed for the units and the records named in this report, whose digests stand in its last section."
    )
    return Section("Signatures", (Paragraph(text, "aside"), Signatures(roles)))


def records_section(material: LotMaterial) -> Section:
    """Give the digest of every record, and the profiles as given."""
    broken = [kept for kept in material.runs if kept.run.broken]
    state = "; ".join(f"{kept.unit}, run {kept.key}: {'; '.join(kept.run.broken)}" for kept in broken)
    entries = (
        Entry(
            "lot, SHA-256",
            (
                material.digest,
                "over one line for each run: its record's digest, two spaces, its key; in the order of the keys, "
                "each line ended by a line feed",
            ),
        ),
        Entry(
            "records",
            (
                f"THESE DO NOT HOLD: {state}"
                if broken
                else "computed again when this report was written: all hold",
            ),
            "against" if broken else "plain",
        ),
        Entry("to check one", (f"bitassay verify {material.runs[0].key}", "derives every number again")),
    )
    blocks: list[Block] = [Entries(entries), Verbatim("\n".join(_digests(material)))]
    profiles = {kept.profile_digest: kept.profile_text for kept in material.runs}
    for digest, text in profiles.items():
        units = dict.fromkeys(kept.unit for kept in material.runs if kept.profile_digest == digest)
        whose = f" of {_all_of(list(units), 0)}" if len(profiles) > 1 else ""
        if text.strip():
            blocks += [Paragraph(f"Profile{whose}, SHA-256 {digest}:"), Verbatim(text.rstrip("\n"))]
    return Section("Records and profile", tuple(blocks))


def _digests(material: LotMaterial) -> Iterator[str]:
    width = max(len(kept.unit) for kept in material.runs)
    for kept in material.runs:
        yield f"{kept.unit:<{width}}  run {kept.key}"
        yield kept.record_digest or "no digest: the run has not ended"


def broken_words(kept: Kept) -> str:
    """Say that a run's record cannot be trusted."""
    return (
        f"THE RECORD OF UNIT {kept.unit} DOES NOT HOLD (run {kept.key}): {'; '.join(kept.run.broken)}. "
        "Do not use this report; look for another copy of the record."
    )
