"""The sequential plan: risks, stairs and bounds against one-bit-at-a-time sums and against simulation."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import lru_cache
from itertools import pairwise, product

import numpy as np
import pytest

from harness.statistics.bounds import bits_needed, clopper_pearson
from harness.statistics.plans import Boundary, make_plan
from harness.statistics.plans.recursion import Stairs, corners, walk
from harness.statistics.plans.sequential import SequentialPlan
from harness.statistics.plans.solve import Aim, aim_at, exact_risks, find_stairs

SMALL = (0.05, 0.9, 3.0, 0.1)  # ber, confidence, margin, producer's risk: ends within a few hundred bits


@lru_cache
def small_stairs() -> Stairs:
    return SequentialPlan(*SMALL).stairs


def small_plan() -> SequentialPlan:
    return SequentialPlan(*SMALL, stairs=small_stairs())


def test_the_table_of_boundaries_says_all_that_its_words_promise() -> None:
    plan = make_plan("sequential", 1e-6)
    rows = plan.boundaries
    assert [row.errors for row in rows] == list(range(len(rows)))
    assert all(row.accept_at <= plan.longest_bits for row in rows)
    assert rows[-1].reject_at == plan.longest_bits == plan.bits == plan.cut_compared
    assert rows[0].reject_at is None
    assert plan.positions_needed == rows[-1].errors
    assert plan.accept_errors is None
    for before, row in pairwise(rows):
        assert row.accept_at >= before.accept_at
        assert (row.reject_at or 0) >= (before.reject_at or 0)
        assert row.reject_at is None or row.reject_at >= row.errors
        assert row.reject_at is None or row is rows[-1] or row.reject_at < row.accept_at
    assert plan.longest_bits == 2 * aim_at(1e-6, 0.95, 2.0, 0.05).fixed_bits


@pytest.mark.parametrize("true", [0.001, 0.05 / 3, 0.03, 0.05, 0.1, 0.4, 0.9])
def test_chances_equal_those_bit_by_bit(bit_by_bit, true: float) -> None:
    plan = small_plan()
    exact = bit_by_bit(plan.boundaries, true)
    assert exact.open == {}
    assert plan.acceptance_probability(true) == pytest.approx(exact.chance(True), abs=1e-13)
    assert plan.rejection_probability(true) == pytest.approx(exact.chance(False), abs=1e-13)
    assert plan.expected_bits(true) == pytest.approx(exact.mean_bits, rel=1e-11)
    for point in (*plan.stopping_distribution(true), *plan.stopping_distribution(true, [1, 30, 77, 9999])):
        assert point.accepted == pytest.approx(exact.chance(True, point.bits), abs=1e-13)
        assert point.rejected == pytest.approx(exact.chance(False, point.bits), abs=1e-13)


def test_both_risks_are_those_bit_by_bit_and_never_above_those_asked_for(bit_by_bit) -> None:
    for ber, confidence, margin, producer in [SMALL, (0.3, 0.8, 2.0, 0.2), (0.1, 0.95, 5.0, 0.05)]:
        plan = SequentialPlan(ber, confidence, margin, producer)
        assert plan.consumer_risk == pytest.approx(bit_by_bit(plan.boundaries, ber).chance(True), abs=1e-13)
        good = bit_by_bit(plan.boundaries, ber / margin)
        assert plan.producer_risk == pytest.approx(good.chance(False), abs=1e-13)
        assert plan.consumer_risk <= 1 - confidence
        assert plan.producer_risk <= producer


def test_certain_and_impossible_errors_have_certain_ends() -> None:
    plan = small_plan()
    assert (plan.acceptance_probability(0.0), plan.rejection_probability(0.0)) == (1.0, 0.0)
    assert (plan.acceptance_probability(1.0), plan.rejection_probability(1.0)) == (0.0, 1.0)
    assert plan.expected_bits(0.0) == plan.boundaries[0].accept_at
    rejected_at = next(row.errors for row in plan.boundaries if row.reject_at)
    assert plan.expected_bits(1.0) == rejected_at


def test_stairs_that_were_tampered_with_are_noticed(bit_by_bit) -> None:
    """Moving any one corner moves a true risk: a plan that stated the old one would be found out."""
    stairs = small_stairs()
    told = exact_risks(stairs, aim_at(*SMALL))
    for k in range(stairs.last - 1):
        accept = list(stairs.accept_at)
        accept[k] -= 5
        if k and accept[k] < accept[k - 1]:
            continue
        moved = small_plan()
        moved.stairs = Stairs(tuple(accept), stairs.reject_at)
        moved._corners = corners(moved.stairs)
        risk = moved.acceptance_probability(SMALL[0])
        assert risk > told[0]
        assert risk == pytest.approx(bit_by_bit(moved.boundaries, SMALL[0]).chance(True), abs=1e-13)


@pytest.mark.parametrize(
    ("accept", "reject", "word"),
    [
        ((5, 9), (0, 0), "one corner"),
        ((5, 9), (0, 0, 8), "one corner"),
        ((5, 9), (3, 3, 9), "one corner"),
        ((9, 5), (0, 0, 5), "climb"),
        ((5, 9, 20), (0, 8, 7, 20), "climb"),
        ((5, 9), (0, 9, 9), "beyond"),
        ((), (0,), "one corner"),
    ],
)
def test_stairs_that_cannot_be_are_refused(accept, reject, word: str) -> None:
    with pytest.raises(ValueError, match=word):
        Stairs(accept, reject)


def walds_bounds(aim: Aim) -> tuple[float, float]:
    """Wald's lower bounds on the mean errors-in-time at the bad and the good unit, in 1 / the bad ratio."""
    a, b, margin = aim.producer, aim.consumer, aim.bad / aim.good
    log, rest = math.log(margin), 1 - 1 / margin
    at_bad = ((1 - b) * math.log((1 - b) / a) + b * math.log(b / (1 - a))) / (log - rest)
    at_good = ((1 - a) * math.log((1 - a) / b) + a * math.log(a / (1 - b))) / (rest - log / margin)
    return at_bad, at_good


