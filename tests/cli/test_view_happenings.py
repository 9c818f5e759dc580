"""What happened, where room is short: the grave is always told, what is left out is counted, and nothing is merged."""

from __future__ import annotations

from dataclasses import replace

import pytest

from harness.assess.requirement import Requirement
from harness.cli.page import page
from harness.cli.view.ink import LINES
from harness.cli.view.notebook import Notebook
from harness.cli.view.sheet import sheet_of_assessment

REQUIREMENT = Requirement(ber=1e-4, accept_errors=12)


@pytest.fixture(autouse=True)
def _in_utc(utc):
    return utc()


@pytest.fixture
def busy(making):
    """Give an assessment in which three grave things are followed by many slips."""
    events = [
        making.event("aligned", "the pattern was found", 0, 0),
        making.event("link_lost", "the link was lost", 1, 48_000),
        making.event("resumed", "the run goes on after it was cut", 2, 96_000),
        making.event("instrument", "the supply did not stay where it was put", 2),
        *[making.event("slip", "one byte lost", 3 + 2 * n, 100_000 + 96_000 * n) for n in range(20)],
    ]
    return making.assessment([0] * 45, events, REQUIREMENT)


def drawn(assessment, height: int) -> str:
    lines = Notebook(100, height, LINES).draw(sheet_of_assessment(assessment), whole=True)
    return "\n".join(line.plain for line in lines)


@pytest.mark.parametrize("height", [9, 29, 34])
def test_a_page_that_stays_tells_what_is_grave_and_counts_the_rest(busy, height):
    text = drawn(busy, height)
    for words in ("the link was lost", "goes on after it was cut", "did not stay"):
        assert words in text
    told = text.count("one byte lost") + ("the pattern was found" in text)
    assert f"… {21 - told} " in text
    assert "`bitassay show RUN --json` has all" in text


def test_a_page_that_stays_says_which_parts_it_has_no_room_for(busy):
    assert "risks: " in drawn(busy, 80)
    assert "not shown" not in drawn(busy, 80)
    short = drawn(busy, 23)
    assert "risks: " not in short
    assert "not shown: risks" in short


def test_plain_lines_never_leave_out_a_grave_one_between(busy, making):
    events = [making.event("slip", f"slip {n}", n) for n in range(40)]
    events[20] = making.event("link_lost", "the link was lost", 20)
    text = "\n".join(page(making.assessment([0] * 45, events, REQUIREMENT)))
    assert "the link was lost" in text
    assert text.count("further events; `bitassay show --json` lists them") == 2


def test_equal_ones_are_joined_within_their_second_only(making):
    events = [
        making.event("slip", "one byte lost", s, b) for s, b in ((1.1, 10), (1.2, 20), (9.0, 1_600_000))
    ]
    text = drawn(making.assessment([0] * 12, events, REQUIREMENT), 60)
    assert text.count("one byte lost (2 times in a row)") == 1
    assert "bit 1\u202f600\u202f000" in text
    assert "(bit 1\u202f600\u202f000)" in "\n".join(page(making.assessment([0] * 12, events, REQUIREMENT)))


def test_a_run_that_was_cut_says_how_it_is_gone_on_with_and_nothing_against_it(making):
    cut = making.assessment([0] * 3, [], REQUIREMENT, status="cut", ended_by=None)
    assert f"`bitassay resume {cut.run[-12:]}` goes on with it" in drawn(cut, 60)
    swept = replace(cut, points=[cut.whole] * 2, sweep=True)
    text = drawn(swept, 60)
    assert f"`bitassay resume {cut.run[-12:]}` goes on with it" in text
    assert "nothing out of the ordinary" not in text
    assert "nothing out of the ordinary" in drawn(replace(swept, status="completed"), 60)
