"""Every ready profile: those that need no hardware run as they are, the others on a device in its own process."""

from __future__ import annotations

import subprocess
import sys
import threading
from pathlib import Path

import pytest

from harness.bench.check.forecast import stop_problem
from harness.bench.session import Links
from harness.profile import load_profile, ready_names

QUICK = ("--set", "requirement.ber=1e-3", "--set", "requirement.plan=fixed")


@pytest.mark.parametrize("name", ready_names())
def test_a_ready_profile_ends_by_itself_and_not_before_its_plan(name):
    profile = load_profile(Path(name))
    assert stop_problem(profile, Links(profile.need_link(), threading.Event()).rate_bps) is None
    assert "Wader-9" in profile.title
    assert "invented" in profile.text


@pytest.mark.parametrize(
    "name", [name for name in ready_names() if "HARDWARE" in load_profile(Path(name)).text]
)
def test_a_profile_for_hardware_carries_its_caution(name):
    text = load_profile(Path(name)).text
    assert "CAUTION" in text or 'topology = "one-way"' in text


@pytest.mark.parametrize("name", ["loopback", "process", "serial"])
def test_it_runs_as_it_is_and_passes(bitassay, name):
    done = bitassay("measure", name, "--json")
    assert (done.status, done.json["verdict"]) == (0, "PASS"), done.err


def test_the_check_of_the_serial_one_is_good_as_it_is(bitassay):
    done = bitassay("check", "serial")
    assert done.status == 0, done.out


def test_a_capture_is_counted(bitassay):
    assert bitassay("emit", "--pattern", "PRBS15", "--bytes", 200_000, "--output", "received.bin").status == 0
    done = bitassay("measure", "capture", "--json")
    assert (done.status, done.json["verdict"]) == (0, "PASS"), done.err


def test_the_simulated_sweep_finds_the_simulated_receiver(bitassay):
    fast = ("--set", "link.pace_bps=20000000", "--set", "stop.bits=1000000")
    done = bitassay("sweep", "sweep-loopback", *fast, "--json", timeout=120)
    assert done.status == 0, done.err
    found = done.json["sensitivity"]
    # QPSK has a BER of 1e-4 at an Eb/N0 of 8.40 dB: 32 dB less that is 23.6 dB of attenuation.
    assert found["lower"] <= 23.6 + 0.15
    assert found["upper"] >= 23.6 - 0.15
    assert found["value"] == pytest.approx(23.6, abs=0.3)


def test_the_network_port_runs_on_a_device(bitassay, device):
    port = device(delay_s=0.1)
    done = bitassay(
        "measure", "tcp", "--set", "link.host=127.0.0.1", "--set", f"link.port={port}", *QUICK, "--json"
    )
    assert (done.status, done.json["verdict"]) == (0, "PASS"), done.err


def test_datagrams_run_on_a_device(bitassay):
    program = Path(__file__).parents[1] / "drivers" / "device.py"
    process = subprocess.Popen([sys.executable, str(program), "udp"], stdout=subprocess.PIPE, text=True)
    try:
        port = process.stdout.readline().strip()
        where = ("--set", "link.host=127.0.0.1", "--set", f"link.port={port}")
        done = bitassay("measure", "udp", *where, *QUICK, "--json")
        assert (done.status, done.json["verdict"]) == (0, "PASS"), done.err
    finally:
        process.kill()
        process.wait()
        process.stdout.close()


@pytest.mark.parametrize("name", ["two-port", "duplex"])
def test_two_ports_run_on_a_device(bitassay, bridge, name):
    ports = bridge()
    where = [f"link.port=socket://127.0.0.1:{ports[0]}", f"link.receive.port=socket://127.0.0.1:{ports[1]}"]
    sets = [word for key in where for word in ("--set", key)]
    done = bitassay("measure", name, *sets, *QUICK, "--json")
    assert (done.status, done.json["verdict"]) == (0, "PASS"), done.err
    if name == "duplex":
        assert [point["pattern"] for point in done.json["points"]] == ["PRBS15", "PRBS23"]


def test_one_way_counts_what_comes_by_itself(bitassay, modem):
    port = modem(path="generator")
    sets = ("--set", f"link.port={port}", "--set", "pattern.name=PRBS9")
    done = bitassay("measure", "one-way", *sets, *QUICK, "--json")
    assert (done.status, done.json["verdict"]) == (0, "PASS"), done.err
    assert done.json["bits_sent"] == 0


def test_the_sweep_with_a_real_attenuator_runs_on_a_device(bitassay, attenuated):
    bench = attenuated(x0_db=84, delay_s=0.05, start_db=95)
    sets = [
        f"link.port=socket://127.0.0.1:{bench.echo_port}",
        f"instruments.attenuator.resource=TCPIP::127.0.0.1::{bench.scpi_port}::SOCKET",
        "sweep.values=[72, 80]",
        "stop.seconds=1",
    ]
    done = bitassay("sweep", "sweep-scpi", *[word for key in sets for word in ("--set", key)], "--json")
    assert done.status == 0, done.err
    assert [point["values"]["attenuator"] for point in done.json["points"]] == [72, 80]
    assert bench.settings()[-1] == 95
