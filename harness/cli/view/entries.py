"""The entries of a page in words: what is required, the ratio and its bounds, the bits, the points of a sweep."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from harness.assess.assessment import PointAssessment
from harness.assess.later import balance_words
from harness.assess.words import count, percent, rate, ratio

PATHS = {
    "far-end-loop": "far-end loop, both directions in series",
    "two-port": "two ports, one direction",
    "one-way": "one way",
}
RESIDUAL = {
    "arq": "residual, after the device's own repeats",
    "fec": "residual, after the device's own correction",
}


def unit_name(device: Mapping[str, str]) -> str:
    """Name the unit: model and serial number as far as they are known."""
    words = [device.get("model", ""), device.get("serial_number", "")]
    return " ".join(word for word in words if word) or "unnamed unit"


def pattern_name(p: PointAssessment) -> str:
    """Name the pattern, where bits were compared with one."""
    return p.pattern or "the pattern"


def required_words(p: PointAssessment) -> list[str]:
    """Say what is required and how it is decided."""
    plan = p.plan
    if plan is None:
        return ["nothing: measured only"]
    longest = count(int(plan["longest_bits"]), "bit")
    if plan["kind"] == "sequential":
        how = f"a sequential plan decides, within {longest}"
    elif plan["accept_errors"] == 0:
        how = f"a {plan['kind']} plan accepts no error in {longest}"
    else:
        how = (
            f"a {plan['kind']} plan accepts at most {count(int(plan['accept_errors']), 'error')} in {longest}"
        )
    return [f"BER at most {ratio(plan['ber'])} with {percent(plan['confidence'])} confidence", how]


def ber_so_far(p: PointAssessment) -> str:
    """Say the ratio and the two-sided bounds, which the bar shows."""
    if p.bounds is None or not p.tally.compared:
        return "no bit was compared: every ratio is possible"
    b = p.bounds
    sure = f"at {percent(b.confidence)} confidence"
    if not p.tally.errors:
        return f"no error measured; under {ratio(b.upper)} {sure}"
    return f"{ratio(p.ber)} measured; between {ratio(b.lower)} and {ratio(b.upper)} {sure}"


def ber_decided(p: PointAssessment) -> str:
    """Say the ratio and the bound that decides, which the bar shows beside a verdict."""
    if p.bounds is None or not p.tally.compared:
        return ber_so_far(p)
    b = p.bounds
    side = "under" if b.side == "upper" else "over"
    if p.verdict == "FAIL" and p.plan and b.side == "upper" and b.value > p.plan["ber"]:
        side = "only under"
    measured = f"{ratio(p.ber)} measured" if p.tally.errors else "no error measured"
    return f"{measured}; {side} {ratio(b.value)} with {percent(b.deciding_confidence)} confidence"


def bits_words(p: PointAssessment) -> list[str]:
    """Say on how many bits it all rests."""
    t = p.tally
    if not t.received:
        return ["none received" + (f", {count(p.bits_sent, 'bit')} sent" if p.bits_sent else "")]
    errors = "no error" if not t.errors else count(t.errors, "error")
    lines = [f"{count(t.compared, 'bit')} compared with {pattern_name(p)}, {errors}"]
    more = []
    if not t.compared:
        lines = [f"none compared: {pattern_name(p)} is not found in the {count(t.received, 'bit')} that came"]
    elif t.unaligned:
        more.append(f"{count(t.unaligned, 'bit')} not aligned")
    if p.slip_count:
        more.append(count(p.slip_count, "slip"))
    if p.bits_lost:
        more.append(f"{count(p.bits_lost, 'bit')} lost")
    if p.bits_inserted:
        more.append(f"{count(p.bits_inserted, 'bit')} inserted")
    if more:
        lines.append(", ".join(more))
    return lines


def path_words(p: PointAssessment) -> str:
    """Say which path was measured: a far-end loop's errors are those of both directions."""
    link = p.facts.get("link") or {}
    if not link.get("driver"):
        return ""
    ends = [str(link.get("peer") or link.get("port") or "")]
    other = link.get("receive")
    if isinstance(other, Mapping):
        ends.append(str(other.get("peer") or other.get("port") or ""))
    where = " and ".join(end for end in ends if end)
    kind = PATHS.get(str(link.get("topology")), "")
    driver = str(link["driver"])
    name = where if where.startswith(driver) else f"{driver} {where}".strip()
    return f"{name}; {kind}" if kind else name


def residual(device: Mapping[str, str]) -> str:
    """Say what the ratio is where the device corrects errors itself: a residual one."""
    return RESIDUAL.get(device.get("error_control", "none").lower(), "")


