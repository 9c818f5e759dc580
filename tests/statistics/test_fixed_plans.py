"""The fixed and the curtailed plan: where they decide, what they risk, and what may be said afterwards."""

from __future__ import annotations

from functools import lru_cache
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.record import Segment, Tally
from harness.statistics.bounds import bits_needed, clopper_pearson, lower_bound, upper_bound
from harness.statistics.plans import Boundary, Plan, PlanError, make_plan
from harness.statistics.plans.recursion import Stairs
from harness.statistics.plans.sequential import SequentialPlan


@lru_cache
def stairs_of(ber: float, confidence: float, producer_risk: float) -> Stairs:
    """Stairs are found once, plans on them are made many times."""
    return SequentialPlan(ber, confidence, 3.0, producer_risk).stairs


def ready_plan(kind: str, ber: float, confidence: float, accepts: int, producer_risk: float) -> Plan:
    if kind == "sequential":
        return SequentialPlan(ber, confidence, 3.0, producer_risk, stairs_of(ber, confidence, producer_risk))
    return make_plan(kind, ber, confidence, accepts, margin=3.0, producer_risk=producer_risk)


def test_a_fixed_plan_decides_at_its_last_bit_and_never_earlier(stretch) -> None:
    plan = make_plan("fixed", 1e-3, accept_errors=1)
    n = plan.bits
    assert plan.cut_compared == plan.longest_bits == n == bits_needed(1e-3, 0.95, 1)
    assert plan.advance(stretch(0, n - 1, [5, 6, 7, 8])) is None  # lost already, and still it goes on
    assert plan.decision is None
    decision = plan.advance(stretch(n - 1, 10, [2]))
    assert decision is not None
    assert (decision.accepted, decision.compared_bits, decision.errors, decision.exact) == (False, n, 4, True)
    assert plan.decision == decision
    assert plan.advance(stretch(n + 9, 10, [])) is None
    assert (plan.compared_bits, plan.errors) == (n, 4)


@pytest.mark.parametrize("kind", ["fixed", "curtailed"])
@pytest.mark.parametrize("errors", [[], [17], [17, 4744], [17, 4745]])
def test_errors_behind_the_last_bit_do_not_count(stretch, kind: str, errors: list[int]) -> None:
    plan = make_plan(kind, 1e-3, accept_errors=1)
    assert plan.bits == 4742
    decision = plan.advance(stretch(0, 9000, errors))
    assert decision is not None
    assert (decision.accepted, decision.compared_bits) == (True, 4742)
    assert decision.errors == min(len(errors), 1)


def test_an_error_at_the_very_last_bit_counts(stretch) -> None:
    for kind in ("fixed", "curtailed"):
        plan = make_plan(kind, 1e-3, accept_errors=1)
        decision = plan.advance(stretch(0, 9000, [17, 4742]))
        assert decision is not None
        assert (decision.accepted, decision.compared_bits, decision.errors) == (False, 4742, 2)
        # The fixed plan's count is binomial; the curtailed one ended at the error, whatever bit that was.
        upper = clopper_pearson(2, 4742, 0.95).upper if kind == "fixed" else upper_bound(1, 4741, 0.975)
        assert plan.bounds().upper == pytest.approx(upper, rel=1e-13)


def test_a_curtailed_plan_rejects_at_the_bit_of_the_first_error_too_many(stretch) -> None:
    plan = make_plan("curtailed", 1e-3, accept_errors=1)
    assert plan.positions_needed == 2
    assert plan.advance(stretch(0, 1000, [400])) is None
    assert plan.advance(Segment(1000, Tally(50_000, 0, 50_000), aligned=False)) is None  # not compared
    decision = plan.advance(stretch(51_000, 1000, [13, 14, 15]))
    assert decision is not None
    assert (decision.accepted, decision.compared_bits, decision.errors) == (False, 1013, 2)


@given(st.data(), st.sampled_from(["fixed", "curtailed", "sequential"]))
@settings(max_examples=80, deadline=None)
def test_no_cutting_into_chunks_changes_a_decision(data: st.DataObject, kind: str) -> None:
    ber = 0.01
    errors = sorted(data.draw(st.sets(st.integers(1, 1500), max_size=25)))
    cuts = sorted(data.draw(st.sets(st.integers(1, 1499), max_size=12)))

    def decide(edges: list[int]):
        plan = ready_plan(kind, ber, 0.9, 2, 0.2)
        for start, end in zip([0, *edges], [*edges, 1500], strict=True):
            at = np.array([e - 1 for e in errors if start < e <= end], dtype=np.int64)
            tally = Tally(end - start, end - start, 0, len(at), 0, len(at))
            done = plan.advance(
                Segment(start, tally, True, 0, positions=at, ones_lost=np.zeros(len(at), bool))
            )
            if done is not None:
                assert start < done.compared_bits <= end
                assert done.errors == sum(e <= done.compared_bits for e in errors)
        return plan.decision, plan.bounds()

    assert decide(cuts) == decide([]) == decide(list(range(50, 1500, 50)))


