"""Streams that once broke the counter: each is kept, and must be counted to its end."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

STREAMS = Path(__file__).parent / "streams"

# In a process of its own: what once went on for ever must not hold up the tests.
COUNT = """
import sys
from harness.signal.counter import Counter
from harness.signal.patterns import parse_pattern
data = open(sys.argv[1], "rb").read()
counter = Counter(parse_pattern(sys.argv[2]), slip_unit=8)
segments = [s for k in range(0, len(data), 512) for s in counter.feed(data[k : k + 512])] + counter.finish()
assert all(s.tally.holds for s in segments)
print(sum(s.tally.received for s in segments), sum(s.tally.compared for s in segments))
"""


@pytest.mark.parametrize(
    ("name", "pattern"),
    [
        # A modem of tones at a low level: a place was taken in, left out again, and taken in for ever.
        ("places_left_out_again.bin", "PRBS15"),
    ],
)
def test_it_is_counted_to_its_end(name, pattern):
    path = STREAMS / name
    done = subprocess.run(
        [sys.executable, "-c", COUNT, str(path), pattern],
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    received, compared = (int(word) for word in done.stdout.split())
    assert received == 8 * path.stat().st_size
    assert compared > received // 2
