"""JSON: the assessment as `show --json` prints it, and every second; its schema lies beside this room."""

from __future__ import annotations

import json
from collections.abc import Iterator
from importlib import resources
from typing import Any, TextIO

from harness.assess.words import iso
from harness.record import Second
from harness.report.material import Material, Measured

SCHEMA_FILE = "export.schema.json"


def schema_text() -> str:
    """Give the JSON Schema (draft 2020-12) that exports keep to."""
    return (resources.files("harness.report.exports") / SCHEMA_FILE).read_text(encoding="utf-8")


def write_json(material: Material, to: TextIO) -> None:
    """Write one JSON object, its seconds one a line: a night has tens of thousands."""
    document = {
        **material.assessment.to_json(),
        "profile_sha256": material.profile_digest,
        "record_sha256": material.kept_digest,
        "record_holds": _holds(material),
        "notes": [
            {"at": iso(n.at), "who": n.who, "text": n.text, "void": n.void} for n in material.run.notes
        ],
        "overrides": list(material.run.overrides),
        "units": dict(material.units),
    }
    text = json.dumps(document, ensure_ascii=True, allow_nan=False, indent=1)
    to.write(text.removesuffix("\n}"))
    to.write(',\n "each_second": [')
    separator = "\n  "
    for row in _rows(material):
        to.write(separator + json.dumps(row, allow_nan=False))
        separator = ",\n  "
    to.write("\n ]\n}\n")


def _holds(material: Material) -> bool | None:
    """Say whether the record is what it was when the run ended; None where it has not ended."""
    return None if material.kept_digest is None else not material.broken


def _rows(material: Material) -> Iterator[dict[str, Any]]:
    for m in material.points:
        for second in m.series.seconds:
            yield _second(m, second)


def _second(m: Measured, s: Second) -> dict[str, Any]:
    t = s.tally
    return {
        "point": m.point.index,
        "sitting": s.sitting,
        "second": s.index,
        "begins": iso(s.at),
        "seconds": s.duration_ns / 1e9,
        "due": s.due,
        "bits_sent": s.sent,
        "bits_received": t.received,
        "bits_compared": t.compared,
        "bits_unaligned": t.unaligned,
        "errors": t.errors,
        "ones_as_zeros": t.ones_as_zeros,
        "zeros_as_ones": t.zeros_as_ones,
        "slips": s.slips,
        "bits_lost": s.bits_lost,
        "bits_inserted": s.bits_inserted,
    }