def check_against_wald(ber: float, margin: float, consumer: float, producer: float) -> None:
    aim = aim_at(ber, 1 - consumer, margin, producer)
    plan = SequentialPlan(ber, 1 - consumer, margin, producer)
    assert plan.consumer_risk <= consumer
    assert plan.producer_risk <= producer
    if aim.fixed_accepts == 0:  # a step of one error is too large to meet both risks
        assert plan.consumer_risk == pytest.approx(consumer, abs=0.001)
        assert plan.producer_risk < producer
        assert "whole numbers" in plan.remarks[0]
        return
    assert plan.consumer_risk == pytest.approx(consumer, abs=0.001)
    assert plan.producer_risk == pytest.approx(producer, abs=0.001)
    assert plan.remarks == ()
    assert plan.longest_bits == 2 * aim.fixed_bits
    at_bad, at_good = walds_bounds(aim)
    # Beyond 2.5 one error is a long step and overshoots, most where one error is all that the fixed plan takes.
    limit = 1.05 if margin <= 2.5 else 1.14 if aim.fixed_accepts > 1 else 1.30
    # The bounds are Wald's for continuous time; on bits they move by the order of the ratio.
    assert 1 - 10 * ber <= plan.expected_bits(ber) * ber / at_bad <= limit, aim
    assert 1 - 10 * ber <= plan.expected_bits(ber / margin) * ber / at_good <= limit, aim


@pytest.mark.parametrize("margin", [1.5, 2.0, 2.5, 4.0, 10.0])
def test_true_risks_are_those_asked_for_and_lengths_near_walds_bound(margin: float) -> None:
    for consumer, producer in product((0.02, 0.1, 0.3), repeat=2):
        check_against_wald(1e-6, margin, consumer, producer)


@pytest.mark.campaign
@pytest.mark.parametrize("ber", [1e-3, 1e-6, 1e-17])
@pytest.mark.parametrize("margin", [1.3, 1.5, 1.7, 2.0, 2.5, 3.0, 4.0, 5.0, 7.0, 10.0])
def test_the_whole_grid_of_margins_and_risks(margin: float, ber: float) -> None:
    for consumer, producer in product((0.01, 0.02, 0.05, 0.1, 0.2, 0.3), repeat=2):
        check_against_wald(ber, margin, consumer, producer)


@pytest.mark.parametrize("ber", [0.01, 0.1, 0.5, 0.9])
def test_risks_are_never_above_those_asked_for_where_errors_are_common(ber: float) -> None:
    for margin, consumer, producer in product((2.0, 4.0), (0.05, 0.3), (0.1, 0.3)):
        aim = aim_at(ber, 1 - consumer, margin, producer)
        risks = exact_risks(find_stairs(aim), aim)
        # A risk may lie exactly on the one asked for, give or take a double's last digit.
        assert risks[0] <= consumer * (1 + 1e-14)
        assert risks[1] <= producer * (1 + 1e-14)


