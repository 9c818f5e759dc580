"""`bitassay check`: what is wrong with a path is named, and only a proper one may be left alone for the night."""

from __future__ import annotations

import threading
from pathlib import Path

import pytest

from harness.bench.check import path as probing
from harness.bench.check.check import Check
from harness.profile import load_profile


@pytest.fixture
def profile(tmp_path: Path):
    """Write a profile for a serial port; link keys go into [link], the rest to the end."""

    def write(port: str, link: str = "", rest: str = "[stop]\nseconds = 60\n") -> Path:
        path = tmp_path / "unit.toml"
        path.write_text(
            f'[link]\ndriver = "serial"\nport = "{port}"\nbaud = 115200\ndrain_s = 1\n{link}\n{rest}'
        )
        return path

    return write


@pytest.fixture
def look(monkeypatch, tmp_path):
    """Check a profile in this process, with less listening than a bench wants."""
    monkeypatch.setattr(probing, "LISTEN_S", 0.3)
    monkeypatch.setattr(probing, "PAUSE_S", 0.3)

    def check(path: Path, *overrides: str):
        return Check(load_profile(path, overrides), tmp_path, threading.Event()).run()

    return check


def bad(report) -> list[tuple[str, str]]:
    return [(finding.step, finding.cause) for finding in report.findings if finding.outcome == "bad"]


# -- the five answers, as a technician gets them


@pytest.mark.parametrize(
    ("device", "status", "words"),
    [
        ({"delay_s": 0.08}, 0, "an unattended run may start"),
        ({}, 4, "short: our own bytes come back at once"),
        ({"path": "local-echo", "delay_s": 0.3}, 4, "local echo: each byte comes back from this end"),
        ({"path": "silent"}, 4, "silence: "),
        ({"path": "generator"}, 4, "another generator is on the line (it looks like PRBS9"),
    ],
    ids=["proper", "short", "echo", "silence", "generator"],
)
def test_each_path_gets_its_own_answer(bitassay, modem, profile, device, status, words):
    done = bitassay("check", profile(modem(**device)))
    said = " ".join(done.out.split())
    assert done.status == status, done.out + done.err
    assert words in said
    assert done.err == ""
    assert ("->" in said) == (status != 0), "what is wrong comes with what to do"


def test_json_is_one_object_that_names_the_cause(bitassay, modem, profile):
    done = bitassay("check", profile(modem(over="socket")), "--json")
    assert done.status == 4
    assert done.json["ready"] is False
    assert [f["cause"] for f in done.json["findings"] if f["outcome"] == "bad"] == ["short"]
    assert done.json["forecast"]["longest_seconds"] == pytest.approx(60, abs=0.1)  # the short's delay added


# -- everything else that answers


@pytest.mark.parametrize(
    ("device", "expected"),
    [
        ({"path": "text-echo"}, ("known errors", "text_echo")),
        ({"path": "seven-bits", "delay_s": 0.05}, ("known errors", "seven_bits")),
        ({"path": "reversed", "delay_s": 0.05}, ("known errors", "bit_order")),
        ({"path": "own-pattern", "delay_s": 0.05}, ("known errors", "other_pattern")),
        ({"path": "anew", "delay_s": 0.05}, ("known errors", "made_anew")),
        ({"path": "small-buffer", "delay_s": 0.05}, ("known errors", "bytes_lost")),
        ({"path": "stuck"}, ("known errors", "flow_control")),
        ({"path": "heartbeat", "delay_s": 0.05}, ("listen", "talks")),
        ({"path": "blocks", "delay_s": 0.05}, ("delay", "holds_back")),
        ({"path": "local-echo", "delay_s": 0.01}, ("delay", "local_echo")),
        ({"over": "rfc2217"}, ("delay", "short")),
    ],
    ids=lambda value: value.get("path", "short") if isinstance(value, dict) else "",
)
def test_what_is_wrong_is_named(modem, profile, look, device, expected):
    report = look(profile(modem(**device)))
    found = bad(report)
    assert found == [expected]
    assert not report.ready
    assert all(f.advice for f in report.findings if f.outcome == "bad")


@pytest.mark.parametrize("over", ["pty", "socket", "rfc2217"])
def test_a_proper_device_is_found_good_over_every_kind_of_port(modem, profile, look, over):
    report = look(profile(modem(over=over, delay_s=0.08)))
    assert report.ready, [f.text for f in report.findings]
    assert 0.08 <= report.delay_s < 0.5


def test_an_inverted_path_is_good_and_said_to_be_inverted(modem, profile, look):
    report = look(profile(modem(path="inverted", delay_s=0.05)))
    assert report.ready
    assert any("inverted" in f.text for f in report.findings)


def test_a_few_errors_and_a_lost_byte_are_the_devices_and_not_the_paths(modem, profile, look):
    report = look(profile(modem(delay_s=0.05, flip=list(range(5_000, 150_000, 1_500)), drop=[9_000])))
    assert report.ready, [f.text for f in report.findings]
    text = next(f.text for f in report.findings if f.step == "known errors")
    assert "beside them" in text
    assert "1 byte lost" in text


