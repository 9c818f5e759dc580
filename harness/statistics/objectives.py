"""Objectives of ITU-T G.821 and G.826: a profile's limits on error ratios of seconds, met or not."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Objectives:
    """Highest ratios that a profile allows, and the least availability; None where nothing is asked.

    The recommendations' own figures (G.821: ESR 0.08, SESR 0.002, from memory) belong to a 27 500 km
    connection over a month; a profile states its own.
    """

    esr: float | None = None
    sesr: float | None = None
    bber: float | None = None
    availability: float | None = None

    def __post_init__(self) -> None:
        for name in ("esr", "sesr", "bber", "availability"):
            value = getattr(self, name)
            if value is not None and not 0 <= value <= 1:
                raise ValueError(f"the objective {name} is a ratio: it lies between 0 and 1")

    @property
    def stated(self) -> bool:
        """Whether anything is asked."""
        return any(v is not None for v in (self.esr, self.sesr, self.bber, self.availability))


@dataclass(frozen=True, slots=True)
class Judged:
    """One objective against what was observed."""

    name: str  # esr, sesr, bber, availability
    objective: float
    observed: float | None
    met: bool | None  # None: nothing was observed that could be judged
    words: str


def judge(name: str, objective: float, observed: float | None, seconds: int) -> Judged:
    """Compare an observed ratio with its objective.

    Parameters
    ----------
    name
        ``esr``, ``sesr``, ``bber`` (at most) or ``availability`` (at least).
    observed
        None where there was no available time.
    seconds
        What the ratio rests on, for the words.
    """
    label = name.upper() if name != "availability" else name
    if observed is None:
        return Judged(name, objective, None, None, f"{label}: nothing to judge, no whole available second")
    least = name == "availability"
    base = "s" if least else "available s"
    met = observed >= objective if least else observed <= objective
    asked = f"at {'least' if least else 'most'} {objective:g}"
    outcome = "met" if met else "not met"
    return Judged(
        name,
        objective,
        observed,
        met,
        f"{label} {observed:.6g} in {seconds} {base}, asked {asked}: {outcome}",
    )