@given(
    st.sampled_from(["fixed", "curtailed", "sequential"]),
    st.sampled_from([0.3, 0.05, 1e-2]),
    st.sampled_from([0.7, 0.9, 0.95, 0.99]),
    st.integers(0, 4),
    st.floats(0, 3),
    st.integers(0, 2**32),
    st.booleans(),
)
@settings(max_examples=150, deadline=None)
def test_a_pass_always_has_its_deciding_bound_at_or_under_the_requirement(
    kind, ber, confidence, accept_errors, times_worse, seed, known
) -> None:
    plan = ready_plan(kind, ber, confidence, accept_errors, 0.1)
    rng = np.random.default_rng(seed)
    bits = plan.longest_bits + 50
    wrong = np.flatnonzero(rng.random(bits) < min(0.99, ber * times_worse)).astype(np.int64)
    step = int(rng.integers(7, 80))
    for start in range(0, bits, step):
        at = wrong[(wrong >= start) & (wrong < start + step)]
        tally = Tally(step, step, 0, len(at), 0, len(at))
        shown = at if known else at[:0]
        segment = Segment(
            start,
            tally,
            True,
            0,
            positions=shown,
            ones_lost=np.zeros(len(shown), bool),
            positions_complete=known,
        )
        if plan.advance(segment) is not None:
            break
    decision, found = plan.decision, plan.bounds()
    assert decision is not None
    assert found.deciding is not None
    assert found.lower <= decision.errors / decision.compared_bits <= found.upper or kind == "sequential"
    if decision.accepted:
        assert (found.deciding.side, found.deciding.confidence) == ("upper", confidence)
        assert found.deciding.value <= ber
        assert plan.bounds(2 * confidence - 1).upper <= ber * (1 + 1e-12) if confidence > 0.5 else True
    elif known and kind != "sequential":
        assert found.deciding.side == "upper"
        assert found.deciding.value > ber
    elif known:
        assert found.deciding.side == "lower"
        assert found.deciding.value >= plan.good_ber


def test_risks_and_lengths_of_a_curtailed_plan_equal_those_bit_by_bit(bit_by_bit) -> None:
    for accepts, ber in product((0, 1, 4), (0.2, 0.05)):
        plan = make_plan("curtailed", ber, 0.9, accepts, margin=2.0)
        n = plan.bits
        rows = [Boundary(k, n, None) for k in range(accepts + 1)] + [Boundary(accepts + 1, n, n)]
        for true in (ber, ber / 2, ber * 2, 0.01):
            exact = bit_by_bit(rows, true)
            assert plan.acceptance_probability(true) == pytest.approx(exact.chance(True), abs=1e-13)
            assert plan.rejection_probability(true) == pytest.approx(exact.chance(False), abs=1e-13)
            assert plan.expected_bits(true) == pytest.approx(exact.mean_bits, rel=1e-12)
            for point in plan.stopping_distribution(true):
                assert point.accepted == pytest.approx(exact.chance(True, point.bits), abs=1e-13)
                assert point.rejected == pytest.approx(exact.chance(False, point.bits), abs=1e-13)
        assert plan.consumer_risk <= 0.1
        assert plan.producer_risk == pytest.approx(bit_by_bit(rows, ber / 2).chance(False), abs=1e-13)
    assert plan.expected_bits(0.0) == n
    assert plan.expected_bits(1.0) == accepts + 1


def test_a_fixed_plan_always_takes_its_length() -> None:
    plan = make_plan("fixed", 1e-6, accept_errors=3)
    assert plan.expected_bits(1e-7) == plan.expected_bits(1e-3) == plan.bits == 7_753_655
    first, last = plan.stopping_distribution(1e-6, [plan.bits - 1, plan.bits])
    assert (first.accepted, first.rejected) == (0.0, 0.0)
    assert last.accepted == plan.consumer_risk <= 0.05
    assert last.accepted == pytest.approx(0.05, abs=1e-6)
    assert last.accepted + last.rejected == pytest.approx(1.0, abs=1e-14)


