"""The canonical form is RFC 8785's but for integers, and the digest notices every change of a record."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from dataclasses import fields, replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.record import Run, Second, Tally
from harness.store import Store, digest_of, open_store
from harness.store.canonical import Digest, canonical


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (-0.0, "0"),
        (1.0, "1"),
        (-1.5, "-1.5"),
        (1e-6, "0.000001"),
        (1e-7, "1e-7"),
        (1.5e-9, "1.5e-9"),
        (1e20, "100000000000000000000"),
        (1e21, "1e+21"),
        (123456789.125, "123456789.125"),
        (5e-324, "5e-324"),
        (1.7976931348623157e308, "1.7976931348623157e+308"),
        (333333333.33333329, "333333333.3333333"),
        (0.1 + 0.2, "0.30000000000000004"),
    ],
)
def test_numbers_are_written_as_ecmascript_does(value: float, text: str) -> None:
    # The rules of ECMA-262, Number::toString, which RFC 8785 section 3.2.2.3 refers to, worked out by hand.
    assert canonical(value) == text


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_numbers_read_back_exactly(value: float) -> None:
    assert float(json.loads(canonical(value))) == value


def test_keys_are_sorted_by_utf_16_units() -> None:
    # RFC 8785 section 3.2.3: an astral character sorts by its surrogates, before U+FB33.
    assert canonical({"\ufb33": 1.5, "\U0001f600": 2.5, "a": None}) == (
        '{"a":null,"\U0001f600":2.5,"\ufb33":1.5}'
    )


def test_integers_are_strings_and_nothing_is_spaced() -> None:
    assert canonical({"b": [1, 2**60, True, None, "x\n\u001f/"]}) == (
        '{"b":["1","1152921504606846976",true,null,"x\\n\\u001f/"]}'
    )


def test_nan_has_no_form() -> None:
    with pytest.raises(ValueError, match="NaN"):
        canonical({"x": float("nan")})


def test_a_seconds_line_written_by_hand_is_the_canonical_one(make_second: Callable[..., Second]) -> None:
    for second in (
        make_second(3),
        make_second(0, errors=0),
        replace(make_second(7), stretches=((40_000, True), (8_000, False)), due=False, slips=2, bits_lost=8),
    ):
        tally = second.tally
        line = canonical(
            {
                "second": second.index,
                "point": second.point,
                "sitting": second.sitting,
                "at": second.at,
                "duration_ns": second.duration_ns,
                "sent": second.sent,
                "tally": [getattr(tally, f.name) for f in fields(Tally)],
                "due": second.due,
                "slips": second.slips,
                "bits_lost": second.bits_lost,
                "bits_inserted": second.bits_inserted,
                "first_bit": second.first_bit,
                "positions": hashlib.sha256(second.positions.astype("<i8").tobytes()).hexdigest(),
                "kinds": hashlib.sha256(second.ones_lost.astype(np.uint8).tobytes()).hexdigest(),
                "positions_complete": second.positions_complete,
                "stretches": second.stretches,
            }
        )
        digest = Digest()
        digest.second(second)
        assert digest.hexdigest() == hashlib.sha256(line.encode() + b"\n").hexdigest()


@pytest.fixture
def run(sqlite: str, filled: Callable[..., str]) -> Run:
    with open_store(sqlite) as store:
        return store.load(filled(store))


def test_the_stored_digest_is_that_of_the_record_read_back(store: Store, filled: Callable[..., str]) -> None:
    key = filled(store)
    assert store.digest(key) == digest_of(store.load(key))


def test_any_change_of_a_second_changes_the_digest(run: Run) -> None:
    before = digest_of(run)
    (point,) = run.points
    second = point.seconds[2]
    moved = second.positions.copy()
    moved[0] += 1
    changes = {
        "index": 99,
        "at": second.at + 1,
        "duration_ns": 1,
        "sent": 1,
        "tally": replace(second.tally, errors=second.tally.errors + 1),
        "due": False,
        "slips": 1,
        "bits_lost": 8,
        "bits_inserted": 8,
        "first_bit": 0,
        "positions": moved,
        "ones_lost": ~second.ones_lost,
        "positions_complete": False,
        "stretches": ((48_000, False),),
        "sitting": 1,
        "point": 1,
    }
    assert set(changes) == {f.name for f in fields(Second)}
    for name, value in changes.items():
        seconds = list(point.seconds)
        seconds[2] = replace(second, **{name: value})
        assert digest_of(replace(run, points=(replace(point, seconds=tuple(seconds)),))) != before, name


def test_any_change_of_the_head_a_sitting_a_point_or_an_event_changes_the_digest(run: Run) -> None:
    before = digest_of(run)
    (point,), (sitting,) = run.points, run.sittings
    for name, value in {
        "key": "x",
        "title": "another",
        "command": "sweep",
        "started": 1,
        "ended": 1,
        "status": "failed",
        "ended_by": "fault",
        "verdict": "FAIL",
        "profile_text": "",
        "overrides": (),
        "settings": {},
        "device": {},
        "stated": None,
    }.items():
        assert digest_of(replace(run, **{name: value})) != before, name
    for name, value in {
        "started": 1,
        "ended": 1,
        "status": "cut",
        "host": {},
        "versions": {},
        "undecided_bits": 77,
    }.items():
        assert digest_of(replace(run, sittings=(replace(sitting, **{name: value}),))) != before, name
    for name, value in {
        "values": {"a": 1.0},
        "started": 1,
        "ended": 1,
        "ended_by": "bits",
        "after_decision": Tally(1, 1),
        "facts": {"x": 1},
        "events": (),
    }.items():
        assert digest_of(replace(run, points=(replace(point, **{name: value}),))) != before, name
    for name, value in {"kind": "slip", "bit": 9, "text": "other", "at": 9, "data": {"n": 5}}.items():
        events = (replace(point.events[0], **{name: value}), *point.events[1:])
        assert digest_of(replace(run, points=(replace(point, events=events),))) != before, name


def test_notes_do_not_touch_the_digest(store: Store, filled: Callable[..., str]) -> None:
    from harness.record import Note

    key = filled(store)
    before = digest_of(store.load(key))
    store.add_note(key, Note(1, "me", "void: wrong cable", True))
    assert digest_of(store.load(key)) == before
