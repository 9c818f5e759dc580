"""The ready profiles are found from anywhere, read without error, and never stand in for a mistyped path."""

from __future__ import annotations

from pathlib import Path

import pytest

from harness.profile import ProfileError, load_profile, ready_names, ready_profiles


def test_ready_profiles_are_those_of_the_checkout() -> None:
    assert ready_profiles() == Path(__file__).parents[2] / "profiles"
    assert "loopback" in ready_names()


@pytest.mark.parametrize("name", ready_names())
def test_every_ready_profile_reads(name: str) -> None:
    profile = load_profile(Path(name))
    assert profile.title
    assert profile.text


@pytest.mark.parametrize(
    "path", ["loopback", "loopback.toml", "profiles/loopback.toml", "./profiles/loopback.toml"]
)
def test_a_ready_profile_is_found_from_another_folder(
    path: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert load_profile(Path(path)).device["model"] == "Wader-9"


def test_a_file_of_ones_own_comes_before_a_ready_one(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    Path("loopback").write_text('title = "mine"\n[link]\ndriver = "loopback"\n')
    assert load_profile(Path("loopback")).title == "mine"


@pytest.mark.parametrize("path", ["/nowhere/loopback.toml", "other/loopback.toml", "loopbak", "x" * 5000])
def test_any_other_path_must_exist(path: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(ProfileError) as caught:
        load_profile(Path(path))
    assert caught.value.advice
