"""The way through the points: in order, without what is hopeless, and on from where a run was cut."""

from __future__ import annotations

import math

import pytest

from harness.bench.route import ListRoute
from harness.bench.search import SearchRoute, fine_step, route_of, space_of
from harness.profile import Profile, ProfileError, parse_profile
from harness.record import Point, Run

BENCH = """
[link]
driver = "loopback"
rate_bps = 48_000
[[link.channel]]
model = "awgn"
modulation = "bpsk"
ebn0_db = 40
[stop]
bits = 1e5
[instruments.attenuator]
driver = "simulated"
knob = "attenuation_db"
limits = [0, 60]
safe = 60
"""
SEARCH = "[search]\ninstrument = 'attenuator'\nlow = 20\nhigh = 45\nber = 1e-4\n"


def sweep(more: str) -> Profile:
    return parse_profile(BENCH + "[sweep]\ninstrument = 'attenuator'\n" + more)


def follow(profile: Profile, measured, lost_from: float) -> tuple[list[float], list[str]]:
    """Visit what the route says; at `lost_from` and above nothing is ever aligned."""
    route, done, words = ListRoute(profile), [], []
    while (visit := route.next(done)) is not None:
        value = visit.values["attenuator"]
        lost = value >= lost_from
        done.append(measured(dict(visit.values), 0 if lost else 1000, 0, unaligned=1000 if lost else 0))
        words += [event.text for event in route.take_events()]
    words += [event.text for event in route.take_events()]
    return [p.values["attenuator"] for p in done], words


def test_a_climb_ends_after_three_points_without_a_link_and_says_so(measured):
    visited, words = follow(sweep("values = { start = 10, stop = 20, step = 1 }"), measured, 14)
    assert visited == [10, 11, 12, 13, 14, 15, 16]
    assert words == [
        "3 points before them were never aligned, so 4 points at still worse conditions are left out: "
        "attenuator 17, 18, 19, 20"
    ]


def test_a_sweep_that_comes_down_from_where_there_is_no_link_reaches_it(measured):
    profile = sweep("values = { start = 20, stop = 10, step = 1 }")
    visited, words = follow(profile, measured, 14)
    assert visited == [20, 19, 18, 17, 16, 15, 14, 13, 12, 11, 10]
    assert words == []


def test_a_shuffled_sweep_leaves_out_only_what_lies_beyond_three_lost_points(measured):
    profile = sweep("values = { start = 0, stop = 40, step = 1 }\norder = 'shuffled'\nseed = 3")
    visited, words = follow(profile, measured, 14)
    assert set(range(14)) <= set(visited)
    lost = [v for v in visited if v >= 14]
    assert len(lost) >= 3
    assert len(visited) < 41
    assert words


def test_the_way_back_of_a_return_trip_is_kept(measured):
    profile = sweep("values = { start = 10, stop = 20, step = 1 }\nreturn_trip = true")
    visited, _ = follow(profile, measured, 14)
    assert visited == [10, 11, 12, 13, 14, 15, 16, 15, 14, 13, 12, 11, 10]


def test_the_reference_is_always_visited_and_guard_0_leaves_out_nothing(measured):
    ranges = "values = { start = 10, stop = 20, step = 1 }\n"
    visited, _ = follow(sweep(ranges + "reference = 30\nreference_every = 3"), measured, 14)
    assert visited.count(30) == 5
    visited, _ = follow(sweep(ranges + "guard = 0"), measured, 14)
    assert visited == list(range(10, 21))


def test_a_point_that_the_requirement_names_is_measured_however_hopeless_it_is(measured):
    """Left out it would have no verdict, and a run without a verdict passes for one that went well."""
    named = (
        "values = { start = 10, stop = 20, step = 1 }\n[requirement]\nber = 1e-3\nat = { attenuator = 19 }\n"
    )
    visited, words = follow(sweep(named), measured, 14)
    assert visited == [10, 11, 12, 13, 14, 15, 16, 19]
    assert words[0].endswith("attenuator 17, 18, 20")


def test_another_axis_is_another_climb(measured):
    profile = parse_profile(
        BENCH
        + """
[instruments.ebn0]
driver = "simulated"
knob = "ebn0_db"
limits = [0, 60]
safe = 40
[[sweep.axes]]
instrument = "attenuator"
values = [10, 20, 30, 40, 50]
[[sweep.axes]]
instrument = "ebn0"
values = [10, 50]
"""
    )
    route, done = ListRoute(profile), []
    while (visit := route.next(done)) is not None:
        lost = visit.values["ebn0"] == 10 and visit.values["attenuator"] > 10
        done.append(measured(dict(visit.values), 0 if lost else 1000, 0))
    seen = [(p.values["attenuator"], p.values["ebn0"]) for p in done]
    assert [a for a, e in seen if e == 50] == [10, 20, 30, 40, 50]
    assert [a for a, e in seen if e == 10] == [10, 20, 30, 40]


def ber_at(attenuation_db: float) -> float:
    return 0.5 * math.erfc(10 ** ((40 - attenuation_db) / 20))


