"""Two ports: one direction, the other, both at once, and a link that went away and came back."""

from __future__ import annotations

from pathlib import Path


def profile(tmp_path: Path, ports: list[int], keys: str, rest: str) -> Path:
    path = tmp_path / "two.toml"
    path.write_text(
        f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {ports[0]}\n{keys}\n'
        f'[link.receive]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {ports[1]}\n{rest}'
    )
    return path


def test_one_direction_is_counted_exactly(bitassay, bridge, tmp_path):
    ports = bridge(flip=[9, 4_000, 70_000], flip_back=[1])
    done = bitassay("measure", profile(tmp_path, ports, "", "[stop]\nbits = 800_000\n"), "--json")
    assert done.status == 0, done.err
    got = done.json
    assert (got["errors"], got["bits_compared"]) == (3, 800_000)


def test_the_other_direction_is_counted_exactly(bitassay, bridge, tmp_path):
    ports = bridge(flip=[9, 4_000, 70_000], flip_back=[1])
    path = profile(tmp_path, ports, 'direction = "reverse"', "[stop]\nbits = 800_000\n")
    assert bitassay("measure", path, "--json").json["errors"] == 1


def test_both_directions_at_once_have_tallies_of_their_own(bitassay, bridge, tmp_path):
    ports = bridge(flip=[9, 4_000, 70_000], flip_back=[77])
    rest = (
        '[pattern]\nname = "PRBS15"\n[pattern.reverse]\nname = "PRBS23"\n'
        "[requirement]\nber = 1e-5\naccept_errors = 3\n"
    )
    keys = "duplex = true\nrate_bps = 400_000\npace_bps = 400_000"
    done = bitassay("measure", profile(tmp_path, ports, keys, rest), "--json")
    assert done.status == 0, done.err
    there, back = done.json["points"]
    assert (there["errors"], back["errors"]) == (3, 1)
    assert (there["pattern"], back["pattern"]) == ("PRBS15", "PRBS23")
    assert there["verdict"] == back["verdict"] == done.json["verdict"] == "PASS"
    assert bitassay("verify", "last").status == 0


def test_one_bad_direction_fails_the_run(bitassay, bridge, tmp_path):
    ports = bridge(flip_back=list(range(1000, 300_000, 1000)))
    rest = '[pattern.reverse]\nname = "PRBS23"\n[requirement]\nber = 1e-4\naccept_errors = 1\n[stop]\nseconds = 20\n'
    keys = "duplex = true\nrate_bps = 400_000\npace_bps = 400_000"
    done = bitassay("measure", profile(tmp_path, ports, keys, rest), "--json")
    assert done.status == 1
    assert [point["verdict"] for point in done.json["points"]] == ["PASS", "FAIL"]
    assert "reverse direction" in done.json["reasons"][0]


def test_a_link_that_went_away_is_waited_for_and_the_gap_recorded(bitassay, bridge, tmp_path):
    ports = bridge(drop_after=60_000, away_s=1.0)
    keys = "rate_bps = 400_000\npace_bps = 400_000\nreconnect_s = 15\ndrain_s = 1"
    done = bitassay("measure", profile(tmp_path, ports, keys, "[stop]\nbits = 1_600_000\n"), "--json")
    assert done.status == 0, done.err
    got = done.json
    kinds = [event["kind"] for event in got["events"]]
    assert "link_gone" in kinds
    assert "link_returned" in kinds
    assert got["status"] == "completed"
    assert got["errors"] == 0
    assert got["bits_compared"] > 1_000_000
    # What was on its way when the link went is lost, and counted once.
    assert got["bits_sent"] == got["bits_received"] + got["bits_lost"] - got["bits_inserted"]
    assert bitassay("verify", "last").status == 0


def test_a_link_that_does_not_come_back_is_a_fault(bitassay, bridge, tmp_path):
    ports = bridge(drop_after=60_000, away_s=60)
    keys = "rate_bps = 400_000\npace_bps = 400_000\nreconnect_s = 1\ndrain_s = 1"
    done = bitassay("measure", profile(tmp_path, ports, keys, "[stop]\nbits = 1_600_000\n"), "--json")
    assert done.status == 4
    assert done.json["status"] == "failed"
    assert done.json["bits_compared"] > 300_000
