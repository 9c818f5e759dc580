"""The ruler tells the truth: the bar passes the mark exactly where the interval passes the requirement."""

from __future__ import annotations

import itertools
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.cli.view.ink import LETTERS, LINES
from harness.cli.view.ruler import DECADES, Bar, columns_of_a_decade, ruler

ratios = st.floats(-15.9, 0.0).map(lambda power: 10.0**power)


def rows(bar: Bar, width: int = 68, signs=LINES) -> list[str]:
    return ["".join(text for text, _ink in line) for _label, line in ruler([("", bar)], width, signs)]


def drawn(row: str) -> str:
    return row.split(" →")[0].split(" >")[0]


@given(ratios, ratios, ratios, st.integers(30, 200))
def test_the_bar_passes_the_mark_exactly_where_the_interval_passes_the_requirement(
    one, other, required, width
):
    lower, upper = sorted((one, other))
    _flag, bar, scale, _labels = rows(Bar(lower, upper, None, required), width)
    mark = scale.index(LINES.mark_on_ruler)
    bar = drawn(bar).ljust(len(scale))
    assert bar[mark] == LINES.mark
    # At the ruler's two ends there is no room beyond the mark.
    if mark > 0:
        assert bool(bar[:mark].strip()) == (upper > required)
    if mark < len(scale) - 1:
        assert bool(bar[mark + 1 :].strip()) == (lower < required)


@given(ratios, ratios, st.floats(1.0, 1e4), st.floats(1.0, 1e4))
def test_a_wider_interval_never_gets_a_shorter_bar(one, other, down, up):
    lower, upper = sorted((one, other))
    narrow = rows(Bar(lower, upper))[0]
    wide = rows(Bar(lower / down, min(1.0, upper * up)))[0]
    assert all(w != " " for n, w in zip(narrow, wide.ljust(len(narrow)), strict=False) if n != " ")
    assert narrow.strip(), "even the narrowest bar is seen"


@given(ratios, ratios, ratios, ratios, st.integers(22, 200))
def test_nothing_is_wider_than_its_room(lower, upper, measured, required, width):
    for row in rows(Bar(min(lower, upper), max(lower, upper), measured, required), width):
        assert len(row) <= width


@pytest.mark.parametrize("width", [22, 40, 68, 128, 200])
def test_every_label_stands_at_its_tick_and_decades_are_equally_wide(width):
    scale, labels = rows(Bar(0.0, 1.0), width)[-2:]
    ticks = [i for i, sign in enumerate(scale) if sign == LINES.tick]
    assert len(ticks) == DECADES + 1
    assert {b - a for a, b in itertools.pairwise(ticks)} == {columns_of_a_decade(width)}
    assert labels[0] == "1"
    found = re.finditer(r"1e-(\d+)", labels)
    places = {int(m[1]): (m.start(), m.end()) for m in found}
    assert DECADES in places
    for power, (start, end) in places.items():
        assert start <= ticks[power] <= end


def test_an_open_end_is_said_and_a_closed_one_is_not():
    assert rows(Bar(0.0, 1e-6))[0].endswith("→ 0")
    assert "→" not in rows(Bar(1e-9, 1e-6))[0]


def test_the_bar_shrinks_as_bits_come_in():
    lengths = [
        len(rows(Bar(0.0, 3.7 / bits))[0].replace(" ", "")) for bits in (10, 10**3, 10**6, 10**9, 10**12)
    ]
    assert lengths == sorted(lengths, reverse=True)
    assert len(set(lengths)) == 5


def test_what_lies_off_the_ruler_stands_at_its_end():
    off = rows(Bar(1e-19, 1e-18, 5e-19, 1e-17))
    on = rows(Bar(1e-15, 1e-15, 1e-15, 1e-15))
    assert off[2].index(LINES.mark_on_ruler) == on[2].index(LINES.mark_on_ruler)


def test_several_bars_share_one_scale_each_with_its_label():
    bars = [("20", Bar(1e-6, 1e-5, None, 1e-4)), ("22", Bar(1e-5, 1e-3, None, 1e-4))]
    labels = [label for label, _line in ruler(bars, 68, LINES)]
    assert labels == ["", "20", "22", "", ""]


def test_letters_draw_it_too():
    for row in rows(Bar(0.0, 1e-4, 1e-5, 1e-6, fades_from=1e-7), 68, LETTERS):
        assert row.isascii()


def test_without_room_nothing_is_drawn():
    assert rows(Bar(0.0, 1.0), 20) == []
