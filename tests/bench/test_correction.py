"""Levels at the device's port: losses, calibration, uncertainty, and limits that nothing gets past."""

from __future__ import annotations

import datetime
import math
import threading

import pytest

from drivers.contract import OutOfLimits
from drivers.registry import link_class
from harness.bench.check.check import Check
from harness.bench.conditions import Conditions, caution
from harness.bench.correction import PortLevel
from harness.profile import ProfileError, parse_profile

BENCH = """
[link]
driver = "loopback"
rate_bps = 48_000
[[link.channel]]
model = "awgn"
modulation = "qpsk"
ebn0_db = 30
[stop]
bits = 1e5
[instruments.attenuator]
driver = "simulated"
knob = "attenuation_db"
limits = [0, 60]
safe = 60
[sweep]
instrument = "attenuator"
values = [20, 30]
"""
LOSSES = """
[level]
instrument = "attenuator"
source_dbm = 10
source_uncertainty_db = 0.3
[correction]
losses = [
  { name = "cable to the box", loss_db = 1.5, uncertainty_db = 0.4, due = "2026-03-01" },
  { name = "pad", loss_db = 10 },
]
[correction.tables.attenuator]
certificate = "invented 17"
due = "2027-01-01"
points = [
  { value = 0, actual = 0.2, uncertainty = 0.1 },
  { value = 20, actual = 20.6, uncertainty = 0.2 },
  { value = 40, actual = 40.0, uncertainty = 0.1 },
]
"""


def level_of(text: str, *overrides: str) -> PortLevel:
    return PortLevel.of(parse_profile(BENCH + text, overrides))


def test_losses_and_the_calibration_table_give_the_level_with_its_uncertainty():
    level = level_of(LOSSES)
    port = level.at({"attenuator": 20})
    assert port is not None
    assert port.dbm == pytest.approx(10 - 20.6 - 11.5)
    assert port.uncertainty_db == pytest.approx(math.sqrt(0.3**2 + 0.4**2 + 0.2**2))
    between = level.at({"attenuator": 30})
    assert between is not None
    assert between.dbm == pytest.approx(10 - 30.3 - 11.5)  # half of the correction of 0.6 at 20
    beyond = level.at({"attenuator": 60})
    assert beyond is not None
    assert beyond.dbm == pytest.approx(10 - 60.0 - 11.5)
    assert level.at({}) is None


def test_what_is_overdue_is_named_and_the_rest_is_not():
    level = level_of(LOSSES)
    assert level.overdue(datetime.date(2026, 3, 1)) == []
    assert level.overdue(datetime.date(2026, 3, 2)) == [
        "the calibration of cable to the box (loss) ran out on 2026-03-01"
    ]
    assert len(level.overdue(datetime.date(2027, 1, 2))) == 2


def test_a_damage_level_is_kept_to_with_its_uncertainty():
    level = level_of(LOSSES.replace("[correction]", "damage_dbm = -22\n[correction]", 1))
    with pytest.raises(OutOfLimits, match="damage level of -22 dBm"):
        level.check({"attenuator": 20})  # -22.1 dBm, ± 1.1 dB
    level.check({"attenuator": 30})
    with pytest.raises(OutOfLimits, match="cannot be worked out"):
        level.check({})


def test_a_permitted_level_is_kept_to_with_its_uncertainty():
    level = level_of(LOSSES.replace("[correction]", "permitted_dbm = 10.5\n[correction]", 1))
    with pytest.raises(OutOfLimits, match=r"permitted 10\.5 dBm"):
        level.check({"attenuator": 30})
    level_of(LOSSES.replace("[correction]", "permitted_dbm = 10.7\n[correction]", 1)).check({})
    with pytest.raises(OutOfLimits, match="not known"):
        level_of("[level]\npermitted_dbm = 10\n").check({"attenuator": 30})


