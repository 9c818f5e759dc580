"""A lot: many units of one kind side by side, each with its verdict, and which of them stand out.

A unit counts by its last completed run that is not void. A unit stands out where its errors differ from those of
all the others together more than chance explains (exact conditional test, the risk shared among the units), or
where its sensitivity lies more than 3.5 robust standard deviations from the median (Iglewicz and Hoaglin, 1993).
"""

from __future__ import annotations

import statistics
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

from harness.assess.assessment import Assessment
from harness.assess.words import percent, ratio
from harness.statistics.bounds import clopper_pearson
from harness.statistics.comparing import compare_counts

OUTLIER_RISK = 0.01  # that any unit of an even lot is called an outlier by its BER
FAR = 3.5
MAD_TO_SIGMA = 0.6745


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit of a lot."""

    serial_number: str
    run: str
    verdict: str | None
    errors: int
    bits: int
    ber: float | None
    sensitivity: float | None
    tries: int
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class LotSummary:
    """A lot as far as it was measured."""

    name: str
    size: int | None
    units: tuple[Unit, ...]
    passed: int
    judged: int
    pass_rate_lower: float
    pass_rate_upper: float
    confidence: float
    ber_spread: tuple[float, float, float] | None  # least, median, most
    sensitivity_spread: tuple[float, float, float] | None
    unit: str  # of the sensitivities

    def to_json(self) -> dict[str, Any]:
        """JSON as `lot` prints it."""
        return {"schema": 1, **asdict(self)}


def summarise(
    name: str, size: int | None, runs: Sequence[Assessment], confidence: float = 0.95
) -> LotSummary:
    """Summarise runs, oldest first; of a unit with several the last completed one counts."""
    tries: dict[str, int] = {}
    last: dict[str, Assessment] = {}
    for run in runs:
        serial = run.device.get("serial_number", "")
        tries[serial] = tries.get(serial, 0) + 1
        if run.status == "completed":
            last[serial] = run
    units = [_unit(serial, run, tries[serial]) for serial, run in last.items()]
    marked = tuple(_marked(unit, units) for unit in units)
    judged = [u for u in marked if u.verdict is not None]
    passed = sum(u.verdict == "PASS" for u in judged)
    rate = clopper_pearson(passed, len(judged), confidence)
    sensitivities = [u.sensitivity for u in marked if u.sensitivity is not None]
    unit = next((str(r.sensitivity["unit"]) for r in runs if r.sensitivity), "")
    return LotSummary(
        name=name,
        size=size,
        units=marked,
        passed=passed,
        judged=len(judged),
        pass_rate_lower=rate.lower,
        pass_rate_upper=rate.upper,
        confidence=confidence,
        ber_spread=_spread([u.ber for u in marked if u.ber is not None]),
        sensitivity_spread=_spread(sensitivities),
        unit=unit,
    )


def _unit(serial: str, run: Assessment, tries: int) -> Unit:
    t = run.whole.tally
    return Unit(
        serial_number=serial,
        run=run.run or "",
        verdict=run.verdict,
        errors=t.errors,
        bits=t.compared,
        ber=run.whole.ber,
        sensitivity=run.sensitivity["value"] if run.sensitivity else None,
        tries=tries,
    )


def _spread(values: Sequence[float]) -> tuple[float, float, float] | None:
    return (min(values), statistics.median(values), max(values)) if values else None


def _marked(unit: Unit, units: Sequence[Unit]) -> Unit:
    """Say what stands out about a unit."""
    remarks = []
    others = [u for u in units if u is not unit]
    if unit.tries > 1:
        remarks.append(f"measured {unit.tries} times; each was a try")
    errors, bits = sum(u.errors for u in others), sum(u.bits for u in others)
    if unit.ber is not None and len(others) >= 2 and bits and unit.bits:
        sure = 1 - OUTLIER_RISK / (2 * len(units))
        compared = compare_counts(errors, bits, unit.errors, unit.bits, sure)
        if compared.worse or compared.better:
            way = "worse" if compared.worse else "better"
            remarks.append(f"BER {ratio(unit.ber)} is {way} than the others' {ratio(errors / bits)}")
    known = [u.sensitivity for u in units if u.sensitivity is not None]
    if unit.sensitivity is not None and len(known) >= 5:
        middle = statistics.median(known)
        away = statistics.median(abs(value - middle) for value in known)
        if away and abs(unit.sensitivity - middle) * MAD_TO_SIGMA / away > FAR:
            remarks.append(f"sensitivity {unit.sensitivity:.2f} is far from the median {middle:.2f}")
    return Unit(**{**asdict(unit), "remarks": tuple(remarks)})


def lines_of(lot: LotSummary) -> list[str]:
    """Say a lot in plain lines."""
    head = f"lot {lot.name or 'without a name'}: {len(lot.units)} units measured"
    lines = [head + (f" of {lot.size}" if lot.size else "")]
    if lot.judged:
        lines.append(
            f"passed {lot.passed} of {lot.judged}; the pass rate lies between {percent(lot.pass_rate_lower)} and "
            f"{percent(lot.pass_rate_upper)} at {percent(lot.confidence)} confidence"
        )
    if lot.ber_spread:
        low, middle, high = lot.ber_spread
        lines.append(f"BER from {ratio(low)} to {ratio(high)}, median {ratio(middle)}")
    if lot.sensitivity_spread:
        low, middle, high = lot.sensitivity_spread
        lines.append(f"sensitivity from {low:.2f} to {high:.2f} {lot.unit}, median {middle:.2f} {lot.unit}")
    lines.append("")
    lines.append(f"{'unit':<12} {'verdict':<10} {'errors':>8} {'bits':>15} {'BER':>10}  run")
    for u in lot.units:
        bits = f"{u.bits:,}".replace(",", "\u202f")
        lines.append(
            f"{u.serial_number:<12} {u.verdict or '-':<10} {u.errors:>8} {bits:>15} {ratio(u.ber):>10}  {u.run}"
        )
        lines += [f"{'':<12} {remark}" for remark in u.remarks]
    return lines
