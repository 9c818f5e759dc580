"""A store that is named by mistake is noticed: reading never makes one, and writing says that it is new."""

from __future__ import annotations

from pathlib import Path

import pytest

from harness.cli.output import new_store

PROFILE = '[link]\ndriver = "loopback"\nrate_bps = 1_000_000\n[stop]\nbits = 80_000\n'


@pytest.mark.parametrize("command", ["runs", "show", "verify", "resume"])
def test_reading_a_store_that_is_not_there_is_status_4_and_makes_none(bitassay, tmp_path, command):
    done = bitassay(command, "--store", "mistyped.sqlite")
    assert done.status == 4
    assert "there is no store at mistyped.sqlite" in done.err
    assert len(done.err.splitlines()) == 2
    assert not (tmp_path / "mistyped.sqlite").exists()


def test_writing_says_that_a_named_store_is_new(bitassay, tmp_path):
    (tmp_path / "p.toml").write_text(PROFILE)
    done = bitassay("measure", "p.toml", "--store", "lab.sqlite")
    assert done.err.splitlines()[0] == "new store at lab.sqlite"
    failed = bitassay("measure", "p.toml", "--store", "/proc/lab.sqlite")
    assert failed.status == 4
    assert "new store" not in failed.err


def test_a_store_that_is_there_or_in_its_usual_place_or_on_a_server_needs_no_word(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("BITASSAY_STORE", raising=False)
    assert new_store(None) is None
    assert new_store("postgresql+psycopg://bench@db.example/lab") is None
    assert new_store("sqlite:///lab.sqlite") == Path("lab.sqlite")
    (tmp_path / "lab.sqlite").touch()
    assert new_store("lab.sqlite") is None
    monkeypatch.setenv("BITASSAY_STORE", "elsewhere.sqlite")
    assert new_store(None) == Path("elsewhere.sqlite")
