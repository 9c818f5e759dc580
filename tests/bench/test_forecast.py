"""The forecast of a record's size, against a real store that has taken the record."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import numpy as np
import pytest

from harness.assess.run import assess
from harness.bench.check.forecast import PAGE_BYTES, POINT_S, forecast, stop_problem
from harness.bench.check.points import of_the_points
from harness.bench.session import bench_host, bench_versions
from harness.profile import parse_profile
from harness.record import Event, Second, Sitting, Tally
from harness.store import open_store

T0 = 1_788_250_000_000_000_000
SLACK = 2 * PAGE_BYTES  # a store grows by whole pages, of the table and of its index


def size(path: Path) -> int:
    with sqlite3.connect(path) as db:
        db.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        pages, free = (
            db.execute(f"PRAGMA {what}").fetchone()[0] for what in ("page_count", "freelist_count")
        )
    db.close()
    return PAGE_BYTES * (pages - free)


def write(store, profile, rate: int, seconds: int, points: int, errors: float) -> None:
    """Write a record as a run does, with errors that fall by chance."""
    rng = np.random.default_rng(11)
    key = store.begin_run(
        title=profile.title,
        command="measure",
        started=T0,
        profile_text=profile.text,
        overrides=(),
        settings=profile.resolved(),
        device=profile.device,
    )
    store.begin_sitting(key, Sitting(0, T0, None, bench_host(), bench_versions()))
    index = 0
    for point in range(points):
        link = {"topology": "far-end-loop", "driver": "loopback", "sends": True, "receives": True}
        facts = {
            "pattern": "PRBS15",
            "pattern_inverted": True,
            "bit_order": "lsb",
            "rate_bps": rate,
            "link": link,
        }
        set_to = Event("instrument", None, "attenuator set to 20.5 dB, reads 20.5 dB", T0)
        if points > 1:
            facts |= {"readings": {"attenuator": 20.5}, "units": {"attenuator": "dB"}, "calibration": {}}
            facts |= {"instruments": {"attenuator": "Fictional Bench SA-95 0042 1.3"}}
        store.begin_point(key, point, {"attenuator": 20.0 + point} if points > 1 else {}, T0, facts)
        words = ("the pattern was found", "loop delay 4 800 bits, 0.1 s")
        data = (
            {"place": 0, "inverted": False, "mismatches": 0},
            {"bits": 4800, "seconds": 0.1, "modulo": None},
        )
        found = [Event(k, 0, w, T0, d) for k, w, d in zip(("aligned", "delay"), words, data, strict=True)]
        found += [set_to] * (points > 1)
        rows = []
        for second in range(seconds):
            first = second * rate
            count = int(rng.poisson(errors)) if errors else 0
            positions = np.unique(rng.integers(0, rate, count)) + first
            ones = rng.random(len(positions)) < 0.5
            lost = int(np.count_nonzero(ones))
            tally = Tally(rate, rate, 0, len(positions), lost, len(positions) - lost)
            rows.append(
                Second(
                    point,
                    0,
                    index,
                    T0 + index * 10**9,
                    10**9,
                    rate,
                    tally,
                    first_bit=first,
                    positions=positions,
                    ones_lost=ones,
                    stretches=((rate, True),),
                )
            )
            index += 1
        store.commit(key, rows, [(point, event) for event in found], 4096)
        store.end_point(key, point, T0 + index * 10**9, "seconds")
    ended = T0 + index * 10**9
    store.end_sitting(key, 0, ended, "completed")
    run = assess(store.load(key))
    store.end_run(key, ended, "completed", "seconds", run.verdict, run.to_json())


@pytest.fixture
def grown(tmp_path: Path):
    """How much a store with one run in it grows by another."""

    def grow(profile, rate: int, seconds: int, points: int, errors: float) -> int:
        path = tmp_path / "runs.sqlite"
        store = open_store(path)
        write(store, profile, rate, 1, 1, 0)
        before = size(path)
        write(store, profile, rate, seconds, points, errors)
        store.close()
        return size(path) - before

    return grow


PLAIN = (
    'title = "Wader-9"\n[link]\ndriver = "loopback"\nrate_bps = {rate}\n[stop]\nseconds = {seconds}\n{more}'
)


@pytest.mark.parametrize(
    ("rate", "seconds"), [(1_200, 6_000), (48_000, 20_000), (10_000_000, 6_000)], ids=["slow", "long", "fast"]
)
def test_the_record_of_a_run_without_errors_is_forecast(grown, rate, seconds):
    profile = parse_profile(PLAIN.format(rate=rate, seconds=seconds, more=""))
    told = forecast(profile, rate).disk_bytes
    assert grown(profile, rate, seconds, 1, 0) == pytest.approx(told, rel=0.1, abs=SLACK)


@pytest.mark.parametrize(("ber", "seconds"), [(2e-5, 3_000), (1e-3, 900), (0.02, 400), (0.1, 90)])
def test_the_record_of_a_run_with_errors_is_forecast(grown, ber, seconds):
    more = f"[requirement]\nber = {2 * ber}\naccept_errors = 1000000\n"
    profile = parse_profile(PLAIN.format(rate=48_000, seconds=seconds, more=more))
    told = forecast(profile, 48_000, positions_per_second=48_000).disk_bytes
    assert grown(profile, 48_000, seconds, 1, ber * 48_000) == pytest.approx(told, rel=0.1, abs=SLACK)


@pytest.mark.parametrize(("points", "seconds", "errors"), [(15, 60, 1000), (40, 5, 0)])
def test_the_points_of_a_sweep_are_forecast(grown, points, seconds, errors):
    sweep = (
        '[instruments.attenuator]\ndriver = "simulated"\nknob = "attenuation_db"\nlimits = [0, 60]\nsafe = 60\n'
        f'[sweep]\ninstrument = "attenuator"\nvalues = {{ start = 1, stop = {points}, step = 1 }}\n'
    )
    profile = parse_profile(PLAIN.format(rate=48_000, seconds=seconds, more=sweep))
    # Every second of a sweep may be full of errors.
    told = forecast(profile, 48_000, positions_per_second=errors).disk_bytes
    assert grown(profile, 48_000, seconds, points, errors) == pytest.approx(told, rel=0.1, abs=SLACK)


SWEEP = """
[link]
driver = "loopback"
rate_bps = 48_000
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
"""
POINTS = "[sweep]\ninstrument = 'att'\nvalues = [20, 30]\n"
SEARCH = "[search]\ninstrument = 'att'\nlow = 20\nhigh = 30\nber = 1e-4\n"


@pytest.mark.parametrize(
    ("text", "problem"),
    [
        (POINTS, "nothing ends this run: [stop] is empty"),
        (POINTS + "[stop]\nseconds = 5\n", None),
        (POINTS + "finish_by = '07:00'\n", None),
        (POINTS + "[requirement]\nber = 1e-4\n", "nothing ends this run: [stop] is empty"),
        (
            POINTS + "[requirement]\nber = 1e-4\nat = { att = 20 }\n",
            "nothing ends this run at the points where nothing is required",
        ),
        (POINTS + "[requirement]\nber = 1e-4\nat = { att = 20 }\n[stop]\nseconds = 5000\n", None),
        (POINTS + "[requirement]\nber = 1e-4\nat = { att = 20 }\n[stop]\nbits = 99\n", "stop.bits is 99"),
        (SEARCH, "nothing limits this search"),
        (SEARCH + "max_seconds = 60\n", None),
        (SEARCH + "max_bits = 1_000_000\n", None),
    ],
)
def test_a_sweep_or_a_search_that_may_not_end_is_found_beforehand(text, problem):
    found = stop_problem(parse_profile(SWEEP + text), 48_000.0)
    assert (found is None) == (problem is None)
    assert found is None or found.startswith(problem)


def test_a_sweep_that_stops_short_of_its_end_or_judges_nothing_is_remarked():
    values = "{ start = 20, stop = 30, step = 4 }"
    text = f"{SWEEP}[sweep]\ninstrument = 'att'\nvalues = {values}\n"
    said = [f.text for f in of_the_points(parse_profile(text + "[requirement]\nber = 1e-3\n"))]
    assert said == [
        "att goes to 28 and not to 30: the step does not meet the end",
        "the requirement names no point and no sensitivity: there will be no verdict",
    ]
    whole = text.replace("step = 4", "step = 0.1")  # decimal steps meet it
    assert (
        list(of_the_points(parse_profile(whole + "[requirement]\nber = 1e-3\nat = { att = 20.1 }\n"))) == []
    )


def test_a_sweep_is_foreseen_with_what_its_points_take_beside_measuring():
    """Only what changes settles; at most, each point also waits for what never comes."""
    two = """
[instruments.slow]
driver = "simulated"
knob = "ebn0_db"
limits = [0, 60]
safe = 40
settle_s = 100
[[sweep.axes]]
instrument = "slow"
values = [40, 50]
[[sweep.axes]]
instrument = "att"
values = [20, 21, 22]
[stop]
seconds = 10
"""
    text = SWEEP.replace("safe = 60", "safe = 60\nsettle_s = 1") + two
    found = forecast(
        parse_profile(text.replace("rate_bps = 48_000", "rate_bps = 48_000\ndrain_s = 5")), 48_000.0
    )
    assert found.points == 6
    assert found.expected_s == pytest.approx(6 * (10 + 1) + 2 * 100 + 6 * POINT_S)
    assert found.longest_s == pytest.approx(found.expected_s + 6 * 5)
