"""What a well-formed profile comes to: values, types, defaults, text kept as given."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path

import pytest

from harness.profile import ProfileError, load_profile, parse_profile

EVERYTHING = """\
format = 1
title = "Wader-9 acceptance, 48 kbit/s"

[device]
model = "Wader-9"
serial_number = "0031"
firmware = 1.20
batch = 31
tested = true
made = 2026-05-01

[link]
driver = "tcp"
host = "127.0.0.1"
port = 5310
topology = "far-end-loop"
rate_bps = 48_000
pace_bps = 48_000
max_in_flight_bits = 96_000
drain_s = 5

[[link.before]]
send = "AT+DATA=1\\r"
expect = "OK"
timeout_s = 2

[pattern]
name = "prbs15"
bit_order = "msb"

[requirement]
ber = 1e-6
confidence = 0.95
plan = "sequential"
accept_errors = 3
margin = 2.0
producer_risk = 0.05
max_slips = 0
max_unaligned_ratio = 0.001
lost_link = "undecided"

[stop]
bits = 100_000_000
seconds = 1800
errors = 1000
"""


def test_every_documented_key_is_read() -> None:
    profile = parse_profile(EVERYTHING)
    link = profile.need_link()
    assert (link.driver, link.topology, link.rate_bps, link.pace_bps) == ("tcp", "far-end-loop", 48e3, 48e3)
    assert (link.max_in_flight_bits, link.drain_s) == (96_000, 5.0)
    assert link.options.model_dump()["port"] == 5310
    assert [(s.send, s.expect, s.timeout_s) for s in link.before] == [("AT+DATA=1\r", "OK", 2.0)]
    assert (profile.pattern.name, profile.pattern.bit_order) == ("prbs15", "msb")
    requirement = profile.requirement
    assert requirement is not None
    assert (requirement.ber, requirement.plan, requirement.accept_errors) == (1e-6, "sequential", 3)
    assert (requirement.max_slips, requirement.lost_link) == (0, "undecided")
    assert (profile.stop.bits, profile.stop.seconds, profile.stop.errors) == (100_000_000, 1800.0, 1000)


def test_device_values_are_text_as_they_were_written() -> None:
    assert parse_profile(EVERYTHING).device == {
        "model": "Wader-9",
        "serial_number": "0031",
        "firmware": "1.20",
        "batch": "31",
        "tested": "true",
        "made": "2026-05-01",
    }


def test_defaults_are_those_that_the_documents_state() -> None:
    profile = parse_profile('[link]\ndriver = "loopback"\n[requirement]\nber = 1e-6\n')
    requirement = profile.requirement
    assert requirement is not None
    assert (profile.pattern.name, profile.pattern.bit_order, profile.format) == ("PRBS15", "lsb", 1)
    assert (requirement.plan, requirement.accept_errors, requirement.confidence) == ("fixed", 0, 0.95)
    assert (requirement.max_slips, requirement.max_unaligned_ratio) == (0, 0.001)
    assert (requirement.lost_link, requirement.clustered, requirement.count) == ("fail", "pass", "bits")
    assert (requirement.margin, requirement.producer_risk) == (2.0, 0.05)
    assert profile.stop.bits is profile.stop.seconds is profile.stop.errors is None
    assert profile.need_link().pace_bps is None


def test_a_single_channel_section_is_a_list_of_one() -> None:
    one = '[link]\ndriver = "loopback"\n[link.channel]\nmodel = "independent"\nber = 1e-6\nseed = 7\n'
    assert (
        parse_profile(one).resolved()
        == parse_profile(one.replace("[link.channel]", "[[link.channel]]")).resolved()
    )


def test_topology_left_out_follows_from_the_driver() -> None:
    capture = parse_profile('[link]\ndriver = "capture"\npath = "received.bin"\n')
    assert capture.need_link().topology == "one-way"
    two = (
        '[link]\ndriver = "tcp"\nhost = "h"\nport = 1\n[link.receive]\ndriver = "tcp"\nhost = "h"\nport = 2\n'
    )
    assert parse_profile(two).need_link().topology == "two-port"
    assert (
        parse_profile('[link]\ndriver = "tcp"\nhost = "h"\nport = 1\n').need_link().topology == "far-end-loop"
    )


def test_a_whole_number_may_be_written_as_a_float_and_a_fraction_may_not() -> None:
    assert parse_profile('[link]\ndriver = "loopback"\n[stop]\nbits = 1e8\n').stop.bits == 100_000_000
    with pytest.raises(ProfileError, match=r"stop.bits must be a whole number, not 1\.5"):
        parse_profile('[link]\ndriver = "loopback"\n[stop]\nbits = 1.5\n')


def test_resolved_is_json_and_reads_back_to_the_same_profile(sweep_text: str) -> None:
    for text in (EVERYTHING, sweep_text):
        resolved = parse_profile(text).resolved()
        assert json.loads(json.dumps(resolved, allow_nan=False)) == resolved
        assert parse_profile(_toml(resolved)).resolved() == resolved


def _toml(value: dict[str, object]) -> str:
    """Write resolved settings as TOML, inline throughout, keys without a value left out."""

    def inline(item: object) -> str:
        if isinstance(item, dict):
            return "{" + ", ".join(f"{k} = {inline(v)}" for k, v in item.items() if v is not None) + "}"
        if isinstance(item, list):
            return "[" + ", ".join(inline(v) for v in item) + "]"
        return json.dumps(item)

    return "\n".join(f"{k} = {inline(v)}" for k, v in value.items() if v is not None)


def test_text_and_digest_are_those_of_the_file(tmp_path: Path) -> None:
    path = tmp_path / "p.toml"
    data = ("\ufeff" + EVERYTHING.replace("\n", "\r\n")).encode()
    path.write_bytes(data)
    profile = load_profile(path, ["stop.seconds=60"])
    assert profile.text.encode() == data
    assert profile.digest == hashlib.sha256(data).hexdigest()
    assert profile.overrides == ("stop.seconds=60",)
    assert profile.name == str(path)


def test_a_profile_is_frozen() -> None:
    with pytest.raises(ValueError, match="frozen"):
        parse_profile(EVERYTHING).title = "another"  # type: ignore[misc]


def test_a_pattern_from_a_file_is_read_and_a_missing_one_is_named(tmp_path: Path) -> None:
    (tmp_path / "reference.bin").write_bytes(bytes(range(200)))
    text = '[link]\ndriver = "loopback"\n[pattern]\nname = "file:{}"\n'
    parse_profile(text.format(tmp_path / "reference.bin"))
    with pytest.raises(ProfileError, match=r"missing\.bin cannot be read"):
        parse_profile(text.format(tmp_path / "missing.bin"))
