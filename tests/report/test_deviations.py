"""What deviates from the profile is said openly, and what nobody may overlook stands above everything."""

from __future__ import annotations

import sqlite3
from dataclasses import replace

import pytest

from harness.assess.verify import differences
from harness.record import Event, Note, Tally
from harness.report import assemble, material_of
from harness.report.document import Verdict
from harness.report.sections.deviations import deviations
from harness.report.text import to_text
from harness.store import digest_of, open_store

FIXED = {"ber": 1e-4, "confidence": 0.95, "plan": "fixed", "accept_errors": 12}


def said(material) -> str:
    return " | ".join(f"{title}: {item}" for title, items in deviations(material) for item in items)


def verdict_of(document) -> str:
    return next(block.word for block in document.sections[0].blocks if isinstance(block, Verdict))


def test_a_run_as_the_profile_has_it_deviates_in_nothing(cases):
    assert deviations(cases["pass"]()) == []
    assert "Nothing deviates" in to_text(assemble(cases["pass"]()))
    assert assemble(cases["pass"]()).banners == ()


def test_overrides_are_quoted(records):
    material = records.make([[0, 1]], FIXED, overrides=["stop.seconds=3", "requirement.ber=1e-2"])
    assert "stop.seconds=3" in said(material)
    assert "requirement.ber=1e-2" in said(material)
    assert "2 things to know about this run" in to_text(assemble(material))


def test_what_a_lot_sets_for_each_unit_is_no_deviation(records):
    own = ["device.serial_number=0031", "device.lot=L7"]
    material = records.make([[0, 1]], FIXED, overrides=["stop.seconds=3", *own])
    material = replace(material, run=replace(material.run, device={"serial_number": "0031", "lot": "L7"}))
    assert deviations(material) == [("Overrides of the profile", ("stop.seconds=3",))]
    by_hand = records.make([[0, 1]], FIXED, overrides=own[:1])
    assert "device.serial_number=0031" in said(by_hand)


def test_an_interruption_is_told_once_and_named_on_the_first_page(records, point):
    text = "the run goes on after it was cut; 4 000 bits on the way then, not counted"
    began = records.make([[0, 1, 0, 1]], FIXED, sittings=2).run.sittings[1].started
    events = [Event("resumed", 2, text, began + 1)]
    material = records.make([point([0, 1, 0, 1], events=events)], FIXED, sittings=2)
    (told,) = dict(deviations(material))["Interruptions"]
    assert told.startswith("not measured for 20 s: ")
    assert told.endswith("; 4 000 bits on the way then, not counted")
    first = to_text(assemble(material)).partition("What deviates")[0]
    assert "1 interruption, after which the run went on: not measured for 20 s" in " ".join(first.split())


def test_a_gap_between_sittings_is_told_with_its_length(records):
    material = records.make([[0, 1, 0, 1]], FIXED, sittings=2)
    assert "not measured for 20 s: sitting 1 ended" in said(material)


def test_a_change_of_computer_or_version_between_sittings_is_told(records):
    material = records.make([[0, 1, 0, 1]], FIXED, sittings=2)
    first, second = material.run.sittings
    second = replace(
        second, host={**second.host, "name": "bench-2"}, versions={**second.versions, "numpy": "2.9"}
    )
    told = said(replace(material, run=replace(material.run, sittings=(first, second))))
    assert "ran on another computer: bench-2" in told
    assert "numpy 2.0 → 2.9" in told


@pytest.mark.parametrize(
    ("kind", "text"),
    [
        ("link_lost", "the link was lost"),
        ("link_back", "the link is back after 3 s"),
        ("fault", "the port is gone"),
        ("guard", "2 points in a row were never aligned: the climb ends here"),
        ("instrument", "attenuator: error queue says -222"),
        ("positions_cut", "positions are kept up to the limit"),
        ("never_returned", "800 bits never came back"),
    ],
)
def test_what_went_wrong_is_told(records, point, kind, text):
    material = records.make([point([0, 1], events=[Event(kind, 5, text, 10**18)])], FIXED)
    assert text in said(material)


def test_what_is_ordinary_is_not_called_a_deviation(records, point):
    events = [
        Event("instrument", None, "attenuator set to 20 dB, reads 20 dB", 10**18),
        Event("instrument", None, "attenuator made safe at 95 dB", 10**18),
        Event("aligned", 0, "the pattern was found", 10**18),
        Event("dialogue", None, 'dialogue: sent "AT"', 10**18),
    ]
    assert deviations(records.make([point([0, 1], events=events)], FIXED)) == []


def test_a_host_that_could_not_keep_up_is_told_with_the_bits(records, point):
    events = [Event("host_overrun", 5, "could not keep up", 10**18, {"bits": n}) for n in (100, 20)]
    material = records.make([point([0, 1], events=events)], FIXED)
    assert "could not keep up 2 times: 120 bits counted as unaligned, not the device's fault" in said(
        material
    )


