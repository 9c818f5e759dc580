"""Exports hold the record's numbers, keep to their schema, and turn nothing green that is not a PASS."""

from __future__ import annotations

import copy
import csv
import io
import json
from dataclasses import replace
from xml.etree import ElementTree as ET

import jsonschema
import pytest

from harness.record import Event, Note
from harness.report import assemble
from harness.report.exports.data import schema_text, write_json
from harness.report.exports.tables import write_points, write_seconds
from harness.report.exports.testcases import write_junit
from harness.report.text import to_text

FIXED = {"ber": 1e-4, "confidence": 0.95, "plan": "fixed", "accept_errors": 12}
KINDS = (
    "pass", "fail", "undecided", "sequential pass", "outages", "bursts", "measured only", "never aligned",
    "nothing came", "sweep", "duplex", "running",
)  # fmt: skip


def written(write, material) -> str:
    out = io.StringIO(newline="")
    write(material, out)
    return out.getvalue()


def rows_of(write, material) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(written(write, material), newline="")))


@pytest.mark.parametrize("kind", KINDS)
def test_seconds_add_up_to_the_assessment(cases, kind):
    material = cases[kind]()
    rows = rows_of(write_seconds, material)
    document = material.assessment.to_json()
    for index, stated in enumerate(document.get("points") or [document]):
        of_point = [row for row in rows if int(row["point"]) == index]
        for key in (
            "bits_sent",
            "bits_received",
            "bits_compared",
            "bits_unaligned",
            "errors",
            "ones_as_zeros",
        ):
            assert sum(int(row[key]) for row in of_point) == stated[key]
        assert sum(int(row["slips"]) for row in of_point) == stated["slip_count"]
        assert sum(float(row["seconds"]) for row in of_point) == pytest.approx(stated["seconds"])


@pytest.mark.parametrize("kind", ["pass", "fail", "sweep", "duplex"])
def test_points_are_the_assessments(cases, kind):
    material = cases[kind]()
    document = material.assessment.to_json()
    points = document.get("points") or [document]
    rows = rows_of(write_points, material)
    assert len(rows) == len(points)
    for row, stated in zip(rows, points, strict=True):
        assert int(row["errors"]) == stated["errors"]
        assert (row["verdict"] or None) == stated["verdict"]
        if stated["bits_compared"]:
            assert float(row["ber"]) == stated["ber"]
            assert float(row["upper"]) == stated["bounds"]["upper"]
            assert float(row["deciding_value"]) == stated["bounds"]["deciding"]["value"]
        else:
            assert (row["ber"], row["upper"]) == ("", "")


def test_set_values_have_a_column_with_their_unit(cases):
    rows = rows_of(write_points, cases["sweep"]())
    assert [float(row["attenuator (dB)"]) for row in rows] == [56, 58, 60, 62, 64]
    assert float(rows[0]["level_dbm"]) == -86


def test_lines_of_csv_end_as_rfc_4180_has_it(cases):
    text = written(write_seconds, cases["pass"]())
    assert text.count("\r\n") == 6
    assert text.count("\n") == 6


@pytest.fixture(scope="session")
def validator():
    schema = json.loads(schema_text())
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema)


@pytest.mark.parametrize("kind", KINDS)
def test_json_keeps_to_its_schema(cases, validator, kind):
    document = json.loads(written(write_json, cases[kind]()))
    assert [f"{list(e.absolute_path)}: {e.message}" for e in validator.iter_errors(document)] == []


def test_json_is_what_show_prints_and_every_second(cases):
    material = cases["fail"]()
    document = json.loads(written(write_json, material))
    shown = material.assessment.to_json()
    assert {key: document[key] for key in shown} == json.loads(json.dumps(shown))
    assert [row["errors"] for row in document["each_second"]] == [9, 4, 0, 7, 2]
    assert document["record_sha256"] == material.kept_digest
    assert document["record_holds"] is True


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("errors",), -1),
        (("errors",), 1.5),
        (("verdict",), "pass"),
        (("ber",), 2),
        (("started",), "yesterday"),
        (("bounds", "upper"), None),
        (("bounds", "deciding", "side"), "left"),
        (("plan", "kind"), "hopeful"),
        (("record_sha256",), "00"),
        (("each_second", 0, "due"), "yes"),
        (("events",), None),
        (("availability", 0, "errored"), "3"),
        (("slips", 0, "bits"), None),
    ],
)
def test_the_schema_refuses_what_is_wrong(cases, validator, path, value):
    document = json.loads(written(write_json, cases["fail"]()))
    assert validator.is_valid(document)
    inner = document
    for key in path[:-1]:
        inner = inner[key]
    inner[path[-1]] = value
    assert not validator.is_valid(document)