@pytest.mark.parametrize(
    "override",
    [
        "level.damage_dbm=0",
        "level.damage_dbm=nan",
        "level.source_dbm=-30",
        "level.source_uncertainty_db=0",
        "level.instrument=other",
        'correction.losses=[{ name = "pad", loss_db = 60 }]',
        "correction.tables.attenuator.points=[{ value = 0, actual = 60 }]",
        "instruments.attenuator.limits=[-10, 60]",
        "instruments.attenuator.knob=ebn0_db",
        "instruments.attenuator.unit=dBm",
        "instruments.attenuator.quantity=level",
    ],
)
def test_no_override_gets_past_a_power_limit(override):
    text = BENCH + LOSSES.replace("[correction]", "damage_dbm = -22\n[correction]", 1)
    parse_profile(text, ["level.damage_dbm=-25"])
    with pytest.raises(ProfileError):
        parse_profile(text, [override])


def test_a_source_that_was_not_stated_cannot_be_made_up_by_an_override():
    with pytest.raises(ProfileError, match="not to be overridden"):
        parse_profile(BENCH + "[level]\ndamage_dbm = 0\n", ["level.source_dbm=-90"])


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (('knob = "attenuation_db"', 'knob = "ebn0_db"'), "sets ebn0 in dB"),
        (('knob = "attenuation_db"', 'knob = "ebn0_db"\nquantity = "gain"\nunit = "dB"'), "sets gain in dB"),
        (('knob = "attenuation_db"', 'knob = "x"\nquantity = "level"\nunit = "W"'), "sets level in W"),
        (('knob = "attenuation_db"', 'knob = "x"\nquantity = "level"\nunit = "dBm"'), "in dBm itself"),
    ],
)
def test_a_level_is_reckoned_only_from_what_takes_away_decibels_or_is_in_dbm(change, words):
    with pytest.raises(ProfileError, match=words):
        parse_profile(BENCH.replace(*change) + LOSSES)


def conditions_of(text: str, tmp_path) -> Conditions:
    profile = parse_profile(BENCH + text)
    link = profile.need_link()
    made = link_class(link.driver)(link.options, link.rate_bps)
    return Conditions(profile, made, tmp_path / "guardian.log", threading.Event())


def test_a_safe_value_that_is_not_safe_is_refused_before_anything_is_opened(tmp_path):
    text = LOSSES.replace("[correction]", "damage_dbm = -62\n[correction]", 1)
    with (
        pytest.raises(OutOfLimits, match="the safe value 60 dB of attenuator is not safe"),
        conditions_of(text, tmp_path).opened(),
    ):
        raise AssertionError("it was opened")


def test_a_value_that_would_damage_is_never_set(tmp_path):
    conditions = conditions_of(LOSSES.replace("[correction]", "damage_dbm = -22\n[correction]", 1), tmp_path)
    with conditions.opened():
        conditions.apply({"attenuator": 30})
        with pytest.raises(OutOfLimits, match="nothing was set"):
            conditions.apply({"attenuator": 20})
        assert conditions.instruments["attenuator"].read() == 30


def test_a_caution_is_said_where_power_flows_and_not_where_all_is_simulated():
    assert caution(parse_profile(BENCH)) == ""
    stated = caution(parse_profile(BENCH + "[level]\nsource_dbm = 0\ndamage_dbm = 20\n"))
    assert "damage level is stated as 20 dBm" in stated
    assert "licence and local rules" in stated


def test_the_check_says_the_caution_and_what_is_overdue_before_it_touches_anything(tmp_path):
    text = LOSSES.replace("[correction]", "damage_dbm = 20\n[correction]", 1).replace(
        "2026-03-01", "2020-03-01"
    )
    report = Check(parse_profile(BENCH + text), tmp_path, threading.Event()).run()
    said = {finding.step: finding.text for finding in report.findings if finding.outcome == "note"}
    assert "damage level is stated as 20 dBm" in said["caution"]
    assert said["calibration"] == "the calibration of cable to the box (loss) ran out on 2020-03-01"