def test_a_host_that_stood_still_is_told(records, point):
    events = [Event("host_stalled", 5, "this computer stood still for 4.5 s", 10**18, {"seconds": 4.5})]
    assert "stood still for 4.5 s" in said(records.make([point([0, 1], events=events)], FIXED))


def test_bits_after_the_decision_are_told(records, point):
    material = records.make([point([0, 1], after=Tally(458, 458, 0, 2, 1, 1))], FIXED)
    assert "458 bits with 2 errors came after the decision" in " ".join(to_text(assemble(material)).split())


def test_overdue_calibration_is_told_once(records, point):
    overdue = {"overdue": ["the calibration of cable A (loss) ran out on 2026-09-01"]}
    material = records.make([point([0], facts=overdue), point([1], facts=overdue)], None)
    assert said(material).count("ran out on 2026-09-01") == 1


def test_notes_are_quoted_with_who_and_when(records):
    material = records.make([[0, 1]], FIXED, notes=[Note(1_788_250_000 * 10**9, "bell", "cable changed")])
    assert "“cable changed” — bell, 2026-" in said(material)
    assert assemble(material).banners == ()


def test_a_void_mark_stands_above_everything_with_who_and_why(records):
    material = records.make([[0] * 5], FIXED, notes=[Note(10**18, "bell", "wrong antenna", void=True)])
    document = assemble(material)
    assert material.assessment.verdict == "PASS"
    assert "VOID: “wrong antenna” — bell" in document.banners[0]
    assert "VOID" in to_text(document).split("In short")[0]
    assert verdict_of(document) == "VOID"


def test_a_run_that_goes_on_is_called_preliminary(cases):
    document = assemble(cases["running"]())
    assert "PRELIMINARY" in document.banners[0]
    assert dict(document.digests)["record"].startswith("none yet")


def test_earlier_tries_are_told_with_the_joint_risk(records, point):
    earlier = [{"run": "01a2-one", "status": "completed", "verdict": "FAIL"}] * 2
    facts = {"earlier_tries": earlier, "earlier_tries_count": 2}
    text = " ".join(to_text(assemble(records.make([point([0] * 5, facts=facts)], FIXED))).split())
    assert "This is test 3 of this unit" in text
    assert "14.3" in text  # 1 - 0.95^3, in per cent
    assert "01a2-one" in text


def test_without_a_serial_number_nobody_claims_a_first_test(records):
    text = to_text(assemble(records.make([[0] * 5], FIXED, device={"model": "Wader-9"})))
    assert "first test" not in text
    assert "cannot be told" in " ".join(text.split())


@pytest.mark.parametrize(
    "change",
    [
        "UPDATE second SET errors = errors + 1, zeros_as_ones = zeros_as_ones + 1 WHERE rowid = 1",
        "UPDATE run SET device = replace(device, '0031', '0032')",
        "UPDATE run SET verdict = 'FAIL'",
    ],
)
def test_a_record_that_was_changed_says_so_above_everything(records, change):
    made = records.make([[1, 0, 2, 0, 1]], FIXED)
    with sqlite3.connect(records.path) as bare:
        assert bare.execute(change).rowcount == 1
    bare.close()
    with open_store(records.path) as store:
        run, kept = store.load(made.run.key), store.digest(made.run.key)
    material = material_of(run, kept, digest_of(run), written=0, program="bitassay")
    document = assemble(material)
    assert "THE RECORD DOES NOT HOLD" in document.banners[0]
    assert "it holds" not in to_text(document)
    assert verdict_of(document) == "NOT VALID"


def test_numbers_that_do_not_follow_from_the_record_are_named(records):
    made = records.make([[1, 0, 2, 0, 1]], FIXED)
    stated = {**made.run.stated, "errors": 3, "verdict": "PASS"}
    run = replace(made.run, stated=stated)
    material = material_of(run, made.kept_digest, made.digest, written=0, program="bitassay")
    assert any("errors was stated as 3, and 4 follows" in what for what in material.broken)


def test_a_record_that_contradicts_itself_does_not_hold_for_the_report_either(records):
    made = records.make([[1, 0, 2, 0, 1]], FIXED)
    (point,) = made.run.points
    stray = Event("slip", 7, "one byte lost", point.started, {"bits": -8, "modulo": None})
    run = replace(
        made.run, points=(replace(point, events=(*point.events, stray)),), stated=None, status="cut"
    )
    material = material_of(run, None, digest_of(run), written=0, program="bitassay")
    assert differences(run) == list(material.broken) == ["point 0: the seconds hold 0 slips, the events 1"]
    assert "THE RECORD DOES NOT HOLD" in assemble(material).banners[0]
