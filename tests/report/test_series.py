"""Seconds as columns: places among compared bits, the path of errors, and outages, against independent ways."""

from __future__ import annotations

import numpy as np
import pytest

from harness.assess.accumulate import Accumulator
from harness.record import Point, Second, Tally
from harness.report.series import series_of

S = 10**9


def second(index: int, first: int, stretches, rng, *, due: bool = True, complete: bool = True) -> Second:
    received = sum(bits for bits, _aligned in stretches)
    places, at = [], first
    for bits, aligned in stretches:
        if aligned and bits:
            places += sorted(rng.choice(bits, min(bits, int(rng.integers(0, 6))), replace=False) + at)
        at += bits
    compared = sum(bits for bits, aligned in stretches if aligned)
    n, lost = len(places), rng.random(len(places)) < 0.5
    ones = int(lost.sum())
    return Second(
        0, 0, index, index * S, S, received, Tally(received, compared, received - compared, n, ones, n - ones),
        due=due, first_bit=first, positions=np.array(places, dtype=np.int64), ones_lost=lost,
        positions_complete=complete, stretches=tuple(stretches),
    )  # fmt: skip


def point(seconds) -> Point:
    return Point(0, {}, 0, None, None, tuple(seconds), ())


def random_seconds(seed: int) -> list[Second]:
    rng = np.random.default_rng(seed)
    seconds, first = [], 0
    for index in range(int(rng.integers(1, 12))):
        pieces = [
            (int(rng.integers(1, 400)), bool(rng.random() < 0.6)) for _ in range(int(rng.integers(0, 5)))
        ]
        seconds.append(second(index, first, pieces, rng))
        first += seconds[-1].tally.received
    return seconds


@pytest.mark.parametrize("seed", range(60))
def test_places_among_compared_bits_are_the_accumulators(seed):
    seconds = random_seconds(seed)
    acc = Accumulator(None)
    for one in seconds:
        acc.add(one)
    acc.flush()
    shuffled = [seconds[k] for k in np.random.default_rng(seed).permutation(len(seconds))]
    found = series_of(point(shuffled)).compared_positions()
    assert found is not None
    assert found.tolist() == acc.positions().tolist()


@pytest.mark.parametrize("seed", range(20))
def test_the_path_rises_by_one_at_each_error(seed):
    series = series_of(point(random_seconds(seed)))
    bits, errors = series.path(10_000)
    places = series.compared_positions()
    assert errors.tolist() == list(range(1, len(places) + 1))
    assert bits.tolist() == [p + 1 for p in places.tolist()]


def test_a_path_with_too_many_errors_goes_by_seconds_and_ends_at_the_total():
    rng = np.random.default_rng(1)
    seconds = [second(k, 100 * k, [(100, True)], rng) for k in range(53)]
    bits, errors = series_of(point(seconds)).path(10)
    assert len(bits) <= 10
    assert (bits[-1], errors[-1]) == (5_300, sum(s.tally.errors for s in seconds))


def test_places_are_not_given_where_not_all_are_known():
    rng = np.random.default_rng(1)
    seconds = [second(0, 0, [(100, True)], rng), second(1, 100, [(100, True)], rng, complete=False)]
    assert series_of(point(seconds)).compared_positions() is None


def test_outages_are_joined_over_seconds_and_told_apart():
    rng = np.random.default_rng(3)
    layout = [
        [(100, True), (20, False)],
        [(50, False)],
        [(10, False), (90, True)],
        [],
        [],
        [(60, True), (5, False), (60, True)],
    ]
    seconds, first = [], 0
    for index, pieces in enumerate(layout):
        seconds.append(second(index, first, pieces, rng))
        first += seconds[-1].tally.received
    found = [(o.bit, o.bits, o.at // S, o.seconds, o.silent) for o in series_of(point(seconds)).outages()]
    assert found == [(100, 80, 0, 3, False), (270, 0, 3, 2, True), (330, 5, 5, 1, False)]


def test_a_second_in_which_nothing_was_due_is_no_outage():
    rng = np.random.default_rng(3)
    assert series_of(point([second(0, 0, [], rng, due=False)])).outages() == []


def test_outages_far_apart_are_two():
    rng = np.random.default_rng(3)
    seconds = [second(0, 0, [(9, False)], rng), second(30, 9, [(9, False)], rng)]
    assert len(series_of(point(seconds)).outages()) == 2


def test_silence_right_after_unaligned_bits_is_an_outage_of_its_own():
    rng = np.random.default_rng(3)
    seconds = [second(0, 0, [(5, True), (9, False)], rng), second(1, 14, [], rng)]
    assert [(o.bits, o.silent) for o in series_of(point(seconds)).outages()] == [(9, False), (0, True)]
