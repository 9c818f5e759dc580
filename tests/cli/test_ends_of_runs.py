"""The ends of runs, with a program of its own as device: what it keeps, makes up and adds there."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import pytest

from harness.assess.verify import differences
from harness.store import open_store

DEVICE = Path(__file__).parents[1] / "devices" / "pipe_device.py"
BITS = 800_000


@pytest.fixture
def measure(bitassay, tmp_path):
    """Measure a program of its own; gives what it stated, verified against its record."""

    def run(rest: str = f"[stop]\nbits = {BITS}\n", link: str = "", pattern: str = "PRBS15", **device):
        command = json.dumps([sys.executable, str(DEVICE), json.dumps(device)])
        path = tmp_path / "unit.toml"
        path.write_text(
            f'[link]\ndriver = "process"\ncommand = {command}\n{link}\n[pattern]\nname = "{pattern}"\n{rest}'
        )
        done = bitassay("measure", path, "--json")
        got = done.json
        with open_store(f"sqlite:///{tmp_path / 'results' / 'runs.sqlite'}") as store:
            assert differences(store.load(got["run"])) == []
        assert got["bits_received"] == got["bits_compared"] + got["bits_unaligned"]
        if got["ended_by"] == "bits":
            assert got["bits_sent"] == got["bits_received"] + got["bits_lost"] - got["bits_inserted"]
        return got

    return run


@pytest.mark.parametrize("keep", [-1, 5000])
def test_a_program_that_keeps_its_output_until_its_input_ends_loses_nothing(measure, keep):
    got = measure(keep=keep)
    assert (got["bits_compared"], got["errors"], got["bits_lost"]) == (BITS, 0, 0)
    assert got["ended_by"] == "bits"
    assert got["status"] == "completed"


def test_a_requirement_is_met_by_a_program_that_keeps_its_output(measure):
    rest = f"[requirement]\nber = 1e-5\n[stop]\nbits = {BITS}\n"
    got = measure(rest, keep=-1)
    assert got["verdict"] == "PASS"
    assert got["bits_lost"] == 0


@pytest.mark.parametrize(("allowed", "verdict"), [(0, "FAIL"), (1, "PASS")])
def test_periods_that_come_twice_count_as_a_slip_once_more_has_come_than_was_sent(measure, allowed, verdict):
    # PRBS9: eight of its periods are 511 bytes, and leave no trace in the pattern.
    rest = f"[requirement]\nber = 2e-5\nmax_slips = {allowed}\n"
    got = measure(rest, link="pace_bps = 400_000", pattern="PRBS9", twice=[12_000, 16 * 511])
    assert (got["errors"], got["slips"]) == (0, [])
    assert got["verdict"] == verdict
    if verdict == "FAIL":
        assert got["reasons"] == [
            "more bits came than were sent, which counts as a slip, and none is allowed"
        ]


def test_a_program_that_answers_promptly_is_not_asked_for_its_last_words(measure):
    got = measure(farewell="4 800 bytes in, 4 800 bytes out\n", link="drain_s = 1")
    assert (got["bits_received"], got["errors"], got["slips"]) == (BITS, 0, [])


def test_last_words_are_bits_that_were_never_sent(measure):
    got = measure(keep=-1, farewell="NO CARRIER\r\n", link="drain_s = 1")
    assert (got["bits_compared"], got["errors"]) == (BITS, 0)
    assert got["slips"] == [{"bit": BITS, "bits": 96, "modulo": None}]


@pytest.mark.parametrize("pattern", ["PRBS9", "PRBS31"])
def test_a_made_up_byte_does_not_end_the_run_before_the_last_one_has_come(measure, pattern):
    got = measure(invent=[[50_000, 77]], linger_s=0.15, pattern=pattern)
    assert got["bits_lost"] == 0
    assert [slip["bits"] for slip in got["slips"]] == [8]
    assert got["bits_received"] == got["bits_compared"] == BITS + 8
    assert got["errors"] <= 8


def test_two_made_up_bytes_do_not_either(measure):
    got = measure(invent=[[20_000, 1], [60_000, 2]], linger_s=0.15)
    assert (got["bits_lost"], got["bits_inserted"]) == (0, 16)


@pytest.mark.parametrize("more", ["00", "0d0a4e4f", "ff" * 100])
def test_bytes_after_the_last_one_are_inserted_and_no_errors(measure, more):
    got = measure(append=[BITS // 8, more])
    extra = 4 * len(more)
    assert (got["bits_compared"], got["errors"], got["bits_unaligned"]) == (BITS, 0, extra)
    assert got["slips"] == [{"bit": BITS, "bits": extra, "modulo": None}]
    assert any("after the last bit sent" in event["text"] for event in got["events"])


def test_a_byte_lost_before_does_not_make_the_added_one_an_error(measure):
    got = measure(lose=[40_000], append=[BITS // 8, "a5"])
    assert (got["errors"], got["bits_unaligned"]) == (0, 8)
    assert sorted(slip["bits"] for slip in got["slips"]) == [-8, 8]


def test_a_lost_last_byte_is_lost_and_what_comes_instead_is_no_slip_back(measure):
    got = measure(lose=[BITS // 8 - 1], link="drain_s = 1")
    assert (got["bits_lost"], got["bits_inserted"], got["errors"]) == (8, 0, 0)


def test_a_program_that_dies_with_what_it_kept_is_named(measure):
    got = measure(keep=100, dies=3, link="drain_s = 1")
    assert (got["bits_lost"], got["errors"]) == (800, 0)
    assert any("ended with exit status 3" in event["text"] for event in got["events"])
