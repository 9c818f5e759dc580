"""The strip shows the last minute, a column a second, and says in words what its signs mean."""

from __future__ import annotations

import pytest

from harness.cli.view.ink import LETTERS, LINES
from harness.cli.view.strip import strip, strip_width, strip_words
from harness.record import Tally

CLEAN = Tally(48_000, 48_000)
SILENT = Tally()
UNALIGNED = Tally(48_000, 0, 48_000)


def errors(number: int) -> Tally:
    return Tally(48_000, 48_000, 0, number, number, 0)


def drawn(tallies: list[Tally], width: int = 60, rows: int = 1, signs=LINES, behind_s: int = 0) -> list[str]:
    lines = strip(list(enumerate(tallies)), width, rows, signs, behind_s=behind_s)
    return ["".join(text for text, _ink in line) for line in lines]


def test_the_newest_second_is_on_the_right_and_only_a_minute_is_shown():
    row = drawn([errors(10), *[CLEAN] * 59, SILENT])[0]
    assert len(row) == 60
    assert row == "." * 59 + "-"


def test_each_kind_of_second_has_its_sign():
    assert drawn([CLEAN, UNALIGNED, SILENT, errors(10)])[0].strip() == ".?-█"


def test_a_second_that_is_not_decided_yet_stays_empty():
    assert drawn([CLEAN, CLEAN], behind_s=3)[0].endswith("..   ")
    assert "3 s not decided yet" in strip_words([(0, CLEAN)], LINES, behind_s=3)


def test_a_gap_in_the_numbering_is_a_gap_in_the_strip():
    row = strip([(0, CLEAN), (4, CLEAN)], 60, 1, LINES)[0]
    assert "".join(text for text, _ink in row).strip() == ".   ."


@pytest.mark.parametrize("rows", [1, 2, 4])
def test_more_errors_never_give_a_lower_column(rows):
    numbers = [1, 2, 3, 5, 10, 30, 100, 1_000, 24_000]
    lines = drawn([errors(n) for n in numbers], rows=rows)
    columns = list(zip(*(line[-len(numbers) :] for line in lines), strict=True))
    heights = [sum(" ▁▂▃▄▅▆▇█".index(sign) for sign in column) for column in columns]
    assert heights == sorted(heights)
    assert heights[0] > 1, "a single error is seen at a glance"
    assert heights[-1] == 8 * rows


def test_wide_room_gives_each_second_two_columns():
    assert strip_width(128) == 120
    assert drawn([CLEAN, errors(10)], width=128)[0].endswith("..██")


def test_narrow_room_shows_fewer_seconds():
    assert drawn([errors(10)] * 50 + [CLEAN] * 10, width=30)[0] == "█" * 20 + "." * 10


def test_letters_draw_it_too():
    assert "".join(drawn([CLEAN, errors(1), errors(10)], rows=2, signs=LETTERS)).isascii()


@pytest.mark.parametrize(
    ("tallies", "words"),
    [
        ([], "no second is complete yet"),
        ([CLEAN], "no error in 1 second"),
        ([CLEAN, errors(3), errors(4)], "7 errors in 3 seconds, at most 4 in one"),
        ([CLEAN, SILENT], "no error in 1 second   - nothing came"),
        ([UNALIGNED], "none compared in 1 second   ? not aligned"),
        ([SILENT, SILENT], "none compared in 2 seconds   - nothing came"),
    ],
)
def test_the_words_claim_no_more_than_was_compared(tallies, words):
    assert strip_words(list(enumerate(tallies)), LINES) == words
