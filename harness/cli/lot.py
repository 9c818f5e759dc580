"""`bitassay lot`: many units, one after another, each by its serial number; then the lot at a glance."""

from __future__ import annotations

import re
import sys
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from harness.cli.failure import FAIL, PASS, UNDECIDED, UserError, warn
from harness.cli.measure import Manner, carry_out
from harness.cli.output import open_for_measuring, open_reading, print_json

if TYPE_CHECKING:
    from harness.assess.lot import LotSummary
    from harness.profile import Lot, Profile
    from harness.store import Store

_ENDING = (130, 143)


def lot(profile: str, overrides: Sequence[str], manner: Manner) -> int:
    """Measure units until no further serial number is given; print the lot."""
    from harness.profile import load_profile

    path = Path(profile)
    loaded = load_profile(path, overrides)
    settings = loaded.lot
    if settings is None:
        raise UserError(
            f"{profile} has no [lot]", "add [lot] with a name, or use `bitassay measure` for one unit"
        )
    if loaded.device.get("serial_number") and any("serial_number" in given for given in overrides):
        raise UserError("a lot asks for each serial number", "leave device.serial_number out of --set")
    name = settings.name or loaded.title
    with open_for_measuring(manner.store):
        pass  # made if need be, and refused now rather than after the first unit
    ended = None
    for serial in _serial_numbers(settings, name, manner):
        given = [*overrides, f"device.serial_number={serial}", f"device.lot={name}"]
        unit = load_profile(path, given)
        command = "measure" if unit.sweep is None and unit.search is None else "sweep"
        status = carry_out(unit, command, Manner(manner.store, False, True, manner.log, silent=True))
        if status in _ENDING:
            ended = status
            break
        if status not in (PASS, FAIL, UNDECIDED):
            warn(f"unit {serial} could not be measured; its run is kept, measure it again")
    summary = _summary(loaded, name, manner.store)
    if manner.as_json:
        print_json(summary.to_json())
    else:
        from harness.assess.lot import lines_of

        print()
        print("\n".join(lines_of(summary)))
    if ended is not None:
        return ended
    verdicts = {unit.verdict for unit in summary.units}
    return FAIL if "FAIL" in verdicts else UNDECIDED if "UNDECIDED" in verdicts or not verdicts else PASS


def _serial_numbers(settings: Lot, name: str, manner: Manner) -> Iterator[str]:
    """Ask for serial numbers until an empty line or the end of the input."""
    done = 0
    while settings.size is None or done < settings.size:
        number = f"{done + 1} of {settings.size}" if settings.size else str(done + 1)
        print(f"unit {number}: serial number (empty: end)? ", end="", file=sys.stderr, flush=True)
        line = sys.stdin.readline()
        serial = line.strip()
        if not serial:
            return
        why = _refused(settings, serial, name, manner)
        if why:
            print(f"  {why}", file=sys.stderr)
            continue
        done += 1
        yield serial


def _refused(settings: Lot, serial: str, name: str, manner: Manner) -> str:
    """Say why a serial number cannot be; empty where it can."""
    if settings.serial_pattern and not re.fullmatch(settings.serial_pattern, serial):
        return (
            f"{serial} does not look like a serial number of this lot ({settings.serial_pattern}); try again"
        )
    if not settings.allow_repeats:
        with open_reading(manner.store) as store:
            if _runs_of(store, name, serial):
                return (
                    f"{serial} was measured in this lot already; "
                    "set lot.allow_repeats = true to measure it again on purpose"
                )
    return ""


def _runs_of(store: Store, name: str, serial: str | None = None) -> list[str]:
    """List the keys of a lot's runs, oldest first; of one unit where it is named."""
    keys = []
    for line in store.runs(serial_number=serial):
        if store.load_head(line.run).device.get("lot") == name:
            keys.append(line.run)
    return keys[::-1]


def _summary(loaded: Profile, name: str, store: str | None) -> LotSummary:
    from harness.assess.lot import summarise
    from harness.assess.run import assess

    confidence = loaded.requirement.confidence if loaded.requirement else 0.95
    with open_reading(store) as opened:
        records = [opened.load(key) for key in _runs_of(opened, name)]
    runs = [assess(r) for r in records if not any(note.void for note in r.notes)]
    size = loaded.lot.size if loaded.lot else None
    return summarise(name, size, runs, confidence)
