"""A point at which only noise comes back keeps the night for the others."""

from __future__ import annotations

import harness.bench.watch as watch
from harness.bench.run import BenchRun, Hooks
from harness.profile import parse_profile
from harness.store import open_store

SWEEP = """
[link]
driver = "loopback"
pace_bps = 400_000
[[link.channel]]
model = "awgn"
modulation = "qpsk"
ebn0_db = 32
attenuation_db = 0
[instruments.att]
driver = "simulated"
knob = "attenuation_db"
limits = [0, 80]
safe = 80
[sweep]
instrument = "att"
values = [80, 20]
[stop]
seconds = 40
bits = 300_000
"""


def swept(tmp_path, text: str):
    with open_store(str(tmp_path / "runs.sqlite"), create=True) as store:
        return BenchRun(parse_profile(text), store, Hooks(), lock=tmp_path, command="sweep").run().assessment


def test_it_ends_long_before_its_time_and_the_next_point_is_whole(tmp_path, monkeypatch):
    monkeypatch.setattr(watch, "HOPELESS_S", 0.5)
    noise, good = swept(tmp_path, SWEEP.replace("300_000", "1_200_000")).points[:2]
    assert (noise.tally.compared, noise.ended_by) == (0, "seconds")
    assert 0 < noise.tally.received < 1_000_000
    assert [e.text for e in noise.events if e.kind == "given_up"] == [
        "nothing was aligned for 0 s: the point ends"
    ]
    assert good.tally.compared == 1_200_000


def test_a_point_with_a_plan_has_all_its_time(tmp_path, monkeypatch):
    """The device may wake up, and a verdict waits for it."""
    monkeypatch.setattr(watch, "HOPELESS_S", 0.5)
    required = SWEEP + "[requirement]\nber = 1e-3\nat = { att = 80 }\n"
    noise = swept(tmp_path, required).points[0]
    assert noise.ended_by == "bits"
    assert noise.tally.received >= 299_000
