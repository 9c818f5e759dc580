"""`bitassay measure` over serial ports (pseudo-terminals, `socket://`, `rfc2217://`) to a modem in its own process."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import pytest


@pytest.fixture
def profile(tmp_path: Path):
    """Write a profile for a serial port; link keys go into [link], the rest to the end."""

    def write(port: str, rest: str, link: str = "") -> Path:
        path = tmp_path / "unit.toml"
        path.write_text(
            f'title = "Wader-9, invented"\n[device]\nserial_number = "0031"\n'
            f'[link]\ndriver = "serial"\nport = "{port}"\nbaud = 115200\n{link}\n{rest}'
        )
        return path

    return write


OVER = pytest.mark.parametrize("over", ["pty", "socket", "rfc2217"])
FLIPS = [0, 7, 8, 1000, 99_999, 100_000, 333_333, 555_555]
DROPS = [22_345, 30_000, 30_001, 30_002, 61_234]
# Nothing on these links paces like a wire, and pseudo-terminals hold 4 kB: keep little on its way.
PACED = "pace_bps = 400_000\nmax_in_flight_bits = 64_000\ndrain_s = 2"


def test_flipped_bits_are_counted_exactly(bitassay, modem, profile):
    port = modem(flip=FLIPS)
    done = bitassay("measure", profile(port, "[stop]\nbits = 600_000\n", PACED), "--json")
    assert done.status == 0, done.err
    got = done.json
    assert got["errors"] == len(FLIPS)
    assert got["bits_sent"] == got["bits_received"] == got["bits_compared"] == 600_000
    assert got["slips"] == []


def test_dropped_bytes_are_slips_of_as_many_bytes_and_no_errors(bitassay, modem, profile):
    port = modem(drop=DROPS)
    done = bitassay("measure", profile(port, "[stop]\nbits = 600_000\n", PACED), "--json")
    assert done.status == 0, done.err
    got = done.json
    assert got["errors"] == 0
    assert [slip["bits"] for slip in got["slips"]] == [-8, -24, -8]
    assert got["bits_lost"] == 8 * len(DROPS)
    assert got["bits_received"] == 600_000 - 8 * len(DROPS) == got["bits_compared"]


@OVER
def test_flips_then_drops_then_a_close_are_exact_and_the_record_is_kept(
    bitassay, modem, profile, over, tmp_path
):
    port = modem(over=over, flip=FLIPS[:6], drop=DROPS, close_after=75_000)
    done = bitassay("measure", profile(port, "[stop]\nbits = 10_000_000\n", PACED), "--quiet")
    assert done.status == 4
    assert port.removeprefix("socket://").removeprefix("rfc2217://") in done.err
    assert 2 <= len(done.err.strip().splitlines()) <= 4
    shown = bitassay("show", "last", "--json").json
    assert (shown["status"], shown["ended_by"]) == ("failed", "fault")
    assert shown["errors"] == 6
    assert [slip["bits"] for slip in shown["slips"]] == [-8, -24, -8]
    # Both places agree on every second bit by chance, so the split is not always the very bit.
    for slip, byte in zip(shown["slips"], [22_345, 30_000 - 1, 61_234 - 4], strict=True):
        assert slip["bit"] == pytest.approx(8 * byte, abs=48)
    assert 8 * 74_000 <= shown["bits_compared"] <= 8 * 85_000
    with sqlite3.connect(tmp_path / "results" / "runs.sqlite") as db:
        assert db.execute("select sum(errors) from second").fetchone()[0] == 6


def test_a_port_that_does_not_exist_is_named(bitassay, profile):
    done = bitassay("measure", profile("/dev/ttyWader9", "[stop]\nbits = 1000\n"))
    assert done.status == 4
    assert "/dev/ttyWader9" in done.err


SETUP = """
[[link.before]]
send = "AT\\r"
expect = "OK"
timeout_s = {timeout}
[[link.before]]
send = "AT+DATA=1\\r"
expect = "OK"
timeout_s = {timeout}
[[link.after]]
send = "+++leave+++"
expect = "OK"
timeout_s = 2
"""
COMMANDS = {"AT": "OK", "AT+DATA=1": "OK"}


def talking(timeout: float = 20) -> str:
    return PACED + SETUP.format(timeout=timeout)


@pytest.mark.parametrize("over", ["pty", "rfc2217"])
def test_a_dialogue_is_held_before_and_after_and_none_of_its_bytes_is_counted(
    bitassay, modem, profile, over, tmp_path
):
    log = tmp_path / "heard"
    port = modem(
        over=over, commands=COMMANDS, answer_after_s=0.6, leave="+++leave+++", log=str(log), flip=FLIPS
    )
    done = bitassay("measure", profile(port, "[stop]\nbits = 600_000\n", talking()), "--json")
    assert done.status == 0, done.err
    got = done.json
    assert (got["errors"], got["bits_compared"], got["bits_received"]) == (len(FLIPS), 600_000, 600_000)
    assert log.read_text().split("\n")[:3] == ["AT", "AT+DATA=1", "+++leave+++"]
    said = [event["text"] for event in got["events"] if event["kind"] == "dialogue"]
    assert [words.count("AT+DATA=1") for words in said].count(1) == 1


def test_a_device_that_answers_error_ends_in_its_own_words(bitassay, modem, profile):
    port = modem(commands={"AT": "OK", "AT+DATA=1": "ERROR 17: no carrier"})
    done = bitassay("measure", profile(port, "[stop]\nbits = 1000\n", talking(1)))
    assert done.status == 4
    assert "ERROR 17: no carrier" in done.err
    assert "step 2" in done.err
    assert bitassay("show", "last", "--json").json["bits_received"] == 0


def test_a_device_that_answers_nothing_is_said_to_be_silent(bitassay, modem, profile):
    port = modem(commands={"AT": ""})
    done = bitassay("measure", profile(port, "[stop]\nbits = 1000\n", talking(0.5)))
    assert done.status == 4
    assert 'did not answer "AT\\r"' in done.err


def test_the_closing_words_are_said_after_a_failed_set_up_too(bitassay, modem, profile, tmp_path):
    log = tmp_path / "heard"
    port = modem(commands={"AT": "OK", "AT+DATA=1": "BUSY"}, log=str(log))
    ends = talking(0.5).replace('send = "+++leave+++"', 'send = "ATH0\\r"')
    assert bitassay("measure", profile(port, "[stop]\nbits = 1000\n", ends)).status == 4
    assert log.read_text().split()[-1] == "ATH0"


def test_the_closing_words_are_said_after_a_verdict(bitassay, modem, profile, tmp_path):
    log = tmp_path / "heard"
    port = modem(commands=COMMANDS, leave="+++leave+++", log=str(log))
    rest = "[requirement]\nber = 1e-4\n[stop]\nseconds = 30\n"
    done = bitassay("measure", profile(port, rest, talking()), "--json")
    assert (done.status, done.json["verdict"]) == (0, "PASS")
    assert "+++leave+++" in log.read_text()


def test_a_port_that_comes_back_is_used_again_and_the_gap_recorded(bitassay, modem, profile, tmp_path):
    port = modem(name=str(tmp_path / "ttyGauge"), close_after=30_000, away_s=1.0)
    keys = PACED + "\nreconnect_s = 30"
    done = bitassay("measure", profile(port, "[stop]\nbits = 1_200_000\n", keys), "--json")
    assert done.status == 0, done.err
    got = done.json
    kinds = [event["kind"] for event in got["events"]]
    assert kinds.count("link_gone") == kinds.count("link_returned") == 1
    gone = next(event["text"] for event in got["events"] if event["kind"] == "link_gone")
    assert "ttyGauge" in gone
    assert got["errors"] == 0
    assert got["bits_compared"] > 800_000
    assert got["bits_sent"] == got["bits_received"] + got["bits_lost"] - got["bits_inserted"]


def test_a_set_up_is_repeated_when_the_port_comes_back(bitassay, modem, profile, tmp_path):
    log = tmp_path / "heard"
    port = modem(
        name=str(tmp_path / "ttyGauge"), close_after=30_000, away_s=0.5, commands=COMMANDS, log=str(log)
    )
    keys = talking().replace("drain_s = 2", "drain_s = 2\nreconnect_s = 30")
    done = bitassay("measure", profile(port, "[stop]\nbits = 800_000\n", keys), "--json")
    assert done.status == 0, done.err
    assert log.read_text().split().count("AT+DATA=1") == 2
    assert done.json["errors"] == 0
