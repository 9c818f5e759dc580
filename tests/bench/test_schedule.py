"""The time budget: shares that add up, errors enough, and more time where the sensitivity is decided."""

from __future__ import annotations

import datetime

import pytest

from harness.bench.schedule import ENOUGH_ERRORS, Schedule, seconds_until
from harness.bench.terms import StopRules
from harness.bench.visits import Visit, visits_of
from harness.profile import Profile, parse_profile

BENCH = """
[link]
driver = "loopback"
rate_bps = 48_000
[[link.channel]]
model = "awgn"
modulation = "qpsk"
ebn0_db = 30
[instruments.attenuator]
driver = "simulated"
knob = "attenuation_db"
limits = [0, 60]
safe = 60
[sweep]
instrument = "attenuator"
values = { start = 20, stop = 29, step = 1 }
sensitivity_ber = 1e-4
"""
EVENING = datetime.datetime(2026, 5, 4, 18, 0)


class Clock:
    def __init__(self) -> None:
        self.now = 1000.0

    def __call__(self) -> float:
        return self.now


def night(more: str = 'finish_by = "07:00"') -> Profile:
    return parse_profile(BENCH + more)


@pytest.mark.parametrize(
    ("clock", "hours"), [("07:00", 13), ("18:01", 1 / 60), ("18:00", 24), ("17:59", 24 - 1 / 60)]
)
def test_a_time_of_day_is_the_next_one(clock, hours):
    assert seconds_until(clock, EVENING) == pytest.approx(hours * 3600)


def test_without_a_time_to_finish_by_the_stop_rules_are_the_profiles(measured):
    visits = visits_of(night(""))
    stop = StopRules(bits=1000, seconds=3.0)
    assert Schedule(night(""), EVENING).share(stop, visits[0], visits[1:], []) == stop


def test_the_shares_of_a_night_add_up_to_it_and_what_points_take_beside_is_left_for_them(measured):
    profile, clock = night(), Clock()
    visits = visits_of(profile)
    schedule = Schedule(profile, EVENING, clock)
    done = []
    for k, visit in enumerate(visits):
        stop = schedule.share(StopRules(), visit, visits[k + 1 :], done)
        assert stop.seconds is not None
        assert stop.errors == ENOUGH_ERRORS
        clock.now += stop.seconds + 60  # a minute of settling
        done.append(measured(dict(visit.values), 48_000, 0, seconds=stop.seconds))
    assert clock.now - 1000 == pytest.approx(13 * 3600, abs=61)  # the first minute could not be foreseen


def test_a_point_that_ended_early_leaves_its_time_to_the_others(measured):
    profile, clock = night(), Clock()
    visits = visits_of(profile)
    schedule = Schedule(profile, EVENING, clock)
    first = schedule.share(StopRules(), visits[0], visits[1:], [])
    assert first.seconds == pytest.approx(13 * 360)
    clock.now += 1
    second = schedule.share(StopRules(), visits[1], visits[2:], [measured({"attenuator": 20.0}, 8, 0)])
    assert second.seconds == pytest.approx((13 * 3600 - 1) / 9)


def test_points_near_the_target_get_more_time_once_the_curve_tells(measured):
    schedule = Schedule(night(), EVENING, Clock())
    # Q's argument falls from 2.24 to 1.41 over 3 dB: it is 4.1 (a BER of 2e-5) at 22 dB, and 12 at 15 dB.
    done = [measured({"attenuator": 29.0}, 10**6, 78_600), measured({"attenuator": 26.0}, 10**6, 12_500)]
    near, far = Visit(2, {"attenuator": 22.0}), Visit(3, {"attenuator": 15.0})
    shared = [
        schedule.share(StopRules(), visit, [other], done).seconds
        for visit, other in ((near, far), (far, near))
    ]
    assert shared[0] is not None
    assert shared[1] is not None
    assert shared[0] == pytest.approx(4 * shared[1])


def test_the_profiles_own_limits_are_kept(measured):
    profile = night()
    visits = visits_of(profile)
    stop = Schedule(profile, EVENING).share(StopRules(None, 5.0, 7), visits[0], visits[1:], [])
    assert (stop.seconds, stop.errors) == (5.0, 7)


def test_a_point_that_a_plan_decides_has_all_the_time_but_the_least_for_the_others(measured):
    profile = night()
    visits = visits_of(profile)
    stop = Schedule(profile, EVENING, Clock()).share(StopRules(), visits[0], visits[1:], [], planned=True)
    assert stop.errors is None
    assert stop.seconds == pytest.approx(13 * 3600 - 9)


def test_a_point_always_gets_a_second_however_late_it_is(measured):
    profile, clock = night(), Clock()
    visits = visits_of(profile)
    schedule = Schedule(profile, EVENING, clock)
    clock.now += 14 * 3600
    assert schedule.share(StopRules(), visits[0], visits[1:], []).seconds == 1.0
