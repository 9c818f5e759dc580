"""`bitassay compare`: two runs side by side, point by point where they have several."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from harness.assess.words import count, local_date, percent, ratio
from harness.cli.failure import UserError
from harness.cli.output import open_reading, print_json

if TYPE_CHECKING:
    from harness.assess.compare import Pair, SideBySide


def compare(a: str, b: str, store: str | None, confidence: float, at: Sequence[str], *, as_json: bool) -> int:
    """Compare two runs."""
    from harness.assess.compare import NoCommonPoint
    from harness.assess.compare import compare as carry_out

    if not 0 < confidence < 1:
        raise UserError(f"a confidence of {confidence:g} is outside 0 to 1", "give 0.95 for 95 %")
    setting = dict(_setting(given) for given in at)
    with open_reading(store) as opened:
        keys = opened.find(a), opened.find(b)
        if keys[0] == keys[1]:
            raise UserError(f"{a} and {b} are the same run", "`bitassay runs` lists the others")
        first, second = (opened.load(key) for key in keys)
    try:
        result = carry_out(first, second, confidence, setting)
    except NoCommonPoint as error:
        swept = first if len(first.points) > 1 else second
        example = next((f"{k}={v:g}" for p in swept.points for k, v in p.values.items()), "attenuator=60")
        raise UserError(str(error), f"say at which setting to compare, for example --at {example}") from error
    if as_json:
        print_json(result.to_json())
        return 0
    from harness.cli.page import print_lines

    print_lines(list(_lines(result)))
    return 0


def _setting(given: str) -> tuple[str, float]:
    name, _, value = given.partition("=")
    try:
        return name.strip(), float(value)
    except ValueError:
        raise UserError(f'--at "{given}" is no setting', "write --at attenuator=60") from None


def _lines(result: SideBySide) -> Iterator[str]:
    one = result.single
    for name, run in (("A", result.a), ("B", result.b)):
        unit = run.device.get("serial_number", "-")
        yield f"{name}  {run.run}  unit {unit}, {local_date(run.started)}"
        if one is not None:
            p = one.a if name == "A" else one.b
            where = f"at {_name(one)}: " if run.sweep else ""
            yield (
                f"   {where}{count(p.tally.errors, 'error')} in {count(p.tally.compared, 'bit')}: BER {ratio(p.ber)}"
            )
    yield ""
    if one is None:
        yield from _points(result)
    elif one.errors is None:
        yield "one of them compared no bit: there is nothing to compare"
    else:
        yield one.errors.words
    if one is not None and one.seconds is not None:
        yield one.seconds.words
    yield from _sensitivities(result)
    for line in result.differences:
        yield f"conditions differ: {line}"
    for line in result.warnings:
        yield f"note: {line}"


def _name(pair: Pair) -> str:
    if pair.direction:
        return f"{pair.direction} direction"
    return ", ".join(f"{name} {value:g}" for name, value in pair.values.items()) or "the run"


def _points(result: SideBySide) -> Iterator[str]:
    """Give one line a point, and what they come to together."""
    heads = ("setting", "BER of A", "BER of B", "B/A", "bounds", "")
    rows = [heads, *(_row(pair) for pair in result.pairs)]
    widths = [max(len(row[k]) for row in rows) for k in range(len(heads))]
    for row in rows:
        cells = [
            f"{row[0]:<{widths[0]}}",
            *(f"{text:>{w}}" for text, w in zip(row[1:5], widths[1:5], strict=True)),
        ]
        yield f"{'  '.join(cells)}  {row[5]}".rstrip()
    yield ""
    known = [pair for pair in result.pairs if pair.errors is not None]
    worse = sum(pair.errors.worse for pair in known if pair.errors)
    better = sum(pair.errors.better for pair in known if pair.errors)
    points = count(len(known), "point")
    said = [f"B is worse than A at {worse} of {points}"] if worse else []
    said += [f"B is better than A at {better} of {points}"] if better else []
    yield "; ".join(said) if said else f"No difference shown at any of {points}"
    yield (
        f"({percent(result.confidence)} confidence for all points together: the risk of calling equal ones "
        "different is shared among them)"
    )


def _row(pair: Pair) -> tuple[str, str, str, str, str, str]:
    from harness.statistics.notation import multiple

    c = pair.errors
    bers = [ratio(p.ber) if p.tally.compared else "never aligned" for p in (pair.a, pair.b)]
    if c is None:
        return (_name(pair), *bers, "", "", "")  # type: ignore[return-value]
    times = "-" if c.ratio is None else multiple(c.ratio)
    upper = "any" if c.upper is None else multiple(c.upper)
    way = "B is worse" if c.worse else "B is better" if c.better else ""
    return (_name(pair), bers[0], bers[1], times, f"{multiple(c.lower)} to {upper}", way)


def _sensitivities(result: SideBySide) -> Iterator[str]:
    """Say what the two sensitivities come to; only where bounds do not overlap are they called different."""
    if not result.swept:
        return
    one, other = result.a.sensitivity, result.b.sensitivity
    assert one is not None
    assert other is not None
    unit = f" {one['unit']}".rstrip()
    away = other["value"] - one["value"]
    yield (
        f"sensitivity at BER {ratio(one['ber'])}: {_between(one)} in A, {_between(other)} in B; "
        f"B's is {abs(away):.2f}{unit} {'higher' if away > 0 else 'lower'}"
        + ("" if _apart(one, other) or _apart(other, one) else ", within their bounds")
    )


def _between(found: object) -> str:
    assert isinstance(found, dict)
    low, high = ("no bound" if v is None else f"{v:.2f}" for v in (found["lower"], found["upper"]))
    return f"{found['value']:.2f} ({low} to {high})"


def _apart(below: object, above: object) -> bool:
    assert isinstance(below, dict)
    assert isinstance(above, dict)
    return below["upper"] is not None and above["lower"] is not None and below["upper"] < above["lower"]
