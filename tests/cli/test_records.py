"""What the store holds, from outside: retests counted, runs compared, notes added, records moved and damaged."""

from __future__ import annotations

import getpass
import sqlite3

import pytest

PROFILE = """
title = "Wader-9, invented"
[device]
serial_number = "0031"
[link]
driver = "loopback"
rate_bps = 1_000_000
[[link.channel]]
model = "independent"
ber = {ber}
seed = {seed}
[requirement]
ber = 1e-4
accept_errors = 12
"""


@pytest.fixture
def measured(bitassay, tmp_path):
    """Measure once more; gives the JSON."""

    def once(seed: int = 7, ber: str = "2e-5", *more: str):
        (tmp_path / "unit.toml").write_text(PROFILE.format(ber=ber, seed=seed))
        return bitassay("measure", "unit.toml", "--json", *more).json

    return once


def test_a_second_test_of_the_same_unit_is_counted_and_named(bitassay, measured):
    first = measured()
    assert first["earlier_tries"] == 0
    bitassay("note", "last", "the cable was loose", "--void")
    second = measured()
    assert second["earlier_tries"] == 1
    assert first["run"][-8:] in second["remarks"][0]
    assert "VOID" in second["remarks"][0]
    shown = bitassay("show", first["run"], "--json").json
    assert shown["void"] is True
    assert shown["notes"][0]["text"] == "the cable was loose"
    assert "VOID" in bitassay("show", first["run"]).out
    assert "VOID" in bitassay("runs").out
    assert bitassay("verify", first["run"]).status == 0
    assert "with probability 9.75 %" in second["remarks"][0]
    other = measured(7, "2e-5", "--set", "device.serial_number=0032")
    assert other["earlier_tries"] == 0
    assert bitassay("verify", "last").status == 0


def test_who_marked_a_run_void_and_why_stands_under_it_and_in_verify(bitassay, measured):
    measured()
    bitassay("note", "last", "byte lost: cable knocked", "--void")
    bitassay("note", "last", "seen by the shift leader")
    lines = bitassay("show", "last").out.splitlines()
    void = next(number for number, line in enumerate(lines) if "VOID" in line)
    words = f"“byte lost: cable knocked” — {getpass.getuser()}, 20"
    assert words in lines[void + 1]
    assert any("noted: “seen by the shift leader”" in line for line in lines)
    verified = bitassay("verify", "last")
    assert verified.status == 0
    assert f"it is VOID: {words}" in verified.out
    document = bitassay("verify", "last", "--json").json
    assert (document["holds"], document["void"]) == (True, True)
    assert document["notes"][0]["text"] == "byte lost: cable knocked"


def test_a_run_in_which_not_a_bit_came_is_named_but_was_no_try(bitassay, measured, tmp_path):
    dead = '--set=link={driver="tcp",host="127.0.0.1",port=1}'
    failed = measured(7, "2e-5", dead)
    assert failed["status"] == "failed"
    next_one = measured()
    assert next_one["verdict"] == "PASS"
    assert next_one["earlier_tries"] == 0
    assert failed["run"][-8:] in next_one["remarks"][0]
    assert "not a single bit came" in next_one["remarks"][0]
    assert "%" not in next_one["remarks"][0]
    third = measured()
    assert third["earlier_tries"] == 1
    assert "test 2 of this unit" in third["remarks"][0]
    again = measured(7, "2e-5", dead)
    assert again["remarks"][0].startswith("Not a single bit came, so this run is no try itself. Earlier: ")
    assert "test 3" not in again["remarks"][0]
    text = " ".join(bitassay("report", "last", "--text").out.split())
    assert "this run is no try itself" in text
    assert "test 3" not in text
    assert bitassay("verify", "last").status == 0
    text = " ".join(bitassay("report", third["run"], "--text").out.split())
    assert "is no try" in text
    assert "UNDECIDED, not a single bit came" in text
    assert bitassay("verify", "last").status == 0


