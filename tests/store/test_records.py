"""A record comes back as it was written, whole or by its tail, and is written once."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from harness.record import Event, Note, Second, Sitting, Tally
from harness.store import NoSuchRun, Store, StoreError, open_store, this_host

T0 = 1_780_000_000_000_000_000
Begin = Callable[..., str]
MakeSecond = Callable[..., Second]


def test_everything_that_was_written_is_read(
    store: Store, make_second: MakeSecond, equal_seconds: Callable[..., bool]
) -> None:
    key = store.begin_run(
        title="Größe ✓",
        command="sweep",
        started=T0,
        profile_text="title = 'x'\r\n",
        overrides=["a.b=1", "device.order= 7"],
        settings={"requirement": None, "stop": {"bits": 10**18}, "x": 1e-6},
        device={"serial_number": "0031"},
    )
    host = this_host()
    store.begin_sitting(key, Sitting(0, T0, None, host, {"bitassay": "0.1.0"}))
    store.begin_point(key, 0, {"attenuator": 20.5}, T0, {"delay": {"bits": 3}})
    odd = replace(
        make_second(1, errors=0),
        tally=Tally(48_000, 40_000, 8_000),
        stretches=((30_000, True), (8_000, False), (10_000, True)),
        due=False,
        slips=1,
        bits_lost=8,
        bits_inserted=16,
        positions_complete=False,
    )
    silent = replace(make_second(2, errors=0), tally=Tally(), sent=0, stretches=())
    events = [
        (0, Event("slip", 5, "one byte lost", T0 + 1, {"bits": -8, "modulo": None})),
        (None, Event("line", None, "CTS went off")),
    ]
    written = [make_second(0), odd, silent, make_second(3, errors=4_000)]
    store.commit(key, written[:2], events, 77, {0: {"reading": 20.4}})
    store.commit(key, written[2:])
    store.end_point(key, 0, T0 + 9, "bits", Tally(9, 9, 0, 1, 1, 0), {"note": "x"})
    store.begin_point(key, 1, {"attenuator": 21.0}, T0 + 10)
    later = replace(
        make_second(4), point=1, first_bit=0, positions=np.array([0, 2**40]), ones_lost=np.ones(2, bool)
    )
    store.commit(key, [later])
    store.end_point(key, 1, T0 + 19, "plan")
    store.end_sitting(key, 0, T0 + 20, "completed")
    store.end_run(key, T0 + 21, "completed", "plan", "UNDECIDED", {"ber": 1e-6, "nothing": None})

    run = store.load(key)
    assert (run.key, run.title, run.command, run.started, run.ended) == (key, "Größe ✓", "sweep", T0, T0 + 21)
    assert (run.status, run.ended_by, run.verdict) == ("completed", "plan", "UNDECIDED")
    assert run.profile_text == "title = 'x'\r\n"
    assert run.overrides == ("a.b=1", "device.order= 7")
    assert run.settings == {"requirement": None, "stop": {"bits": 10**18}, "x": 1e-6}
    assert run.device == {"serial_number": "0031"}
    assert run.stated == {"ber": 1e-6, "nothing": None}
    (sitting,) = run.sittings
    assert sitting == Sitting(0, T0, T0 + 20, host, {"bitassay": "0.1.0"}, 0, "completed")
    first, second = run.points
    assert equal_seconds(first.seconds, written)
    assert equal_seconds(second.seconds, [later])
    assert first.events == (events[0][1], events[1][1])
    assert (first.values, first.facts) == (
        {"attenuator": 20.5},
        {"delay": {"bits": 3}, "reading": 20.4, "note": "x"},
    )
    assert (first.ended, first.ended_by, first.after_decision) == (T0 + 9, "bits", Tally(9, 9, 0, 1, 1, 0))
    assert (second.index, second.ended_by, second.after_decision) == (1, "plan", Tally())


def test_a_tail_holds_what_came_since(
    store: Store, begin: Begin, make_second: MakeSecond, equal_seconds: Callable[..., bool]
) -> None:
    key = begin(store)
    seen_seconds: list[Second] = []
    seen_events: list[str] = []
    last, events = -1, 0
    for k in range(6):
        store.commit(key, [make_second(k)], [(0, Event("line", k, f"event {k}"))] if k % 2 else [])
        if k in (0, 2, 3, 5):
            tail = store.load_tail(key, last, events)
            last, events = tail.last_second, tail.events_seen
            seen_seconds += tail.run.points[0].seconds
            seen_events += [event.text for event in tail.run.points[0].events]
    assert equal_seconds(seen_seconds, store.load(key).points[0].seconds)
    assert seen_events == ["event 1", "event 3", "event 5"]
    nothing = store.load_tail(key, last, events)
    assert (nothing.last_second, nothing.events_seen) == (last, events)
    assert nothing.run.points[0].seconds == ()
    assert nothing.run.points[0].events == ()


def test_a_second_is_written_once(store: Store, begin: Begin, make_second: MakeSecond) -> None:
    key = begin(store)
    store.commit(key, [make_second(0)])
    with pytest.raises(StoreError, match="holds that part of the record already"):
        store.commit(key, [replace(make_second(0), sent=1)], [(0, Event("line", 0, "lost"))], 99)
    run = store.load(key)
    assert run.points[0].seconds[0].sent == 48_000
    assert run.points[0].events == ()
    assert run.sittings[0].undecided_bits == 0


def test_a_commit_is_all_or_nothing_and_can_be_made_again(
    store: Store, begin: Begin, make_second: MakeSecond
) -> None:
    key = begin(store)
    stray = replace(make_second(1), point=7)  # no such point: the database refuses it
    with pytest.raises(StoreError):
        store.commit(key, [make_second(0), stray], [(0, Event("line", 0, "once"))], 5, {0: {"x": 1}})
    assert store.load(key).points[0].seconds == ()
    assert store.load(key).points[0].facts == {}
    store.commit(key, [make_second(0)], [(0, Event("line", 0, "once"))], 5, {0: {"x": 1}})
    run = store.load(key)
    assert [e.text for e in run.points[0].events] == ["once"]
    assert run.points[0].facts == {"x": 1}


def test_endings_are_written_once(store: Store, filled: Begin) -> None:
    key = filled(store)
    with pytest.raises(StoreError):
        store.end_run(key, T0, "failed", "fault", "FAIL", None)
    with pytest.raises(StoreError, match="no sitting here"):
        store.end_point(key, 0, T0, "fault")
    with pytest.raises(StoreError, match="no sitting here"):
        store.end_sitting(key, 0, T0, "failed")
    assert store.load(key).verdict == "PASS"


def test_an_open_ending_is_written_once_too(store: Store, begin: Begin) -> None:
    key = begin(store)
    store.end_point(key, 0, T0 + 1, "plan")
    with pytest.raises(StoreError, match="is over already"):
        store.end_point(key, 0, T0 + 2, "fault")
    store.end_sitting(key, 0, T0 + 1, "completed")
    with pytest.raises(StoreError, match="is over already"):
        store.end_sitting(key, 0, T0 + 2, "failed")
    with pytest.raises(StoreError, match=r"point 0 of the run .* is over"):
        store.begin_point(key, 0, {}, T0 + 3)


def test_events_from_before_the_first_point_belong_to_it(store: Store) -> None:
    key = store.begin_run(
        title="", command="measure", started=T0, profile_text="", overrides=[], settings={}, device={}
    )
    store.begin_sitting(key, Sitting(0, T0, None, this_host(), {}))
    store.commit(key, [], [(None, Event("fault", None, "refused"))])
    assert [e.text for p in store.load(key).points for e in p.events] == ["refused"]
    store.begin_point(key, 0, {}, T0)
    assert [e.text for e in store.load(key).points[0].events] == ["refused"]
    store.end_point(key, 0, T0 + 1, "fault")
    store.end_sitting(key, 0, T0 + 1, "failed")
    store.end_run(key, T0 + 1, "failed", "fault", None, None)
    assert store.load(key).status == "failed"


def test_a_device_with_odd_words_is_kept(store: Store, begin: Begin) -> None:
    words = "<script>alert(1)</script> '; DROP TABLE run; -- \0 \udc80 =1+1"
    key = begin(store, device={"serial_number": words, "model": words})
    store.commit(key, [], [(0, Event("fault", None, words, None, {"said": words}))])
    run = store.load(key)
    assert run.device == {"serial_number": words, "model": words}
    assert run.points[0].events[0].data == {"said": words}
    assert run.points[0].events[0].text == words.replace("\0", "\u2400").replace("\udc80", "\\udc80")
    assert store.runs()[0].run == key


def test_notes_are_added_and_void_shows_in_lists(store: Store, filled: Begin) -> None:
    key, other = filled(store), filled(store, started=T0 + 1)
    store.add_note(key, Note(T0, "A. Bench", "cable was loose", False))
    assert [line.void for line in store.runs()] == [False, False]
    store.add_note(key, Note(T0 + 1, "A. Bench", "void: cable was loose", True))
    assert {line.run: line.void for line in store.runs()} == {key: True, other: False}
    assert [(n.who, n.void) for n in store.load(key).notes] == [("A. Bench", False), ("A. Bench", True)]
    with pytest.raises(NoSuchRun):
        store.add_note("nobody", Note(T0, "x", "y"))


def test_two_runs_are_written_at_once_by_two_threads(
    store: Store, begin: Begin, make_second: MakeSecond
) -> None:
    keys = [begin(store, started=T0 + k) for k in range(2)]
    failures: list[BaseException] = []

    def write(key: str) -> None:
        try:
            for k in range(25):
                store.commit(key, [make_second(k)], [(0, Event("line", k, str(k)))])
        except BaseException as error:
            failures.append(error)

    threads = [threading.Thread(target=write, args=(key,)) for key in keys]
    for thread in threads:
        thread.start()
    while any(thread.is_alive() for thread in threads):
        for key in keys:
            point = store.load(key).points[0]
            assert len(point.seconds) == len(point.events)  # a reader sees whole commits only
        time.sleep(0.01)
    assert failures == []
    assert [len(store.load(key).points[0].seconds) for key in keys] == [25, 25]


def test_a_reader_elsewhere_sees_what_was_committed(
    store: Store, address: str, begin: Begin, make_second: MakeSecond
) -> None:
    key = begin(store)
    store.commit(key, [make_second(0)])
    with open_store(address, create=False) as reader:
        assert len(reader.load(key).points[0].seconds) == 1
        store.commit(key, [make_second(1)])
        assert len(reader.load(key).points[0].seconds) == 2


def test_a_long_record_streams_to_the_same_digest(
    store: Store, begin: Begin, finish: Any, make_second: MakeSecond
) -> None:
    from harness.store import digest_of

    key = begin(store)
    store.commit(key, [make_second(k, errors=k % 4) for k in range(4_100)])
    assert finish(store, key) == digest_of(store.load(key)) == store.digest(key)
