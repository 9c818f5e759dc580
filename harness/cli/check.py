"""`bitassay check`: proves the bench before a run, and says what to do where it does not hold."""

from __future__ import annotations

import shutil
import sys
import textwrap
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from harness.cli.failure import FAULT, PASS, USAGE
from harness.cli.output import lock_folder, print_json, store_url

if TYPE_CHECKING:
    from harness.bench.check.findings import Finding

MARKS = {"good": "ok     ", "bad": "NOT OK ", "note": "note   "}


def print_finding(finding: Finding) -> None:
    """Print a finding as soon as it is there, wrapped to the terminal's width."""
    width = max(40, shutil.get_terminal_size((100, 24)).columns)
    indent = " " * len(MARKS["good"])
    lead = f"{MARKS[finding.outcome]}{finding.step}: "
    print(textwrap.fill(lead + finding.text, width, subsequent_indent=indent, break_on_hyphens=False))
    if finding.advice and finding.outcome != "good":
        advice = indent + "-> " + finding.advice
        print(textwrap.fill(advice, width, subsequent_indent=indent + "   ", break_on_hyphens=False))
    sys.stdout.flush()


def check(profile: str, overrides: Sequence[str], store: str | None, *, as_json: bool) -> int:
    """Check a profile and print what was found."""
    from harness.bench.check.check import Check
    from harness.cli.measure import Ending
    from harness.profile import load_profile

    loaded = load_profile(Path(profile), overrides)
    ending = Ending()
    with ending.caught():
        tell = (lambda _finding: None) if as_json else print_finding
        report = Check(loaded, lock_folder(store_url(store)), ending.event, tell).run()
    if as_json:
        print_json(report.to_json())
    elif ending.status is None:
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
