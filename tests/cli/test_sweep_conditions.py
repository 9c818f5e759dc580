"""What a sweep does between its points: settling, lost links, references, levels, limits and calibration."""

from __future__ import annotations

SWEEP = "[sweep]\ninstrument = 'attenuator'\n"


def test_only_bits_sent_after_settling_count(bitassay, attenuated, tmp_path):
    # The device follows the attenuator late, and gives every bit back late; at 20 dB it makes no error.
    device = attenuated(lag_s=0.4, delay_s=0.3)
    sweep = SWEEP + "values = [20, 38, 20, 38, 20]\nsettle_s = 1.2\n"
    (tmp_path / "sweep.toml").write_text(device.profile(sweep, stop="bits = 80_000"))
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 0, done.err
    points = done.json["points"]
    assert [p["bits_compared"] for p in points] == [80_000] * 5
    assert [p["errors"] for p in points if p["values"]["attenuator"] == 20] == [0, 0, 0]
    assert all(p["errors"] > 1000 for p in points if p["values"]["attenuator"] == 38)


def test_a_lost_link_at_a_point_is_a_result_and_the_sweep_goes_on(bitassay, attenuated, tmp_path):
    device = attenuated(deaf_above=0.2)
    sweep = SWEEP + "values = [20, 60, 20]\nsensitivity_ber = 1e-3\n"
    (tmp_path / "sweep.toml").write_text(device.profile(sweep, stop="bits = 400_000\nseconds = 4"))
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 0, done.err
    first, lost, last = done.json["points"]
    assert lost["bits_received"] == 0
    assert lost["ended_by"] in ("seconds", "bits")
    assert lost["ber"] is None
    for point in (first, last):
        assert (point["bits_compared"], point["errors"], point["slips"]) == (400_000, 0, [])
    assert done.json["status"] == "completed"
    assert bitassay("verify", "last").status == 0


def test_a_device_that_gets_worse_is_seen_at_the_reference_and_on_the_way_back(
    bitassay, attenuated, tmp_path
):
    device = attenuated(drift_db=0.5)
    sweep = SWEEP + (
        "values = [33, 34]\nreturn_trip = true\nreference = 35\nreference_every = 2\nsensitivity_ber = 1e-2\n"
    )
    level = """
[level]
instrument = "attenuator"
source_dbm = 0
source_uncertainty_db = 0.2
damage_dbm = -20
[correction]
losses = [{ name = "cable", loss_db = 2.0, uncertainty_db = 0.3, due = "2020-01-31" }]
"""
    (tmp_path / "sweep.toml").write_text(device.profile(sweep, stop="bits = 160_000", more=level))
    done = bitassay("sweep", "sweep.toml", timeout=120)
    assert done.status == 0, done.err
    assert "caution:" in done.err
    assert "damage level is stated as -20 dBm" in done.err
    assert "the calibration of cable (loss) ran out on 2020-01-31" in done.out
    assert "the reference point at 35 drifted" in done.out
    assert "2 of 2 values, up against down, show hysteresis, most at 33: BER " in done.out
    got = bitassay("show", "last", "--json").json
    assert any("ran out on 2020-01-31" in remark for p in got["points"] for remark in p["remarks"])
    assert len(got["curve_remarks"]) >= 2
    assert [p["values"]["attenuator"] for p in got["points"]] == [35, 33, 34, 35, 34, 33, 35]
    found = got["sensitivity"]
    if found["value"] is not None:  # the points may be too scattered for a curve
        assert abs(found["level_dbm"] - (-2.0 - found["value"])) < 1e-6
        assert abs(found["level_uncertainty_db"] - (0.2**2 + 0.3**2) ** 0.5) < 1e-9


def test_a_point_that_would_damage_the_receiver_is_never_set(bitassay, attenuated, tmp_path):
    device = attenuated(start_db=50)
    level = "[level]\ninstrument = 'attenuator'\nsource_dbm = 10\ndamage_dbm = -20\n"
    (tmp_path / "sweep.toml").write_text(
        device.profile(SWEEP + "values = [40, 28]\n", stop="bits = 80_000", more=level)
    )
    for override in ("level.damage_dbm=0", "level.source_dbm=0", "instruments.attenuator.limits=[-10, 80]"):
        refused = bitassay("sweep", "sweep.toml", "--set", override)
        assert refused.status == 2
    assert device.settings() == []
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 4
    assert "would reach its damage level of -20 dBm; nothing was set" in done.err
    assert device.settings() == [40, 80]


def test_a_search_over_scpi_finds_the_devices_own_crossing(bitassay, attenuated, tmp_path):
    device = attenuated()
    search = "[search]\ninstrument = 'attenuator'\nlow = 25\nhigh = 45\nber = 1e-3\nconfidence = 0.9999\n"
    (tmp_path / "search.toml").write_text(device.profile(search + "resolution = 1\n", stop="seconds = 60"))
    done = bitassay("sweep", "search.toml", "--json", timeout=180)
    assert done.status == 0, done.err
    got = done.json
    found = got["sensitivity"]
    assert found["lower"] <= 33.21 <= found["upper"]  # BPSK needs 6.79 dB for 1e-3
    assert found["upper"] - found["lower"] <= 1.0
    assert found["bits"] == sum(p["bits_received"] for p in got["points"])
    sure = found["without_a_curve"]
    assert sure["under"] is None or sure["under"] <= 33.21
    assert sure["over"] is None or sure["over"] >= 33.21
    assert any(e["kind"] == "search" for e in got["events"])
    assert all(25 <= value <= 45 for value in device.settings()[:-1])
    assert device.settings()[-1] == 80
    assert bitassay("verify", "last").status == 0
    shown = bitassay("show", "last")
    assert "the search ends after" in shown.out
    paper = bitassay("report", "last", "--text").out
    assert ("without any curve, levels as set" in paper) == (
        sure["under"] is not None or sure["over"] is not None
    )
    refused = bitassay("measure", "search.toml")
    assert refused.status == 2
    assert "bitassay sweep" in refused.err


def test_what_stands_where_it_should_is_not_set_again_and_what_fell_back_is(bitassay, attenuated, tmp_path):
    """The slow axis is set when it changes only: an oven would have to settle at each step of the attenuator."""
    fast = attenuated()
    slow = attenuated(falls_back_s=0.7, falls_back_at=[2], start_db=7)
    axes = """
[instruments.slow]
driver = "scpi"
resource = "TCPIP::127.0.0.1::{port}::SOCKET"
backend = "@py"
quantity = "attenuation"
unit = "dB"
limits = [0, 80]
safe = 80
set = "ATT {{value:.1f}}"
read = "ATT?"
tolerance = 0.05
[sweep]
sensitivity_ber = 1e-2
[[sweep.axes]]
instrument = "slow"
values = [1, 2]
[[sweep.axes]]
instrument = "attenuator"
values = [32, 34, 36]
"""
    text = fast.profile(axes.format(port=slow.scpi_port), stop="seconds = 1")
    (tmp_path / "sweep.toml").write_text(text)
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 0, done.err
    assert fast.settings() == [32, 34, 36, 32, 34, 36, 80]
    assert slow.settings() == [1, 2, 2, 80]
    moved = [any("did not stay" in remark for remark in p["remarks"]) for p in done.json["points"]]
    assert moved == [False, False, False, True, False, False]
    assert all(p["readings"]["slow"] == p["values"]["slow"] for p in done.json["points"] if "readings" in p)
