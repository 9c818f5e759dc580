"""`bitassay report` and `bitassay export` from outside: files, standard output, exit status, advice."""

from __future__ import annotations

import json
import sys
from xml.etree import ElementTree as ET

import pytest

from harness.cli.main import main

FIXED = {"ber": 1e-4, "confidence": 0.95, "plan": "fixed", "accept_errors": 12}
DEVICE = {"model": "<script>alert(1)</script>", "serial_number": "=1+1"}


@pytest.fixture
def store(records):
    records.make([[1, 0, 2, 0, 1]], FIXED, device=DEVICE)
    return f"--store={records.path}"


def test_a_report_in_all_its_forms(bitassay, store, tmp_path):
    shown = bitassay("show", "last", "--json", store).json
    done = bitassay("report", "last", "--html", "r.html", "--pdf", "r.pdf", "--text", store)
    assert done.status == 0
    assert "wrote r.html" in done.err
    assert "wrote r.pdf" in done.err
    page = (tmp_path / "r.html").read_text()
    assert (tmp_path / "r.pdf").read_bytes().startswith(b"%PDF-")
    assert not list(tmp_path.glob(".*part"))
    digits = f"{shown['bits_compared']:,}".replace(",", "\u202f")
    for text in (page, done.out):
        assert f"{shown['errors']} errors in {digits} compared bits" in text
        assert shown["run"] in text
    assert "<script>" not in page
    assert bitassay("report", store).out.splitlines()[:40] == done.out.splitlines()[:40]  # no choice: text


def test_exports_go_to_standard_output_or_to_a_file(bitassay, store, tmp_path):
    shown = bitassay("show", "last", "--json", store).json
    document = bitassay("export", "last", "--format", "json", store).json
    assert {key: document[key] for key in shown} == shown
    assert sum(row["errors"] for row in document["each_second"]) == shown["errors"]
    root = ET.fromstring(bitassay("export", "--format", "junit", store).out)
    assert root.get("failures") == root.get("errors") == "0"
    done = bitassay("export", "--format", "csv", "--output", "s.csv", store)
    assert (done.out, done.status) == ("", 0)
    assert "wrote s.csv" in done.err
    written = (tmp_path / "s.csv").read_bytes()
    assert written.count(b"\r\n") == 6
    assert b",'=1+1," in written


def test_without_typst_it_says_what_to_install_and_writes_nothing(store, tmp_path, monkeypatch, capfd):
    monkeypatch.setitem(sys.modules, "typst", None)  # as if it were not installed
    monkeypatch.chdir(tmp_path)

    def run(*arguments):
        monkeypatch.setattr("sys.argv", ["bitassay", *arguments, store])
        with pytest.raises(SystemExit) as left:
            main()
        return left.value.code, capfd.readouterr().err

    status, said = run("report", "--html", "r.html", "--pdf", "r.pdf")
    assert status == 2
    lines = said.strip().splitlines()
    assert len(lines) == 2
    assert "Typst" in lines[0]
    assert "pip install 'bitassay[pdf]'" in lines[1]
    assert not (tmp_path / "r.html").exists()
    assert not (tmp_path / "r.pdf").exists()
    assert run("report", "--html", "r.html")[0] == 0


@pytest.mark.parametrize(
    ("arguments", "status", "words"),
    [
        (("export", "--format", "pdf"), 2, "csv, json, junit"),
        (("export", "--format", "json", "--points"), 2, "--points is for CSV"),
        (("report", "--pdf", "x.pdf", "--paper", "a5"), 2, "a4, letter"),
        (("report", "nonesuch"), 2, "no run is named"),
        (("report", "--html", "nowhere/x.html"), 2, "there is no folder"),
        (("export", "--output", "nowhere/x.csv"), 2, "there is no folder"),
        (("report", "--html", "x.html", "--pdf", "x.html"), 2, "--html and --pdf both name x.html"),
        (("report", "--html", "."), 2, "is a folder"),
    ],
)
def test_what_cannot_be_done_is_said_in_two_lines(
    store, capfd, monkeypatch, tmp_path, arguments, status, words
):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr("sys.argv", ["bitassay", *arguments, store])
    with pytest.raises(SystemExit) as left:
        main()
    assert left.value.code == status
    said = capfd.readouterr()
    assert words in said.err
    assert len(said.err.strip().splitlines()) == 2
    assert said.out == ""


def test_an_earlier_report_is_replaced_and_any_other_file_is_left_alone(store, capfd, monkeypatch, tmp_path):
    def run(*arguments):
        monkeypatch.setattr("sys.argv", ["bitassay", *arguments, store])
        with pytest.raises(SystemExit) as left:
            main()
        said = capfd.readouterr()
        return left.value.code, said.out + said.err

    monkeypatch.chdir(tmp_path)
    written = [("report", f"--{form}", f"r.{form}") for form in ("html", "pdf")]
    written += [("export", "--format", f, "--output", f"x.{f}") for f in ("csv", "json", "junit")]
    written += [("export", "--points", "--output", "p.csv"), ("export", "--schema", "--output", "s.json")]
    for arguments in written:
        name = arguments[-1]
        assert run(*arguments) == (0, f"wrote {name}\n")
        assert run(*arguments) == (0, f"replaced {name}\n")
        (tmp_path / name).write_bytes(b"%PDF-1.4 the customer's own drawing")
        status, said = run(*arguments)
        assert status == 2
        assert f"{name} is there already, and is no report or export of bitassay: it was left alone" in said
        assert (tmp_path / name).read_bytes() == b"%PDF-1.4 the customer's own drawing"
    assert not list(tmp_path.glob(".*part"))


def test_the_schema_is_printed_without_a_run(bitassay):
    assert json.loads(bitassay("export", "--schema").out)["title"].startswith("A run as")


def test_a_failed_run_is_reported_with_status_0(bitassay, records):
    records.make([[9, 9, 9, 9, 9]], FIXED)
    done = bitassay("report", f"--store={records.path}")
    assert done.status == 0
    assert "VERDICT                 FAIL" in done.out
