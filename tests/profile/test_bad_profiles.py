"""Each way in which a profile can be wrong ends in one line what and one line what to do."""

from __future__ import annotations

from pathlib import Path

import pytest

from harness.profile import ProfileError, load_profile, parse_profile

LINK = '[link]\ndriver = "loopback"\n'


def problem(text: str, *overrides: str) -> ProfileError:
    with pytest.raises(ProfileError) as caught:
        parse_profile(text, overrides, "wader.toml")
    error = caught.value
    assert error.what
    assert error.advice
    assert "\n" not in error.what + error.advice
    return error


def test_a_missing_file_names_the_ready_profiles(tmp_path: Path) -> None:
    with pytest.raises(ProfileError) as caught:
        load_profile(tmp_path / "nowhere.toml")
    assert "there is no profile" in caught.value.what
    assert "loopback" in caught.value.advice


def test_a_folder_is_no_profile(tmp_path: Path) -> None:
    with pytest.raises(ProfileError, match="is a folder"):
        load_profile(tmp_path)


def test_a_binary_file_is_no_profile(tmp_path: Path) -> None:
    path = tmp_path / "capture.toml"
    path.write_bytes(b"title = 'x'\n\xff\xfe\x00")
    with pytest.raises(ProfileError, match="line 2 is not UTF-8"):
        load_profile(path)


@pytest.mark.parametrize(
    ("text", "line"), [("a =", 1), ("title = 'x'\n\nstop", 3), ("x = 1\nx = 2\n", 2), ("\n[link\n", 2)]
)
def test_what_is_not_toml_names_the_line(text: str, line: int) -> None:
    assert f"wader.toml is not TOML, line {line}:" in problem(text).what


def test_leading_zeros_without_quotes_get_the_advice_to_quote() -> None:
    assert "put it in quotes" in problem("[device]\nserial_number = 0031\n").advice


@pytest.mark.parametrize(
    ("text", "key", "nearest"),
    [
        (LINK + "[stop]\nsecnds = 3\n", "stop.secnds", "stop.seconds"),
        (LINK + "[sotp]\nseconds = 3\n", "sotp", "stop"),
        (LINK + "[pattern]\nconfidence = 0.9\n", "pattern.confidence", "requirement.confidence"),
        (LINK + "rate_bsp = 3\n", "link.rate_bsp", "link.rate_bps"),
        ('[link]\ndriver = "tcp"\nhots = "x"\nport = 3\n', "link.hots", "link.host"),
        ('[link]\ndrivr = "tcp"\n', "link.drivr", "link.driver"),
        (
            LINK + '[[link.channel]]\nmodel = "independent"\nbre = 0.1\n',
            "link.channel[1].bre",
            "link.channel.ber",
        ),
        (LINK + '[[link.before]]\nsnd = "x"\n', "link.before[1].snd", "link.before.send"),
        (LINK + "titel = 3\n", "link.titel", "title"),
    ],
)
def test_an_unknown_key_names_the_nearest_known_one(text: str, key: str, nearest: str) -> None:
    error = problem(text)
    assert error.what.removesuffix(" (and 1 more)") == f"unknown key {key}"
    assert error.advice == f"the nearest known key is {nearest}"


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ('ber = "1e-6"', 'requirement.ber must be a number, not "1e-6"'),
        ("ber = true", "requirement.ber must be a number, not true"),
        ("ber = [1e-6]", "requirement.ber must be a number, not [1e-6]"),
        ("ber = 0", "requirement.ber must be over 0, not 0"),
        ("ber = -1e-6", "requirement.ber must be over 0, not -1e-6"),
        ("ber = 1", "requirement.ber must be under 1, not 1"),
        ("ber = 1.5", "requirement.ber must be under 1, not 1.5"),
        ("ber = nan", "requirement.ber must be a finite number, not nan"),
        ("ber = inf", "requirement.ber must be"),
        ("confidence = 0.9", "requirement.ber is missing"),
        ("ber = 1e-6\nconfidence = 1", "requirement.confidence must be under 1, not 1"),
        ("ber = 1e-6\nconfidence = 0.0", "requirement.confidence must be over 0, not 0"),
        ("ber = 1e-6\nmargin = 1", "requirement.margin must be over 1, not 1"),
        ("ber = 1e-6\naccept_errors = -1", "requirement.accept_errors must be at least 0, not -1"),
        ("ber = 1e-6\nmax_slips = 0.5", "requirement.max_slips must be a whole number, not 0.5"),
        ("ber = 1e-6\nmax_unaligned_ratio = 2", "requirement.max_unaligned_ratio must be at most 1, not 2"),
        ("ber = 1e-6\nproducer_risk = 0", "requirement.producer_risk must be over 0, not 0"),
        ('ber = 1e-6\nplan = "sequentail"', 'requirement.plan cannot be "sequentail"'),
        ('ber = 1e-6\nlost_link = "maybe"', 'requirement.lost_link cannot be "maybe"'),
        ('ber = 1e-6\ncount = "events"', "requirement counts events without saying what an event is"),
        ('ber = 1e-6\nplan = "sequential"\nconfidence = 0.4\nproducer_risk = 0.5', "add up to 1 or more"),
    ],
)
def test_a_requirement_out_of_range_is_refused(line: str, words: str) -> None:
    assert words in problem(f"{LINK}[requirement]\n{line}\n").what