def simulate(plan: SequentialPlan, ber: float, runs: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Runs of errors with geometric gaps, each followed to its end; gives accepted and bits."""
    rng = np.random.default_rng(seed)
    accepted, ended = np.zeros(runs, bool), np.zeros(runs, dtype=np.int64)
    running, at = np.arange(runs), np.zeros(runs, dtype=np.int64)
    rows = plan.boundaries
    for k, row in enumerate(rows[:-1]):
        at = at + rng.geometric(ber, len(running))
        passes = at > row.accept_at  # the next error comes too late
        accepted[running[passes]], ended[running[passes]] = True, row.accept_at
        fails = ~passes & (at <= (rows[k + 1].reject_at or 0))
        ended[running[fails]] = at[fails]
        # An error on the very bit at which its own count is accepted ends the run there.
        running, at = running[~passes & ~fails], at[~passes & ~fails]
    assert len(running) == 0
    return accepted, ended


@pytest.mark.parametrize("which", ["requirement", "good"])
def test_a_million_simulated_runs_agree_within_their_own_error(which: str) -> None:
    plan = make_plan("sequential", 1e-6, margin=3.0)
    ber = plan.ber if which == "requirement" else plan.good_ber
    runs = 1_000_000
    accepted, bits = simulate(plan, ber, runs, seed=5)
    exact = plan.acceptance_probability(ber)
    # Four standard errors: by chance one in 16 000.
    assert abs(accepted.mean() - exact) < 4 * math.sqrt(exact * (1 - exact) / runs)
    assert abs(bits.mean() - plan.expected_bits(ber)) < 4 * bits.std() / math.sqrt(runs)
    for point in plan.stopping_distribution(ber)[::6]:
        share = (accepted & (bits <= point.bits)).mean()
        assert abs(share - point.accepted) < 4 * math.sqrt(max(1e-6, point.accepted) / runs) + 1e-9
        share = (~accepted & (bits <= point.bits)).mean()
        assert abs(share - point.rejected) < 4 * math.sqrt(max(1e-6, point.rejected) / runs) + 1e-9


def decided(accepted: bool, bit: int, errors: int, stretch) -> SequentialPlan:
    """A plan brought to an outcome: the errors before the last one lie where they cannot end it."""
    plan = small_plan()
    rows = plan.boundaries
    places = []
    for k in range(1, errors + 1):
        if not accepted and k == errors:
            places.append(bit)
        else:
            places.append(max((rows[k].reject_at or 0) + 1, places[-1] + 1 if places else 1))
    decision = plan.advance(stretch(0, bit, places))
    assert decision is not None, (accepted, bit, errors, places)
    assert (decision.accepted, decision.compared_bits, decision.errors) == (accepted, bit, errors)
    return plan


def in_order(outcome: tuple[bool, int, int]) -> tuple[int, int, int]:
    """From low to high ratios."""
    accepted, bit, errors = outcome
    return (0, bit, errors) if accepted else (1, -bit, errors)


def test_bounds_after_a_stop_are_where_the_tails_of_the_order_equal_the_risk(bit_by_bit, stretch) -> None:
    outcomes = sorted(bit_by_bit(small_plan().boundaries, 0.04).outcomes, key=in_order)
    for i in range(0, len(outcomes), 17):
        found = decided(*outcomes[i], stretch).bounds(0.9)
        if found.upper < 1:
            ways = bit_by_bit(small_plan().boundaries, found.upper).outcomes
            assert sum(ways.get(o, 0.0) for o in outcomes[: i + 1]) == pytest.approx(0.05, abs=1e-11)
        if found.lower > 0:
            ways = bit_by_bit(small_plan().boundaries, found.lower).outcomes
            assert sum(ways.get(o, 0.0) for o in outcomes[i:]) == pytest.approx(0.05, abs=1e-11)
    lowest, highest = decided(*outcomes[0], stretch).bounds(), decided(*outcomes[-1], stretch).bounds()
    assert (lowest.lower, highest.upper) == (0.0, 1.0)


def test_bounds_cover_at_ten_true_ratios_while_clopper_pearson_does_not(bit_by_bit, stretch) -> None:
    outcomes = sorted(bit_by_bit(small_plan().boundaries, 0.04).outcomes, key=in_order)
    bounds = {o: decided(*o, stretch).bounds(0.9) for o in outcomes}
    uppers = [bounds[o].upper for o in outcomes]
    lowers = [bounds[o].lower for o in outcomes]
    assert uppers == sorted(uppers)
    assert lowers == sorted(lowers)
    naive = {o: clopper_pearson(o[2], o[1], 0.9) for o in outcomes}
    worst = 1.0
    for true in (0.002, 0.01, 0.0167, 0.025, 0.035, 0.05, 0.07, 0.12, 0.3, 0.6):
        ways = bit_by_bit(small_plan().boundaries, true).outcomes
        covered = sum(c for o, c in ways.items() if bounds[o].lower <= true <= bounds[o].upper)
        assert covered >= 0.9 - 1e-12, true
        for side in (
            sum(c for o, c in ways.items() if bounds[o].upper < true),
            sum(c for o, c in ways.items() if bounds[o].lower > true),
        ):
            assert side <= 0.05 + 1e-12, true
        worst = min(worst, sum(c for o, c in ways.items() if naive[o].lower <= true <= naive[o].upper))
    assert worst < 0.88  # what the count alone would claim, and not keep


def test_decision_and_deciding_bound_are_the_same_statement(bit_by_bit, stretch) -> None:
    for outcome in bit_by_bit(small_plan().boundaries, 0.04).outcomes:
        plan = decided(*outcome, stretch)
        deciding = plan.bounds().deciding
        assert deciding is not None
        if outcome[0]:
            assert (deciding.side, deciding.confidence) == ("upper", 0.9)
            assert deciding.value <= plan.ber
        else:
            assert (deciding.side, deciding.confidence) == ("lower", 0.9)
            assert deciding.value >= plan.good_ber


@pytest.mark.parametrize("true", [2e-7, 5e-7, 1e-6, 3e-6])
def test_bounds_cover_in_simulated_runs_of_a_real_plan(true: float, stretch) -> None:
    """Fixed-seed runs; not more than three standard errors under nominal."""
    made = make_plan("sequential", 1e-6, margin=3.0, producer_risk=0.1)
    assert isinstance(made, SequentialPlan)
    rng = np.random.default_rng(int(true * 1e9))
    runs, covered = 300, 0
    for _ in range(runs):
        plan = SequentialPlan(1e-6, 0.95, 3.0, 0.1, stairs=made.stairs)
        places = np.cumsum(rng.geometric(true, 200))
        places = places[places <= plan.longest_bits]
        assert plan.advance(stretch(0, plan.longest_bits, places)) is not None
        found = plan.bounds()
        covered += found.lower <= true <= found.upper
    assert covered / runs >= 0.95 - 3 * math.sqrt(0.95 * 0.05 / runs)


def test_a_limit_fixed_beforehand_leaves_bounds_that_cover(bit_by_bit, stretch) -> None:
    rows, limit = small_plan().boundaries, 90
    ways = bit_by_bit(rows, 0.04, limit)
    undecided = {}
    for errors in ways.open:
        plan = small_plan()
        places = []
        for k in range(1, errors + 1):
            places.append(max((rows[k].reject_at or 0) + 1, places[-1] + 1 if places else 1))
        assert plan.advance(stretch(0, limit, places)) is None
        undecided[errors] = plan.bounds(0.9, ended="limit")
        assert undecided[errors].deciding is None
        assert undecided[errors].remarks == ()
        assert "stop was chosen" in plan.bounds(0.9, ended="operator").remarks[0]
    decided_bounds = {o: decided(*o, stretch).bounds(0.9) for o in ways.outcomes}
    for true in (0.005, 0.02, 0.03, 0.04, 0.05, 0.08, 0.2):
        exact = bit_by_bit(rows, true, limit)
        covered = sum(
            c for o, c in exact.outcomes.items() if decided_bounds[o].lower <= true <= decided_bounds[o].upper
        )
        covered += sum(c for k, c in exact.open.items() if undecided[k].lower <= true <= undecided[k].upper)
        assert covered >= 0.9 - 1e-12, true


def test_before_anything_is_compared_nothing_is_known() -> None:
    found = small_plan().bounds()
    assert (found.lower, found.upper, found.deciding) == (0.0, 1.0, None)


def test_looking_again_and_again_at_an_upper_bound_has_three_times_the_risk() -> None:
    """Stopping when a 95 % bound dips under the requirement, with at most so many errors: common practice."""
    ber = 1e-6
    for most, risk in [(0, 0.05), (2, 0.094), (10, 0.16), (50, 0.25)]:
        dips = tuple(bits_needed(ber, 0.95, k) for k in range(most + 1))
        habit = Stairs(dips, (*(0,) * (most + 1), dips[-1]))
        assert walk(corners(habit), ber).acceptance == pytest.approx(risk, abs=0.005), most
    three_tries = 1 - 0.95**3
    assert three_tries == pytest.approx(0.14, abs=0.005)


def test_a_boundary_that_lies_about_a_risk_is_a_defect_and_not_a_pass(stretch) -> None:
    stairs = small_stairs()
    cheap = Stairs((stairs.accept_at[0] // 3, *stairs.accept_at[1:]), stairs.reject_at)
    plan = SequentialPlan(*SMALL, stairs=cheap)
    assert plan.advance(stretch(0, 100, [])) is not None
    with pytest.raises(ArithmeticError, match="contradicts"):
        plan.bounds()


def test_boundary_rows_are_plain_data() -> None:
    row = Boundary(1, 20, None)
    assert replace(row, reject_at=4) == Boundary(1, 20, 4)
