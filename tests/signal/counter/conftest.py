"""What the counter's tests share: the oracle, made streams, and ways to feed a counter."""

import importlib.util
from functools import cache
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from harness.record import Tally
from harness.signal.bits import pack
from harness.signal.counter import Counter
from harness.signal.patterns import parse_pattern


@cache
def _load(name):
    spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name(f"{name}.py"))
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def oracle():
    return _load("oracle")


@pytest.fixture(scope="session")
def made():
    return _load("made")


@pytest.fixture(scope="session")
def parse():
    return cache(parse_pattern)


def _merged(segments, period):
    """Neighbours that differ in nothing but the cut between them, as plain values."""
    out = []
    for s in segments:
        place = None if s.place is None else s.place - s.start
        if place is not None and period is not None:
            place %= period
        one = [
            s.start,
            s.tally,
            s.aligned,
            s.inverted,
            list(s.positions),
            list(s.ones_lost),
            s.positions_complete,
        ]
        if (
            out
            and not s.events
            and (place, s.aligned, s.inverted) == (out[-1][0], out[-1][1][2], out[-1][1][3])
        ):
            last = out[-1][1]
            last[1] = last[1] + s.tally
            last[4] += one[4]
            last[5] += one[5]
            last[6] = last[6] and one[6]
        else:
            out.append((place, one, [(e.kind, e.bit, e.text, dict(e.data)) for e in s.events]))
    return out


def _same(segments, period):
    """What may not depend on chunks: everything, places modulo the period."""
    return _merged(segments, period)


def _check(segments, received):
    """Nothing counted twice and nothing dropped; the sum of all tallies."""
    at, total = 0, Tally()
    for s in segments:
        assert s.start == at
        assert s.tally.holds
        assert s.tally.received > 0
        assert s.aligned == (s.tally.compared > 0)
        assert s.aligned or s.tally.errors == 0
        assert all(s.start <= p < s.end for p in s.positions)
        assert np.all(np.diff(s.positions) > 0)
        if s.positions_complete:
            assert len(s.positions) == s.tally.errors
            assert np.count_nonzero(s.ones_lost) == s.tally.ones_as_zeros
        assert all(s.start <= e.bit <= s.end for e in s.events)
        at, total = s.end, total + s.tally
    assert at == received
    return total


def _feed(counter, data, chunks):
    out, at = [], 0
    for size in chunks:
        out += counter.feed(data[at : at + size])
        at += size
        assert counter.received - counter.decided >= 0
    assert at == len(data)
    return out


@pytest.fixture(scope="session")
def counting(parse):
    """Count bits: `counting.run(name, bits, chunks=None, **how)` gives segments, all checked."""

    def run(name, bits, chunks=None, order="lsb", check=True, **how):
        counter = Counter(parse(name), bit_order=order, **how)
        data = pack(np.asarray(bits, dtype=np.uint8), order)
        segments = _feed(counter, data, chunks or [len(data)]) + counter.finish()
        assert counter.decided == counter.received == 8 * len(data)
        if check:
            _check(segments, 8 * len(data))
        return segments

    def total(segments):
        return sum((s.tally for s in segments), Tally())

    def events(segments):
        return [e for s in segments for e in s.events]

    return SimpleNamespace(
        run=run, total=total, events=events, check=_check, feed=_feed, same=_same, Counter=Counter
    )
