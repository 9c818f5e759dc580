"""Twelve hours' content through the real consumer, book, plan and accumulator: memory stays flat."""

from __future__ import annotations

import gc
import os
import sqlite3
import time
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from harness.assess.feed import PlanFeed
from harness.assess.point import Facts
from harness.assess.requirement import Requirement
from harness.bench.book import Book
from harness.bench.check.forecast import forecast
from harness.bench.consumer import Consumer
from harness.bench.places import Places
from harness.bench.progress import Live
from harness.bench.ring import Ring
from harness.bench.session import bench_host, bench_versions
from harness.bench.terms import Rules
from harness.bench.traffic import Traffic
from harness.bench.watch import LinkWatch
from harness.profile import parse_profile
from harness.record import Event, Second, Sitting, Tally
from harness.signal.counter import Counter
from harness.signal.patterns import parse_pattern
from harness.store import open_store

HOURS_12 = 43_200
BYTES = 4096  # a second
SECOND_NS = 10**9
ERRORS = 4  # a second
REQUIREMENT = Requirement(ber=1e-12, max_slips=1_000_000)  # no plan decides in one night
Commit = Callable[[list[Second], list[Event], int], None]


class Night:
    """A bench without threads and without a clock: each call of `second` is a second of the night.

    Parameters
    ----------
    keep
        Called with what is committed.
    size
        Bytes that come in a second.
    errors
        Errors in each second.
    """

    def __init__(self, keep: Commit, size: int = BYTES, errors: int = ERRORS) -> None:
        self._size, self._errors = size, errors
        pattern = parse_pattern("PRBS15")
        self.live = Live(
            REQUIREMENT,
            Facts({}, "running", None, 0, None, Tally(), "PRBS15", "lsb", 8.0 * size, REQUIREMENT),
        )
        self._keep = keep
        self._traffic = Traffic()
        self._ring = Ring(max(1 << 20, 2 * size))
        self._reader = pattern.reader(0, "lsb")
        self._begun = time.monotonic_ns()
        self._now = self._begun
        self._rng = np.random.default_rng(7)
        self._seconds = 0
        plan = PlanFeed(REQUIREMENT.make_plan(), REQUIREMENT)
        self._consumer = Consumer(
            ring=self._ring,
            counter=Counter(pattern, slip_unit=8, position_limit=4096),
            traffic=self._traffic,
            book=Book(
                point=0, sitting=0, first_index=0, started_ns=self._begun, wall_ns=0, keep_positions=4096
            ),
            places=Places(self._traffic, period=pattern.period, unit=8, most_in_flight=None, first_place=0),
            watch=LinkWatch(5 * SECOND_NS),
            rules=Rules(plan=plan, errors=None, received_bits=None),
            started_ns=self._begun,
            wall_ns=0,
            drain_ns=5 * SECOND_NS,
            sending=lambda: True,
            commit=self._commit,
            stop=lambda why: None,
        )

    def _commit(self, seconds: list[Second], events: list[Event], undecided: int) -> None:
        self.live.take(seconds, events)
        self._keep(seconds, events, undecided)

    def second(self) -> None:
        data = np.empty(self._size, dtype=np.uint8)
        self._reader.read_into(data)
        self._traffic.sent(8 * self._size, self._now)
        at = self._rng.choice(8 * self._size, self._errors, replace=False)
        data[at // 8] ^= (1 << (at % 8)).astype(np.uint8)
        if self._seconds % 600 == 300:  # now and then a byte is lost
            data = np.delete(data, 2048)
        self._now += SECOND_NS // 2
        room = self._ring.room()
        while len(room) < len(data):  # before the ring's turn
            room[:] = data[: len(room)].data
            self._arrived(len(room))
            data = data[len(room) :]
            room = self._ring.room()
        room[: len(data)] = data.data
        self._arrived(len(data))
        while (piece := self._ring.next_piece(0)) is not None:
            self._consumer._pass_time(piece.arrived_ns, idle=False)
            self._consumer._take(piece)
        self._now += SECOND_NS // 2
        self._seconds += 1
        if self._seconds % 100 == 0:
            self.live.point()
            self.live.outlook()

    def _arrived(self, count: int) -> None:
        if count:
            self._traffic.received(8 * count, self._now)
            self._ring.written(count, self._now)


def grown_by(seconds: int, part: int) -> tuple[Night, list[int]]:
    """Let a night go on; gives what is allocated after each part, in bytes, the first part not counted."""
    night = Night(lambda *_: None)
    for _ in range(part):
        night.second()
    gc.collect()
    tracemalloc.start(1)
    marks = []
    try:
        for _ in range(seconds // part - 1):
            for _ in range(part):
                night.second()
            gc.collect()
            marks.append(tracemalloc.get_traced_memory()[0])
    finally:
        tracemalloc.stop()
    return night, marks


@pytest.mark.parametrize(
    ("seconds", "part"), [(1800, 450), pytest.param(HOURS_12, 3600, marks=pytest.mark.campaign)]
)
def test_memory_is_flat(seconds: int, part: int):
    # The first part fills what is bounded. Error positions are kept for the judgement of clusters, a million
    # at most: eight bytes each, and an array for each second. Beside them only what is bounded may still fill.
    night, marks = grown_by(seconds, part)
    kept = 8 * ERRORS + 200
    grown = (marks[-1] - marks[0]) / (len(marks) - 1) / part  # bytes a second
    assert grown < kept + 200, marks
    assert marks[-1] < 40e6
    point = night.live.point()
    assert seconds - 3 <= point.seconds <= seconds
    assert point.slip_count == seconds // 600
    assert abs(point.tally.errors - ERRORS * seconds) < 0.002 * ERRORS * seconds


@pytest.mark.campaign
@pytest.mark.parametrize(
    ("size", "errors", "accepted"), [(BYTES, ERRORS, 400_000), (1_250_000, 10, 1_000_000)]
)
def test_the_record_of_twelve_hours_is_as_large_as_forecast(
    tmp_path: Path, size: int, errors: int, accepted: int
):
    """At 33 kbit/s, and at 10 Mbit/s: 432 Gbit, all counted; there the whole process's memory is watched too."""
    rate = 8 * size
    # A unit is foreseen to be twice as good as required: here it is, and its plan takes all night.
    text = f"""
[link]
driver = "loopback"
rate_bps = {rate}
[[link.channel]]
model = "independent"
ber = {errors / rate}
[requirement]
ber = {2 * errors / rate}
accept_errors = {accepted}
[stop]
seconds = {HOURS_12}
"""
    profile = parse_profile(text)
    path = tmp_path / "runs.sqlite"
    with open_store(path) as store:
        now = time.time_ns()
        key = store.begin_run(
            title="",
            command="measure",
            started=now,
            profile_text=text,
            overrides=(),
            settings=profile.resolved(),
            device={},
        )
        store.begin_sitting(key, Sitting(0, now, None, bench_host(), bench_versions()))
        store.begin_point(key, 0, {}, now, {})
        waiting: list[tuple[list[Second], list[Event]]] = []

        def flush() -> None:
            rows = [second for seconds, _ in waiting for second in seconds]
            store.commit(key, rows, [(0, event) for _, events in waiting for event in events])
            waiting.clear()

        def keep(seconds: list[Second], events: list[Event], undecided: int) -> None:
            waiting.append((seconds, events))
            if len(waiting) == 60:  # a commit a second takes its time, and no more room
                flush()

        before = _size(path)
        night = Night(keep, size, errors)
        resident = []
        for second in range(HOURS_12):
            night.second()
            if second % 3600 == 3599:
                resident.append(_resident_bytes())
        flush()
        store.end_point(key, 0, time.time_ns(), "seconds")
        store.end_run(key, time.time_ns(), "completed", "seconds", None, None)
        took = _size(path) - before
    foreseen = forecast(profile, float(rate))
    assert foreseen.longest_s == HOURS_12
    assert foreseen.disk_bytes is not None
    counted = night.live.point().tally.compared
    hours = ", ".join(f"{b / 1e6:.0f}" for b in resident)
    print(
        f"{counted / 1e9:.4g} Gbit; record {took} bytes, forecast {foreseen.disk_bytes}; MB each hour: {hours}"
    )
    assert counted > 0.999 * rate * (HOURS_12 - 3)
    assert took == pytest.approx(foreseen.disk_bytes, rel=0.1)
    # Error positions fill 8 bytes each, and what SQLite keeps of its pages fills up in the first hour.
    assert resident[-1] - resident[0] < 40e6
    assert resident[-1] < 200e6


def _resident_bytes() -> int:
    """Memory that this process holds, as the system counts it."""
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE")


def _size(path: Path) -> int:
    """Bytes of a SQLite file, what still stands in its log included."""
    with sqlite3.connect(path) as db:
        db.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    db.close()
    return path.stat().st_size
