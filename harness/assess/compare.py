"""Two runs side by side: is B worse than A, by how much, and were the conditions the same?"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass
from typing import Any

from harness.assess.assessment import Assessment
from harness.assess.run import assess
from harness.assess.words import value_words
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


@dataclass(frozen=True, slots=True)
class SideBySide:
    """What the comparison of two runs says."""

    a: Assessment
    b: Assessment
    errors: Comparison | None  # None: one of them compared no bit
    seconds: Comparison | None  # errored seconds; None: one of them has no whole available second
    differences: tuple[str, ...]
    warnings: tuple[str, ...]

    def to_json(self) -> dict[str, Any]:
        """JSON as `compare` prints it."""
        return {
            "schema": 1,
            "a": self.a.run,
            "b": self.b.run,
            "errors": None if self.errors is None else asdict(self.errors),
            "errored_seconds": None if self.seconds is None else asdict(self.seconds),
            "conditions_differ": list(self.differences),
            "warnings": list(self.warnings),
        }


def compare(a: Run, b: Run, confidence: float = 0.95) -> SideBySide:
    """Compare two records."""
    one, other = assess(a), assess(b)
    ta, tb = one.whole.tally, other.whole.tally
    errors = None
    if ta.compared and tb.compared:
        errors = compare_counts(ta.errors, ta.compared, tb.errors, tb.compared, confidence)
    return SideBySide(
        one,
        other,
        errors,
        _seconds(one, other, confidence),
        tuple(condition_differences(a.settings, b.settings)),
        tuple(_warnings(one, other)),
    )


def _seconds(a: Assessment, b: Assessment, confidence: float) -> Comparison | None:
    if not a.whole.availability or not b.whole.availability:
        return None
    sa, sb = a.whole.availability[-1], b.whole.availability[-1]
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


def _warnings(a: Assessment, b: Assessment) -> Iterator[str]:
    for name, run in (("A", a), ("B", b)):
        if run.sweep:
            yield f"{name} has several points: they are compared as one sum"
        clustering = run.whole.clustering
        if clustering is not None and clustering.clustered:
            yield f"the errors of {name} come in clusters: the test takes them as independent and is too sure"
        if run.whole.tally.unaligned or run.whole.bits_lost:
            yield f"{name} has unaligned or lost bits, which are in no error count"
        if run.status != "completed":
            yield f"{name} was {run.status}"
