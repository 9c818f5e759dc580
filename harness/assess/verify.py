"""Verification: every number of a record derived again, and every difference named."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np

from harness.assess.run import assess
from harness.record import Point, Run, Second, Tally

_LISTED = 20
_LOOSE = 1e-9  # relative: a bound solved on another machine may differ in its last digits


def differences(run: Run) -> list[str]:
    """Name what does not hold in a record: sums, positions, and the numbers stated at the run's end."""
    found = contradictions(run)
    if run.stated is not None:
        found.extend(_against_stated(run, run.stated))
    elif run.status not in ("running", "cut"):
        found.append("the run has ended, but no numbers were stated at its end")
    return found[:_LISTED] + ([f"and {len(found) - _LISTED} more"] if len(found) > _LISTED else [])


def contradictions(run: Run) -> list[str]:
    """Name what does not add up within a record, whatever was stated at the run's end."""
    return [line for point in run.points for line in _point(point)]


def _against_stated(run: Run, stated: Mapping[str, Any]) -> Iterator[str]:
    try:
        derived = assess(replace(run, notes=())).to_json()  # notes came after the numbers were stated
    except (ValueError, ArithmeticError, KeyError, TypeError, IndexError) as error:
        yield f"nothing follows from the record any more: {error}"
        return
    yield from _compare(stated, derived, "")


def _point(point: Point) -> Iterator[str]:
    seconds = sorted(point.seconds, key=lambda s: s.index)
    for second in seconds:
        yield from _second(point.index, second)
    yield from _joints(point.index, seconds, int(point.facts.get("index_step", 1)))
    if not point.after_decision.holds:
        yield f"point {point.index}: the bits after the decision do not add up"
    slips = sum(s.slips for s in seconds)
    listed = [e for e in point.events if e.kind == "slip"]
    cut = any(e.kind == "events_cut" for e in point.events)
    if not cut and len(listed) != slips:
        yield f"point {point.index}: the seconds hold {slips} slips, the events {len(listed)}"
    elif not cut:
        lost = sum(max(0, -int(e.data["bits"])) for e in listed)
        if lost != sum(s.bits_lost for s in seconds):
            yield f"point {point.index}: the seconds' lost bits are not those of the slips"


def _second(point: int, second: Second) -> Iterator[str]:
    name = f"point {point}, second {second.index}"
    tally = second.tally
    if not tally.holds:
        yield f"{name}: {_why(tally)}"
    known = len(second.positions)
    if second.positions_complete and known != tally.errors:
        yield f"{name}: errors are {tally.errors}, but {known} positions are kept"
    if known > tally.errors or len(second.ones_lost) != known:
        yield f"{name}: the kept positions do not fit the {tally.errors} errors"
    if second.positions_complete and int(np.count_nonzero(second.ones_lost)) != tally.ones_as_zeros:
        yield f"{name}: ones_as_zeros is {tally.ones_as_zeros}, the positions say otherwise"
    if known and (
        int(second.positions[0]) < second.first_bit
        or int(second.positions[-1]) >= second.first_bit + tally.received
        or bool((np.diff(second.positions) <= 0).any())
    ):
        yield f"{name}: error positions lie outside the second or out of order"
    compared = sum(bits for bits, aligned in second.stretches if aligned)
    unaligned = sum(bits for bits, aligned in second.stretches if not aligned)
    if (compared, unaligned) != (tally.compared, tally.unaligned):
        yield (
            f"{name}: its stretches hold {compared} compared and {unaligned} unaligned bits, "
            f"the tally {tally.compared} and {tally.unaligned}"
        )


def _why(tally: Tally) -> str:
    if tally.received != tally.compared + tally.unaligned:
        return f"{tally.received} received is not {tally.compared} compared + {tally.unaligned} unaligned"
    return (
        f"{tally.errors} errors is not {tally.ones_as_zeros} ones_as_zeros + "
        f"{tally.zeros_as_ones} zeros_as_ones, or more than were compared"
    )


def _joints(point: int, seconds: Sequence[Second], step: int) -> Iterator[str]:
    for before, after in pairwise(seconds):
        if after.index == before.index:
            yield f"point {point}: second {after.index} is there twice"
        elif after.sitting == before.sitting:
            if after.index != before.index + step:
                yield f"point {point}: seconds {before.index + step} to {after.index - step} are missing"
            if after.first_bit != before.first_bit + before.tally.received:
                yield f"point {point}: second {after.index} does not begin where second {before.index} ends"


def _compare(stated: Any, derived: Any, path: str) -> Iterator[str]:
    """Walk both documents; keys that only one of them has are differences too."""
    if _said_otherwise(path, stated, derived):
        return
    if isinstance(stated, Mapping) and isinstance(derived, Mapping):
        for key in {**stated, **derived}:
            yield from _compare(stated.get(key), derived.get(key), f"{path}.{key}" if path else str(key))
    elif isinstance(stated, list | tuple) and isinstance(derived, list | tuple):
        if len(stated) != len(derived):
            yield f"{path}: {len(stated)} entries were stated, {len(derived)} follow from the record"
            return
        for number, (one, other) in enumerate(zip(stated, derived, strict=True)):
            yield from _compare(one, other, f"{path}[{number}]")
    elif isinstance(stated, float) or isinstance(derived, float):
        if not _close(stated, derived):
            yield f"{path}: {stated} was stated, {derived} follows from the record"
    elif stated != derived:
        yield f"{path}: {stated} was stated, {derived} follows from the record"


def _said_otherwise(path: str, stated: Any, derived: Any) -> bool:
    """Whether an earlier version said the same in other words: it stated null for clusters not judged.

    It also stated 0 seconds for a capture without a rate.
    """
    key = path.rpartition(".")[2]
    if key == "clustering" and stated is None:
        return isinstance(derived, Mapping) and not derived["clustered"]
    return key == "seconds" and derived is None and stated == 0


def _close(one: Any, other: Any) -> bool:
    if one is None or other is None or isinstance(one, str) or isinstance(other, str):
        return bool(one == other)
    return bool(abs(one - other) <= _LOOSE * max(abs(one), abs(other)))
