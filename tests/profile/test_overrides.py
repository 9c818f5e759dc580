"""Overrides are read by the field's type, kept as given, and never loosen a limit."""

from __future__ import annotations

import pytest

from harness.profile import Profile, ProfileError, parse_profile


@pytest.fixture
def read(sweep_text: str):  # type: ignore[no-untyped-def]
    def read(*overrides: str) -> Profile:
        return parse_profile(sweep_text, overrides)

    return read


def refused(read, *overrides: str) -> str:  # type: ignore[no-untyped-def]
    with pytest.raises(ProfileError) as caught:
        read(*overrides)
    assert caught.value.advice
    return caught.value.what


def test_values_are_read_by_the_fields_type(read) -> None:  # type: ignore[no-untyped-def]
    profile = read(
        "stop.bits=1_000",
        "stop.seconds=.5",
        "requirement.ber=1e-4",
        "requirement.plan=curtailed",
        "pattern.name=PRBS9",
        'title="quoted"',
        "instruments.attenuator.low_power=true",
        "instruments.attenuator.resource=123",
        "sweep.values=[1, 2.5]",
        "sweep.finish_by=07:00",
        "requirement.at.attenuator=2.5",
    )
    assert (profile.stop.bits, profile.stop.seconds) == (1000, 0.5)
    assert (profile.requirement.ber, profile.requirement.plan) == (1e-4, "curtailed")
    assert (profile.pattern.name, profile.title) == ("PRBS9", "quoted")
    options = profile.instruments["attenuator"].options
    assert (options.low_power, options.resource) == (True, "123")
    assert (profile.sweep.values, profile.sweep.finish_by) == ((1.0, 2.5), "07:00")
    assert profile.requirement.at == {"attenuator": 2.5}


@pytest.mark.parametrize("value", ["0031", "1e3", "true", "[1]", "2026-05-01", "a=b", "", "0x1F", " padded "])
def test_device_values_stay_text(read, value: str) -> None:  # type: ignore[no-untyped-def]
    assert read(f"device.serial_number={value}").device["serial_number"] == value


def test_a_title_that_looks_like_a_number_stays_text(read) -> None:  # type: ignore[no-untyped-def]
    assert read("title=0031").title == "0031"


def test_list_items_by_number_and_the_only_one_without(read) -> None:  # type: ignore[no-untyped-def]
    for key in ("link.channel.ber", "link.channel.0.ber"):
        assert read(f"{key}=0.25").need_link().options.channel[0].ber == 0.25
    assert "names no item" in refused(read, "link.channel.1.ber=0.25")


def test_a_new_section_can_be_made(read) -> None:  # type: ignore[no-untyped-def]
    assert read("lot.size=3").lot.size == 3


def test_overrides_are_kept_in_order_as_given(read) -> None:  # type: ignore[no-untyped-def]
    given = ("stop.bits=1e3", "stop.bits=2_000", "device.order= A 7")
    profile = read(*given)
    assert profile.overrides == given
    assert profile.stop.bits == 2000


@pytest.mark.parametrize(
    ("override", "words"),
    [
        ("stop.bits", "not of the form"),
        ("=3", "not of the form"),
        ("a b=3", "cannot read the key"),
        ("stop..bits=3", "cannot read the key"),
        ("stop.bits=abc", 'stop.bits must be a whole number, not "abc"'),
        ("stop.bits=", 'stop.bits must be a whole number, not ""'),
        ("stop.bit=3", "unknown key stop.bit"),
        ("stop=3", "stop must be a section"),
        ("title.x=3", "title is a value"),
        ("requirement.ber=2", "requirement.ber must be under 1"),
        ("instruments={}", "would replace a whole instrument"),
        ('instruments.attenuator={driver="step-box"}', "would replace a whole instrument"),
        ("title=\udcff", "is not UTF-8"),
    ],
)
def test_a_bad_override_is_refused(read, override: str, words: str) -> None:  # type: ignore[no-untyped-def]
    assert words in refused(read, override)


def test_limits_may_be_narrowed(read) -> None:  # type: ignore[no-untyped-def]
    profile = read("instruments.attenuator.limits=[10, 70]", "instruments.attenuator.safe=70")
    assert profile.instruments["attenuator"].options.limits == (10.0, 70.0)


@pytest.mark.parametrize("limits", ["[0, 96]", "[-0.1, 95]", "[0, inf]", "[0, nan]", "[95]", "95", "wide"])
def test_limits_may_never_be_widened_or_lost(read, limits: str) -> None:  # type: ignore[no-untyped-def]
    assert "never widen them" in refused(read, f"instruments.attenuator.limits={limits}")


def test_limits_cannot_be_widened_in_two_steps(read) -> None:  # type: ignore[no-untyped-def]
    steps = ("instruments.attenuator.limits=[30, 50]", "instruments.attenuator.limits=[0, 120]")
    assert "never widen them" in refused(read, *steps)


def test_a_safe_value_outside_narrowed_limits_is_refused(read) -> None:  # type: ignore[no-untyped-def]
    assert "safe is 95 and lies outside" in refused(read, "instruments.attenuator.limits=[10, 70]")


@pytest.mark.parametrize("key", ["damage_dbm", "permitted_dbm"])
def test_power_limits_may_be_lowered_and_never_raised(sweep_text: str, key: str) -> None:
    text = sweep_text + f"\n[level]\nsource_dbm = 10\n{key} = -10\n"
    parse_profile(text, [f"level.{key}=-20"])
    for value in ("-9.9", "inf", "nan", "x"):
        with pytest.raises(ProfileError, match="never raise it"):
            parse_profile(text, [f"level.{key}={value}"])
    with pytest.raises(ProfileError, match="is not to be overridden"):
        parse_profile(text, ["level.source_dbm=0"])
