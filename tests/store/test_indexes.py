"""No everyday question looks through the seconds or events of other runs, however many years there are."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

import pytest
from sqlalchemy import event, text

from harness.record import Note
from harness.store import Store, open_store

Begin = Callable[..., str]


@contextmanager
def statements(store: Store) -> Iterator[list[tuple[str, object]]]:
    """Gather what is asked of the database meanwhile."""
    asked: list[tuple[str, object]] = []

    def note(_c: object, _k: object, statement: str, parameters: object, *_: object) -> None:
        if statement.startswith(("SELECT", "UPDATE")):
            asked.append((statement, parameters))

    event.listen(store._engine, "before_cursor_execute", note)
    yield asked
    event.remove(store._engine, "before_cursor_execute", note)


def plans(store: Store, asked: list[tuple[str, object]]) -> list[str]:
    with store._reading() as connection:
        return [
            str(row[-1])
            for statement, parameters in asked
            for row in connection.exec_driver_sql(f"EXPLAIN QUERY PLAN {statement}", parameters)  # type: ignore[arg-type]
        ]


@pytest.fixture
def full(sqlite: str, filled: Begin) -> Iterator[tuple[Store, str]]:
    with open_store(sqlite) as store:
        keys = [filled(store, started=1_780_000_000_000_000_000 + k * 10**9) for k in range(5)]
        store.add_note(keys[2], Note(1, "me", "seen"))
        yield store, keys[2]


@pytest.mark.parametrize(
    "ask",
    [
        lambda store, key: store.runs(limit=20),
        lambda store, key: store.runs(limit=20, serial_number="0031"),
        lambda store, key: store.find("last"),
        lambda store, key: store.load(key),
        lambda store, key: store.load_head(key),
        lambda store, key: store.load_tail(key, 2, 2),
        lambda store, key: store.digest(key),
        lambda store, key: store.earlier_runs("0031", key, {"ber": 1e-6}, "Wader-9"),
    ],
)
def test_everyday_questions_go_by_an_index(
    full: tuple[Store, str], ask: Callable[[Store, str], object]
) -> None:
    store, key = full
    with statements(store) as asked:
        ask(store, key)
    assert asked
    for plan in plans(store, asked):
        assert not plan.startswith("SCAN") or "USING INDEX" in plan or "CONSTANT ROW" in plan, plan


def test_an_ending_looks_at_keys_alone(full: tuple[Store, str]) -> None:
    store, key = full
    with statements(store) as asked:
        store.find(key[-9:])
    assert [plan for plan in plans(store, asked) if "USING COVERING INDEX" not in plan] == []


def test_writing_a_second_looks_through_nothing(
    sqlite: str, begin: Begin, make_second: Callable[..., object]
) -> None:
    with open_store(sqlite) as store:
        key = begin(store)
        with statements(store) as asked:
            store.commit(key, [make_second(0)], facts={0: {"x": 1}})  # type: ignore[list-item]
        assert asked
        assert [plan for plan in plans(store, asked) if plan.startswith("SCAN")] == []


def test_a_question_without_an_index_would_be_noticed(full: tuple[Store, str]) -> None:
    store, _ = full
    with statements(store) as asked, store._reading() as connection:
        connection.execute(text("SELECT count(*) FROM second WHERE errors > 3"))
    assert any(plan.startswith("SCAN second") for plan in plans(store, asked))
