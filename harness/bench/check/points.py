"""What a sweep's points may leave out without anybody noticing: the end of a range, and the requirement."""

from __future__ import annotations

from collections.abc import Iterator

from harness.bench.check.findings import Finding
from harness.profile import Profile
from harness.profile.sweeps import Range


def of_the_points(profile: Profile) -> Iterator[Finding]:
    """Say which values and which verdicts will not come, though the profile looks as if they did."""
    sweep, search, requirement = profile.sweep, profile.search, profile.requirement
    for axis in sweep.all_axes() if sweep is not None else ():
        if isinstance(axis.values, Range) and not axis.values.meets_its_end:
            last = axis.values.values()[-1]
            yield Finding(
                "points",
                "note",
                f"{axis.instrument} goes to {last:g} and not to {axis.values.stop:g}: the step does not meet the end",
                "choose a step that divides the range, or list the values",
            )
    if requirement is None or (sweep is None and search is None):
        return
    if not requirement.at and requirement.sensitivity_at_least is None:
        yield Finding(
            "points",
            "note",
            "the requirement names no point and no sensitivity: there will be no verdict",
            "add requirement.at = { instrument = value }, or requirement.sensitivity_at_least",
        )
