"""The bytes of a file have come at the rate that is stated for them, however fast the file is read."""

from __future__ import annotations

import numpy as np
import pytest

from harness.bench.playback import SECOND_NS, Playback, PlayedArrivals
from harness.signal.patterns import parse_pattern

STARTED = 123_456_789


@pytest.mark.parametrize("rate_bps", [3.0, 33.0, 1_000.0, 7_001.0, 48_000.0, 92_160.0, 1e9, 2.048e6 / 3])
@pytest.mark.parametrize("at_hand", [1, 777, 262_144])
def test_no_piece_straddles_a_second_and_each_byte_lies_in_the_second_in_which_it_began(rate_bps, at_hand):
    playback = Playback(STARTED, rate_bps)
    taken = before = 0
    for _ in range(2_000):
        count, arrived_ns = playback.piece(8 * taken, at_hand)
        assert 1 <= count <= at_hand
        second = (arrived_ns - STARTED) // SECOND_NS
        assert second >= before
        for byte in (taken, taken + count - 1):
            began = byte * 8 / rate_bps
            assert second == int(began) or began == pytest.approx(round(began), abs=1e-9)
        taken, before = taken + count, second


def test_a_bit_has_its_own_time_within_a_large_piece():
    arrivals = PlayedArrivals(STARTED, Playback(STARTED, 48_000.0))
    arrivals.came(48_000, STARTED + SECOND_NS - 1, b"x" * 6_000)
    assert arrivals.when(0) == STARTED
    assert arrivals.when(12_000) == STARTED + SECOND_NS // 4


def test_a_capture_is_measured_in_the_seconds_of_its_rate_and_stops_to_the_bit(bitassay, tmp_path):
    data = np.zeros(60_000, dtype=np.uint8)
    parse_pattern("PRBS15", bit_order="lsb").reader(0, "lsb").read_into(data)
    data[20_000] ^= 1  # in the fourth second
    data[20_600] ^= 8
    (tmp_path / "got.bin").write_bytes(data.tobytes())
    (tmp_path / "p.toml").write_text('[link]\ndriver = "capture"\npath = "got.bin"\nrate_bps = 48_000\n')
    whole = bitassay("measure", "p.toml", "--json").json
    assert (whole["seconds"], whole["ended_by"], whole["errors"]) == (10.0, "end_of_data", 2)
    g821 = whole["availability"][0]
    assert (g821["seconds"], g821["errored"], g821["partial"]) == (10, 1, 0)
    limits = ["--set", "stop.bits=400_000", "--set", "stop.seconds=2.5"]
    cut = bitassay("measure", "p.toml", *limits, "--json").json
    assert (cut["bits_received"], cut["seconds"], cut["ended_by"]) == (120_000, 2.5, "seconds")
    (tmp_path / "p.toml").write_text('[link]\ndriver = "capture"\npath = "got.bin"\n')
    untimed = bitassay("measure", "p.toml", "--json").json
    assert (untimed["errors"], untimed["seconds"], untimed["availability"]) == (2, None, [])
    assert bitassay("verify", "last").status == 0
