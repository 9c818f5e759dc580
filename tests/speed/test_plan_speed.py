"""How long a sequential plan takes to be found, and a bound to be computed, beside SciPy's own quantile."""

from __future__ import annotations

import time
from collections.abc import Callable

import pytest
from scipy import stats

from harness.statistics.bounds import upper_bound
from harness.statistics.plans import make_plan


def seconds(work: Callable[[], object], times: int) -> float:
    work()
    start = time.perf_counter()
    for _ in range(times):
        work()
    return (time.perf_counter() - start) / times


def test_bounds_beside_scipys(capsys: pytest.CaptureFixture[str]) -> None:
    ours = seconds(lambda: upper_bound(12, 10**9, 0.95), 50)
    theirs = seconds(lambda: stats.binomtest(12, 10**9).proportion_ci(0.95, "exact"), 50)
    with capsys.disabled():
        print(
            f"\nan upper bound: {ours * 1e3:.2f} ms, {ours / theirs:.2f} of scipy's binomtest in the same run"
        )


@pytest.mark.parametrize(("margin", "risk"), [(1.3, 0.01), (1.3, 0.1), (2.0, 0.05), (10.0, 0.1)])
def test_finding_a_sequential_plan(capsys: pytest.CaptureFixture[str], margin: float, risk: float) -> None:
    yardstick = seconds(lambda: stats.binomtest(12, 10**9).proportion_ci(0.95, "exact"), 20)
    plan = None

    def find() -> None:
        nonlocal plan
        plan = make_plan("sequential", 1e-6, 1 - risk, margin=margin, producer_risk=risk)

    took = seconds(find, 1)
    assert plan is not None
    with capsys.disabled():
        print(
            f"\nsequential plan, margin {margin:g}, risks {risk:g}: {took:.3f} s, "
            f"{took / yardstick:.0f} of scipy's exact intervals"
        )
