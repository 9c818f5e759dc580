"""What comes of it without anybody noticing: points that a sweep leaves out, a requirement that cannot be met."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.words import count, percent, ratio
from harness.bench.check.findings import Finding
from harness.profile import Profile
from harness.profile.sweeps import Range
from harness.statistics.bounds import lower_bound

SURE = 0.95  # that the path's own errors are beyond what is required: a few may be chance


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


def of_the_requirement(profile: Profile, finding: Finding) -> Iterator[Finding]:
    """Say that the path's own errors or slips are more than the requirement allows; the bench may still be ready."""
    required = profile.requirement
    if required is None or finding.own is None or profile.sweep is not None or profile.search is not None:
        return
    errors, bits, bytes_off = finding.own
    too_many = bits > 0 and lower_bound(errors, bits, SURE) > required.ber
    slips = bytes_off > 0 and required.max_slips == 0
    if not too_many and not slips:
        return
    allowed = count(required.max_slips, "slip") if required.max_slips else "no slip"
    came = (
        [f"a BER of {ratio(errors / bits)} (with {percent(SURE)} confidence over {ratio(required.ber)})"]
        if too_many
        else []
    )
    came += [f"{count(bytes_off, 'byte')} lost or too many"] if slips else []
    yield Finding(
        "requirement",
        "note",
        f"the requirement allows a BER of {ratio(required.ber)} and {allowed}; the path showed {' and '.join(came)}: "
        "expect FAIL",
        "mend the path first, unless it is just this that is to be measured",
    )
