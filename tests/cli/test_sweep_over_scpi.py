"""A sweep on real parts: a SCPI attenuator and the device behind it in a process of their own, over TCP."""

from __future__ import annotations

import math
import time
from pathlib import Path

import pytest

from harness.assess.verify import differences
from harness.store import open_store

X0_DB = 40.0  # the device's attenuation at which Eb/N0 is 0 dB
VALUES = [30 + k * 0.5 for k in range(15)]
SWEEP = """
[sweep]
instrument = "attenuator"
values = { start = 30, stop = 37, step = 0.5 }
sensitivity_ber = 1e-3
[sweep.theory]
modulation = "bpsk"
value = 40
ebn0_db = 0
"""
SHORT = "[sweep]\ninstrument = 'attenuator'\nvalues = [32, 34, 36]\n"


def ber_at(attenuation_db: float) -> float:
    """The device's own curve, BPSK in Gaussian noise."""
    return 0.5 * math.erfc(10 ** ((X0_DB - attenuation_db) / 20))


def sensitivity_at(ber: float) -> float:
    low, high = 0.0, X0_DB
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if ber_at(middle) < ber else (low, middle)
    return low


def test_a_sweep_of_15_points_gives_the_devices_own_curve_and_ends_safe(bitassay, attenuated, tmp_path):
    device = attenuated(seed=3)
    (tmp_path / "sweep.toml").write_text(
        device.profile(SWEEP, stop="bits = 600_000", more="[requirement]\nber = 1e-3\nconfidence = 0.9999\n")
    )
    done = bitassay("sweep", "sweep.toml", "--json", timeout=180)
    assert done.status == 0, done.err
    got = done.json
    assert [p["values"]["attenuator"] for p in got["points"]] == VALUES
    for p in got["points"]:
        assert p["bits_sent"] == p["bits_received"] == p["bits_compared"] == 600_000
        # Bounds of 95 % on 15 points would miss in half of all sweeps: six standard deviations, under 1e-7.
        expected = 600_000 * ber_at(p["values"]["attenuator"])
        assert abs(p["errors"] - expected) <= 6 * expected**0.5 + 3
    found = got["sensitivity"]
    assert found["confidence"] == 0.9999
    assert found["lower"] <= sensitivity_at(1e-3) <= found["upper"]
    assert found["upper"] - found["lower"] < 0.6
    # What the textbook needs and the device has are the same: the device is simulated by that formula.
    assert abs(found["theory_distance_db"]) < 0.3
    settings = device.settings()
    assert all(0 <= value <= 80 for value in settings)
    assert settings[: len(VALUES)] == VALUES
    assert settings[-1] == 80
    assert bitassay("verify", "last").status == 0
    assert bitassay("show", "last", "--json").json == got


FAULTS = {
    "answers late": ({"late_s": 60, "fault_from": 1}, {"timeout_s": 3}, "no answer"),
    "answers no number": ({"answer": "OVERLOAD", "fault_from": 1}, {}, "OVERLOAD"),
    "reports an error": ({"refuse": '-222,"Data out of range"', "fault_from": 1}, {}, "Data out of range"),
    "reads back 1 dB off": ({"offset_db": 1.0, "fault_from": 1}, {}, "reads 35 dB"),
    "dies": ({"die_after": 1}, {}, "127.0.0.1"),
}


def wait_for_the_guardian(folder: Path) -> str:
    """Read its log once it has tried."""
    for _ in range(600):
        words = "".join(log.read_text() for log in folder.glob("guardian-*.log"))
        if "safe" in words.replace("1 instrument safe", ""):
            return words
        time.sleep(0.1)
    raise AssertionError("the guardian never tried")


@pytest.mark.parametrize("fault", FAULTS)
def test_an_attenuator_that_fails_in_mid_sweep_ends_it_and_what_was_measured_is_kept(
    bitassay, attenuated, tmp_path, fault
):
    options, keys, words = FAULTS[fault]
    device = attenuated(**options)
    (tmp_path / "sweep.toml").write_text(device.profile(SHORT, stop="bits = 80_000", **keys))
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 4, done.err
    got = done.json
    assert got["status"] == "failed"
    assert words in done.err
    said = done.err.strip().splitlines()
    assert said[0].startswith("caution: too little attenuation")
    assert len(said) == 3
    assert said[1].startswith("bitassay: attenuator: ")  # which one, not its address alone
    assert "Traceback" not in done.err
    first = got["points"][0]
    assert first["bits_compared"] == 80_000
    assert first["ended_by"] == "bits"
    assert device.settings()[-1] == 80 or fault == "dies"  # the safe value was the last one that was sent
    assert all(0 <= value <= 80 for value in device.settings())
    with open_store(tmp_path / "results" / "runs.sqlite") as store:
        record = store.load(got["run"])
    assert differences(record) == []
    if fault == "dies":  # nothing answers any more: it is said, and the guardian goes on trying
        assert any("could NOT be made safe" in e["text"] for p in got["points"] for e in p["events"])
        assert "not yet safe" in wait_for_the_guardian(tmp_path / "results")
        assert "attenuator could NOT be made safe" in said[1]
        assert "set it by hand" in said[2]


def test_a_sweep_that_went_well_and_left_its_attenuator_unsafe_is_no_success(bitassay, attenuated, tmp_path):
    device = attenuated(refuse='-350,"Queue overflow"', fault_from=3)
    (tmp_path / "sweep.toml").write_text(device.profile(SHORT, stop="bits = 80_000"))
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 4, done.err
    assert "attenuator could NOT be made safe" in done.err
    assert "set it by hand before anyone touches the bench" in done.err
    assert done.json["status"] == "completed"
    assert [p["bits_compared"] for p in done.json["points"]] == [80_000] * 3
    shown = bitassay("show", "last").out
    assert "attenuator could NOT be made safe" in shown.partition("\npoints")[0]
    assert bitassay("verify", "last").status == 0


def test_an_attenuator_that_is_slow_but_answers_in_time_is_waited_for(bitassay, attenuated, tmp_path):
    device = attenuated(late_s=0.3)
    (tmp_path / "sweep.toml").write_text(device.profile(SHORT, stop="bits = 80_000"))
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 0, done.err
    assert [p["bits_compared"] for p in done.json["points"]] == [80_000] * 3
    assert device.settings() == [32, 34, 36, 80]


def test_another_instrument_than_the_one_expected_is_never_sent_a_value(bitassay, attenuated, tmp_path):
    device = attenuated(identity="Fictional Bench,PSU-30,0007,2.0")
    (tmp_path / "sweep.toml").write_text(device.profile(SHORT))
    done = bitassay("sweep", "sweep.toml")
    assert done.status == 4
    assert "PSU-30" in done.err
    assert device.settings() == []


def test_the_same_profile_runs_against_pyvisa_sim(bitassay, attenuated, tmp_path):
    device = attenuated()
    there = Path(__file__).parents[1] / "drivers" / "instruments" / "sim.yaml"
    (tmp_path / "sweep.toml").write_text(device.profile(SHORT, limits=[0, 60], safe=60))
    done = bitassay(
        "sweep",
        "sweep.toml",
        "--json",
        "--set",
        f"instruments.attenuator.backend={there}@sim",
        "--set",
        "instruments.attenuator.resource=TCPIP::192.0.2.9::5025::SOCKET",
        timeout=120,
    )
    assert done.status == 0, done.err
    points = done.json["points"]
    assert [p["values"]["attenuator"] for p in points] == [32, 34, 36]
    assert all(p["errors"] == 0 for p in points)  # nobody turned the real attenuator
    assert device.settings() == []
