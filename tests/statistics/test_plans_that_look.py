"""Plans whose counts show at readings' ends only: decisions, risks and bounds against an oracle bit by bit.

The oracle knows a set of bits at which the count is seen, and nothing of stretches, corners or walks.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.record import Segment, Tally
from harness.statistics.bounds import upper_bound
from harness.statistics.plans import Plan, make_plan
from harness.statistics.plans.recursion import Stairs
from harness.statistics.plans.sequential import SequentialPlan

SMALL = (0.05, 0.9, 3.0, 0.1)
Outcome = tuple[bool, int, int]


@lru_cache
def small_stairs() -> Stairs:
    return SequentialPlan(*SMALL).stairs


def small_plan() -> SequentialPlan:
    return SequentialPlan(*SMALL, stairs=small_stairs())


@dataclass(frozen=True)
class Seen:
    """The rule at each bit that is seen: counts up to the first accepted, from the second on rejected."""

    limits: dict[int, tuple[int, int]]
    chances: dict[Outcome, float]
    still: dict[int, float]


def oracle(seen: list[int], ber: float, limits: dict[int, tuple[int, int]] | None = None) -> Seen:
    """Go bit by bit; without `limits` find which counts are admitted, holding the risk at `ber` to 0.1."""
    accept_at, reject_at = small_stairs().accept_at, small_stairs().reject_at
    last, longest = len(accept_at), accept_at[-1]
    found: dict[int, tuple[int, int]] = {}
    chances: dict[Outcome, float] = {}
    still = np.zeros(seen[-1] + 2)
    still[0] = 1.0
    spent, allowed = 0.0, -1
    for bit in range(1, seen[-1] + 1):
        still[1:] = still[1:] * (1 - ber) + still[:-1] * ber
        still[0] *= 1 - ber
        if bit not in seen:
            continue
        may = sum(a <= bit for a in accept_at) - 1
        must = min([k for k in range(1, last + 1) if reject_at[k] >= bit], default=last)
        if limits is None:
            top = -1
            if may > allowed:
                for k in range(may + 1):
                    if still[k] == 0:
                        top = k if top == k - 1 else top
                        continue
                    if spent + still[k] > 0.1:
                        break
                    spent, top = spent + still[k], k
            if bit >= longest:
                must = top + 1
            found[bit] = (top, must)
            allowed = max(allowed, may)
        else:
            top, must = limits[bit]
        for k in np.flatnonzero(still):
            if k <= top or k >= must:
                chances[bool(k <= top), bit, int(k)] = float(still[k])
                still[k] = 0.0
        if bit >= longest:
            break
    return Seen(limits or found, chances, {int(k): float(still[k]) for k in np.flatnonzero(still)})


def in_order(outcome: Outcome) -> tuple[int, int, int]:
    accepted, bit, errors = outcome
    return (0, bit, errors) if accepted else (1, -bit, errors)


def seen_bits(stretches: list[tuple[int, bool]]) -> list[int]:
    """Every bit of a known stretch, the last one of an unknown one."""
    bits, at = [], 0
    for length, known in stretches:
        bits += range(at + 1, at + length + 1) if known else [at + length]
        at += length
    return bits


def drive(plan: Plan, stretches: list[tuple[int, bool]], wrong: np.ndarray) -> None:
    """Hand a run's stretches to a plan; `wrong` are the bits in error, from 1."""
    at = 0
    for length, known in stretches:
        here = wrong[(wrong > at) & (wrong <= at + length)].astype(np.int64) - 1
        tally = Tally(length, length, 0, len(here), 0, len(here))
        shown = here if known else here[:0]
        segment = Segment(
            at,
            tally,
            True,
            0,
            positions=shown,
            ones_lost=np.zeros(len(shown), bool),
            positions_complete=known,
        )
        if plan.advance(segment) is not None:
            return
        at += length


