"""Two benches measure into one server that goes away in mid-run, and others read: nothing lost, nothing doubled."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from harness.store import open_store

PROFILE = """
title = "Wader-9, invented"
[device]
model = "Wader-9"
[link]
driver = "loopback"
rate_bps = 48_000
pace_bps = 48_000
[[link.channel]]
model = "independent"
ber = 2e-4
[stop]
seconds = 16
"""


def test_benches_and_a_follower_outlive_a_server_that_is_stopped_and_started(
    server: Any, bitassay: Callable[..., Any], tmp_path: Path
) -> None:
    (tmp_path / "wader.toml").write_text(PROFILE)

    def start(name: str, *arguments: str) -> subprocess.Popen[bytes]:
        folder = tmp_path / name  # a computer of its own: each keeps what the server has yet to get
        folder.mkdir()
        out, err = (folder / "out").open("wb"), (folder / "err").open("wb")
        command = [sys.executable, "-m", "harness.cli.main", *arguments, f"--store={server.address}"]
        with out, err:
            return subprocess.Popen(
                command, cwd=folder, stdin=subprocess.DEVNULL, stdout=out, stderr=err,
                env=os.environ | {"NO_COLOR": "1"},
            )  # fmt: skip

    def until(said: Callable[[], bool], what: str) -> None:
        by = time.monotonic() + 40
        while not said():
            assert time.monotonic() < by, f"{what} did not come"
            time.sleep(0.1)

    def err(name: str) -> str:
        return (tmp_path / name / "err").read_text()

    profile = str(tmp_path / "wader.toml")
    benches = {
        serial: start(
            serial, "measure", profile, f"--set=device.serial_number={serial}", "--json", "--log=log"
        )
        for serial in ("0031", "0032")
    }
    keys: dict[str, str] = {}

    def begun() -> bool:
        with open_store(server.address) as store:
            keys.update({line.serial_number or "": line.run for line in store.runs()})
        return len(keys) == 2

    until(begun, "both runs")
    follower = start("follower", "follow", keys["0031"])
    until(lambda: keys["0031"] in err("follower"), "the follower's first line")
    server.stop()
    until(lambda: all("cannot be reached" in err(name) for name in (*benches, "follower")), "the loss")
    shown = bitassay("show", keys["0032"], f"--store={server.address}")
    assert shown.status == 4
    assert "cannot be reached (Connection refused)" in shown.err
    server.start()
    for name, process in {**benches, "follower": follower}.items():
        assert process.wait(60) == 0, err(name)
    assert "waiting for it" in err("follower")
    assert "the store can be reached again" in err("follower")
    for serial, key in keys.items():
        stated = json.loads((tmp_path / serial / "out").read_bytes())
        # At a run's end the server may still be away from its bench: then `close` hands over.
        assert "is back and has got the" in err(serial)
        assert "cannot be reached" in (tmp_path / serial / "log").read_text()
        exported = bitassay("export", key, "--format", "json", f"--store={server.address}").json
        numbers = [second["second"] for second in exported["each_second"]]
        assert numbers == list(range(len(numbers)))
        for what in ("bits_received", "bits_compared", "errors", "bits_sent"):
            assert sum(second[what] for second in exported["each_second"]) == stated[what]
        assert stated["bits_compared"] >= 16 * 47_000
        assert bitassay("verify", key, f"--store={server.address}").status == 0
        left = bitassay("runs", "--json", f"--store={tmp_path / serial / 'results' / 'handover.sqlite'}")
        assert left.json["runs"] == []


JUDGED = (
    PROFILE.replace("seconds = 16", "seconds = 1")
    + """
[requirement]
ber = 1e-2
accept_errors = 50
"""
)


def test_a_bench_begins_while_the_server_is_away_and_says_what_it_cannot_know(
    server: Any, bitassay: Callable[..., Any], tmp_path: Path
) -> None:
    (tmp_path / "wader.toml").write_text(JUDGED)
    measure = (
        "measure",
        "wader.toml",
        "--set=device.serial_number=0031",
        "--json",
        f"--store={server.address}",
    )
    server.stop()
    alone = bitassay(*measure)
    assert alone.status == 0, alone.err
    assert alone.json["verdict"] == "PASS"
    assert alone.json["earlier_tries"] is None
    assert any("tested before" in remark and "not known" in remark for remark in alone.json["remarks"])
    server.start()
    again = bitassay(*measure)
    assert again.json["earlier_tries"] == 1  # the one before has been handed over
    assert bitassay("verify", alone.json["run"], f"--store={server.address}").status == 0
    text = bitassay("report", alone.json["run"], f"--store={server.address}").out
    assert "not known: the store could not be reached when the run began" in " ".join(text.split())


def test_an_undecided_run_that_only_the_server_has_is_looked_into_as_an_earlier_try(
    server: Any, bitassay: Callable[..., Any], tmp_path: Path
) -> None:
    (tmp_path / "wader.toml").write_text(JUDGED.replace("ber = 1e-2", "ber = 1e-5"))
    measure = (
        "measure",
        "wader.toml",
        "--set=device.serial_number=0031",
        "--json",
        f"--store={server.address}",
    )
    assert bitassay(*measure).json["verdict"] == "UNDECIDED"
    again = bitassay(*measure)
    assert again.status == 3, again.err
    assert again.json["earlier_tries"] == 1
