"""Records made by hand, second by second."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from harness.record import Event, Point, Run, Second, Tally

REQUIREMENT = {"ber": 1e-4, "confidence": 0.95, "plan": "fixed", "accept_errors": 3, "margin": 2.0}


@pytest.fixture
def second() -> Callable[..., Second]:
    """One second of 10 000 bits, with errors at places of the stream."""

    def make(index: int, errors: tuple[int, ...] = (), unaligned: int = 0, **more: Any) -> Second:
        bits = more.pop("bits", 10_000)
        first = more.pop("first_bit", 10_000 * index)
        at = np.array(errors, dtype=np.int64)
        tally = Tally(bits, bits - unaligned, unaligned, len(errors), len(errors), 0)
        stretches = tuple(x for x in ((bits - unaligned, True), (unaligned, False)) if x[0])
        return Second(
            point=0,
            sitting=0,
            index=index,
            at=index * 10**9,
            duration_ns=10**9,
            sent=bits,
            tally=tally,
            first_bit=first,
            positions=at,
            ones_lost=np.ones(len(errors), dtype=np.bool_),
            stretches=stretches,
            **more,
        )

    return make


@pytest.fixture
def record(second: Callable[..., Second]) -> Callable[..., Run]:
    """A completed run of these seconds."""

    def make(
        seconds: list[Second] | None = None,
        events: tuple[Event, ...] = (),
        ended_by: str = "plan",
        status: str = "completed",
        **requirement: Any,
    ) -> Run:
        given = {**REQUIREMENT, **requirement}
        seconds = [second(i) for i in range(8)] if seconds is None else seconds
        facts = {"pattern": "PRBS15", "bit_order": "lsb", "rate_bps": 10_000.0}
        first = Event("aligned", 0, "the pattern was found", 0, {"place": 0, "inverted": False})
        point = Point(0, {}, 0, 1, ended_by, tuple(seconds), (first, *events), facts=facts)
        return Run(
            key="k",
            title="",
            command="measure",
            started=0,
            ended=1,
            status=status,
            ended_by=ended_by,
            verdict=None,
            profile_text="",
            overrides=(),
            settings={"requirement": given},
            device={},
            sittings=(),
            points=(point,),
            stated=None,
        )

    return make
