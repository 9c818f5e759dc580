"""`bitassay check`: proves the bench before a run, and says what to do where it does not hold."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from harness.cli.failure import FAULT, PASS, USAGE
from harness.cli.output import lock_folder, print_json, store_url

MARKS = {"good": "ok     ", "bad": "NOT OK ", "note": "note   "}


def check(profile: str, overrides: Sequence[str], store: str | None, *, as_json: bool) -> int:
    """Check a profile and print what was found."""
    from harness.bench.check.check import Check
    from harness.cli.measure import Ending
    from harness.profile import load_profile

    loaded = load_profile(Path(profile), overrides)
    ending = Ending()
    with ending.caught():
        report = Check(loaded, lock_folder(store_url(store)), ending.event).run()
    if as_json:
        print_json(report.to_json())
    else:
        for finding in report.findings:
            print(f"{MARKS[finding.outcome]}{finding.step}: {finding.text}")
            if finding.advice and finding.outcome != "good":
                print(f"       {finding.advice}")
        print()
        print(
            "ready: an unattended run may start" if report.ready else "NOT ready: mend what is not ok first"
        )
    if ending.status is not None:
        return ending.status
    bad = [finding for finding in report.findings if finding.outcome == "bad"]
    if not bad:
        return PASS
    return USAGE if all(finding.usage for finding in bad) else FAULT
