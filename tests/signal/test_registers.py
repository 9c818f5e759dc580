"""Registers: sequence, period, jumps, places and the shortest recurrence, against stepping bit by bit."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.signal import polynomials
from harness.signal.patterns import known_patterns
from harness.signal.registers import Register, shortest_recurrence, sliding_windows

ROWS = {row.name: row.taps for row in known_patterns()}


def step_by_step(taps: tuple[int, ...], start: list[int], count: int) -> list[int]:
    bits = list(start)
    while len(bits) < count:
        bits.append(sum(bits[-tap] for tap in taps) % 2)
    return bits[:count]


def period_by_stepping(taps: tuple[int, ...]) -> int:
    first = state = (1,) * taps[-1]
    for count in itertools.count(1):
        state = (*state[1:], sum(state[-tap] for tap in taps) % 2)
        if state == first:
            return count
    raise AssertionError


def test_periods_of_all_small_registers_are_those_found_by_stepping():
    checked = 0
    for stages in range(2, 11):
        for others in range(1, stages, 2):
            for inner in itertools.islice(itertools.combinations(range(1, stages), others), 12):
                taps = (*inner, stages)
                assert Register(taps).period == period_by_stepping(taps), taps
                checked += 1
    assert checked > 150


@pytest.mark.parametrize("name", ROWS)
def test_registers_of_the_table_are_maximal_forwards_and_backwards(name):
    register = Register(ROWS[name])
    assert register.period == register.reversed.period == 2**register.stages - 1
    assert register.reversed.reversed == register


@pytest.mark.parametrize("name", ROWS)
def test_reversed_register_gives_the_sequence_backwards(name):
    register = Register(ROWS[name])
    stages = register.stages
    forwards = step_by_step(register.taps, [1] * stages, 40 * stages)
    backwards = forwards[::-1]
    assert step_by_step(register.reversed.taps, backwards[:stages], len(backwards)) == backwards


@given(data=st.data())
@settings(max_examples=60, deadline=None)
def test_runs_from_any_window_are_those_of_a_stepped_register(data):
    stages = data.draw(st.integers(2, 32))
    inner = data.draw(
        st.sets(st.integers(1, stages - 1), min_size=1, max_size=5).filter(lambda s: len(s) % 2)
    )
    window = data.draw(st.integers(0, 2**stages - 1))
    taps = (*sorted(inner), stages)
    start = [(window >> i) & 1 for i in range(stages)]
    assert Register(taps).bits_from(window, 500).tolist() == step_by_step(taps, start, 500)


def matrix_jump(taps: tuple[int, ...], count: int) -> list[int]:
    """The window after `count` steps, by squaring the companion matrix: an independent way to jump."""
    n = taps[-1]
    step = np.zeros((n, n), dtype=np.int64)
    step[np.arange(n - 1), np.arange(1, n)] = 1
    step[n - 1, [n - tap for tap in taps]] = 1
    state = np.ones(n, dtype=np.int64)
    while count:
        if count & 1:
            state = step @ state % 2
        step = step @ step % 2
        count >>= 1
    return state.tolist()


@pytest.mark.parametrize("name", ROWS)
@pytest.mark.parametrize("backwards", [False, True])
def test_jump_to_a_place_and_back_from_its_window(name, backwards):
    register = Register(ROWS[name])
    register = register.reversed if backwards else register
    period = register.period
    rng = np.random.default_rng(20)
    places = [0, 1, period - 1, period // 2, *rng.integers(period, size=8).tolist()]
    for place in places:
        window = register.window_at(place)
        assert [(window >> i) & 1 for i in range(register.stages)] == matrix_jump(register.taps, place)
        assert register.place_of(window) == place
        assert register.window_at(place - period) == window == register.window_at(place + period)


@pytest.mark.parametrize("taps", [(2, 4), (3, 6), (1, 5), (4, 8)])
def test_place_of_every_window_of_registers_with_several_cycles(taps):
    register = Register(taps)
    bits = step_by_step(taps, [1] * taps[-1], register.period + taps[-1] - 1)
    on_cycle = {
        int(window): i for i, window in enumerate(sliding_windows(np.array(bits, np.uint8), taps[-1]))
    }
    assert 0 not in on_cycle
    assert len(on_cycle) == register.period < 2 ** taps[-1] - 1
    for window in range(2 ** taps[-1]):
        assert register.place_of(window) == on_cycle.get(window)


@pytest.mark.parametrize("taps", [(), (1, 2, 3), (5, 5), (0, 3), (3, 2), (-1, 4), (4, 33), (7,)])
def test_taps_that_make_no_register_are_refused(taps):
    with pytest.raises(ValueError, match=r"tap|register"):
        Register(taps)


@pytest.mark.parametrize("name", ROWS)
def test_shortest_recurrence_of_twice_the_stages_names_the_taps(name):
    register = Register(ROWS[name])
    rng = np.random.default_rng(3)
    start = rng.integers(0, 2, register.stages).tolist()
    start[0] = 1
    length, connection = shortest_recurrence(
        np.array(step_by_step(register.taps, start, 2 * register.stages + 5), np.uint8)
    )
    assert length == register.stages
    assert [t for t in range(1, length + 1) if connection >> t & 1] == list(register.taps)


@given(bits=st.lists(st.integers(0, 1), max_size=14))
@settings(max_examples=150, deadline=None)
def test_no_recurrence_is_shorter_than_the_shortest(bits):
    length, connection = shortest_recurrence(np.array(bits, np.uint8))

    def fits(size: int, taps: int) -> bool:
        return all(
            bits[i] == sum(bits[i - t] for t in range(1, size + 1) if taps >> t & 1) % 2
            for i in range(size, len(bits))
        )

    assert fits(length, connection)
    assert not any(fits(size, 2 * taps) for size in range(length) for taps in range(2**size))


@given(a=st.integers(0, 2**40), b=st.integers(1, 2**20))
def test_quotient_and_remainder_give_the_polynomial_back(a, b):
    rest = polynomials.remainder(a, b)
    assert rest.bit_length() < b.bit_length()
    assert polynomials.multiply(polynomials.quotient(a, b), b) ^ rest == a


@given(a=st.integers(1, 2**12), b=st.integers(1, 2**12), c=st.integers(1, 2**8))
def test_common_divisor_divides_both_and_holds_every_shared_factor(a, b, c):
    shared = polynomials.common_divisor(polynomials.multiply(a, c), polynomials.multiply(b, c))
    for whole in (polynomials.multiply(a, c), polynomials.multiply(b, c)):
        assert polynomials.remainder(whole, shared) == 0
    assert polynomials.remainder(shared, c) == 0


@given(modulus=st.integers(1, 2**9).map(lambda m: 2 * m + 1))
@settings(deadline=None)
def test_order_of_x_is_the_first_power_that_is_one(modulus):
    power, order = polynomials.remainder(2, modulus), 1
    while power != polynomials.remainder(1, modulus):
        power, order = polynomials.remainder(power << 1, modulus), order + 1
    assert polynomials.order_of_x(modulus) == order


def test_polynomials_divisible_by_x_have_no_order():
    with pytest.raises(ValueError, match="no power of x"):
        polynomials.order_of_x(0b110)
