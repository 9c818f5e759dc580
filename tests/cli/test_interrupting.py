"""Ctrl-C, SIGTERM and SIGKILL: the run is closed, or cut; what was measured is kept and goes on."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import time
from concurrent.futures import ThreadPoolExecutor

import pytest

from harness.store import open_store

RUN = """
title = "Wader-9, invented"
[device]
serial_number = "0031"
[link]
driver = "loopback"
rate_bps = 800_000
pace_bps = 800_000
drain_s = 1
[[link.channel]]
model = "independent"
ber = 1e-3
seed = 7
"""


def start(tmp_path, *arguments: str) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "harness.cli.main", *arguments],
        cwd=tmp_path,
        env={k: v for k, v in os.environ.items() if k != "BITASSAY_STORE"},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def seconds_kept(bitassay) -> float:
    shown = bitassay("show", "last", "--json")
    return shown.json["seconds"] if shown.status == 0 else 0.0


def wait_until_measuring(bitassay, least_s: float = 1.0) -> None:
    for _ in range(40):
        if seconds_kept(bitassay) >= least_s:
            return
        time.sleep(0.2)
    raise AssertionError("the run never got going")


def wait_for_rows(tmp_path, least: int, process: subprocess.Popen[str]) -> bool:
    """Wait until the store holds so many seconds; False where the run ended before."""
    path = tmp_path / "results" / "runs.sqlite"
    while process.poll() is None:
        if path.exists():
            try:
                with contextlib.closing(sqlite3.connect(path)) as db:
                    if db.execute("select count(*) from second").fetchone()[0] >= least:
                        return True
            except sqlite3.OperationalError:  # its tables are being made
                pass
        time.sleep(0.05)
    return False


@pytest.mark.parametrize(("number", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_a_signal_closes_the_run_properly(bitassay, tmp_path, number, status):
    (tmp_path / "run.toml").write_text(RUN + "[requirement]\nber = 1e-9\n[stop]\nseconds = 60\n")
    process = start(tmp_path, "measure", "run.toml", "--json")
    wait_until_measuring(bitassay)
    process.send_signal(number)
    out, err = process.communicate(timeout=20)
    assert process.returncode == status, err
    got = json.loads(out)
    assert (got["status"], got["ended_by"]) == ("interrupted", "interrupted")
    assert got["bits_received"] == got["bits_compared"] > 400_000
    assert bitassay("show", "last", "--json").json == got
    assert bitassay("verify", "last").status == 0


def test_a_killed_run_is_cut_and_keeps_all_but_its_last_second(bitassay, tmp_path):
    (tmp_path / "run.toml").write_text(RUN + "[stop]\nseconds = 60\n")
    process = start(tmp_path, "measure", "run.toml", "--quiet")
    wait_until_measuring(bitassay, 2.0)
    begun = time.monotonic()
    process.kill()
    process.communicate()
    kept = seconds_kept(bitassay)
    shown = bitassay("show", "last", "--json").json
    assert shown["status"] == "cut"
    assert kept >= 2.0
    assert time.monotonic() - begun < 30
    assert bitassay("verify", "last").status == 0


def test_a_sweep_killed_again_and_again_has_the_bits_of_one_that_was_not(bitassay, tmp_path):
    (tmp_path / "sweep.toml").write_text(
        RUN
        + "[stop]\nbits = 2_400_000\n[instruments.attenuator]\ndriver = 'simulated'\nknob = 'ber'\n"
        + "limits = [0, 0.5]\nsafe = 0\n[sweep]\ninstrument = 'attenuator'\nvalues = [0.001, 0.01, 0.1]\n"
    )
    kills = 0
    process = start(tmp_path, "sweep", "sweep.toml", "--quiet")
    while kills < 3 and wait_for_rows(tmp_path, kills + 1, process):
        process.kill()
        process.communicate()
        kills += 1
        process = start(tmp_path, "resume", "last", "--quiet")
    process.communicate(timeout=60)
    assert process.returncode == 0
    assert kills >= 1
    got = bitassay("show", "last", "--json").json
    assert got["status"] == "completed"
    assert [point["values"]["attenuator"] for point in got["points"]] == [0.001, 0.01, 0.1]
    for point in got["points"]:
        assert point["bits_compared"] == point["bits_received"] == 2_400_000
        expected = 2_400_000 * point["values"]["attenuator"]
        assert abs(point["errors"] - expected) < 6 * expected**0.5  # under 1e-8 by chance
    assert bitassay("verify", "last").status == 0
    again = bitassay("resume", "last", "--json")
    assert again.status == 0
    assert again.json["run"] == got["run"]


def echo_to(port: int) -> None:
    """Be the device: connect, give back what comes, until the other side has gone."""
    for _ in range(300):
        with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", port)) as connection:
            while data := connection.recv(65_536):
                connection.sendall(data)
            return
        time.sleep(0.1)


def test_a_run_killed_before_its_first_point_is_shown_and_goes_on(bitassay, own_port, tmp_path):
    port = own_port(socket.SOCK_STREAM)
    (tmp_path / "run.toml").write_text(
        f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {port}\nlisten = true\nrate_bps = 800_000\n'
        "connect_timeout_s = 60\n[requirement]\nber = 1e-4\n[stop]\nbits = 80_000\n"
    )
    process = start(tmp_path, "measure", "run.toml")
    path = tmp_path / "results" / "runs.sqlite"
    for _ in range(400):
        with contextlib.suppress(sqlite3.OperationalError), contextlib.closing(sqlite3.connect(path)) as db:
            if db.execute("select count(*) from sitting").fetchone()[0]:
                break
        time.sleep(0.05)
    process.kill()
    process.communicate()
    shown = bitassay("show", "last", "--json")
    assert shown.status == 0, shown.err
    assert (shown.json["status"], shown.json["bits_received"]) == ("cut", 0)
    for command in ("show last", "runs", "report last --text", "verify last", "export last --format csv"):
        done = bitassay(*command.split())
        assert done.status == 0, (command, done.err)
    for form in ("json", "junit"):
        assert bitassay("export", "last", "--format", form).status == 0
    with ThreadPoolExecutor() as pool:
        pool.submit(echo_to, port)
        resumed = bitassay("resume", "last", "--json")
    assert resumed.status == 0, resumed.err
    assert (resumed.json["verdict"], resumed.json["errors"]) == ("PASS", 0)
    assert bitassay("verify", "last").status == 0


def test_a_resumed_run_does_not_meet_the_errors_of_its_beginning_again(bitassay, tmp_path):
    (tmp_path / "run.toml").write_text(RUN + "[stop]\nbits = 2_400_000\n")
    process = start(tmp_path, "measure", "run.toml", "--quiet")
    assert wait_for_rows(tmp_path, 1, process)
    process.kill()
    process.communicate()
    assert bitassay("resume", "last").status == 0
    with open_store(f"sqlite:///{tmp_path / 'results' / 'runs.sqlite'}") as store:
        (point,) = store.load(store.find("last")).points
    sittings = []
    for sitting in (0, 1):
        seconds = [s for s in point.seconds if s.sitting == sitting]
        first = min(s.first_bit for s in seconds)
        sittings.append({int(bit) - first for s in seconds for bit in s.positions})
    same, fewest = len(sittings[0] & sittings[1]), min(map(len, sittings))
    assert fewest > 200
    assert same < fewest / 10  # one in a thousand by chance


def test_what_a_resumed_run_says_of_its_cut_names_how_it_stopped_and_what_was_out(bitassay, tmp_path):
    (tmp_path / "run.toml").write_text(RUN + "[stop]\nbits = 2_400_000\n")
    process = start(tmp_path, "measure", "run.toml", "--quiet")
    assert wait_for_rows(tmp_path, 1, process)
    process.send_signal(signal.SIGINT)
    process.communicate()
    assert bitassay("resume", "last").status == 0
    got = bitassay("show", "last", "--json").json
    (words,) = [e["text"] for e in got["events"] if e["kind"] == "resumed"]
    assert words.startswith("the run goes on after it was interrupted; ")
    out = got["bits_sent"] - got["bits_received"]
    assert words.endswith(
        f"{out:,} bits on the way then, not counted".replace(",", "\u202f", 1)
        if out > 999
        else f"{out} bits on the way then, not counted"
        if out
        else "no bit was on its way then"
    )


def test_a_computer_that_stood_still_is_not_a_lost_link(bitassay, tmp_path):
    (tmp_path / "run.toml").write_text(RUN + "[stop]\nbits = 4_000_000\n")
    process = start(tmp_path, "measure", "run.toml", "--json")
    assert wait_for_rows(tmp_path, 1, process)
    process.send_signal(signal.SIGSTOP)
    time.sleep(4.2)
    process.send_signal(signal.SIGCONT)
    out, err = process.communicate(timeout=30)
    assert process.returncode == 0, err
    got = json.loads(out)
    assert got["links_lost"] == got["bits_lost"] == 0
    assert got["bits_compared"] == 4_000_000
    assert [event["kind"] for event in got["events"]].count("host_stalled") >= 1
    assert any("this computer stood still" in remark for remark in got["remarks"])
    assert got["availability"][0]["unavailable"] == 0
    assert bitassay("verify", "last").status == 0


def test_a_run_killed_amid_slips_keeps_none_without_its_second(bitassay, device, tmp_path):
    (tmp_path / "run.toml").write_text(
        f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {device(lose_every=503)}\n'
        "rate_bps = 80_000\npace_bps = 80_000\n[stop]\nseconds = 60\n"
    )
    process = start(tmp_path, "measure", "run.toml", "--quiet")
    assert wait_for_rows(tmp_path, 3, process)
    process.kill()
    process.communicate()
    done = bitassay("verify", "last")
    assert done.status == 0, done.err
    shown = bitassay("show", "last", "--json").json
    assert shown["bits_lost"] == 8 * len(shown["slips"]) > 0
