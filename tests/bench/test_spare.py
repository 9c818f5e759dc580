"""Time that is left over goes where the sensitivity is decided, and never to a second try of a plan."""

from __future__ import annotations

from dataclasses import replace

import pytest

from harness.bench.schedule import ENOUGH_ERRORS
from harness.bench.spare import LEAST_S, visit_again
from harness.profile.sweeps import Sweep

SWEEP = Sweep(instrument="attenuator", values=(20.0, 21.0, 22.0, 23.0), sensitivity_ber=1e-5)
WITHOUT = Sweep(instrument="attenuator", values=(20.0, 21.0, 22.0, 23.0))


@pytest.fixture
def done(measured):
    return [
        measured({"attenuator": 20.0}, 10**8, 0),  # surely under the target
        measured({"attenuator": 21.0}, 10**7, 30),
        measured({"attenuator": 22.0}, 10**6, 90),
        measured({"attenuator": 23.0}, 10**6, 1000),  # has errors enough
    ]


def test_the_setting_nearest_to_the_target_is_visited_again_until_it_has_enough(done, measured):
    visit = visit_again(SWEEP, done, 400.0, 4)
    assert visit is not None
    assert (visit.number, visit.values) == (4, {"attenuator": 21.0})
    assert visit.facts == {"again": True}
    assert visit.stop is not None
    assert visit.stop.seconds == 200.0  # two settings are worth it
    assert visit.stop.errors == ENOUGH_ERRORS - 30
    after = visit_again(SWEEP, [*done, measured({"attenuator": 21.0}, 10**8, 400)], 400.0, 5)
    assert after is not None
    assert after.values == {"attenuator": 22.0}
    assert after.stop is not None
    assert after.stop.seconds == 400.0


def test_without_a_target_the_setting_with_the_fewest_errors_is_visited_again(done):
    visit = visit_again(WITHOUT, done, 400.0, 4)
    assert visit is not None
    assert visit.values == {"attenuator": 20.0}


def test_too_little_time_is_left_alone_and_none_longer_than_there_is(done):
    assert visit_again(SWEEP, done, LEAST_S - 0.1, 4) is None
    visit = visit_again(SWEEP, done, LEAST_S + 1, 4)
    assert visit is not None
    assert visit.stop is not None
    assert visit.stop.seconds == LEAST_S


def test_the_profiles_own_limit_of_errors_is_enough(done):
    visit = visit_again(SWEEP, done, 400.0, 4, errors=50)
    assert visit is not None
    assert visit.stop is not None
    assert visit.stop.errors == 50 - 30
    assert visit_again(SWEEP, done, 400.0, 4, errors=10) is None


def test_lost_points_references_and_points_with_a_plan_are_not_visited_again(done, measured):
    lost = measured({"attenuator": 30.0}, 0, 0, unaligned=1000)
    assert visit_again(WITHOUT, [lost], 400.0, 1) is None
    reference = replace(done[1], facts={"reference": True})
    planned = replace(done[2], plan={"kind": "fixed"})
    assert visit_again(SWEEP, [done[0], reference, planned, done[3]], 400.0, 4) is None
