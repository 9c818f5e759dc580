"""`bitassay measure` against a device in a process of its own, over a real TCP connection."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import pytest


@pytest.fixture
def profile(tmp_path: Path):
    """Write a profile for a device's port; extra TOML goes to the end, link keys into [link]."""

    def write(port: int, extra: str = "", link: str = "", pattern: str = "PRBS15") -> Path:
        path = tmp_path / "unit.toml"
        path.write_text(
            f'title = "Wader-9, invented"\n[device]\nserial_number = "0031"\n'
            f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {port}\n{link}\n'
            f'[pattern]\nname = "{pattern}"\n{extra}'
        )
        return path

    return write


FLIPS = [0, 7, 8, 1000, 99_999, 100_000, 555_555, 777_777, 1_999_999]


@pytest.mark.parametrize("pattern", ["PRBS9", "PRBS15", "PRBS23-reversed", "PRBS31", "QRSS"])
def test_flipped_bits_are_counted_exactly(bitassay, device, profile, pattern):
    port = device(flip=FLIPS)
    done = bitassay("measure", profile(port, "[stop]\nbits = 2_000_000\n", pattern=pattern), "--json")
    assert done.status == 0, done.err
    got = done.json
    assert got["errors"] == len(FLIPS)
    assert got["bits_sent"] == got["bits_received"] == got["bits_compared"] == 2_000_000
    assert got["ended_by"] == "bits"
    assert got["status"] == "completed"
    assert got["slips"] == []
    assert got["bits_lost"] == 0


def test_an_echo_two_seconds_late_is_counted_exactly_and_its_delay_is_found(bitassay, device, profile):
    port = device(flip=FLIPS[:6], delay_s=2.0)
    path = profile(port, "[stop]\nbits = 400_000\n", link="rate_bps = 200_000\npace_bps = 200_000")
    got = bitassay("measure", path, "--json").json
    assert got["errors"] == 6
    assert got["bits_compared"] == 400_000
    assert got["delay"]["seconds"] == pytest.approx(2.0, abs=0.3)
    assert got["delay"]["bits"] == pytest.approx(400_000, rel=0.15)
    assert got["links_lost"] == 0


def test_a_long_loss_whose_split_lies_before_the_gap_by_chance_has_its_true_size(bitassay, device, profile):
    # The two bits before the loss agree with both places, so the split is put before them, and they came long
    # before the bits behind the loss were sent: what was possible when they came says nothing of those.
    port = device(deaf=[10_800, 31_000])
    keys = "rate_bps = 400_000\npace_bps = 400_000"
    got = bitassay("measure", profile(port, "[stop]\nbits = 480_000\n", link=keys), "--json").json
    assert got["slips"] == [{"bit": 86_398, "bits": -161_600, "modulo": None}]
    assert (got["errors"], got["bits_lost"], got["bits_inserted"]) == (0, 161_600, 0)


REQUIRED = "[requirement]\nber = 1e-5\n[stop]\nseconds = 12\n"


def test_a_device_deaf_for_half_of_the_run_gets_no_pass(bitassay, device, profile):
    port = device(deaf_s=[1.0, 3.0])
    path = profile(port, REQUIRED, link="rate_bps = 80_000\npace_bps = 80_000")
    done = bitassay("measure", path, "--json")
    assert done.json["verdict"] == "FAIL"
    assert done.status == 1
    assert done.json["bits_lost"] == pytest.approx(160_000, rel=0.4)


def test_a_device_deaf_from_the_beginning_gets_no_pass(bitassay, device, profile):
    port = device(deaf_s=[0.0, 3.0])
    path = profile(port, REQUIRED, link="rate_bps = 80_000\npace_bps = 80_000\ndrain_s = 1")
    done = bitassay("measure", path, "--json")
    assert done.json["verdict"] == "FAIL"
    assert done.json["bits_lost"] == pytest.approx(240_000, rel=0.4)


