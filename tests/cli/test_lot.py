"""`bitassay lot`: serial numbers are asked for and checked, repeats refused, outliers pointed out."""

from __future__ import annotations

import hashlib
import re

PROFILE = """
title = "Wader-9 lot, invented"
[device]
model = "Wader-9"
[link]
driver = "loopback"
rate_bps = 1_000_000
[[link.channel]]
model = "independent"
ber = 2e-5
seed = 3
[requirement]
ber = 1e-4
accept_errors = 12
[lot]
name = "L7"
serial_pattern = '\\d{4}'
"""


def test_units_are_asked_for_checked_measured_and_summed_up(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE)
    done = bitassay("lot", "lot.toml", stdin=b"0031\n31\n0032\n0031\n\n")
    assert done.status == 0, done.err
    assert "31 does not look like a serial number" in done.err
    assert "0031 was measured in this lot already" in done.err
    assert "passed 2 of 2" in done.out
    runs = bitassay("runs", "--json").json["runs"]
    assert [run["serial_number"] for run in runs] == ["0032", "0031"]


def test_a_lot_is_reported_when_it_ends_and_again_later_without_measuring(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE)
    done = bitassay("lot", "lot.toml", "--html", "a.html", "--text", stdin=b"0031\n0032\n\n")
    assert done.status == 0, done.err
    assert "wrote a.html" in done.err
    again = bitassay("report", "--lot", "L7")
    assert again.status == 0
    written = re.compile(r"written by .*")
    assert written.sub("", again.out) == written.sub("", done.out)
    assert (
        bitassay("report", "--lot", "last").out.splitlines()[0] == "Wader-9, lot L7 — Wader-9 lot, invented"
    )
    runs = [run["run"] for run in bitassay("runs", "--json").json["runs"]]
    assert len(runs) == 2
    digests = {key: bitassay("verify", key, "--json").json["digest"] for key in runs}
    for key, digest in digests.items():
        assert key in again.out
        assert digest in again.out
    lines = "".join(f"{digests[key]}  {key}\n" for key in sorted(runs))
    assert again.out.count(hashlib.sha256(lines.encode()).hexdigest()) == 2  # its section, and the foot
    page = (tmp_path / "a.html").read_text()
    for key in runs:
        shown = bitassay("show", key, "--json").json
        digits = f"{shown['bits_compared']:,}".replace(",", "\u202f")
        row = re.search(rf"{shown['device']['serial_number']} +PASS +{shown['errors']} +{digits} ", again.out)
        assert row, again.out
        assert f">{digits}<" in page


def test_what_cannot_be_reported_is_said_before_anything_is_measured(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE)
    done = bitassay("lot", "lot.toml", "--pdf", "nowhere/lot.pdf", stdin=b"0031\n\n")
    assert done.status == 2
    assert "there is no folder" in done.err
    assert bitassay("runs", "--json").json["runs"] == []
    bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    done = bitassay("report", "--lot", "L8")
    assert (done.status, done.out) == (2, "")
    assert 'no lot "L8"' in done.err
    assert "it holds L7" in done.err
    assert bitassay("report", "last", "--lot", "L7").status == 2


def test_a_lot_with_units_still_to_be_measured_has_not_passed_and_counts_on(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE + "size = 2\n")
    done = bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    assert done.status == 3
    assert "lot L7: 1 unit measured of 2" in done.out
    assert "1 unit of 2 still to be measured" in done.out
    assert max(len(line) for line in done.out.splitlines()) <= 80
    done = bitassay("lot", "lot.toml", "--json", stdin=b"0032\n0033\n")
    assert done.status == 0
    assert "unit 2 of 2" in done.err
    assert done.json["verdict"] == "PASS"
    assert [unit["serial_number"] for unit in done.json["units"]] == ["0031", "0032"]


def test_a_void_run_may_be_made_up_for_and_is_told(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE)
    bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    bitassay("note", "last", "antenna cable was loose", "--void")
    done = bitassay("lot", "lot.toml", "--json", stdin=b"\n")
    assert done.status == 3
    assert done.json["units"][0]["standing"] == "void"
    done = bitassay("lot", "lot.toml", "--text", stdin=b"0031\n\n")
    assert done.status == 0
    assert "void: antenna cable was loose" in done.out
    assert "This is test 2 of unit 0031" in done.out


def test_a_lot_goes_on_another_day_and_knows_what_was_measured(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE)
    bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    done = bitassay("lot", "lot.toml", "--json", stdin=b"0031\n0040\n")
    assert done.status == 0
    assert [unit["serial_number"] for unit in done.json["units"]] == ["0031", "0040"]
    assert done.json["passed"] == done.json["judged"] == 2


def test_why_a_unit_did_not_pass_is_said_when_it_did_not(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE.replace("ber = 2e-5", "ber = 3e-3"))
    done = bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    assert done.status == 1
    assert re.search(r"0031 FAIL: not demonstrated: [\d\u202f]+ errors in .* \(run [0-9a-f-]{36}\)", done.err)
    assert "194\u202f422 bits" in done.err  # what no terminal obeys stays as it is
    assert "\ufffd" not in done.err


def test_a_unit_that_could_not_be_measured_is_told_why_and_may_be_tried_again(bitassay, tmp_path):
    head, tail = PROFILE.split('driver = "loopback"')
    away = (
        head
        + 'driver = "tcp"\nhost = "127.0.0.1"\nport = 9\n'
        + re.sub(r"(?s)\[\[link.*?seed = 3\n", "", tail)
    )
    (tmp_path / "away.toml").write_text(away)
    (tmp_path / "lot.toml").write_text(PROFILE)
    done = bitassay("lot", "away.toml", stdin=b"0031\n\n")
    assert done.status == 4
    assert "refused the connection" in done.err
    assert "unit 0031 could not be measured" in done.err
    done = bitassay("lot", "lot.toml", "--json", stdin=b"0031\n\n")
    assert (done.status, done.json["verdict"]) == (0, "PASS")
    assert done.json["units"][0]["tries"] == 1  # not a bit came in the first run
    assert done.json["tries"][0]["why"] == "something failed; not a single bit came, so it was no try"


def test_a_lot_without_any_name_is_refused_before_anything_is_measured(bitassay, tmp_path):
    nameless = PROFILE.replace('title = "Wader-9 lot, invented"', "").replace('name = "L7"', "")
    (tmp_path / "lot.toml").write_text(nameless)
    done = bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    assert done.status == 2
    assert "[lot]" in done.err


def test_blanks_around_a_lots_name_do_not_hide_its_units(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE.replace('"L7"', '" L7 "'))
    done = bitassay("lot", "lot.toml", "--json", stdin=b"0031\n\n")
    assert (done.status, done.json["passed"]) == (0, 1)
    assert bitassay("report", "--lot", "L7").status == 0


def test_a_profile_without_a_lot_is_refused(bitassay, tmp_path):
    (tmp_path / "one.toml").write_text(PROFILE.split("[lot]")[0])
    done = bitassay("lot", "one.toml", stdin=b"0031\n")
    assert done.status == 2
    assert "[lot]" in done.err


def test_a_unit_measured_outside_of_its_lot_is_told_so(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE)
    done = bitassay("measure", "lot.toml", "--quiet")
    assert done.status == 0
    assert "not part of lot L7: `bitassay lot`" in done.err
    inside = bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    assert "not part of" not in inside.err