def test_bounds_after_a_fixed_plan_are_clopper_pearsons(stretch) -> None:
    plan = make_plan("fixed", 1e-3, accept_errors=1)
    plan.advance(stretch(0, 1000, [3]))
    early = plan.bounds()
    assert early.deciding is None
    assert (early.lower, early.upper) == (
        clopper_pearson(1, 1000, 0.95).lower,
        clopper_pearson(1, 1000, 0.95).upper,
    )
    assert early.remarks == ()
    assert "stop was chosen" in plan.bounds(ended="operator").remarks[0]
    plan.advance(stretch(1000, 9000, []))
    final = plan.bounds(0.99, ended="operator")
    assert final.method == "Clopper-Pearson"
    assert final.remarks == ()
    assert final.upper == clopper_pearson(1, 4742, 0.99).upper
    assert final.deciding is not None
    assert final.deciding.value == pytest.approx(upper_bound(1, 4742, 0.95))


def test_bounds_after_a_curtailed_rejection_are_those_of_inverse_sampling(stretch) -> None:
    plan = make_plan("curtailed", 1e-3, accept_errors=2)
    plan.advance(stretch(0, 1000, [100, 200, 300]))
    found = plan.bounds()
    assert found.lower == pytest.approx(lower_bound(3, 300, 0.975), rel=1e-13)
    assert found.upper == pytest.approx(upper_bound(2, 299, 0.975), rel=1e-13)
    assert found.deciding is not None
    assert found.deciding.value == pytest.approx(upper_bound(2, 299, 0.95), rel=1e-13)
    assert "tails" in found.method
    worst = make_plan("curtailed", 1e-3, accept_errors=2)
    worst.advance(stretch(0, 1000, [1, 2, 3]))
    assert worst.bounds().upper == 1.0


def test_readings_without_positions_are_decided_at_their_ends(stretch) -> None:
    plan = make_plan("fixed", 1e-3, accept_errors=1)
    assert plan.advance_count(4000, 1) is None
    decision = plan.advance_count(1000, 0)
    assert decision is not None
    assert (decision.accepted, decision.compared_bits, decision.exact) == (True, 5000, False)
    risks = plan.risks_as_run()
    assert risks is not None
    assert risks.consumer < plan.consumer_risk
    assert risks.producer > plan.producer_risk
    plan = make_plan("fixed", 1e-3, accept_errors=1)
    decision = plan.advance_count(4742, 1)
    assert decision is not None
    assert decision.exact
    plan = make_plan("curtailed", 1e-3, accept_errors=1)
    assert plan.advance(stretch(0, 1000, [3], known=False)) is None
    decision = plan.advance(stretch(1000, 500, [7, 9], known=False))
    assert decision is not None
    assert (decision.accepted, decision.compared_bits, decision.errors) == (False, 1500, 3)
    assert not decision.exact
    assert make_plan("fixed", 1e-3).risks_as_run() is None


def test_bounds_of_a_reading_that_rejected_equal_sums_over_all_ways(binomial_tail) -> None:
    """First reading of 40 bits with at most 2 errors, then one of 60 that brings 7 in all."""
    from math import comb

    plan = make_plan("curtailed", 0.02, accept_errors=2)
    plan.advance_count(40, 2)
    decision = plan.advance_count(60, 5)
    assert decision is not None
    assert not decision.accepted

    def exactly(k: int, n: int, p: float) -> float:
        return comb(n, k) * p**k * (1 - p) ** (n - k)

    def from_it(p: float) -> float:
        earlier = 1 - sum(exactly(k, 40, p) for k in range(3))
        return earlier + sum(
            exactly(k, 40, p) * exactly(j, 60, p) for k in range(3) for j in range(61) if k + j >= 7
        )

    def up_to(p: float) -> float:
        return sum(exactly(k, 40, p) * exactly(j, 60, p) for k in range(3) for j in range(61) if k + j <= 7)

    found = plan.bounds(0.9)
    assert from_it(found.lower) == pytest.approx(0.05, rel=1e-9)
    assert up_to(found.upper) == pytest.approx(0.05, rel=1e-9)