def test_a_device_that_loses_a_byte_a_second_gets_no_pass(bitassay, device, profile):
    port = device(lose_every=10_000)
    path = profile(port, REQUIRED, link="rate_bps = 80_000\npace_bps = 80_000")
    done = bitassay("measure", path, "--json")
    assert done.json["verdict"] == "FAIL"
    assert all(slip["bits"] == -8 for slip in done.json["slips"])
    assert done.json["errors"] == 0


def test_a_device_that_returns_nothing_ends_in_status_4(bitassay, device, profile):
    port = device(silent=True)
    path = profile(port, "[requirement]\nber = 1e-5\n[stop]\nseconds = 3\n", link="drain_s = 0.5")
    done = bitassay("measure", path, "--json")
    assert done.status == 4
    assert done.json["verdict"] == "UNDECIDED"
    assert len(done.err.strip().splitlines()) == 2


def test_a_device_that_answers_noise_is_never_aligned_and_ends_in_status_3(bitassay, device, profile):
    port = device(noise=True)
    path = profile(
        port, "[stop]\nseconds = 2\n", link="rate_bps = 400_000\npace_bps = 400_000\ndrain_s = 0.5"
    )
    done = bitassay("measure", path, "--json")
    assert done.status == 3
    assert done.json["bits_compared"] == 0
    assert done.json["bits_unaligned"] == done.json["bits_received"] > 0


def test_a_device_that_closes_half_way_ends_in_status_4_and_the_record_is_kept(
    bitassay, device, profile, tmp_path
):
    port = device(close_after=20_000)
    path = profile(port, "[stop]\nbits = 10_000_000\n", link="rate_bps = 800_000\npace_bps = 800_000")
    done = bitassay("measure", path)
    assert done.status == 4
    assert f"127.0.0.1:{port}" in done.err
    shown = bitassay("show", "last", "--json").json
    assert shown["status"] == "failed"
    assert shown["ended_by"] == "fault"
    assert shown["bits_compared"] >= 8 * 19_000
    assert shown["bits_lost"] == 0  # what was on its way when it closed says nothing of the device
    with sqlite3.connect(tmp_path / "results" / "runs.sqlite") as db:
        assert db.execute("select sum(errors), count(*) from second").fetchone()[1] >= 1


def test_a_refused_connection_says_where_and_keeps_a_record(bitassay, device, profile):
    done = bitassay("measure", profile(1, "[stop]\nbits = 1000\n"))
    assert done.status == 4
    assert "127.0.0.1:1" in done.err
    assert len(done.err.strip().splitlines()) <= 3
    assert bitassay("runs", "--json").json["runs"][0]["status"] == "failed"


def test_the_verdict_is_decided_at_the_plans_very_bit(bitassay, device, profile):
    port = device(flip=[5, 50_000])
    path = profile(port, "[requirement]\nber = 1e-5\naccept_errors = 2\n[stop]\nseconds = 20\n")
    done = bitassay("measure", path, "--json")
    got = done.json
    assert done.status == 0
    assert got["verdict"] == "PASS"
    assert got["bits_compared"] == got["plan"]["decided_at_bit"] == got["plan"]["bits"]
    assert got["errors"] == 2
    assert got["bounds"]["deciding"]["value"] <= 1e-5
    shown = bitassay("show", "last", "--json").json
    assert shown == got
    assert bitassay("verify", "last").status == 0


def test_losses_of_whole_periods_leave_no_slip_and_still_get_no_pass(bitassay, device, profile):
    """127 bytes are eight periods of PRBS7: the stream goes on as though nothing had been lost."""
    port = device(lose=[127, 12_700])
    link = "rate_bps = 400_000\npace_bps = 400_000\ndrain_s = 1"
    done = bitassay(
        "measure", profile(port, "[requirement]\nber = 1e-5\n", link=link, pattern="PRBS7"), "--json"
    )
    assert done.json["slips"] == []
    assert done.json["verdict"] == "FAIL"
    assert 1016 <= done.json["bits_lost"] <= done.json["bits_compared"] / 90
    assert bitassay("verify", "last").status == 0
