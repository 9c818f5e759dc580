"""Runs are found by `last`, a key or its ending, listed newest first, and retests by their serial number."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from harness.record import Note
from harness.store import AmbiguousRun, NoSuchRun, Store

T0 = 1_780_000_000_000_000_000
Begin = Callable[..., str]
KEYS = (
    "01900000-0000-7000-8000-00000000abcd",
    "01900000-0000-7000-8000-0000000fabcd",
    "01900000-0000-7000-8000-000000001234",
)


@pytest.fixture
def three(store: Store, begin: Begin) -> Store:
    for k, key in enumerate(KEYS):
        begin(store, key=key, started=T0 + k)
    return store


@pytest.mark.parametrize(
    ("ref", "found"),
    [("last", 2), ("1234", 2), ("4", 2), ("fabcd", 1), ("0ABCD", 0), (KEYS[0], 0), (" last ", 2)],
)
def test_a_name_finds_its_run(three: Store, ref: str, found: int) -> None:
    assert three.find(ref) == KEYS[found]


@pytest.mark.parametrize("ref", ["abcd", "d"])
def test_an_ending_of_several_runs_is_ambiguous(three: Store, ref: str) -> None:
    with pytest.raises(AmbiguousRun) as caught:
        three.find(ref)
    assert "several runs" in caught.value.what
    assert caught.value.advice == "give more of the key"


@pytest.mark.parametrize("ref", ["ffff", "", "%", "_234", "1234' OR 1=1", "x" * 100, "0" + KEYS[0]])
def test_anything_else_finds_none(three: Store, ref: str) -> None:
    with pytest.raises(NoSuchRun) as caught:
        three.find(ref)
    assert caught.value.advice


def test_an_empty_store_says_so(store: Store) -> None:
    assert store.runs() == []
    with pytest.raises(NoSuchRun, match="holds no run yet"):
        store.find("last")
    with pytest.raises(NoSuchRun):
        store.load(KEYS[0])


def test_runs_are_listed_newest_first(three: Store) -> None:
    assert [line.run for line in three.runs()] == [KEYS[2], KEYS[1], KEYS[0]]
    assert [line.run for line in three.runs(limit=2)] == [KEYS[2], KEYS[1]]
    line = three.runs(limit=1)[0]
    assert (line.title, line.command, line.started, line.status) == (
        "Wader-9 acceptance",
        "measure",
        T0 + 2,
        "running",
    )
    assert (line.serial_number, line.model, line.requirement_ber, line.verdict) == (
        "0031",
        "Wader-9",
        1e-6,
        None,
    )


def test_retests_of_a_unit_are_found_void_and_interrupted_ones_too(
    store: Store, begin: Begin, finish: Callable[..., str]
) -> None:
    requirement = {"ber": 1e-6, "plan": "fixed"}
    settings = {"requirement": requirement}
    unit = {"model": "Wader-9", "serial_number": "0031"}

    def run(started: int, **changes: object) -> str:
        return begin(store, started=T0 + started, **({"settings": settings, "device": unit} | changes))

    failed, void, interrupted, cut = run(1), run(2), run(3), run(4)
    finish(store, failed, verdict="FAIL")
    finish(store, void, verdict="FAIL")
    store.add_note(void, Note(T0, "me", "void", True))
    finish(store, interrupted, status="interrupted", verdict=None)
    other_plan = run(5, settings={"requirement": {"ber": 1e-6, "plan": "sequential", "confidence": 0.9}})
    nameless = run(6, device={"serial_number": "0031"})
    run(7, settings={"requirement": {"ber": 1e-5}})  # another requirement
    run(8, settings={"requirement": None})
    run(9, device={"model": "Wader-9", "serial_number": "0032"})  # another unit
    run(10, device={"model": "Heron-2", "serial_number": "0031"})  # another model with that number
    now = run(11)
    run(12)  # later

    found = store.earlier_runs("0031", now, requirement, model="Wader-9")
    assert [line.run for line in found] == [failed, void, interrupted, cut, other_plan, nameless]
    assert [line.void for line in found] == [False, True, False, False, False, False]
    assert [line.verdict for line in found[:3]] == ["FAIL", "FAIL", None]
    assert len(store.earlier_runs("0031", now, requirement)) == 7
    assert store.earlier_runs("0031", failed, requirement) == []
