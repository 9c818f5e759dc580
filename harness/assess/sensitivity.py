"""The verdict on a required sensitivity: from a curve, or from what is sure without one.

Nothing is decided beyond the values that were measured, nor by a curve that goes the wrong way. Slips,
unaligned bits and lost links count at every point at which the device has to work, as they do in a plain run.
"""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.assessment import PointAssessment
from harness.assess.curve import Curve
from harness.assess.requirement import Requirement
from harness.assess.words import count, percent, ratio
from harness.record import Verdict
from harness.statistics.curve import CurveFit

Judged = tuple[Verdict, list[str]]


def judge_sensitivity(curve: Curve | None, least: float, requirement: Requirement) -> Judged:
    """Give the verdict on ``requirement.sensitivity_at_least``, with its reasons.

    Parameters
    ----------
    curve
        None where no point was measured.
    least
        In the instrument's unit: more attenuation is better, and less level.
    requirement
        For its limits of slips, unaligned bits and lost links.
    """
    if curve is None or curve.fit is None:
        return "UNDECIDED", ["the sensitivity could not be determined: no point was measured"]
    if not any(point.tally.compared for point in curve.points):
        return "UNDECIDED", ["nothing was ever aligned at any value: no bit could be compared"]
    if curve.contrary:
        return "UNDECIDED", [curve.contrary]
    unit = f" {curve.unit}".rstrip()
    verdict, reasons = _by_the_curve(curve, curve.fit, least, unit)
    if verdict != "UNDECIDED" and (words := _not_measured(curve, least, unit, verdict)):
        verdict, reasons = "UNDECIDED", [words, *reasons]
    failures, doubts = _troubles(curve, least, requirement)
    if failures or verdict == "FAIL":
        return "FAIL", [*failures, *reasons]
    return ("UNDECIDED", [*doubts, *reasons]) if doubts else (verdict, reasons)


def _by_the_curve(curve: Curve, fit: CurveFit, least: float, unit: str) -> Judged:
    """Judge by the bound on the unfavourable side."""
    sign = _sign(fit)
    if fit.value is None:
        return _without_a_curve(curve, fit, least, unit)
    good, bad = (fit.lower, fit.upper) if fit.rising else (fit.upper, fit.lower)
    about = f"the sensitivity is {fit.value:.2f}{unit}"
    between = f"(between {_bound(fit.lower)} and {_bound(fit.upper)}{unit} at {percent(fit.confidence)})"
    if good is not None and sign * good >= sign * least:
        return "PASS", [f"{about} {between}, at least {least:g}{unit} as required"]
    if bad is not None and sign * bad < sign * least:
        return "FAIL", [f"{about} {between}, and {least:g}{unit} is required"]
    return "UNDECIDED", [f"{about} {between}: whether it reaches {least:g}{unit} is open"]


def _without_a_curve(curve: Curve, fit: CurveFit, least: float, unit: str) -> Judged:
    """Judge by the values at which the BER is surely under, or surely over, the target."""
    sure, sign = curve.sure, _sign(fit)
    if sure is not None and fit.rising is not None:
        at = f"at {percent(sure.confidence)}, whatever the curve's shape; {least:g}{unit} is required"
        if sure.under is not None and sign * sure.under >= sign * least:
            return "PASS", [f"the BER is under {ratio(fit.target_ber)} as far as {sure.under:g}{unit} {at}"]
        if sure.over is not None and sign * sure.over <= sign * least:
            return "FAIL", [f"the BER is over {ratio(fit.target_ber)} at {sure.over:g}{unit} already, {at}"]
    return "UNDECIDED", [f"the sensitivity could not be determined: {fit.words}"]


def _not_measured(curve: Curve, least: float, unit: str, verdict: Verdict) -> str:
    """Say where a verdict would rest on values beyond those measured; empty where it does not.

    A unit passes by what it does at the required value or harder ones, and fails by that or easier ones.
    """
    sign = _sign(curve.fit)
    harder = [sign * (point.values[curve.instrument] - least) for point in curve.points]
    if (max(harder) >= 0) if verdict == "PASS" else (min(harder) <= 0):
        return ""
    values = [point.values[curve.instrument] for point in curve.points]
    return f"{least:g}{unit} is required, and only {min(values):g} to {max(values):g}{unit} was measured"


def _troubles(curve: Curve, least: float, requirement: Requirement) -> tuple[list[str], list[str]]:
    """Say what else rules a PASS out at the points at which the device has to work, and what leaves it open."""
    failures: list[str] = []
    doubts: list[str] = []
    sign = _sign(curve.fit)
    for point in curve.points:
        value = point.values[curve.instrument]
        if sign * value > sign * least:
            continue
        where = f"{curve.instrument} {value:g}"
        failures += [f"{where}: {words}" for words in _over_the_limits(point, requirement)]
        if point.links_lost or not point.tally.compared:
            lost = "the link was lost" if point.tally.compared else "nothing was ever aligned"
            (failures if requirement.lost_link == "fail" else doubts).append(f"{where}: {lost}")
    return failures, doubts


def _over_the_limits(point: PointAssessment, requirement: Requirement) -> Iterator[str]:
    if point.slip_count > requirement.max_slips:
        yield f"{count(point.slip_count, 'slip')}, where at most {requirement.max_slips} are allowed"
    elif point.slip_count + point.inversions > requirement.max_slips:
        turned = count(point.inversions, "inversion")
        yield f"{turned} in mid-stream, each like a slip, where at most {requirement.max_slips} are allowed"
    share = point.unaligned_ratio
    if point.tally.compared and share is not None and share > requirement.max_unaligned_ratio:
        most = percent(requirement.max_unaligned_ratio)
        yield f"{percent(share)} of the bits were unaligned or lost, where at most {most} are allowed"


def _sign(fit: CurveFit | None) -> int:
    """+1 where more of the value is harder (attenuation), -1 where less of it is (level)."""
    return 1 if fit is not None and fit.rising else -1


def _bound(value: float | None) -> str:
    return "no bound" if value is None else f"{value:.2f}"