@pytest.mark.parametrize("line", ["bits = 0", "seconds = -1", "errors = 0", "seconds = nan", "bits = 1e19"])
def test_a_stop_rule_that_never_or_always_holds_is_refused(line: str) -> None:
    assert problem(f"{LINK}[stop]\n{line}\n").what.startswith(f"stop.{line.split()[0]} must be")


@pytest.mark.parametrize("line", ["pace_bps = 0", "rate_bps = -3", "drain_s = 0", "max_in_flight_bits = 0"])
def test_link_numbers_out_of_range_are_refused(line: str) -> None:
    assert f"link.{line.split()[0]} must be over 0" in problem(f"{LINK}{line}\n").what


def test_further_problems_are_counted() -> None:
    assert problem(LINK + "[stop]\nbits = 0\nseconds = 0\nerrors = 0\n").what.endswith("(and 2 more)")


def test_an_unknown_driver_and_a_missing_one() -> None:
    error = problem('[link]\ndriver = "lopback"\n')
    assert "lopback" in error.what
    assert "loopback" in error.advice
    assert problem("[link]\nport = 3\n").what == "link.driver is missing"
    assert problem("[link]\ndriver = 3\n").what == "link.driver must be text in quotes, not 3"
    assert "no [link]" in problem("title = 'x'\n").what


def test_a_drivers_own_keys_are_checked_by_the_driver() -> None:
    assert problem('[link]\ndriver = "tcp"\nhost = "h"\nport = "x"\n').what.startswith(
        "link.port must be a whole number"
    )
    assert problem('[link]\ndriver = "tcp"\nhost = "h"\n').what == "link.port is missing"


@pytest.mark.parametrize("name", ["PRBS99", "word:012", "taps:", "bernoulli:2", ""])
def test_an_unknown_pattern_is_refused(name: str) -> None:
    assert problem(f'{LINK}[pattern]\nname = "{name}"\n').what.startswith("pattern.name: ")


def test_a_section_where_a_value_belongs_and_the_other_way_round() -> None:
    assert problem("link = 3\n").what == "link must be a section, not 3"
    assert problem(LINK + "[title]\nx = 1\n").what == "title must be text in quotes, not a section"
    assert problem(LINK + "[device.x]\ny = 1\n").what == "device.x must be text in quotes, not a section"


def test_control_characters_in_what_is_printed_are_refused() -> None:
    assert "control characters" in problem('title = "\\u001b[2J"\n' + LINK).what
    assert "control characters" in problem(LINK + '[device]\nmodel = "\\u0000"\n').what


def test_xon_xoff_with_a_pattern_that_sends_every_byte_is_refused() -> None:
    text = '[link]\ndriver = "serial"\nport = "loop://"\nflow = "xonxoff"\n'
    assert "XON/XOFF" in problem(text).what
    parse_profile(text + '[pattern]\nname = "word:0x5A"\n')
    parse_profile(text.replace("xonxoff", "rtscts"))


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (LINK + 'topology = "two-port"\n', "needs its second port"),
        (LINK + 'topology = "one-way"\n[link.receive]\ndriver = "loopback"\n', "is a second port"),
        (LINK + "duplex = true\n", "duplex needs two ports"),
        (LINK + 'duplex = true\n[link.receive]\ndriver = "loopback"\n', "duplex needs another pattern"),
        (LINK + "[pattern.reverse]\nname = 'PRBS9'\n", "both directions at once"),
        (LINK + "[framing]\nsync = 1\n", "[framing] is reserved"),
    ],
)
def test_ports_and_directions_must_fit_together(text: str, words: str) -> None:
    assert words in problem(text).what


def test_two_directions_with_two_patterns_are_accepted() -> None:
    text = LINK + 'duplex = true\n[link.receive]\ndriver = "loopback"\n[pattern.reverse]\nname = "PRBS9"\n'
    assert parse_profile(text).pattern.reverse is not None
