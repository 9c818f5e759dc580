"""`bitassay drivers NAME` says each key once, under what it belongs to."""

from __future__ import annotations

from harness.cli.catalogue import drivers


def test_what_all_models_share_is_said_once_before_them(capsys):
    assert drivers("loopback", as_json=False) == 0
    out = capsys.readouterr().out
    assert out.count("Makes the same stream again") == 1
    assert out.index("with any model:") < out.index("with model = independent:")
    for heading in ("any model", "model = independent", "model = burst", "model = awgn", "model = rician"):
        assert out.count(f"channel[] with {heading}:") == 1
    assert "anything" not in out


def test_keys_after_the_alternatives_stand_apart_from_them(capsys):
    drivers("loopback", as_json=False)
    lines = capsys.readouterr().out.splitlines()
    place = next(n for n, line in enumerate(lines) if line.startswith("  delay_s "))
    assert lines[place - 1] == ""


def test_a_pair_of_limits_is_a_list_of_two_numbers(capsys):
    drivers("scpi", as_json=False)
    assert "list of 2 numbers" in capsys.readouterr().out