def test_two_runs_are_compared_and_their_conditions(bitassay, measured):
    good, bad = measured(), measured(8, "3e-3")
    assert (good["verdict"], bad["verdict"]) == ("PASS", "FAIL")
    done = bitassay("compare", good["run"], bad["run"], "--json")
    assert done.status == 0
    assert done.json["errors"]["worse"] is True
    assert any("ber" in line for line in done.json["conditions_differ"])
    back = bitassay("compare", bad["run"], good["run"], "--json").json
    assert back["errors"]["worse"] is False
    same = bitassay("compare", good["run"], measured()["run"], "--json").json
    assert same["conditions_differ"] == []
    assert same["errors"]["worse"] is False


def test_a_run_is_named_by_its_ending_and_unknown_ones_are_refused(bitassay, measured):
    run = measured()["run"]
    assert bitassay("show", run[-6:], "--json").json["run"] == run
    assert bitassay("show", "zzzz").status == 2


def test_one_changed_byte_is_found_and_named(bitassay, measured, tmp_path):
    measured()
    with sqlite3.connect(tmp_path / "results" / "runs.sqlite") as db:
        changed = db.execute("update second set errors = errors + 1 where errors > 0").rowcount
    assert changed >= 1
    done = bitassay("verify", "last")
    assert done.status == 4
    assert "errors" in done.out
    assert "NOT" in done.out


def test_a_changed_profile_is_found_by_the_digest(bitassay, measured, tmp_path):
    measured()
    with sqlite3.connect(tmp_path / "results" / "runs.sqlite") as db:
        db.execute("update run set profile_text = replace(profile_text, '0031', '0032')")
    done = bitassay("verify", "last")
    assert done.status == 4
    assert "SHA-256" in done.out


@pytest.mark.parametrize("change", ["serial_number = '0032'", "model = 'W'", "requirement_ber = 2e-4"])
def test_a_run_that_is_listed_as_another_units_is_found(bitassay, measured, tmp_path, change):
    measured()  # its later tries are counted by these columns: a failed one could be hidden by them
    with sqlite3.connect(tmp_path / "results" / "runs.sqlite") as db:
        db.execute(f"update run set {change}")
    done = bitassay("verify", "last")
    assert done.status == 4
    assert f"{change.split(' ')[0].replace('_ber', '.ber')}: the record says" in done.out


@pytest.mark.parametrize("change", ["update point set number = 3", "update event set point = 3"])
def test_what_belongs_to_a_point_that_is_not_there_is_a_damaged_record(bitassay, measured, tmp_path, change):
    measured()
    with sqlite3.connect(tmp_path / "results" / "runs.sqlite") as db:
        db.execute(change)
    for command in ("verify", "show", "export", "report"):
        done = bitassay(command, "last")
        assert done.status == 4, command
        assert "cannot be read: an event belongs to point" in done.err


def test_records_are_copied_once_however_often_it_is_said(bitassay, measured, tmp_path):
    run = measured()["run"]
    for words in ("1 new run", "0 new runs"):
        done = bitassay("store", "copy", "results/runs.sqlite", "other.sqlite")
        assert done.status == 0
        assert words in done.out
    assert bitassay("show", run, "--store", "other.sqlite", "--json").json["run"] == run
    assert bitassay("verify", run, "--store", "other.sqlite").status == 0
    assert bitassay("store", "upgrade", "--store", "other.sqlite").status == 0


def test_curtailed_and_sequential_plans_decide_on_the_bench_too(bitassay, measured):
    sequential = measured(7, "2e-5", "--set", "requirement.plan=sequential", "--set", "requirement.margin=3")
    assert sequential["verdict"] == "PASS"
    assert sequential["bits_compared"] == sequential["plan"]["decided_at_bit"] < sequential["plan"]["bits"]
    assert sequential["bounds"]["deciding"]["value"] <= 1e-4
    curtailed = measured(7, "3e-3", "--set", "requirement.plan=curtailed")
    assert curtailed["verdict"] == "FAIL"
    assert curtailed["errors"] == 13
    assert curtailed["bits_compared"] == curtailed["plan"]["decided_at_bit"] < 20_000
    assert curtailed["after_decision"]["bits"] > 0