def search(profile: Profile, measured, route=None, done=None, most: int = 60):
    """Carry a search out against the textbook's curve, with the expected counts."""
    route = route or route_of(profile, None)
    done = [] if done is None else done
    while len(done) < most and (visit := route.next(done)) is not None:
        p = ber_at(visit.values["attenuator"])
        bits = min(visit.stop.bits, round(visit.stop.errors / p / 8) * 8 or 8)
        done.append(measured(dict(visit.values), bits, round(bits * p)))
    return done, [event.text for event in route.take_events()]


def test_a_search_closes_in_and_says_why_it_ends(measured):
    done, words = search(parse_profile(BENCH + SEARCH), measured)
    assert 5 < len(done) < 20
    assert all(20 <= p.values["attenuator"] <= 45 for p in done)
    assert all(abs(10 * p.values["attenuator"] - round(10 * p.values["attenuator"])) < 1e-6 for p in done)
    assert len(words) == 1
    assert words[0].startswith(f"the search ends after {len(done)} points and ")
    assert "is reached at 31.6" in words[0]  # Eb/N0 of 8.4 dB is what BPSK needs for 1e-4


def test_a_search_goes_on_where_it_was_cut_with_the_same_limits(measured):
    profile = parse_profile(BENCH + SEARCH)
    done, _ = search(profile, measured, most=4)
    route = route_of(profile, None)
    expected = route.next(done)
    assert expected is not None
    facts = expected.facts
    points = [Point(k, dict(p.values), 0, 1, "errors", (), ()) for k, p in enumerate(done)]
    begun = Point(4, dict(expected.values), 0, None, None, (), (), facts=facts)
    cut = Run("", "", "sweep", 0, None, "cut", None, None, "", (), {}, {}, (), (*points, begun), None)
    resumed = route_of(profile, cut)
    visit = resumed.next(done)
    assert visit is not None
    assert (visit.number, visit.values) == (4, expected.values)
    assert visit.stop is not None
    assert (visit.stop.bits, visit.stop.errors) == (facts["search"]["bits"], facts["search"]["errors"])
    fifth = measured(dict(visit.values), 10_000, 20)
    after, same = resumed.next([*done, fifth]), route.next([*done, fifth])
    assert after is not None
    assert same is not None
    assert (after.number, after.values, after.stop) == (5, same.values, same.stop)


def test_a_search_ends_at_its_limits_of_bits_and_time(measured):
    done, words = search(parse_profile(BENCH + SEARCH + "max_bits = 100_000"), measured)
    assert sum(p.tally.received for p in done[:-1]) < 100_000
    assert "given up" in words[0]
    profile = parse_profile(BENCH + SEARCH + "max_seconds = 2.5")
    done, words = search(profile, measured)
    assert len(done) == 3  # a second each
    assert "limit of time" in words[0]


def test_a_search_where_nothing_is_crossed_says_so(measured):
    profile = parse_profile(BENCH + SEARCH.replace("high = 45", "high = 25"))
    done, words = search(profile, measured)
    assert len(done) < 10
    assert "not over the target" in words[0]


@pytest.mark.parametrize(
    ("resolution", "step"), [(0.5, 0.1), (1.0, 0.1), (5.0, 1.0), (0.4, 0.01), (0.05, 0.01), (0.1, 0.01)]
)
def test_the_step_is_a_power_of_ten_of_a_fifth_or_less(resolution, step):
    assert fine_step(resolution) == step


def test_a_search_knows_which_way_it_gets_worse():
    profile = parse_profile(BENCH + SEARCH)
    assert profile.search is not None
    assert space_of(profile, profile.search).rising
    falling = parse_profile(BENCH.replace('"attenuation_db"', '"ebn0_db"') + SEARCH)
    assert falling.search is not None
    assert not space_of(falling, falling.search).rising
    assert isinstance(route_of(profile, None), SearchRoute)


def test_a_search_over_what_is_not_in_decibels_is_refused():
    with pytest.raises(ProfileError, match="goes along decibels"):
        parse_profile(
            BENCH.replace('"attenuation_db"', '"ber"\nquantity = "temperature"\nunit = "K"') + SEARCH
        )


def test_a_point_that_was_visited_again_when_the_run_was_cut_is_gone_on_with(measured):
    profile = sweep("values = [10, 20]\nfinish_by = '07:00'")
    ended = [Point(k, {"attenuator": v}, 0, 1, "bits", (), ()) for k, v in enumerate((10.0, 20.0))]
    again = Point(2, {"attenuator": 20.0}, 0, None, None, (), (), facts={"again": True})
    cut = Run("", "", "sweep", 0, None, "cut", None, None, "", (), {}, {}, (), (*ended, again), None)
    route = route_of(profile, cut)
    visit = route.next([])
    assert visit is not None
    assert (visit.number, visit.values, visit.facts) == (2, {"attenuator": 20.0}, {"again": True})
    done = [measured({"attenuator": 20.0}, 1000, 3)]
    assert route.next(done) is None
    after = route.again(done, 100.0)
    assert after is not None
    assert after.number == 3
    assert route.again(done, None) is None  # without a time to finish by nothing is left over
