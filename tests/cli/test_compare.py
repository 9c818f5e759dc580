"""`bitassay compare` on sweeps: point by point, at one setting where it is named, and in lines one can read."""

from __future__ import annotations

import re

PROFILE = """
title = "Wader-9 sweep, invented"
[device]
model = "Wader-9"
serial_number = "0031"
[link]
driver = "loopback"
rate_bps = 500_000
[[link.channel]]
model = "awgn"
modulation = "qpsk"
ebn0_db = 32
attenuation_db = 0
seed = {seed}
[instruments.attenuator]
driver = "simulated"
knob = "attenuation_db"
limits = [0, 60]
safe = 60
[sweep]
instrument = "attenuator"
values = {values}
sensitivity_ber = 1e-3
[stop]
bits = 200_000
"""


def test_sweeps_are_compared_point_by_point(bitassay, tmp_path):
    for name, values, seed in (("a", "[24, 26, 28]", 3), ("b", "[26, 28, 29]", 4)):
        (tmp_path / f"{name}.toml").write_text(PROFILE.format(values=values, seed=seed))
        assert bitassay("sweep", f"{name}.toml", "--quiet").status == 0
    b, a = (run["run"] for run in bitassay("runs", "--json").json["runs"])
    done = bitassay("compare", a, b)
    assert done.status == 0, done.err
    assert re.search(r"^attenuator 26 +\d\S*e-\d", done.out, re.M)
    assert re.search(r"^attenuator 28 ", done.out, re.M)
    assert not re.search(r"^attenuator (24|29) ", done.out, re.M)
    assert "note: 1 point of A without a match in the other run" in done.out
    assert re.search(r"^sensitivity at BER 1e-3: \d\d\.\d\d \(", done.out, re.M)
    assert re.search(r"^conditions differ: sweep\.", done.out, re.M)
    assert "{" not in done.out
    points = bitassay("compare", a, b, "--json").json["points"]
    assert [p["values"] for p in points] == [{"attenuator": 26.0}, {"attenuator": 28.0}]
    one = bitassay("compare", a, b, "--at", "attenuator=28", "--json").json
    assert one["errors"] is not None
    assert len(one["points"]) == 1


def test_a_sweep_against_one_point_asks_for_the_setting(bitassay, tmp_path):
    (tmp_path / "a.toml").write_text(PROFILE.format(values="[26, 28]", seed=3))
    plain = PROFILE.format(values="[26]", seed=3).split("[instruments")[0] + "[stop]\nbits = 200_000\n"
    (tmp_path / "p.toml").write_text(plain.replace("attenuation_db = 0", "attenuation_db = 28"))
    assert bitassay("sweep", "a.toml", "--quiet").status == 0
    assert bitassay("measure", "p.toml", "--quiet").status == 0
    p, a = (run["run"] for run in bitassay("runs", "--json").json["runs"])
    done = bitassay("compare", a, p)
    assert (done.status, done.out) == (2, "")
    assert "--at attenuator=26" in done.err
    done = bitassay("compare", a, p, "--at", "attenuator=28")
    assert done.status == 0
    assert "at attenuator 28: " in done.out
    assert bitassay("compare", a, p, "--at", "attenuator").status == 2


def test_a_run_is_not_compared_with_itself(bitassay, tmp_path):
    plain = PROFILE.format(values="[26]", seed=3).split("[instruments")[0] + "[stop]\nbits = 200_000\n"
    (tmp_path / "p.toml").write_text(plain)
    assert bitassay("measure", "p.toml", "--quiet").status == 0
    done = bitassay("compare", "last", "last")
    assert (done.status, done.out) == (2, "")
    assert "the same run" in done.err
    again = bitassay("resume", "last")
    assert again.status == 0
    assert "nothing to go on with" in again.err