def test_the_schema_wants_every_key_that_stays(cases, validator):
    document = json.loads(written(write_json, cases["pass"]()))
    for key in document:
        if key not in ("points", "sensitivity", "sensitivities", "curve_remarks"):
            without = {k: v for k, v in copy.copy(document).items() if k != key}
            assert not validator.is_valid(without) or key not in validator.schema["properties"], key
    assert set(document) <= {
        *validator.schema["properties"],
        *validator.schema["$defs"]["measured"]["properties"],
    }


def suite_of(material):
    root = ET.fromstring(written(write_junit, material).encode())
    suite = root.find("testsuite")
    cases = suite.findall("testcase")
    for tag, count in (("failure", "failures"), ("error", "errors"), ("skipped", "skipped")):
        assert (
            int(suite.get(count)) == int(root.get(count)) == sum(case.find(tag) is not None for case in cases)
        )
    assert int(suite.get("tests")) == len(cases)
    return cases


def outcome(case) -> str:
    return next((tag for tag in ("failure", "error", "skipped") if case.find(tag) is not None), "passed")


@pytest.mark.parametrize(
    ("kind", "expected"),
    [
        ("pass", ["passed"]),
        ("sequential pass", ["passed"]),
        ("fail", ["failure"]),
        ("undecided", ["error"]),
        ("never aligned", ["error"]),
        ("nothing came", ["error"]),
        ("running", ["error"]),
        ("measured only", ["skipped"]),
        ("sweep", ["skipped"] * 5),
        ("duplex", ["passed", "passed"]),
    ],
)
def test_only_a_pass_is_green(cases, kind, expected):
    assert [outcome(case) for case in suite_of(cases[kind]())] == expected


def test_a_failure_says_why(cases):
    material = cases["fail"]()
    failure = suite_of(material)[0].find("failure")
    assert failure.get("message") == "; ".join(material.assessment.reasons)
    assert failure.get("type") == "FAIL"


def test_a_void_pass_is_not_green(cases):
    material = cases["pass"]()
    noted = replace(material.run, notes=(Note(1, "bell", "wrong unit", void=True),))
    case = suite_of(replace(material, run=noted))[0]
    assert outcome(case) == "error"
    assert case.find("error").get("type") == "VOID"


def test_a_pass_of_a_record_that_does_not_hold_is_not_green(cases):
    case = suite_of(replace(cases["pass"](), digest="0" * 64))[0]
    assert (outcome(case), case.find("error").get("type")) == ("error", "RECORD")


def test_a_fail_stays_one_however_the_run_ended(cases):
    material = cases["fail"]()
    assert (
        outcome(suite_of(replace(material, run=replace(material.run, status="interrupted")))[0]) == "failure"
    )


def test_a_pass_of_an_interrupted_run_is_not_green(cases):
    material = cases["pass"]()
    assert outcome(suite_of(replace(material, run=replace(material.run, status="interrupted")))[0]) == "error"


@pytest.mark.parametrize(
    ("verdict", "expected"), [("FAIL", "failure"), ("UNDECIDED", "error"), ("PASS", "passed")]
)
def test_a_verdict_on_the_sensitivity_has_a_case_of_its_own(cases, verdict, expected):
    material = cases["sweep"]()
    run = replace(material.run, verdict=verdict, stated=None)
    judged = replace(material.assessment, verdict=verdict, reasons=("the sensitivity is 60.03 dB",))
    found = suite_of(replace(material, run=run, assessment=judged))
    assert [outcome(case) for case in found] == ["skipped"] * 5 + [expected]


def test_a_refused_connection_is_a_fault_and_no_verdict_on_the_unit(records, point):
    refused = Event("fault", None, "127.0.0.1:5310 refused the connection", 1_788_250_000 * 10**9)
    material = records.make([point([], {}, {}, [refused], "fault")], FIXED, status="failed")
    case = suite_of(material)[0]
    assert outcome(case) == "error"
    error = case.find("error")
    assert error.get("type") == "FAULT"
    assert error.get("message") == "127.0.0.1:5310 refused the connection"
    text = to_text(assemble(material))
    assert "something failed: 127.0.0.1:5310 refused the connection" in " ".join(text.split())
    assert "no slip, no unaligned bit" not in text