def test_a_path_that_may_answer_at_once_is_good_where_the_profile_says_so(modem, profile, look):
    port = modem()
    assert bad(look(profile(port))) == [("delay", "short")]
    assert look(profile(port), "link.least_delay_s=0").ready


def test_what_comes_sooner_than_the_profile_allows_is_a_short(modem, profile, look):
    port = modem(delay_s=0.08)
    assert look(profile(port), "link.least_delay_s=0.02").ready
    assert bad(look(profile(port), "link.least_delay_s=2")) == [("delay", "short")]


def test_a_slow_link_is_probed_with_less_and_says_how_long_that_takes(modem, profile, look):
    path = profile(modem(delay_s=0.4), "rate_bps = 300\npace_bps = 9600")
    report = look(path)
    assert report.ready
    assert any("probing takes" in f.text for f in report.findings)


def test_a_device_that_refuses_its_set_up_command_is_quoted(modem, profile, look):
    before = '[[link.before]]\nsend = "AT+DATA=1\\r"\nexpect = "OK"\ntimeout_s = 0.5\n[stop]\nseconds = 9\n'
    report = look(profile(modem(commands={"AT+DATA=1": "ERROR 17"}), rest=before))
    assert bad(report) == [("bench", "fault")]
    assert any("ERROR 17" in f.text for f in report.findings)


# -- connections, where no connector can be shorted


@pytest.fixture
def over_tcp(modem, tmp_path):
    """Write a profile for a modem behind a TCP connection."""

    def write(**device) -> Path:
        port = modem(over="socket", **device).rpartition(":")[2]
        path = tmp_path / "tcp.toml"
        path.write_text(
            f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {port}\nrate_bps = 480_000\ndrain_s = 1\n'
            "[stop]\nbits = 480_000\n"
        )
        return path

    return write


def test_an_answer_at_once_over_tcp_is_no_short_but_is_said(over_tcp, look):
    report = look(over_tcp())
    assert report.ready, [f.text for f in report.findings]
    note = next(f for f in report.findings if f.cause == "at_once")
    assert note.outcome == "note"
    assert "an echo or a short at this end" in note.text
    assert bad(look(over_tcp(), "link.least_delay_s=0.01")) == [("delay", "short")]


def test_a_local_echo_over_tcp_is_refused(over_tcp, look):
    assert bad(look(over_tcp(path="local-echo", delay_s=0.1))) == [("delay", "local_echo")]


def test_a_silent_peer_is_not_told_to_look_for_cables(over_tcp, look):
    silent = next(f for f in look(over_tcp(path="silent")).findings if f.cause == "silence")
    assert "host and port" in silent.advice
    assert "cable" not in silent.advice


def test_the_forecast_counts_the_loop_delay_and_says_what_lost_bits_would_add(over_tcp, look):
    report = look(over_tcp(delay_s=0.4))
    assert report.forecast["longest_seconds"] >= 1.4
    text = next(f.text for f in report.findings if f.step == "forecast")
    assert "should its last bits be lost, 1 s more" in text


# -- two ports, one way


def two_ports(tmp_path: Path, ports: list[int], keys: str = "", rest: str = "") -> Path:
    path = tmp_path / "two.toml"
    path.write_text(
        f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {ports[0]}\ndrain_s = 1\n{keys}\n'
        f'[link.receive]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {ports[1]}\n'
        f"{rest}\n[stop]\nseconds = 9\n"
    )
    return path


DUPLEX = '[pattern]\nname = "PRBS15"\n[pattern.reverse]\nname = "PRBS23"\n'


def test_two_ports_are_proven_and_an_answer_at_once_is_remarked(bridge, look, tmp_path):
    report = look(two_ports(tmp_path, bridge()))
    assert report.ready, [f.text for f in report.findings]
    assert any(f.cause == "at_once" for f in report.findings)


def test_both_directions_are_proven(bridge, look, tmp_path):
    report = look(two_ports(tmp_path, bridge(), "duplex = true", DUPLEX))
    assert report.ready, [f.text for f in report.findings]
    assert [f.step for f in report.findings].count("known errors") == 2
    assert [f.step for f in report.findings].count("echo") == 2


def test_an_echo_at_one_end_would_be_counted_in_the_other_direction(bridge, look, tmp_path):
    report = look(two_ports(tmp_path, bridge(echo=True), "duplex = true", DUPLEX))
    assert ("echo", "local_echo") in bad(report)


def one_way(tmp_path: Path, data: bytes) -> Path:
    (tmp_path / "heard.bin").write_bytes(data)
    path = tmp_path / "one.toml"
    path.write_text(f'[link]\ndriver = "capture"\npath = "{tmp_path}/heard.bin"\n')
    return path


