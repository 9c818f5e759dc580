"""What a check finds, in words that say what to do."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

Outcome = Literal["good", "bad", "note"]


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing that was looked at.

    Attributes
    ----------
    step
        What was looked at.
    cause
        What was recognised, in one word for programs: ``short``, ``local_echo``, ``silence``,
        ``other_generator`` ...; empty where nothing is wrong.
    usage
        Bad because of the profile, not of the path.
    own
        Errors of the path's own, the bits that they were among, and bytes lost or too many; None where not counted.
    """

    step: str
    outcome: Outcome
    text: str
    advice: str = ""
    usage: bool = False
    cause: str = ""
    own: tuple[int, int, int] | None = None

    def to_json(self) -> dict[str, Any]:
        """JSON as `check` prints it."""
        return {
            "step": self.step,
            "outcome": self.outcome,
            "cause": self.cause or None,
            "text": self.text,
            "advice": self.advice,
        }


@dataclass(frozen=True, slots=True)
class Report:
    """All findings, and the forecast."""

    findings: tuple[Finding, ...]
    delay_s: float | None = None
    forecast: Mapping[str, Any] = field(default_factory=dict)

    @property
    def ready(self) -> bool:
        """Whether an unattended run may start."""
        return all(finding.outcome != "bad" for finding in self.findings)

    def to_json(self) -> dict[str, Any]:
        """JSON as `check` prints it."""
        return {
            "schema": 1,
            "ready": self.ready,
            "findings": [finding.to_json() for finding in self.findings],
            "delay_seconds": self.delay_s,
            "forecast": dict(self.forecast),
        }
