"""What is still to do and until when: forecast from the plan, the profile's limits and the last minute's rate."""

from __future__ import annotations

import pytest

from harness.assess.requirement import Requirement
from harness.bench.outlook import Outlook
from harness.bench.terms import StopRules
from harness.cli.view.forecast import moment, rates, still_to_do

SECOND_NS = 10**9
FIXED = Requirement(ber=1e-6, accept_errors=3)  # 7 753 656 bits: 161.5 s at 48 kbit/s


@pytest.fixture(autouse=True)
def _in_utc(utc):
    return utc()


def now_of(making, progress) -> int:
    return making.start + int(progress.elapsed_s * SECOND_NS)


def words(making, progress, **more) -> list[str]:
    return [line.replace("\u202f", "") for line in still_to_do(progress, now_of(making, progress), **more)]


def test_a_fixed_plan_ends_when_its_bits_are_in_at_the_measured_rate(making):
    progress = making.progress([0] * 60, requirement=FIXED)
    longest = progress.longest_bits
    left_s = (longest - 60 * 48_000) / 48_000
    until = moment(now_of(making, progress) + left_s * SECOND_NS, now_of(making, progress))
    assert words(making, progress) == [
        f"{longest - 60 * 48_000} bits to the decision, about 1 min 42 s: until {until}"
    ]


def test_the_rate_is_that_of_the_last_minute_with_its_silent_seconds(making):
    progress = making.progress([0] * 30 + ["silent"] * 15 + [0] * 15, requirement=FIXED)
    assert rates(progress.point.recent, None).compared_bps == pytest.approx(48_000 * 0.75)


def test_at_a_standstill_nothing_is_foretold(making):
    for seconds in ([0] * 10 + ["silent"] * 3, [0] * 10 + ["unaligned"] * 3, ["silent"]):
        assert words(making, making.progress(seconds, requirement=FIXED))[0].endswith(
            "no forecast at a standstill"
        )
    progress = making.progress([0] * 10, requirement=FIXED)
    assert words(making, progress, behind_s=3)[0].endswith("no forecast at a standstill")
    assert "until" in words(making, progress, behind_s=2)[0]


def test_a_limit_that_may_come_before_the_plan_is_called_so(making):
    stop = StopRules(seconds=90)
    lines = words(making, making.progress([0] * 60, requirement=FIXED, stop=stop))
    assert "the limit of 1 min 30 s ends it at" in lines[1]
    assert "perhaps before the plan decides" in lines[1]


def test_a_limit_behind_the_plans_end_is_the_latest_time(making):
    progress = making.progress([0] * 60, requirement=FIXED, stop=StopRules(seconds=600))
    at = moment(making.start + 600 * SECOND_NS, now_of(making, progress))
    assert words(making, progress)[1] == f"until {at} at the latest, by the limit of 10 min 00 s"


def test_a_plan_that_can_no_longer_accept_still_says_its_end(making):
    progress = making.progress([10] * 10, requirement=FIXED)
    assert progress.outlook.accept_at is None
    assert "to the plan's end" in words(making, progress)[0]


def test_a_sequential_plan_says_when_it_would_accept_and_what_a_good_unit_takes(making):
    requirement = Requirement(ber=1e-5, plan="sequential", margin=3.0)
    progress = making.progress([0, 1, 0], requirement=requirement)
    plan = requirement.make_plan()
    accept_at = plan.boundaries[1].accept_at
    lines = words(making, progress)
    assert lines[0].startswith(f"{accept_at - 3 * 48_000} bits to a PASS if no more errors come")
    assert lines[1] == (
        f"a good unit takes {round(plan.expected_bits(1e-5 / 3))} bits on average, "
        f"none more than {plan.longest_bits} bits"
    )


def test_without_a_plan_the_limits_are_what_ends_it(making):
    progress = making.progress([0] * 10, stop=StopRules(bits=960_000))
    now = now_of(making, progress)
    assert words(making, progress) == [
        f"about 10 s: until {moment(now + 10 * SECOND_NS, now)}, by the limit of 960000 bits"
    ]
    assert words(making, making.progress([0] * 10, stop=StopRules(errors=5))) == [
        "until the limit of 5 errors is reached"
    ]
    assert words(making, making.progress([1] * 10, stop=StopRules(errors=20)))[0].startswith(
        "about 10 s: until"
    )


def test_without_plan_and_limits_only_a_person_ends_it(making):
    assert words(making, making.progress([0])) == ["nothing ends this run by itself: end it with Ctrl-C"]


def test_before_the_first_second_the_nominal_rate_stands_in(making):
    assert "about 2 min 42 s" in words(making, making.progress([], requirement=FIXED))[0]


def test_after_the_decision_nothing_is_foretold(making):
    progress = making.progress(
        [0] * 10, requirement=FIXED, outlook=Outlook(decided=True), stop=StopRules(seconds=90)
    )
    assert words(making, progress) == [
        "the plan has decided; what is still on its way is taken in, then the record is closed"
    ]


def test_a_run_of_centuries_has_no_time_of_day(making):
    lines = words(making, making.progress([0] * 5, requirement=Requirement(ber=1e-15)))
    assert "years: too long for one run" in lines[0]


@pytest.mark.parametrize(
    ("seconds", "words"),
    [
        (0, "12:00:00"),
        (90, "12:01:30"),
        (7200, "14:00"),
        (86_400, "12:00 on Wed 2 Dec"),
        (31 * 86_400, "12:00 on Fri 1 Jan 2027"),
    ],
)
def test_a_time_of_day_says_its_day_where_it_is_another(seconds, words):
    noon = 1_796_126_400 * SECOND_NS  # 2026-12-01 12:00:00 UTC
    assert moment(noon + seconds * SECOND_NS, noon) == words