def detail_words(p: PointAssessment) -> list[str]:
    """Say what is good to know where there is room for it."""
    t = p.tally
    lines = []
    if t.errors:
        ones, zeros = count(t.ones_as_zeros, "ONE"), count(t.zeros_as_ones, "ZERO")
        lines.append(f"{ones} received as ZERO, {zeros} received as ONE")
    if t.received:
        lines.append(balance_words(p, f" at {rate(p.measured_bps)}" if p.measured_bps else ""))
    for a in p.availability:
        if a.seconds:
            lines.append(
                f"{a.standard}: {count(a.seconds, 'second')}, {a.errored} errored, "
                f"{a.severely_errored} severely errored, {a.unavailable} unavailable"
            )
    return lines


def risk_words(p: PointAssessment) -> str:
    """Say how often the plan is wrong about a unit."""
    if p.plan is None:
        return ""
    plan = p.plan
    return (
        f"risks: {percent(plan['consumer_risk'])} that a unit with just this BER passes, "
        f"{percent(plan['producer_risk'])} that one {plan['margin']:g} times better fails"
    )


def point_words(p: PointAssessment) -> str:
    """Say one of several points in a line; the confidence is said once for all of them."""
    verdict = f"{p.verdict}, " if p.verdict else ""
    verdict += "what it was set to moved away, " if p.moved else ""
    t = p.tally
    if p.bounds is None or not t.compared:
        return f"{point_name(p)}: {verdict}{bits_words(p)[0]}"
    errors = count(t.errors, "error") if t.errors else "no error"
    lower, upper = ratio(p.bounds.lower), ratio(p.bounds.upper)
    between = f"{ratio(p.ber)} ({lower} to {upper})" if t.errors else f"under {upper}"
    return f"{point_name(p)}: {verdict}{between}, {errors} in {count(t.compared, 'bit')}"


def point_name(p: PointAssessment) -> str:
    """Name a point by its direction, or by what was set."""
    direction = p.facts.get("direction")
    if direction:
        return f"{direction} direction"
    return ", ".join(f"{name} {value:g}" for name, value in p.values.items()) or "point"


def point_label(p: PointAssessment) -> str:
    """Name a point as shortly as the margin wants it."""
    direction = p.facts.get("direction")
    if direction:
        return str(direction)
    mark = "ref " if p.facts.get("reference") else ""
    return mark + "/".join(f"{value:g}" for value in p.values.values())


def sensitivity_words(found: Mapping[str, Any] | None) -> str:
    """Say where the ratio that was looked for is reached."""
    if not found:
        return ""
    at = "".join(f"{name} {value:g}: " for name, value in (found.get("at") or {}).items())
    unit = f" {found['unit']}" if found.get("unit") else ""
    if found.get("value") is None:
        return f"{at}where {ratio(found.get('ber'))} is reached these points do not tell{_sides(found, unit)}"
    words = f"{at}{ratio(found.get('ber'))} is reached at {found['value']:.4g}{unit}"
    if found.get("lower") is not None and found.get("upper") is not None:
        words += f" ({found['lower']:.4g} to {found['upper']:.4g}{unit} at {percent(found['confidence'])})"
    sure = found.get("without_a_curve") or {}
    if sure.get("under") is None or sure.get("over") is None:
        return words
    return f"{words}; without any curve under it at {sure['under']:g} and over it at {sure['over']:g}{unit}"


def sensitivity_details(found: Mapping[str, Any] | None) -> list[str]:
    """Say at which level the device stands there, and how far that is from the textbook; as far as is known."""
    words = []
    if found and found.get("level_dbm") is not None:
        # Expanded with a factor of two, as uncertainties are stated.
        uncertainty = 2 * float(found.get("level_uncertainty_db") or 0.0)
        about = f" ± {uncertainty:.2g} dB (k = 2)" if uncertainty else ""
        words.append(f"{found['level_dbm']:.2f} dBm{about} at the device's port")
    if found and found.get("theory_distance_db") is not None:
        distance = float(found["theory_distance_db"])
        words.append(
            f"{abs(distance):.2f} dB {'worse' if distance > 0 else 'better'} than the textbook's curve"
        )
    return ["; ".join(words)] if words else []


def _sides(found: Mapping[str, Any], unit: str) -> str:
    """Say what bounds there are without a value."""
    lower, upper = found.get("lower"), found.get("upper")
    if lower is None and upper is None:
        return ""
    sure = f"{unit} at {percent(found['confidence'])}"
    if lower is None or upper is None:
        return f": at least {lower:g}{sure}" if upper is None else f": at most {upper:g}{sure}"
    return f": between {lower:g} and {upper:g}{sure}"
