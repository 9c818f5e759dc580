"""`bitassay lot`: many units, one after another, each by its serial number; then the lot at a glance."""

from __future__ import annotations

import re
import sys
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from harness.cli.failure import FAIL, FAULT, PASS, UNDECIDED, UserError, warn
from harness.cli.measure import Manner, carry_out
from harness.cli.output import open_for_measuring, open_reading, print_json
from harness.cli.report import Forms, lot_material, ready, write_lot

if TYPE_CHECKING:
    from harness.profile import Lot, Profile
    from harness.report.lot import LotMaterial
    from harness.store import RunLine

_ENDING = (130, 143)


def lot(profile: str, overrides: Sequence[str], manner: Manner, forms: Forms | None = None) -> int:
    """Measure units until no further serial number is given; print the lot, or write its report."""
    from harness.profile import load_profile

    forms = forms or Forms()
    path = Path(profile)
    loaded = load_profile(path, overrides)
    settings = loaded.lot
    if settings is None:
        raise UserError(
            f"{profile} has no [lot]", "add [lot] with a name, or use `bitassay measure` for one unit"
        )
    if loaded.device.get("serial_number") and any("serial_number" in given for given in overrides):
        raise UserError("a lot asks for each serial number", "leave device.serial_number out of --set")
    if manner.as_json and forms.text:
        raise UserError("--json and --text both print the lot", "leave one of them out")
    ready(forms)  # what cannot be written is said now, and not after the last unit
    name = (settings.name or loaded.title).strip()
    if not name:
        raise UserError(f"{profile} names neither the lot nor itself", 'add name = "L7" to [lot]')
    with open_for_measuring(manner.store):
        pass  # made if need be, and refused now rather than after the first unit
    ended = _measure_units(loaded, path, overrides, name, manner)
    material = _summed_up(name, manner)
    if material is None:
        return ended if ended is not None else UNDECIDED
    if manner.as_json:
        print_json(material.summary.to_json())
    elif not forms.text:
        from harness.assess.lot_words import lines_of
        from harness.cli.page import print_lines

        print()
        print_lines(lines_of(material.summary))
    if forms.any:
        write_lot(material, forms, aside=manner.as_json)
    return ended if ended is not None else _status(material)


def _measure_units(
    loaded: Profile, path: Path, overrides: Sequence[str], name: str, manner: Manner
) -> int | None:
    """Measure until there is no further serial number; gives 130 or 143 where that was the end."""
    from harness.profile import load_profile

    assert loaded.lot is not None
    for serial in _serial_numbers(loaded.lot, name, manner):
        given = [*overrides, f"device.serial_number={serial}", f"device.lot={name}"]
        unit = load_profile(path, given)
        command = "measure" if unit.sweep is None and unit.search is None else "sweep"
        status = carry_out(
            unit, command, Manner(manner.store, False, manner.as_json, manner.log, silent=True)
        )
        if status in _ENDING:
            return status
        if status not in (PASS, FAIL, UNDECIDED):
            warn(f"unit {serial} could not be measured; its run is kept, measure it again")
    return None


def _summed_up(name: str, manner: Manner) -> LotMaterial | None:
    """Load the lot; none where nothing was measured, and a word where the store cannot be asked."""
    from harness.store import StoreLost

    try:
        material = lot_material(name, manner.store)
    except StoreLost as error:
        raise UserError(
            f"{error.what}: the lot cannot be summed up now",
            f'what was measured is kept; `bitassay report --lot "{name}"` sums it up once the store is back',
            FAULT,
        ) from error
    if material is None:
        if manner.as_json:
            from harness.assess.lot import summarise

            print_json(summarise(name, None, []).to_json())
        else:
            print(f"no unit of the lot {name} was measured")
    return material


def _status(material: LotMaterial) -> int:
    """Give the exit status: 4 where a unit could not be measured or a record does not hold, then the verdict."""
    lot = material.summary
    by_key = {kept.key: kept.run for kept in material.runs}
    if any(u.standing == "not valid" or by_key[u.run].assessment.status == "failed" for u in lot.units):
        return FAULT
    return {"PASS": PASS, "FAIL": FAIL, "UNDECIDED": UNDECIDED, None: PASS}[lot.verdict]


def _serial_numbers(settings: Lot, name: str, manner: Manner) -> Iterator[str]:
    """Ask for serial numbers until an empty line, the end of the input, or the lot's last unit."""
    done = 0 if settings.allow_repeats else _done_before(name, manner.store)
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


def _done_before(name: str, store: str | None) -> int:
    """Count the units of the lot that have a run that counts."""
    from harness.store import StoreLost

    try:
        with open_reading(store) as opened:
            of_lot = set(opened.in_lot(name))
            lines = [line for line in opened.runs() if line.run in of_lot] if of_lot else []
    except StoreLost:
        return 0
    return len({(line.model, line.serial_number) for line in lines if _counts(line)})


def _counts(line: RunLine) -> bool:
    """Whether a run counts: a void one, or one that failed, may be made up for."""
    return line.status == "completed" and not line.void


def _refused(settings: Lot, serial: str, name: str, manner: Manner) -> str:
    """Say why a serial number cannot be; empty where it can."""
    from harness.store import StoreLost

    if settings.serial_pattern and not re.fullmatch(settings.serial_pattern, serial):
        return (
            f"{serial} does not look like a serial number of this lot ({settings.serial_pattern}); try again"
        )
    if settings.allow_repeats:
        return ""
    try:
        measured = _counts_already(name, serial, manner.store)
    except StoreLost:
        warn(
            f"the store cannot be reached: whether {serial} was measured in this lot before cannot be told now"
        )
        return ""
    if measured:
        return (
            f"{serial} was measured in this lot already; "
            "set lot.allow_repeats = true to measure it again on purpose"
        )
    return ""


def _counts_already(name: str, serial: str, store: str | None) -> bool:
    """Whether a unit has a run in this lot that counts."""
    with open_reading(store) as opened:
        of_lot = set(opened.in_lot(name))
        return any(line.run in of_lot and _counts(line) for line in opened.runs(serial_number=serial))
