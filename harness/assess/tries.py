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


def words_of(consumer_risk: float, facts: Mapping[str, Any], *, without_a_bit: bool) -> str:
    """Say which try a run is, and what that does to the risk; empty for a first one.

    Parameters
    ----------
    without_a_bit
        Whether the run itself ended before a single bit came: it is no try then, and has no number.
    """
    from harness.statistics.retests import retest_words

    if without_a_bit:
        return "Not a single bit came, so this run is no try itself."
    return retest_words(consumer_risk, 1 + count_of(facts))


def remark(consumer_risk: float, facts: Mapping[str, Any], *, without_a_bit: bool = False) -> Sequence[str]:
    """Say beside the verdict that a unit was tested before, and what that does to the risk."""
    if unknown(facts):
        return (f"{UNKNOWN[0].upper()}{UNKNOWN[1:]}.",)
    runs = listed(facts)
    if not runs:
        return ()
    named = ", ".join(f"{str(run.get('run'))[-8:]} ({result_of(run)})" for run in runs)
    words = [words_of(consumer_risk, facts, without_a_bit=without_a_bit), f"Earlier: {named}"]
    if any(run.get("without_a_bit") for run in runs):
        words.append(f"({NO_TRY})")
    return (" ".join(word for word in words if word),)
