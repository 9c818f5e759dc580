"""Bad input: one line what, one line what to do, the right exit status, and nothing lost."""

from __future__ import annotations

import pytest

GOOD = '[link]\ndriver = "loopback"\n'


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("not = [toml", "TOML"),
        (GOOD + '[requirement]\nber = "low"\n', "ber"),
        (GOOD + "[requirement]\nber = 1.5\n", "ber"),
        (GOOD + "[requirement]\nber = 0\n", "ber"),
        (GOOD + "[requirement]\nbar = 1e-6\n", "ber"),
        (GOOD + "[stop]\nbits = -5\n", "bits"),
        ('[link]\ndriver = "loopbak"\n', "loopback"),
        (GOOD + '[pattern]\nname = "PRBS16"\n', "PRBS"),
        (GOOD + "[stpo]\nbits = 5\n", "stop"),
        (GOOD + "pace = 5\n", "pace_bps"),
    ],
)
def test_a_bad_profile_is_status_2_in_two_lines_that_name_the_key(bitassay, tmp_path, text, word):
    path = tmp_path / "bad.toml"
    path.write_text(text)
    done = bitassay("measure", path)
    assert done.status == 2
    lines = done.err.strip().splitlines()
    assert len(lines) == 2
    assert word in done.err
    assert "Traceback" not in done.err
    assert done.out == ""


@pytest.mark.parametrize(
    "arguments",
    [
        ["measure", "missing.toml"],
        ["measure"],
        ["nonsense"],
        ["bounds", "4", "3"],
        ["bounds", "1", "10", "--confidence", "1"],
        ["plan", "--ber", "2"],
        ["plan", "--ber", "1e-6", "--margin", "1", "--kind", "sequential"],
        ["emit", "--pattern", "PRBS8", "--bytes", "3"],
        ["emit", "--pattern", "PRBS7", "--bytes", "3", "--bit-order", "middle"],
        ["examine", "missing.bin"],
        ["theory", "--modulation", "bpsk"],
        ["theory", "--modulation", "xyz", "--ebn0", "1"],
        ["drivers", "nosuch"],
    ],
)
def test_bad_usage_is_status_2_in_two_lines(bitassay, arguments):
    done = bitassay(*arguments)
    assert done.status == 2
    assert len(done.err.strip().splitlines()) == 2
    assert "Traceback" not in done.err


def test_an_empty_capture_is_status_4(bitassay, tmp_path):
    (tmp_path / "empty.bin").write_bytes(b"")
    done = bitassay("examine", "empty.bin")
    assert done.status == 4
    assert "empty" in done.err


def test_a_store_that_is_no_database_is_status_4(bitassay, tmp_path):
    (tmp_path / "text.sqlite").write_text("this is no database, it is only text. " * 100)
    done = bitassay("runs", "--store", "text.sqlite")
    assert done.status == 4
    assert len(done.err.strip().splitlines()) == 2


def test_runs_before_anything_was_measured_is_an_empty_list(bitassay):
    assert bitassay("runs", "--json").json["runs"] == []
    assert bitassay("runs").status == 0


@pytest.mark.parametrize("key", ["serial", "serialnumber", "serial_no", "SN"])
def test_a_misspelt_serial_number_is_refused_or_the_wrong_unit_would_be_named(bitassay, tmp_path, key):
    (tmp_path / "unit.toml").write_text(GOOD + f'[device]\n{key} = "0032"\n')
    done = bitassay("measure", "unit.toml")
    assert done.status == 2
    assert "serial_number" in done.err
