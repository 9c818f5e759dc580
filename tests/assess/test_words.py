"""Shares in words: three digits, never rounded onto a limit that they do not touch."""

from __future__ import annotations

import pytest

from harness.assess.words import percent


@pytest.mark.parametrize(
    ("share", "words"),
    [
        (0.0, "0 %"),
        (1.0, "100 %"),
        (0.05, "5 %"),
        (0.07, "7 %"),
        (0.183, "18.3 %"),
        (0.000899, "0.0899 %"),
        (0.9996, "99.96 %"),
        (1e-6, "under 0.001 %"),
    ],
)
def test_a_share_has_three_digits_and_is_never_rounded_to_none_or_all(share, words):
    assert percent(share) == words


def test_a_share_beside_its_limit_never_reads_like_the_limit():
    assert percent(0.0010004) == "0.1 %"
    assert percent(0.0010004, beside=0.001) == "0.10004 %"
    assert percent(0.001, beside=0.001) == "0.1 %"
