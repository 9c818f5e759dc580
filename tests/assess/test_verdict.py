"""The verdict: PASS needs everything, FAIL one thing, and what is neither is UNDECIDED."""

from __future__ import annotations

from dataclasses import replace

import pytest

from harness.assess.run import assess
from harness.record import Event
from harness.statistics.plans import make_plan

BITS = make_plan("fixed", 1e-4, accept_errors=3).bits  # 77 534


def seconds(second, errors=(), last=None):
    """Whole seconds up to the plan's very last bit, the errors where they fall."""
    rows = []
    for index in range(BITS // 10_000 + 1):
        bits = min(10_000, BITS - 10_000 * index)
        inside = tuple(e for e in errors if 10_000 * index <= e < 10_000 * index + bits)
        rows.append(second(index, inside, bits=bits))
    return rows


def test_as_many_errors_as_the_plan_accepts_pass(record, second):
    a = assess(record(seconds(second, (5, 30_000, 50_000))))
    assert a.verdict == "PASS"
    assert a.whole.plan["decided_at_bit"] == BITS
    assert a.whole.bounds.value <= 1e-4


def test_one_error_more_fails_and_says_what_that_means(record, second):
    a = assess(record(seconds(second, (5, 30_000, 50_000, 70_000))))
    assert a.verdict == "FAIL"
    assert "not demonstrated" in a.reasons[0]
    assert "2 times better fails this test with probability" in a.reasons[1]


def test_one_bit_less_than_the_plan_asks_is_undecided(record, second):
    rows = seconds(second)
    short = rows[-1].tally.received - 1
    a = assess(record([*rows[:-1], second(rows[-1].index, bits=short)], ended_by="bits"))
    assert a.verdict == "UNDECIDED"


def test_too_many_errors_before_the_plans_end_fail_already(record, second):
    a = assess(record([second(0, (1, 2_000, 4_000, 9_000))], ended_by="seconds"))
    assert a.verdict == "FAIL"


@pytest.mark.parametrize(("allowed", "verdict"), [(0, "FAIL"), (1, "PASS")])
def test_slips_beyond_those_allowed_fail(record, second, allowed, verdict):
    rows = seconds(second)
    rows[2] = replace(rows[2], slips=1, bits_lost=8)
    slip = Event("slip", 25_000, "one byte lost", 2, {"bits": -8, "modulo": None})
    a = assess(record(rows, (slip,), max_slips=allowed))
    assert a.verdict == verdict
    assert a.whole.slips == ({"bit": 25_000, "bits": -8, "modulo": None},)


@pytest.mark.parametrize(("allowed", "verdict"), [(0, "FAIL"), (1, "FAIL"), (2, "PASS")])
def test_a_polarity_that_turns_over_in_mid_stream_counts_as_a_slip(record, second, allowed, verdict):
    turned = tuple(Event("inversion", bit, "polarity turned over", 2) for bit in (25_000, 45_000))
    a = assess(record(seconds(second), turned, max_slips=allowed))
    assert a.verdict == verdict
    assert a.whole.slip_count == 0
    if verdict == "FAIL":
        assert a.reasons[0].startswith(
            "the polarity turned over 2 times in mid-stream, each counts as a slip, and "
        )


@pytest.mark.parametrize("kind", ["link_lost", "never_returned", "inversion", "never_sent"])
def test_what_rules_a_pass_out_counts_after_more_events_than_are_kept(record, second, kind):
    many = tuple(Event("line", 10, "a line's state changed", 2) for _ in range(10_001))
    last = Event(kind, 20_000, "", 2, {"bits": 8_000})
    assert assess(record(seconds(second), many)).verdict == "PASS"
    assert assess(record(seconds(second), (*many, last))).verdict == "FAIL"


@pytest.mark.parametrize(("limit", "verdict"), [(0.001, "FAIL"), (0.5, "PASS")])
def test_unaligned_bits_beyond_the_limit_fail(record, second, limit, verdict):
    rows = [second(0, unaligned=5_000)]
    rows += [second(i + 1, bits=s.tally.received) for i, s in enumerate(seconds(second))]
    rows[-1] = second(rows[-1].index, bits=min(10_000, rows[-1].tally.received))
    a = assess(record(rows, max_unaligned_ratio=limit))
    assert a.verdict == verdict


@pytest.mark.parametrize(("rule", "verdict"), [("fail", "FAIL"), ("undecided", "UNDECIDED")])
def test_a_lost_link_never_passes(record, second, rule, verdict):
    lost = Event("link_lost", 20_000, "the link was lost", 2)
    assert assess(record(seconds(second), (lost,), lost_link=rule)).verdict == verdict


def test_bits_that_never_came_back_count_as_lost(record, second):
    gone = Event("never_returned", 20_000, "8 000 bits were sent and never came back", 2, {"bits": 8_000})
    a = assess(record(seconds(second), (gone,)))
    assert a.verdict == "FAIL"
    assert a.whole.bits_lost == 8_000


def test_a_stream_never_aligned_is_undecided_even_where_the_link_was_lost(record, second):
    lost = Event("link_lost", 0, "the link was lost", 2)
    a = assess(record([second(i, unaligned=10_000) for i in range(8)], (lost,), ended_by="seconds"))
    assert a.verdict == "UNDECIDED"
    assert "never aligned" in a.reasons[0]


def test_nothing_received_is_undecided(record):
    a = assess(record([], ended_by="seconds"))
    assert a.verdict == "UNDECIDED"
    assert a.whole.ber is None


def burst(start: int, size: int) -> tuple[int, ...]:
    return tuple(range(start, start + size))


def test_clustered_errors_with_too_few_events_are_undecided(record, second):
    rows = seconds(second, (*burst(1_000, 20), *burst(40_000, 20)))
    a = assess(record(rows, accept_errors=60, ber=2e-3, ended_by="bits"))
    clustering = a.whole.clustering
    assert clustering is not None
    assert clustering.clustered
    assert a.verdict == "UNDECIDED"


def test_counts_add_up_over_seconds(record, second):
    a = assess(record(seconds(second, (5, 30_000))))
    t = a.whole.tally
    assert t.holds
    assert t.received == t.compared == BITS
    assert a.to_json()["bits_received"] == BITS


def test_every_number_of_the_json_is_finite_or_null(record, second):
    import json

    for run in (record([]), record(seconds(second, (5,)))):
        json.dumps(assess(run).to_json(), allow_nan=False)
