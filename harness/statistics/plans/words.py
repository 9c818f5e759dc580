"""A plan in plain words, to be pasted into a test procedure."""

from __future__ import annotations

from harness.statistics.notation import ratio
from harness.statistics.plans.plan import Plan

_MEANING = (
    "The length and the limits are fixed before the test and are not changed in view of its count. A pass "
    "demonstrates the requirement; a fail says that it was not demonstrated. A unit that is tested again "
    "until it passes does not have these risks, nor has one whose errors come in bursts."
)


def describe(plan: Plan, rate_bps: float | None = None) -> str:
    """Say what is required, what is done, and what the risks are.

    Parameters
    ----------
    plan
        Any plan; it need not have begun.
    rate_bps
        Payload rate in bit/s, for times.

    Returns
    -------
    str
        Paragraphs of running text, separated by empty lines.
    """
    parts = [_requirement(plan), _rule(plan, rate_bps), _risks(plan), _MEANING, *plan.remarks]
    return "\n\n".join(part[0].upper() + part[1:] + ("" if part.endswith(".") else ".") for part in parts)


def good_unit_fails(plan: Plan) -> str:
    """What a FAIL has to say beside itself."""
    return (
        f"not demonstrated; a unit {plan.margin:g} times better fails this test "
        f"with probability {_percent(plan.producer_risk)}"
    )


def _requirement(plan: Plan) -> str:
    return (
        f"Requirement: the bit error ratio (BER) is at most {ratio(plan.ber, 6)}, to be demonstrated with "
        f"{_percent(plan.confidence)} confidence."
    )


def _rule(plan: Plan, rate_bps: float | None) -> str:
    def length(bits: float) -> str:
        time = f" ({_time(bits / rate_bps)} at {rate_bps:,.0f} bit/s)".replace(",", " ") if rate_bps else ""
        return f"{_count(bits, 'bit')}{time}"

    if plan.kind == "sequential":
        first = plan.boundaries[0].accept_at
        return (
            "Test: a known pattern is sent, the received bits are compared with it, and after every bit the "
            "number of errors so far is held against two limits, laid down in the table of boundaries. The "
            "unit passes as soon as the bits compared reach the accepting limit for its number of errors "
            f"(without any error: {length(first)}); it fails as soon as an error falls at or before the "
            f"rejecting limit. The test ends after {length(plan.longest_bits)} at the latest. On average it "
            f"takes {length(plan.expected_bits(plan.ber))} for a unit that just misses the requirement and "
            f"{length(plan.expected_bits(plan.good_ber))} for one {plan.margin:g} times better."
        )
    assert plan.accept_errors is not None
    allowed = "without an error" if plan.accept_errors == 0 else f"with {_at_most(plan.accept_errors)}"
    ending = (
        "it fails at the first error too many, and a pass takes the whole length"
        if plan.kind == "curtailed"
        else "otherwise it fails; the whole length is run in any case"
    )
    return (
        f"Test: a known pattern is sent and {length(plan.longest_bits)} are compared with it. The unit "
        f"passes if they arrive {allowed}; {ending}."
    )


def _risks(plan: Plan) -> str:
    return (
        f"Risks, computed exactly for independent errors: a unit with a BER of exactly {ratio(plan.ber, 6)} passes "
        f"with probability {_percent(plan.consumer_risk)} (consumer's risk), a worse one less often; a unit "
        f"{plan.margin:g} times better (BER {ratio(plan.good_ber)}) fails with probability "
        f"{_percent(plan.producer_risk)} (producer's risk), a better one less often."
    )


def _at_most(errors: int) -> str:
    return "at most one error" if errors == 1 else f"at most {_count(errors, 'error')}"


def _count(number: float, noun: str) -> str:
    return f"{round(number):,}".replace(",", " ") + f" {noun}" + ("" if round(number) == 1 else "s")


def _percent(share: float) -> str:
    """Three digits, and never a rounded 0 or 100."""
    text = f"{100 * share:.3g}"
    if text in ("0", "100") and 0 < share < 1:
        text = f"{100 * share:.3e}" if share < 0.5 else "over 99.9"
    return f"{text} %"


def _time(seconds: float) -> str:
    if seconds < 120:
        return f"{seconds:.3g} s"
    if seconds < 7200:
        return f"{seconds / 60:.3g} min"
    return f"{seconds / 3600:.3g} h" if seconds < 172_800 else f"{seconds / 86_400:,.1f} days"
