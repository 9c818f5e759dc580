"""JUnit XML for test automation: a test case for each point, and nothing green that is not a PASS.

PASS is a passed case and FAIL a failure. UNDECIDED, a run that failed, was cut or was marked void, and a
record that does not hold are errors. Where nothing was required the case is skipped.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal, TextIO
from xml.etree import ElementTree as ET

from harness.assess.words import STATUS, iso
from harness.report.harmless import plain
from harness.report.material import Material, Measured
from harness.report.phrases import (
    bounds_words,
    deciding_words,
    digits,
    fault_words,
    on_bits,
    point_name,
    unit_name,
)

Outcome = Literal["passed", "failure", "error", "skipped"]


@dataclass(frozen=True, slots=True)
class Case:
    """A test case."""

    name: str
    seconds: float
    outcome: Outcome
    kind: str  # of the outcome, in a word
    message: str
    output: str


def write_junit(material: Material, to: TextIO) -> None:
    """Write the run as one test suite."""
    cases = list(cases_of(material))
    run = material.run
    counts = {
        "tests": str(len(cases)),
        "failures": str(sum(c.outcome == "failure" for c in cases)),
        "errors": str(sum(c.outcome == "error" for c in cases)),
        "skipped": str(sum(c.outcome == "skipped" for c in cases)),
        "time": f"{sum(c.seconds for c in cases):.3f}",
    }
    suites = ET.Element("testsuites", {"name": "bitassay", **counts})
    about = {"name": plain(run.title or run.key), "timestamp": (iso(run.started) or "").removesuffix("Z")}
    suite = ET.SubElement(suites, "testsuite", {**about, **counts})
    properties = ET.SubElement(suite, "properties")
    for name, value in _properties(material):
        ET.SubElement(properties, "property", {"name": plain(name), "value": plain(value)})
    for case in cases:
        _add(suite, case, plain(unit_name(run.device)))
    ET.indent(suites)
    to.write('<?xml version="1.0" encoding="utf-8"?>\n')
    to.write(ET.tostring(suites, encoding="unicode"))
    to.write("\n")


def _add(suite: ET.Element, case: Case, unit: str) -> None:
    attributes = {"name": plain(case.name), "classname": f"bitassay.{unit}", "time": f"{case.seconds:.3f}"}
    element = ET.SubElement(suite, "testcase", attributes)
    if case.outcome != "passed":
        about = {"message": plain(case.message)}
        if case.outcome != "skipped":
            about["type"] = case.kind
        ET.SubElement(element, case.outcome, about).text = plain(case.message)
    ET.SubElement(element, "system-out").text = plain(case.output, keep_lines=True)


def _properties(material: Material) -> Iterator[tuple[str, str]]:
    yield "run", material.run.key
    yield "profile_sha256", material.profile_digest
    if material.kept_digest:
        yield "record_sha256", material.kept_digest
    for key, value in material.run.device.items():
        yield f"device.{key}", value
    for override in material.run.overrides:
        yield "override", override


def cases_of(material: Material) -> Iterator[Case]:
    """List the test cases: one for each point, and one for a verdict that belongs to none of them."""
    a = material.assessment
    for m in material.points:
        outcome, kind, message = _of_point(material, m)
        yield Case(point_name(m), m.assessed.seconds, outcome, kind, message, _output(m))
    # A sensitivity that is required belongs to no point: its verdict must not get lost.
    if not material.points or (a.verdict is not None and material.swept):
        outcome, kind, message = _overall(material) or _verdict(a.verdict, "; ".join(a.reasons))
        yield Case("the whole run", 0.0, outcome, kind, message, "; ".join(a.reasons))


def _overall(material: Material) -> tuple[Outcome, str, str] | None:
    """Say what takes any verdict's worth away."""
    if material.broken:
        return "error", "RECORD", f"the record does not hold: {'; '.join(material.broken)}"
    if material.void_notes:
        return "error", "VOID", "; ".join(f"void: {n.text} ({n.who})" for n in material.void_notes)
    status = material.run.status
    if status != "completed":
        # A fault is no FAIL: the type must not be read as a verdict on the unit.
        fault = fault_words(material)
        return "error", "FAULT" if status == "failed" else status.upper(), fault or STATUS[status]
    return None


def _of_point(material: Material, m: Measured) -> tuple[Outcome, str, str]:
    p = m.assessed
    if p.verdict == "FAIL" and not material.broken and not material.void_notes:
        return _verdict(p.verdict, "; ".join(p.reasons))  # a FAIL is one, however the run ended
    overall = _overall(material)
    if overall is not None:
        return overall
    if p.verdict is None and not p.tally.compared and material.swept:
        return "skipped", "", f"nothing was required here: {on_bits(p)}"
    if p.verdict is None and not p.tally.compared:
        return "error", "NOTHING", on_bits(p)
    return _verdict(p.verdict, "; ".join(p.reasons))


def _verdict(verdict: str | None, reasons: str) -> tuple[Outcome, str, str]:
    if verdict == "PASS":
        return "passed", verdict, reasons
    if verdict == "FAIL":
        return "failure", verdict, reasons
    if verdict == "UNDECIDED":
        return "error", verdict, reasons
    return "skipped", "", "nothing was required here: measured only"


def _output(m: Measured) -> str:
    p = m.assessed
    lines = [
        f"verdict {p.verdict or 'none'}",
        *p.reasons,
        f"BER {digits(p.ber)}: {on_bits(p)}",
        bounds_words(p),
    ]
    lines += [deciding_words(p)] if p.plan else []
    lines += [
        f"{p.slip_count} slips, {p.tally.unaligned} bits unaligned, {p.bits_lost} bits lost",
        *p.remarks,
    ]
    return "\n".join(line for line in lines if line)
