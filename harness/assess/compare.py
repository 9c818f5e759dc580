"""Two runs side by side: is B worse than A, by how much, and were the conditions the same?"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass
from typing import Any

from harness.assess.assessment import Assessment, PointAssessment
from harness.assess.run import assess
from harness.assess.words import STATUS, count, value_words
from harness.record import Run
from harness.statistics.comparing import Comparison, compare_counts, compare_seconds

# Where two runs differ in these, their counts differ for more reasons than the device.
_CONDITIONS = ("link", "pattern", "instruments", "sweep", "level", "correction")
_PLACES = (
    "host",
    "port",
    "path",
    "command",
    "url",
    "resource",
    "seed",
)  # other places, same conditions


class NoCommonPoint(ValueError):
    """There is no point at which both runs measured."""


@dataclass(frozen=True, slots=True)
class Pair:
    """A point of A and one of B that were measured under the same setting."""

    values: Mapping[str, float]
    direction: str
    a: PointAssessment
    b: PointAssessment
    errors: Comparison | None  # None: one of them compared no bit
    seconds: Comparison | None  # errored seconds; None: one of them has no whole available second

    def to_json(self) -> dict[str, Any]:
        """JSON of a pair."""
        return {
            "values": dict(self.values),
            "direction": self.direction or None,
            "errors": None if self.errors is None else asdict(self.errors),
            "errored_seconds": None if self.seconds is None else asdict(self.seconds),
        }


@dataclass(frozen=True, slots=True)
class SideBySide:
    """What the comparison of two runs says."""

    a: Assessment
    b: Assessment
    pairs: tuple[Pair, ...]
    confidence: float  # of all pairs together
    differences: tuple[str, ...]
    warnings: tuple[str, ...]

    @property
    def single(self) -> Pair | None:
        """The only pair; None where there are several."""
        return self.pairs[0] if len(self.pairs) == 1 else None

    def to_json(self) -> dict[str, Any]:
        """JSON as `compare` prints it; with several points, `errors` is null and each has its own."""
        one = self.single.to_json() if self.single else {}
        return {
            "schema": 1,
            "a": self.a.run,
            "b": self.b.run,
            "errors": one.get("errors"),
            "errored_seconds": one.get("errored_seconds"),
            "points": [pair.to_json() for pair in self.pairs],
            "sensitivities": None if not self.swept else [self.a.sensitivity, self.b.sensitivity],
            "conditions_differ": list(self.differences),
            "warnings": list(self.warnings),
        }

    @property
    def swept(self) -> bool:
        """Whether both runs looked for a sensitivity at the same BER."""
        found = [run.sensitivity for run in (self.a, self.b)]
        return all(f is not None and f["value"] is not None for f in found) and (
            found[0]["ber"] == found[1]["ber"]  # type: ignore[index]
        )


def compare(a: Run, b: Run, confidence: float = 0.95, at: Mapping[str, float] | None = None) -> SideBySide:
    """Compare two records, point by point where they have several.

    Parameters
    ----------
    confidence
        Of all points together: the risk is shared among them (Bonferroni).
    at
        Compare at this setting only; a run with a single point is taken there whatever its setting was.

    Raises
    ------
    NoCommonPoint
        If there is no setting at which both measured.
    """
    one, other = assess(a), assess(b)
    matched = _matched(one, other, at or {})
    each = 1 - (1 - confidence) / len(matched)
    pairs = tuple(_pair(pa, pb, each) for pa, pb in matched)
    stepped = one.sweep and other.sweep and not at
    differences = condition_differences(a.settings, b.settings)
    return SideBySide(
        one,
        other,
        pairs,
        confidence,
        tuple(d for d in differences if stepped or not d.startswith(("sweep.", "search."))),
        tuple(_warnings(one, other, pairs, at or {})),
    )


def _matched(
    a: Assessment, b: Assessment, at: Mapping[str, float]
) -> list[tuple[PointAssessment, PointAssessment]]:
    """Pair points of the same setting, in the order in which they were measured."""
    if not a.sweep and not b.sweep:
        return [(a.whole, b.whole)]
    chosen = [[p for p in run.points if not run.sweep or at.items() <= p.values.items()] for run in (a, b)]
    if not (a.sweep and b.sweep):
        if not at:
            raise NoCommonPoint("one of the runs has a single point, the other several")
        pairs = list(zip(*chosen, strict=False))[:1]
    else:
        waiting: dict[tuple[Any, ...], list[PointAssessment]] = {}
        for p in chosen[1]:
            waiting.setdefault(_setting(p), []).append(p)
        pairs = [(p, waiting[_setting(p)].pop(0)) for p in chosen[0] if waiting.get(_setting(p))]
    if not pairs:
        raise NoCommonPoint("the runs have no point in common" + (" there" if at else ""))
    return pairs


def _setting(p: PointAssessment) -> tuple[Any, ...]:
    return (_direction(p), *sorted(p.values.items()))


def _direction(p: PointAssessment) -> str:
    return str(p.facts.get("direction") or "")


def _pair(a: PointAssessment, b: PointAssessment, confidence: float) -> Pair:
    errors = None
    if a.tally.compared and b.tally.compared:
        errors = compare_counts(
            a.tally.errors, a.tally.compared, b.tally.errors, b.tally.compared, confidence
        )
    return Pair(a.values or b.values, _direction(a), a, b, errors, _seconds(a, b, confidence))


def _seconds(a: PointAssessment, b: PointAssessment, confidence: float) -> Comparison | None:
    if not a.availability or not b.availability:
        return None
    sa, sb = a.availability[-1], b.availability[-1]
    if not sa.available or not sb.available:
        return None
    return compare_seconds(sa.errored, sa.available, sb.errored, sb.available, confidence)


def condition_differences(
    a: Mapping[str, Any], b: Mapping[str, Any], names: tuple[str, str] = ("A", "B")
) -> Iterator[str]:
    """Say in which settings two runs differ that make their counts differ for more reasons than the device."""
    for section in _CONDITIONS:
        yield from _walk(a.get(section), b.get(section), section, names)


def _walk(a: Any, b: Any, path: str, names: tuple[str, str]) -> Iterator[str]:
    if isinstance(a, Mapping) or isinstance(b, Mapping):
        one, other = (x if isinstance(x, Mapping) else {} for x in (a, b))
        for key in sorted({*one, *other}):
            if key not in _PLACES:
                yield from _walk(one.get(key), other.get(key), f"{path}.{key}", names)
    elif isinstance(a, list | tuple) and isinstance(b, list | tuple) and len(a) == len(b):
        for number, (first, second) in enumerate(zip(a, b, strict=True)):
            yield from _walk(first, second, f"{path}[{number + 1}]", names)
    elif a != b:
        yield f"{path}: {_word(a)} in {names[0]}, {_word(b)} in {names[1]}"


def _word(value: Any) -> str:
    return "nothing" if value is None else value_words(value)


def _warnings(
    a: Assessment, b: Assessment, pairs: tuple[Pair, ...], at: Mapping[str, float]
) -> Iterator[str]:
    for name, run, points in (("A", a, [p.a for p in pairs]), ("B", b, [p.b for p in pairs])):
        if run.sweep and len(points) < len(run.points) and not at:
            yield f"{count(len(run.points) - len(points), 'point')} of {name} without a match in the other run"
        if run.sweep and at and sum(at.items() <= p.values.items() for p in run.points) > len(points):
            yield f"{name} was there several times: the first time is compared"
        if any(p.clustering is not None and p.clustering.clustered for p in points):
            yield f"the errors of {name} come in clusters: the test takes them as independent and is too sure"
        if any(p.tally.unaligned or p.bits_lost for p in points):
            yield f"{name} has unaligned or lost bits, which are in no error count"
        if run.status != "completed":
            yield f"{name}: {STATUS[run.status]}"
        if run.more.get("void"):
            yield f"{name} is marked void"