def full(stretches: list[tuple[int, bool]], rest: int) -> list[tuple[int, bool]]:
    """Go on in unknown stretches until beyond the plan's end."""
    done = sum(length for length, _ in stretches)
    need = max(1, -(-(small_stairs().longest + 1 - done) // rest))
    return [*stretches, *[(rest, False)] * need]


stretches_of_a_run = st.lists(st.tuples(st.integers(1, 120), st.booleans()), max_size=6)


@given(stretches_of_a_run, st.integers(20, 200), st.floats(0.005, 0.12), st.integers(0, 2**32))
@settings(max_examples=60, deadline=None)
def test_any_mixture_of_known_and_unknown_stretches_is_decided_as_the_oracle_does(
    some, rest: int, true: float, seed: int
) -> None:
    stretches = full(some, rest)
    rule = oracle(seen_bits(stretches), SMALL[0])
    total = sum(length for length, _ in stretches)
    wrong = np.flatnonzero(np.random.default_rng(seed).random(total) < true) + 1
    plan = small_plan()
    drive(plan, stretches, wrong)
    for bit, (top, must) in rule.limits.items():
        errors = int((wrong <= bit).sum())
        if errors <= top or errors >= must:
            assert plan.decision is not None
            decided = plan.decision
            assert (decided.accepted, decided.compared_bits, decided.errors) == (errors <= top, bit, errors)
            break
    found = plan.bounds()
    assert found.deciding is not None
    if plan.decision is not None and plan.decision.accepted:
        assert found.deciding.value <= plan.ber


@given(stretches_of_a_run, st.integers(40, 200), st.floats(0.005, 0.12), st.integers(0, 2**32))
@settings(max_examples=25, deadline=None)
def test_bounds_after_any_mixture_are_where_the_oracles_tails_equal_the_risk(
    some, rest: int, true: float, seed: int
) -> None:
    stretches = full(some, rest)
    seen = seen_bits(stretches)
    rule = oracle(seen, SMALL[0]).limits
    total = sum(length for length, _ in stretches)
    wrong = np.flatnonzero(np.random.default_rng(seed).random(total) < true) + 1
    plan = small_plan()
    drive(plan, stretches, wrong)
    decided, found = plan.decision, plan.bounds(0.9)
    assert decided is not None
    me = in_order((decided.accepted, decided.compared_bits, decided.errors))
    if found.upper < 1:
        ways = oracle(seen, found.upper, rule).chances
        assert sum(c for o, c in ways.items() if in_order(o) <= me) == pytest.approx(0.05, abs=1e-10)
    if found.lower > 0:
        ways = oracle(seen, found.lower, rule).chances
        assert sum(c for o, c in ways.items() if in_order(o) >= me) == pytest.approx(0.05, abs=1e-10)


@pytest.mark.parametrize("step", [1, 7, 25, 60, 150, 1000])
def test_risks_for_looks_equal_the_oracles_and_hold_the_consumers(step: int) -> None:
    plan = small_plan()
    looks = list(range(step, plan.longest_bits + step, step))
    rule = oracle(looks, plan.ber)
    good = oracle(looks, plan.good_ber, rule.limits)
    risks = plan.risks_for_looks(looks)
    assert risks.consumer == pytest.approx(sum(c for o, c in rule.chances.items() if o[0]), abs=1e-12)
    assert risks.producer == pytest.approx(sum(c for o, c in good.chances.items() if not o[0]), abs=1e-12)
    assert risks.consumer <= 0.1
    assert (risks.undecided_at_requirement, risks.undecided_at_good) == (0.0, 0.0)
    if step == 1:
        assert risks.consumer == pytest.approx(plan.consumer_risk, abs=1e-13)
        assert risks.producer == pytest.approx(plan.producer_risk, abs=1e-13)


def test_looks_that_end_too_early_leave_it_undecided() -> None:
    plan = small_plan()
    risks = plan.risks_for_looks([30, 60])
    still = oracle([30, 60], plan.ber).still
    assert risks.undecided_at_requirement == pytest.approx(sum(still.values()), abs=1e-13)
    assert 0 < risks.undecided_at_good < 1
    nothing = plan.risks_for_looks([])
    assert (nothing.consumer, nothing.undecided_at_requirement) == (0.0, 1.0)
    fixed, curtailed = make_plan("fixed", 0.05), make_plan("curtailed", 0.05)
    assert fixed.risks_for_looks([10, 20]).undecided_at_requirement == 1.0
    assert curtailed.risks_for_looks([10, 20]).undecided_at_requirement == pytest.approx(0.95**20)
    assert curtailed.risks_for_looks([10, 20]).producer == pytest.approx(1 - 0.975**20)


@pytest.mark.parametrize("kind", ["fixed", "curtailed"])
def test_looks_beyond_the_length_are_counted_at_the_look(kind: str) -> None:
    plan = make_plan(kind, 0.05, accept_errors=1, margin=4.0)
    risks = plan.risks_for_looks([plan.bits - 1, plan.bits + 9])
    assert upper_bound(1, plan.bits + 9, 1 - risks.consumer) == pytest.approx(0.05, rel=1e-9)
    assert risks.consumer < plan.consumer_risk


def test_without_admission_rare_looks_would_break_the_consumers_risk() -> None:
    """The reason for it: rejections that nobody sees let more bad units through to the accepting stair."""
    stairs, plan = small_stairs(), small_plan()
    worst: tuple[float, list[int]] = (0.0, [])
    for first in range(5, stairs.longest, 5):
        for step in (1, 5, 40):
            looks = [*range(first, stairs.longest, step), stairs.longest]
            free = {}
            allowed = -1
            for bit in looks:
                may = stairs.acceptable(bit)
                top = may if may > allowed else -1
                allowed = max(allowed, may)
                free[bit] = (top, stairs.rejectable(bit) if bit < stairs.longest else top + 1)
            ways = oracle(looks, SMALL[0], free).chances
            worst = max(worst, (sum(c for o, c in ways.items() if o[0]), looks))
            assert plan.risks_for_looks(looks).consumer <= 0.1
    assert worst[0] > 0.1005
    held = oracle(worst[1], SMALL[0])
    assert plan.risks_for_looks(worst[1]).consumer == pytest.approx(
        sum(c for o, c in held.chances.items() if o[0]), abs=1e-12
    )


def test_bounds_cover_under_looks() -> None:
    looks = list(range(40, small_stairs().longest + 40, 40))
    rule = oracle(looks, SMALL[0]).limits
    truths = (0.002, 0.01, 0.02, 0.03, 0.04, 0.05, 0.07, 0.1, 0.2, 0.5)
    chances = {true: oracle(looks, true, rule).chances for true in truths}
    # Outcomes that never come up are left out, and count as not covered.
    common = {o for ways in chances.values() for o, c in ways.items() if c > 1e-6}
    bounds = {o: small_bounds(o, looks, rule) for o in common}
    for true, ways in chances.items():
        covered = sum(c for o, c in ways.items() if o in bounds and bounds[o][0] <= true <= bounds[o][1])
        assert covered >= 0.9, true


def small_bounds(outcome: Outcome, looks: list[int], rule: dict[int, tuple[int, int]]) -> tuple[float, float]:
    """Bring a plan to an outcome by readings that stay undecided until then."""
    _, bit, errors = outcome
    plan, before, so_far = small_plan(), 0, 0
    for look in looks:
        if look == bit:
            plan.advance_count(look - before, errors - so_far)
            break
        # Enough errors to pass no accepting limit, and room for what has to be reached by the end.
        top, must = rule[look]
        count = min(errors, must - 1, so_far + (look - before))
        assert count > top
        plan.advance_count(look - before, count - so_far)
        before, so_far = look, count
    assert plan.decision is not None
    assert (plan.decision.compared_bits, plan.decision.errors) == (bit, errors)
    found = plan.bounds(0.9)
    return found.lower, found.upper


def test_risks_as_run_go_on_at_the_readings_that_were_taken() -> None:
    plan = small_plan()
    for _ in range(4):
        assert plan.advance_count(25, 1) is None
    looks = [25 * i for i in range(1, plan.longest_bits // 25 + 2)]
    assert plan.risks_as_run() == plan.risks_for_looks(looks)


def test_a_day_of_readings_is_followed_without_delay() -> None:
    """86 400 readings of a second each at 2 Mbit/s: looks in which nothing can change are not walked."""
    plan = make_plan("sequential", 1e-10)
    for _ in range(86_400):
        if plan.advance_count(2_000_000, 0) is not None:
            break
    assert plan.decision is not None
    assert plan.decision.accepted
    assert plan.decision.compared_bits < plan.boundaries[0].accept_at + 2_000_000
    assert plan.bounds().upper < 1e-10
