"""The end of a point: whether the last bit has come, and a patience that does not count lost time."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import numpy as np
import pytest

from harness.bench.ending import Patience, ends_with
from harness.signal.bits import pack
from harness.signal.patterns import parse_pattern

END = 8 * 40_000
NAMES = ["PRBS7", "PRBS15", "QRSS", "PRBS31"]


def tail(name: str, shift: int = 0, ber: float = 0.0, order: str = "lsb") -> bytes:
    """The last 64 bytes of a stream that has come up to `shift` bits before its end."""
    bits = parse_pattern(name).bits(END - shift - 512, 512)
    wrong = np.random.default_rng(7).random(512) < ber
    return pack(bits ^ wrong.astype(np.uint8), order).tobytes()


@pytest.mark.parametrize("order", ["lsb", "msb"])
@pytest.mark.parametrize("name", NAMES)
def test_a_stream_that_has_come_to_its_end_is_known_in_either_polarity(name, order):
    pattern, whole = parse_pattern(name), tail(name, order=order)
    assert ends_with(whole, pattern, order, END) == "yes"
    assert ends_with(bytes(255 - b for b in whole), pattern, order, END) == "yes"
    assert ends_with(whole[-3:], pattern, order, END) == "yes"


@pytest.mark.parametrize("shift", [8, 16, 24, 800])
@pytest.mark.parametrize("name", NAMES)
def test_a_stream_that_lacks_its_last_bytes_is_known_too(name, shift):
    assert ends_with(tail(name, shift), parse_pattern(name), "lsb", END) == "no"
    assert ends_with(tail(name, shift, 0.1), parse_pattern(name), "lsb", END) == "no"


@pytest.mark.parametrize("short", [1, 2, 5, 20])
def test_a_byte_made_up_close_to_the_end_leaves_it_open(short):
    whole = tail("PRBS31")
    made_up = (whole[:-short] + b"\x5a" + whole[-short:])[:-1]  # as many bytes as were sent
    assert ends_with(made_up[-64:], parse_pattern("PRBS31"), "lsb", END) in ("perhaps", "no")


def test_many_errors_leave_it_open_but_do_not_deny_it():
    answers = {
        ends_with(tail(name, ber=ber), parse_pattern(name), "lsb", END)
        for name in NAMES
        for ber in (0.01, 0.1, 0.2, 0.25)
    }
    assert "no" not in answers


def test_a_stream_of_a_few_bits_or_none_is_no_defect():
    pattern = parse_pattern("PRBS15")
    assert ends_with(b"", pattern, "lsb", 0) == "yes"
    assert ends_with(pattern.packed(0, 2, "lsb").tobytes(), pattern, "lsb", 16) == "yes"
    assert ends_with(bytes(64), pattern, "lsb", 16) in ("yes", "perhaps", "no")


def test_patience_is_spent_by_waiting_and_renewed_by_what_comes():
    patience = Patience(0.05)
    assert not patience.spent(1)
    time.sleep(0.06)
    assert not patience.spent(2)
    time.sleep(0.06)
    assert patience.spent(2)


HELD_UP = """
import sys, time
from harness.bench.ending import Patience
patience = Patience(1.0)
patience.spent(None)
print("looking", flush=True)
sys.stdin.readline()
print(patience.spent(None), flush=True)
"""


def test_time_in_which_this_computer_stood_still_does_not_count():
    process = subprocess.Popen(
        [sys.executable, "-c", HELD_UP], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    assert process.stdin
    assert process.stdout
    with process:
        assert process.stdout.readline() == "looking\n"
        os.kill(process.pid, signal.SIGSTOP)
        time.sleep(1.2)
        os.kill(process.pid, signal.SIGCONT)
        process.stdin.write("\n")
        process.stdin.flush()
        assert process.stdout.readline() == "False\n"
