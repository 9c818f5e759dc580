"""While nothing is measured it is said why, and the store hears that the run lives."""

from __future__ import annotations

import threading
import time

import harness.bench.pausing as pausing
from harness.bench.pausing import Pausing
from harness.bench.run import BenchRun, Hooks
from harness.profile import load_profile
from harness.store import open_store


def test_a_long_setting_says_what_it_is_and_gives_signs_of_life(monkeypatch):
    """An oven that settles for an hour must not let other hosts take the run to be cut."""
    monkeypatch.setattr(pausing, "SIGN_OF_LIFE_S", 0.01)
    said: list[str] = []
    alive = threading.Semaphore(0)
    with Pausing(said.append, alive.release, threading.Event()).during("being set: oven 60"):
        for _ in range(3):
            assert alive.acquire(timeout=30)
        assert said == ["being set: oven 60"]
    assert said == ["being set: oven 60", ""]


def test_waiting_says_until_when_and_ends_when_the_run_is_to_end():
    said: list[str] = []
    cancel = threading.Event()
    cancel.set()
    began = time.monotonic()
    pause = Pausing(said.append, lambda: None, cancel)
    pause.wait(3600, "instruments and device warm up")
    assert time.monotonic() - began < 600
    assert len(said) == 2
    assert said[0].startswith("instruments and device warm up until ")
    pause.wait(0, "nothing")
    assert len(said) == 2


def test_what_fails_while_something_is_set_is_raised_and_the_pause_is_over():
    said: list[str] = []
    try:
        with Pausing(said.append, lambda: None, threading.Event()).during("being set: oven 60"):
            raise ValueError
    except ValueError:
        assert said[-1] == ""
    else:
        raise AssertionError


def test_a_sweep_tells_its_warm_up_its_settings_and_its_settling(tmp_path):
    (tmp_path / "sweep.toml").write_text(
        """
[link]
driver = "loopback"
[[link.channel]]
model = "awgn"
modulation = "qpsk"
ebn0_db = 32
attenuation_db = 0
[instruments.att]
driver = "simulated"
knob = "attenuation_db"
limits = [0, 60]
safe = 60
[sweep]
instrument = "att"
values = [20, 21]
warm_up_s = 0.05
settle_s = 0.02
[stop]
bits = 8_000
"""
    )
    said: list[str] = []
    with open_store(str(tmp_path / "runs.sqlite"), create=True) as store:
        profile = load_profile(tmp_path / "sweep.toml")
        BenchRun(profile, store, Hooks(pausing=said.append), lock=tmp_path, command="sweep").run()
    told = [words.partition(" until ")[0] for words in said if words]
    assert told == [
        "being set: att 20",
        "instruments and device warm up",
        "everything settles before bits count",
        "being set: att 21",
        "everything settles before bits count",
    ]
    assert said[1::2] == [""] * 5
