"""Earlier runs of a unit against the same requirement: which of them were tries, and what is said of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

NO_TRY = "a run in which not a single bit came could not have passed, and is no try"


UNKNOWN = (
    "whether this unit was tested before against this requirement is not known: the store could not be reached when "
    "the run began"
)


def unknown(facts: Mapping[str, Any]) -> bool:
    """Whether nobody could be asked for earlier runs."""
    return bool(facts.get("earlier_tries_unknown"))


def count_of(facts: Mapping[str, Any]) -> int:
    """How many earlier runs were tries: each of them might have passed."""
    return int(facts.get("earlier_tries_count", 0))


def listed(facts: Mapping[str, Any]) -> Sequence[Mapping[str, Any]]:
    """The earlier runs that are named, those that were no try among them."""
    runs: Sequence[Mapping[str, Any]] = facts.get("earlier_tries", ())
    return runs


def result_of(run: Mapping[str, Any]) -> str:
    """What came of an earlier run: its verdict, or how it stands; and that it was no try."""
    result = str(run.get("verdict") or run.get("status") or "none")
    return f"{result}, not a single bit came" if run.get("without_a_bit") else result


def remark(consumer_risk: float, facts: Mapping[str, Any]) -> Sequence[str]:
    """Say beside the verdict that a unit was tested before, and what that does to the risk."""
    if unknown(facts):
        return (f"{UNKNOWN[0].upper()}{UNKNOWN[1:]}.",)
    runs = listed(facts)
    if not runs:
        return ()
    from harness.statistics.retests import retest_words

    named = ", ".join(f"{str(run.get('run'))[-8:]} ({result_of(run)})" for run in runs)
    words = [retest_words(consumer_risk, 1 + count_of(facts)), f"Earlier: {named}"]
    if any(run.get("without_a_bit") for run in runs):
        words.append(f"({NO_TRY})")
    return (" ".join(word for word in words if word),)