def test_what_comes_one_way_has_to_be_the_pattern(bitassay, look, tmp_path):
    bitassay("emit", "--pattern", "PRBS15", "--bytes", 4000, "--output", "right.bin")
    bitassay("emit", "--pattern", "PRBS9", "--bytes", 4000, "--output", "wrong.bin")
    assert look(one_way(tmp_path, (tmp_path / "right.bin").read_bytes())).ready
    report = look(one_way(tmp_path, (tmp_path / "wrong.bin").read_bytes()))
    assert bad(report) == [("listen", "other_pattern")]
    assert any("PRBS9" in f.text for f in report.findings)


# -- stop rules


REQUIRED = "[requirement]\nber = 1e-6\naccept_errors = 3\n[stop]\n"


def test_a_stop_before_the_plans_end_is_refused_before_anything_is_opened(bitassay, profile):
    done = bitassay("check", profile("/dev/ttyWader9", "rate_bps = 48_000", REQUIRED + "seconds = 2\n"))
    assert done.status == 2, done.out
    assert "stop.seconds is 2" in done.out
    assert "ttyWader9" not in done.out + done.err, "the port was opened"


@pytest.mark.parametrize("stop", ["seconds = 161", "bits = 7_753_000", "errors = 3"])
def test_every_stop_rule_is_held_against_the_plan(look, profile, stop):
    report = look(profile("/dev/ttyWader9", "rate_bps = 48_000", REQUIRED + stop))
    assert [(f.step, f.usage) for f in report.findings if f.outcome == "bad"] == [("stop rules", True)]


def test_a_stop_beyond_the_plans_end_is_good(look, profile):
    stop = "seconds = 162\nbits = 7_754_000\nerrors = 4"
    report = look(profile("/dev/ttyWader9", "rate_bps = 48_000", REQUIRED + stop))
    assert [f.step for f in report.findings if f.outcome == "bad"] == ["bench"]


def test_a_run_that_nothing_ends_is_refused(look, profile):
    report = look(profile("/dev/ttyWader9", rest=""))
    assert [f.step for f in report.findings if f.outcome == "bad"] == ["stop rules"]


# -- instruments


def test_instruments_are_stepped_within_their_limits_and_the_link_is_lost_at_the_highest(
    bitassay, attenuated, tmp_path
):
    bench = attenuated(x0_db=40, delay_s=0.05)
    path = tmp_path / "sweep.toml"
    path.write_text(bench.profile('[sweep]\ninstrument = "attenuator"\nvalues = [20, 25, 30]\n'))
    done = bitassay("check", path)
    assert done.status == 0, done.out + done.err
    assert "the link is lost" in done.out
    settings = bench.settings()
    assert {20, 30, 80} <= set(settings)
    assert all(0 <= value <= 80 for value in settings)
    assert settings[-1] == 80, "safe is the last word"


def test_a_path_around_the_attenuator_is_found(look, attenuated, tmp_path):
    bench = attenuated(x0_db=40, delay_s=0.05, leak=True)
    path = tmp_path / "sweep.toml"
    path.write_text(bench.profile('[sweep]\ninstrument = "attenuator"\nvalues = [20, 25, 30]\n'))
    assert bad(look(path)) == [("isolation", "leak")]
    assert bench.settings()[-1] == 80


MANUAL = """
[instruments.attenuator]
driver = "manual"
name = "the step attenuator"
quantity = "attenuation"
unit = "dB"
limits = [0, 110]
safe = 110
[sweep]
instrument = "attenuator"
values = [20, 30]
"""


def test_a_sweep_by_hand_cannot_be_left_alone(look, profile):
    report = look(profile("/dev/ttyWader9", rest="[stop]\nseconds = 5\n" + MANUAL))
    assert bad(report) == [("instruments", "manual")], "and the port was not opened"
    assert all(f.usage for f in report.findings if f.outcome == "bad")


# -- a requirement that the path cannot meet


@pytest.mark.parametrize(("ber", "said"), [(2e-3, True), (2e-6, False)])
def test_a_path_that_is_worse_than_required_is_ready_and_told_to_expect_fail(look, tmp_path, ber, said):
    path = tmp_path / "unit.toml"
    path.write_text(
        '[link]\ndriver = "loopback"\nrate_bps = 1_000_000\n'
        f'[[link.channel]]\nmodel = "independent"\nber = {ber}\nseed = 3\n[requirement]\nber = 1e-4\n'
    )
    report = look(path)
    words = [finding.text for finding in report.findings if finding.step == "requirement"]
    assert report.ready
    assert len(words) == said
    if said:
        assert words[0].startswith(
            "the requirement allows a BER of 1e-4 and no slip; the path showed a BER of "
        )
        assert words[0].endswith(": expect FAIL")


def test_a_lost_byte_where_no_slip_is_allowed_is_told(look, modem, profile):
    rest = "[requirement]\nber = 1e-3\n[stop]\nseconds = 600\n"
    report = look(profile(modem(delay_s=0.05, drop=[9_000]), rest=rest))
    assert any("no slip; the path showed " in finding.text for finding in report.findings)
