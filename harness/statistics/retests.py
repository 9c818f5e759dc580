"""What repeating a test does to its risk: a bad unit that may try again and again passes in the end."""

from __future__ import annotations

import math
from collections.abc import Sequence


def retest_risk(consumer_risk: float, tries: int) -> float:
    """Chance that a unit exactly at the requirement passes at least one of so many equal tests.

    Parameters
    ----------
    consumer_risk
        Of one test, 0 to 1.
    tries
        Tests in all, this one included.

    Examples
    --------
    >>> round(retest_risk(0.05, 3), 4)
    0.1426
    """
    if tries < 1 or int(tries) != tries:
        raise ValueError("there is at least one try")
    return joint_risk([consumer_risk]) if tries == 1 else _at_least_once(tries * _log_fail(consumer_risk))


def joint_risk(consumer_risks: Sequence[float]) -> float:
    """Chance that a unit at the requirement passes at least one of these tests, each with its own risk."""
    return _at_least_once(math.fsum(_log_fail(risk) for risk in consumer_risks))


def risk_for_each(consumer_risk: float, tries: int) -> float:
    """Risk that each of so many tests may have for all of them together to keep this one."""
    if tries < 1:
        raise ValueError("there is at least one try")
    return _at_least_once(_log_fail(consumer_risk) / tries)


def retest_words(consumer_risk: float, tries: int, units: str = "this unit") -> str:
    """Say it beside the verdict; empty for a first try.

    Runs that were void, interrupted or undecided are tries too: whoever may stop and begin again has as many.
    """
    if tries <= 1:
        return ""
    joint = retest_risk(consumer_risk, tries)
    return (
        f"This is test {tries} of {units} against this requirement: with a consumer's risk of "
        f"{_per_cent(consumer_risk)} each, a unit at the requirement passes at least one of them with "
        f"probability {_per_cent(joint)}."
    )


def _log_fail(risk: float) -> float:
    if not 0 <= risk <= 1:  # NaN fails too
        raise ValueError("a risk lies between 0 and 1")
    return math.log1p(-risk) if risk < 1 else -math.inf


def _at_least_once(log_never: float) -> float:
    return -math.expm1(log_never)


def _per_cent(share: float) -> str:
    return f"{share * 100:.3g} %"
