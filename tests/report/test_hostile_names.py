"""Names that mean something to a browser, a typesetter, a spreadsheet, XML or a terminal are shown, never obeyed."""

from __future__ import annotations

import csv
import io
import json
import shutil
import subprocess
from xml.etree import ElementTree as ET

import pytest

from harness.report import assemble
from harness.report.exports.data import write_json
from harness.report.exports.tables import write_points, write_seconds
from harness.report.exports.testcases import write_junit
from harness.report.figures.drawing import draw_all
from harness.report.harmless import REPLACEMENT, cell, plain
from harness.report.html import to_html
from harness.report.pdf import to_pdf
from harness.report.text import to_text

SCRIPT = "<script>alert(1)</script>"
SUM = "=1+1"
TYPESET = '#panic("x") $x^2$ *b* _i_ @a <b> \\ [y] `z`'
INSTRUMENT = '=1+1$\\frac{1}{"><img src=x onerror=alert(1)>$'
CONTROLS = "a\x00b\x1b[31mc\u202ed\u200be\u2028f\x85g"


@pytest.fixture(scope="session")
def hostile(hostile_record):
    return hostile_record(SCRIPT, SUM, TYPESET, INSTRUMENT, CONTROLS)


def test_a_page_shows_them_and_runs_none(hostile, parsed):
    words = parsed(to_html(assemble(hostile)))
    names = {tag for tag, _a in words.tags}
    assert not names & {"script", "img", "b2", "iframe"}
    assert all(not name.startswith("on") for _tag, attributes in words.tags for name in attributes)
    text = "".join(words.parts)
    assert f"{SCRIPT} {SUM}" in text
    assert TYPESET in text
    assert not set(text) & set("\x00\x1b\u202e\u200b\x85")
    assert "heard" in text


def test_figures_show_them_and_stay_well_formed(hostile):
    for svg in draw_all(assemble(hostile).figures()):
        tree = ET.fromstring(svg)
        assert not [
            e for e in tree.iter() if e.tag.endswith(("script", "img", "a", "image", "foreignObject"))
        ]


def test_an_instruments_name_is_drawn_letter_by_letter(hostile):
    drawn = "".join("".join(ET.fromstring(svg).itertext()) for svg in draw_all(assemble(hostile).figures()))
    assert INSTRUMENT in drawn


def test_a_pdf_shows_them_as_they_are(hostile, tmp_path):
    made = to_pdf(assemble(hostile))
    assert made.startswith(b"%PDF-")
    assert b"/JavaScript" not in made
    assert b"/URI" not in made
    if shutil.which("pdftotext") is None:
        pytest.skip("needs pdftotext (poppler) for what it shows")
    (tmp_path / "r.pdf").write_bytes(made)
    done = subprocess.run(["pdftotext", tmp_path / "r.pdf", "-"], capture_output=True, check=True)
    text = "".join(done.stdout.decode().split())
    assert "".join(f"{SCRIPT}{SUM}".split()) in text
    assert "".join(TYPESET.split()) in text


def test_text_carries_no_control_character(hostile):
    text = to_text(assemble(hostile))
    assert f"{SCRIPT} {SUM}" in text
    assert not {c for c in text if ord(c) < 32 or 127 <= ord(c) < 160 or c in "\u202e\u200b\u2028"} - {"\n"}


@pytest.mark.parametrize("write", [write_seconds, write_points])
def test_no_cell_of_csv_is_run_by_a_spreadsheet(hostile, write):
    out = io.StringIO(newline="")
    write(hostile, out)
    rows = list(csv.reader(io.StringIO(out.getvalue(), newline="")))
    assert len({len(row) for row in rows}) == 1
    assert f"'{SUM}" in {text for row in rows for text in row}
    for row in rows:
        for text in row:
            try:
                float(text)
            except ValueError:
                assert not text.lstrip().startswith(("=", "+", "-", "@", "\t", "\r", "\n")), text


@pytest.mark.parametrize(
    "text", ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1", "\n=1", " =1", "＝1", "=cmd|' /C calc'!A0"]
)
def test_a_text_that_would_run_is_led_by_an_apostrophe(text):
    assert str(cell(text)).startswith("'")
    assert not set(str(cell(text))) & set("\t\r\n")


def test_numbers_and_plain_text_stay_as_they_are():
    assert [cell(v) for v in (-2.5, 0, "Wader-9", "a=b", None, True)] == [
        -2.5,
        0,
        "Wader-9",
        "a=b",
        "",
        "yes",
    ]


def test_junit_is_well_formed_and_holds_them_as_text(hostile):
    out = io.StringIO()
    write_junit(hostile, out)
    root = ET.fromstring(out.getvalue().encode())
    assert {e.tag for e in root.iter()} <= {
        "testsuites", "testsuite", "properties", "property", "testcase", "error", "failure", "skipped", "system-out",
    }  # fmt: skip
    assert all(case.get("classname") == f"bitassay.{SCRIPT} {SUM}" for case in root.iter("testcase"))


def test_json_gives_them_back_letter_by_letter(hostile):
    out = io.StringIO()
    write_json(hostile, out)
    document = json.loads(out.getvalue())
    assert document["device"]["model"] == SCRIPT
    assert document["device"][SCRIPT] == CONTROLS
    assert out.getvalue().isascii()


def test_what_is_replaced_is_seen_to_be():
    assert plain("a\x1b[31mb") == f"a{REPLACEMENT}[31mb"
    assert plain("a\nb\tc") == "a b c"
    assert plain("a\r\nb\tc", keep_lines=True) == "a\nb\tc"
    assert plain("Größe 10 µV ±5 %, 測試") == "Größe 10 µV ±5 %, 測試"
    assert plain("\udc80") == REPLACEMENT
