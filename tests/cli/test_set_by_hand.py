"""An attenuator that a person sets: what is asked stands on the terminal, where a page would hide it."""

from __future__ import annotations

import os
import pty
import select
import subprocess
import sys
import time

PROFILE = """
[link]
driver = "loopback"
[stop]
bits = 80_000
[instruments.attenuator]
driver = "manual"
name = "the step attenuator beside the shielded box"
quantity = "attenuation"
unit = "dB"
limits = [0, 110]
safe = 110
[sweep]
instrument = "attenuator"
values = [20, 30]
"""


def read_until(terminal: int, words: str, heard: list[str]) -> None:
    """Read what the command says; at the end of it, too."""
    ends = time.monotonic() + 60
    while words not in "".join(heard) and time.monotonic() < ends:
        if select.select([terminal], [], [], 0.2)[0]:
            try:
                heard.append(os.read(terminal, 65_536).decode())
            except OSError:  # it has gone
                break
    assert words in "".join(heard)


def test_a_person_is_asked_for_each_point_and_told_the_safe_value(tmp_path):
    (tmp_path / "sweep.toml").write_text(PROFILE)
    ours, theirs = pty.openpty()
    process = subprocess.Popen(
        [sys.executable, "-m", "harness.cli.main", "sweep", "sweep.toml"],
        cwd=tmp_path,
        env={k: v for k, v in os.environ.items() if k != "BITASSAY_STORE"} | {"TERM": "xterm"},
        stdin=theirs,
        stdout=theirs,
        stderr=theirs,
        start_new_session=True,
    )
    os.close(theirs)
    heard: list[str] = []
    try:
        for value in (20, 30):
            read_until(ours, f"Set the step attenuator beside the shielded box to {value} dB.", heard)
            os.write(ours, b"\n")
        read_until(
            ours, "Now set the step attenuator beside the shielded box to its safe value: 110 dB.", heard
        )
        read_until(ours, "record in", heard)
        assert process.wait(timeout=60) == 0
    finally:
        process.kill()
        process.wait()
        os.close(ours)
    assert "\x1b[?1049h" not in "".join(heard)  # no second screen, which would hide the questions
    assert "caution:" in "".join(heard)