@pytest.mark.parametrize("kind", ["fixed", "curtailed"])
@pytest.mark.parametrize("accepts", [0, 2])
def test_bounds_cover_at_ten_true_ratios(bit_by_bit, stretch, kind: str, accepts: int) -> None:
    ber, confidence = 0.04, 0.9
    made = make_plan(kind, ber, confidence, accepts)
    n = made.bits
    if kind == "fixed":
        outcomes = [(0, k) for k in range(n + 1)]
    else:
        outcomes = [(n, k) for k in range(accepts + 1)] + [
            (t, accepts + 1) for t in range(accepts + 1, n + 1)
        ]
    intervals = {}
    for bit, errors in outcomes:
        plan = make_plan(kind, ber, confidence, accepts)
        if kind == "fixed":
            decision = plan.advance(stretch(0, n, range(1, errors + 1)))
        else:
            rejected = errors > accepts
            decision = plan.advance(
                stretch(0, n, [*range(1, errors), bit] if rejected else range(1, errors + 1))
            )
        assert decision is not None
        intervals[bit, errors] = plan.bounds()
    rows = [Boundary(k, n, None) for k in range(accepts + 1)] + [Boundary(accepts + 1, n, n)]
    never = [Boundary(k, n, None) for k in range(n + 1)]
    for true in (0.002, 0.01, 0.02, 0.03, 0.04, 0.05, 0.08, 0.15, 0.3, 0.6):
        ways = bit_by_bit(never if kind == "fixed" else rows, true, n).outcomes
        covered = under = over = 0.0
        for (_, bit, errors), chance in ways.items():
            found = intervals[0 if kind == "fixed" else bit, errors]
            covered += chance * (found.lower <= true <= found.upper)
            under += chance * (found.upper < true)
            over += chance * (found.lower > true)
        assert covered >= confidence - 1e-12, true
        assert max(under, over) <= (1 - confidence) / 2 + 1e-12, true


@pytest.mark.parametrize(
    ("settings_", "word", "advice"),
    [
        ({"ber": 0.0}, "outside 0 to 1", "1e-6"),
        ({"ber": 1.0}, "outside 0 to 1", "1e-6"),
        ({"ber": float("nan")}, "outside 0 to 1", "1e-6"),
        ({"confidence": 95.0}, "outside 0 to 1", "0.95"),
        ({"margin": 1.0}, "leaves good and bad units alike", "more than 1"),
        ({"margin": float("inf")}, "leaves good and bad units alike", "more than 1"),
        ({"producer_risk": 0.0}, "producer's risk", "0.05"),
        ({"accept_errors": -1}, "cannot accept", "whole number"),
        ({"kind": "wald"}, "no plan named", "sequential"),
        ({"kind": "sequential", "confidence": 0.4, "producer_risk": 0.5}, "nothing to decide", "confidence"),
        ({"kind": "sequential", "margin": 1.01}, "takes more than", "larger margin"),
        ({"kind": "sequential", "ber": 1e-30, "margin": 1e300}, "no errors at all", "smaller margin"),
    ],
)
def test_plans_that_cannot_be_are_refused_with_advice(settings_, word: str, advice: str) -> None:
    with pytest.raises(PlanError, match=word) as caught:
        make_plan(**{"kind": "fixed", "ber": 1e-6, **settings_})
    assert advice in caught.value.advice
    assert "\n" not in caught.value.what + caught.value.advice


def test_a_segment_that_contradicts_itself_is_refused(stretch) -> None:
    plan = make_plan("curtailed", 1e-3)
    wrong = Segment(0, Tally(100, 100, 0, 2, 0, 2), True, 0, positions=np.array([5], dtype=np.int64))
    with pytest.raises(ValueError, match="contradict"):
        plan.advance(wrong)
    outside = Segment(10, Tally(100, 100, 0, 1, 0, 1), True, 0, positions=np.array([5], dtype=np.int64))
    with pytest.raises(ValueError, match="contradict"):
        plan.advance(outside)
    with pytest.raises(ValueError, match="cannot hold"):
        plan.advance_count(3, 4)
    assert (plan.compared_bits, plan.errors) == (0, 0)


@pytest.mark.campaign
@pytest.mark.parametrize("kind", ["fixed", "curtailed", "sequential"])
def test_bounds_cover_in_simulated_runs_at_ten_true_ratios(stretch, kind: str) -> None:
    """Not more than three standard errors under nominal; by chance one in 25 of the 30 cases together."""
    ber, runs = 1e-6, 400
    for i, times in enumerate((0.02, 0.1, 0.2, 0.35, 0.5, 0.75, 1.0, 1.5, 3.0, 20.0)):
        rng = np.random.default_rng(100 + i)
        true, covered = ber * times, 0
        for _ in range(runs):
            plan = ready_plan(kind, ber, 0.95, 3, 0.1)
            places = np.cumsum(rng.geometric(true, 100 + int(3 * true * plan.longest_bits)))
            places = places[places <= plan.longest_bits]
            assert plan.advance(stretch(0, plan.longest_bits, places)) is not None
            found = plan.bounds()
            covered += found.lower <= true <= found.upper
        assert covered / runs >= 0.95 - 3 * (0.95 * 0.05 / runs) ** 0.5, times
