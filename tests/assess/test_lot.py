"""A lot passes where every unit has, against one requirement; what stands out is said; nothing is hidden."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from harness.assess.assessment import Bounds
from harness.assess.lot import LotRun, summarise
from harness.assess.lot_words import lines_of
from harness.assess.run import assess
from harness.record import Run, Tally

ASKED = {"ber": 1e-4, "confidence": 0.95, "plan": "fixed"}


@pytest.fixture
def tried():
    """Make a run of a lot: a unit's serial number, its verdict, and whatever else it found."""
    nothing = Run("k", "", "measure", 0, 1, "completed", "plan", None, "", (), {}, {}, (), (), None)
    empty = assess(nothing)

    def make(serial, verdict="PASS", errors=20, bits=10**6, *, key=None, status="completed", **more):
        bounds = Bounds(
            "Clopper-Pearson", 0.95, errors / bits / 2, errors / bits * 2 + 1e-7, "upper", 0.95, 1e-5
        )
        received = more.pop("received", bits)
        tally = Tally(received, received, 0, errors, errors, 0)
        p = replace(empty.whole, tally=tally, ber=errors / bits, bounds=bounds, verdict=verdict)
        a = replace(
            empty, run=key or f"run-{serial}", device={"serial_number": serial, "model": "Wader-9"},
            verdict=verdict, whole=p, points=(p,), status=status, sensitivity=more.pop("sensitivity", None),
        )  # fmt: skip
        return LotRun(a, **({"requirement": ASKED} | more))

    return make


def test_all_units_must_pass(tried):
    lot = summarise("L7", 3, [tried("1"), tried("2"), tried("3")])
    assert (lot.verdict, lot.passed, lot.judged) == ("PASS", 3, 3)
    assert lot.pass_rate_lower == pytest.approx(0.025 ** (1 / 3))
    assert summarise("L7", 3, [tried("1"), tried("2", "FAIL")]).verdict == "FAIL"


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ({"verdict": "UNDECIDED"}, "1 unit undecided: 2"),
        ({"void": "the cable was loose"}, "1 unit void and not measured again: 2"),
        ({"status": "interrupted"}, "1 unit not measured to the end: 2"),
        ({"broken": ("errors was stated as 3",)}, "1 unit with a record that does not hold: 2"),
        ({"requirement": {**ASKED, "ber": 1e-3}}, "1 unit measured against another requirement: 1"),
    ],
)
def test_a_lot_has_not_passed_while_anything_of_it_is_open(tried, more, words):
    lot = summarise("L7", None, [tried("1"), tried("2", **more)])
    assert lot.verdict == "UNDECIDED"
    assert words in lot.reasons
    assert lot.judged == (1 if {"void", "status", "broken"} & set(more) else 2)


def test_a_lot_of_which_units_are_missing_has_not_passed(tried):
    lot = summarise("L7", 5, [tried("1"), tried("2")])
    assert lot.verdict == "UNDECIDED"
    assert lot.reasons == ("3 units of 5 still to be measured",)
    assert summarise("L7", 1, [tried("1"), tried("2")]).verdict == "UNDECIDED"


def test_a_unit_that_is_tested_until_it_passes_passes_in_the_end_and_not_at_the_first_try(tried):
    runs = [tried("1"), tried("2", "FAIL", key="a"), tried("2", "FAIL", key="b"), tried("2", key="c")]
    lot = summarise("L7", None, runs)
    assert (lot.passed, lot.judged, lot.first_passed, lot.first_judged) == (2, 2, 1, 2)
    assert [(t.run, t.verdict, t.why) for t in lot.tries] == [
        ("a", "FAIL", "measured again later"), ("b", "FAIL", "measured again later"),
    ]  # fmt: skip
    assert "measured 3 times; each was a try" in lot.units[1].remarks
    assert "at the first try 1 of 2" in "\n".join(lines_of(lot))


def test_voiding_a_fail_does_not_make_the_next_try_the_first(tried):
    lot = summarise("L7", None, [tried("1", "FAIL", key="a", void="by mistake"), tried("1", key="b")])
    assert (lot.passed, lot.first_passed, lot.first_judged) == (1, 0, 1)
    assert lot.tries[0].why == "void: by mistake"


def test_a_run_in_which_not_a_bit_came_is_listed_and_is_no_try(tried):
    lot = summarise("L7", None, [tried("1", "UNDECIDED", 0, 1, key="a", received=0), tried("1", key="b")])
    assert (lot.units[0].tries, lot.first_passed, lot.first_judged) == (1, 1, 1)
    assert lot.tries[0].why == "measured again later; not a single bit came, so it was no try"
    assert lot.units[0].remarks == ()


def test_units_of_two_models_with_one_serial_number_are_two_units(tried):
    other = tried("1", key="other")
    other = replace(
        other, assessment=replace(other.assessment, device={"serial_number": "1", "model": "Wader-8"})
    )
    assert len(summarise("L7", None, [tried("1"), other]).units) == 2


def test_a_unit_with_far_more_errors_than_the_others_is_pointed_out(tried):
    rng = np.random.default_rng(1)
    runs = [tried(f"{n:04}", errors=int(rng.poisson(20))) for n in range(12)]
    lot = summarise("L7", None, [*runs, tried("9999", errors=80)])
    assert "worse than the others" in " ".join(lot.units[-1].remarks)
    assert not any(unit.remarks for unit in lot.units[:-1])


def test_a_sensitivity_far_from_the_median_is_pointed_out(tried):
    values = [54.0, 54.1, 53.9, 54.2, 54.04, 50.0]
    runs = [
        tried(str(n), sensitivity={"value": v, "lower": v - 0.2, "upper": v + 0.2, "unit": "dB"})
        for n, v in enumerate(values)
    ]
    lot = summarise("L7", None, runs)
    assert lot.units[-1].remarks == ("sensitivity 50.00 is far from the median 54.02",)
    assert lot.sensitivity_spread == pytest.approx((50.0, 54.02, 54.2))
    assert "sensitivity from 50.00 to 54.20 dB" in "\n".join(lines_of(lot))


def test_no_line_is_wider_than_a_terminal(tried):
    runs = [tried("A" * 12 + str(n), "FAIL", 123_456, 10**12) for n in range(30)]
    lines = lines_of(summarise("A lot with quite a long name for a bench", 30, runs))
    assert max(len(line) for line in lines) <= 80
    assert lines_of(summarise("L7", None, [tried("1")]))[0] == "lot L7: 1 unit measured"
