"""`bitassay lot`: serial numbers are asked for and checked, repeats refused, outliers pointed out."""

from __future__ import annotations

import numpy as np

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


def test_a_lot_goes_on_another_day_and_knows_what_was_measured(bitassay, tmp_path):
    (tmp_path / "lot.toml").write_text(PROFILE)
    bitassay("lot", "lot.toml", stdin=b"0031\n\n")
    done = bitassay("lot", "lot.toml", "--json", stdin=b"0031\n0040\n")
    assert done.status == 0
    assert [unit["serial_number"] for unit in done.json["units"]] == ["0031", "0040"]
    assert done.json["passed"] == done.json["judged"] == 2


def test_a_profile_without_a_lot_is_refused(bitassay, tmp_path):
    (tmp_path / "one.toml").write_text(PROFILE.split("[lot]")[0])
    done = bitassay("lot", "one.toml", stdin=b"0031\n")
    assert done.status == 2
    assert "[lot]" in done.err


def test_a_unit_with_far_more_errors_than_the_others_is_pointed_out():
    from harness.assess.lot import Unit, _marked

    rng = np.random.default_rng(1)
    units = [Unit(f"{n:04}", "", "PASS", int(rng.poisson(20)), 10**6, 2e-5, None, 1) for n in range(12)]
    odd = Unit("9999", "", "PASS", 80, 10**6, 8e-5, None, 1)
    assert "worse than the others" in " ".join(_marked(odd, [*units, odd]).remarks)
    assert not any(_marked(unit, units).remarks for unit in units)
