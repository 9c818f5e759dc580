"""`bitassay bounds`, `plan` and `theory`: figures that need no link and no store."""

from __future__ import annotations

import re
from typing import Any

from harness.assess.words import count, duration, percent, ratio
from harness.cli.failure import UserError, warn
from harness.cli.output import print_json

LEAST_RATIO = 1e-300  # what is said of a ratio too small for a double


def bounds(errors: int, bits: int, confidence: float, *, as_json: bool) -> int:
    """Print bounds for a count."""
    from harness.statistics.bounds import clopper_pearson, lower_bound, upper_bound

    try:
        both = clopper_pearson(errors, bits, confidence)
        low, high = lower_bound(errors, bits, confidence), upper_bound(errors, bits, confidence)
    except ValueError as error:
        raise UserError(str(error), "`bitassay bounds --help` shows an example") from error
    ber = errors / bits if bits else None
    if as_json:
        print_json(
            {
                "schema": 1,
                "errors": errors,
                "bits": bits,
                "ber": ber,
                "confidence": confidence,
                "lower": both.lower,
                "upper": both.upper,
                "lower_one_sided": low,
                "upper_one_sided": high,
            }
        )
        return 0
    print(f"{count(errors, 'error')} in {count(bits, 'bit')}: BER {ratio(ber)}")
    print(f"at {percent(confidence)} confidence (Clopper-Pearson):")
    print(f"  two-sided   {_six_digits(both.lower)} to {_six_digits(both.upper)}")
    print(f"  one-sided   at least {_six_digits(low)}; or at most {_six_digits(high)}")
    return 0


def plan(
    ber: float,
    confidence: float,
    accept_errors: int | None,
    kind: str,
    margin: float,
    producer_risk: float | None,
    rate_bps: float | None,
    *,
    as_json: bool,
) -> int:
    """Print what a plan needs and risks."""
    from harness.statistics.plans import make_plan

    if rate_bps is not None and not 0 < rate_bps < float("inf"):
        raise UserError(
            f"a rate of {rate_bps:g} bit/s makes no sense", "give --rate in bit/s, for example 48000"
        )
    if accept_errors is not None and kind == "sequential":
        raise UserError(
            "a sequential plan finds for itself how many errors to accept",
            "leave out --accept-errors, or choose --kind fixed or curtailed",
        )
    if producer_risk is not None and kind in ("fixed", "curtailed"):
        warn(
            f"--producer-risk is for sequential plans: that of a {kind} plan follows from --accept-errors and --margin"
        )
    made = make_plan(
        kind,
        ber,
        confidence=confidence,
        accept_errors=accept_errors or 0,
        margin=margin,
        producer_risk=0.05 if producer_risk is None else producer_risk,
    )
    document: dict[str, Any] = {
        "schema": 1,
        "kind": made.kind,
        "ber": made.ber,
        "confidence": made.confidence,
        "margin": made.margin,
        "bits": made.bits,
        "accept_errors": made.accept_errors,
        "seconds": made.bits / rate_bps if rate_bps else None,
        "consumer_risk": made.consumer_risk,
        "producer_risk": made.producer_risk,
        "expected_bits": {
            "at_requirement": made.expected_bits(made.ber),
            "at_good": made.expected_bits(made.good_ber),
        },
        "longest_bits": made.longest_bits,
        "remarks": list(made.remarks),
    }
    if made.kind == "sequential":
        document["boundaries"] = [
            {"errors": b.errors, "accept_at": b.accept_at, "reject_at": b.reject_at} for b in made.boundaries
        ]
    if as_json:
        print_json(document)
        return 0
    print("\n".join(_plan_lines(made, document, rate_bps)))
    return 0


def _plan_lines(made: Any, document: dict[str, Any], rate_bps: float | None) -> list[str]:
    import shutil
    import textwrap

    from harness.statistics.plans import describe, draw_stairs

    def with_time(bits: float) -> str:
        return count(round(bits), "bit") + (f" ({duration(bits / rate_bps)})" if rate_bps else "")

    expected = document["expected_bits"]
    lines = [
        f"{made.kind} plan for BER {ratio(made.ber)} with {percent(made.confidence)} confidence",
        f"  at most         {with_time(made.longest_bits)}",
    ]
    if made.accept_errors is not None:
        lines.append(f"  accepts         with at most {count(made.accept_errors, 'error')}")
    lines += [
        f"  consumer's risk {percent(made.consumer_risk)}: a unit at BER {ratio(made.ber)} passes",
        f"  producer's risk {percent(made.producer_risk)}: a unit {made.margin:g} times better fails",
        f"  expected        {with_time(expected['at_requirement'])} at the requirement",
        f"                  {with_time(expected['at_good'])} for a unit {made.margin:g} times better",
    ]
    lines += [f"  note            {remark}" for remark in made.remarks]
    lines += ["", *draw_stairs(made, width=min(100, shutil.get_terminal_size().columns - 1))]
    lines += ["", "For a test procedure:", *textwrap.wrap(describe(made, rate_bps), 88)]
    return lines


def theory(
    modulation: str, ebn0: float | None, ber: float | None, fading: str | None, *, as_json: bool
) -> int:
    """Print a point of the textbook curve."""
    from harness.statistics import theory as curve

    if modulation == "list":
        for known in curve.modulations():
            print(f"{known.name:<12} {known.title}")
        return 0
    if (ebn0 is None) == (ber is None):
        raise UserError("give either an Eb/N0 or a BER", "add --ebn0 DB, or --ber P, not both")
    try:
        named = curve.parse_modulation(modulation)
        if ebn0 is not None:
            ber = curve.ber(modulation, ebn0, fading)
        else:
            assert ber is not None
            ebn0 = curve.ebn0_db(modulation, ber, fading)
    except ValueError as error:
        advice = "`bitassay theory --modulation list` lists the modulations"
        if "modulation" not in str(error):
            advice = "`bitassay theory --help` shows an example"
        raise UserError(str(error), advice) from error
    least = (
        None if ber else LEAST_RATIO
    )  # what a double cannot hold is not nought: no Eb/N0 gives none at all
    if as_json:
        document = {
            "modulation": named.name,
            "fading": fading,
            "ebn0_db": ebn0,
            "ber": ber,
            "ber_under": least,
        }
        print_json({"schema": 1, **document})
        return 0
    over = f" over {fading} fading" if fading else ""
    said = f"under {ratio(least)}" if least else _six_digits(ber)
    print(f"{named.title}{over}: BER {said} at Eb/N0 {ebn0:.4f} dB")
    return 0


def _six_digits(value: float) -> str:
    """Write a figure with six digits, and powers of ten as everywhere else: ``1e-6``, not ``1e-06``."""
    return re.sub(r"e([+-])0+(?=\d)", lambda found: f"e{found[1].strip('+')}", f"{value:.6g}")
