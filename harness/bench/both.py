"""Both directions at once: measurements side by side, and what ended them together."""

from __future__ import annotations

import threading

from harness.bench.measurement import Measurement
from harness.bench.terms import Outcome
from harness.record import EndedBy


def side_by_side(measurements: list[Measurement]) -> list[Outcome]:
    """Run measurements at once; every one but the first has a thread of its own."""
    answers: dict[int, Outcome | BaseException] = {}

    def beside(number: int) -> None:
        try:
            answers[number] = measurements[number].run()
        except BaseException as error:
            answers[number] = error

    threads = [
        threading.Thread(target=beside, args=(number,), name=f"direction {number}", daemon=True)
        for number in range(1, len(measurements))
    ]
    for thread in threads:
        thread.start()
    beside(0)
    for thread in threads:
        thread.join()
    outcomes = []
    for number in range(len(measurements)):
        answer = answers[number]
        if isinstance(answer, BaseException):
            raise answer
        outcomes.append(answer)
    return outcomes


def worst(outcomes: list[Outcome]) -> EndedBy:
    """What ended a point: a fault or an interruption in either direction, else what ended the first."""
    reasons: list[EndedBy] = [outcome.ended_by for outcome in outcomes]
    for bad in ("interrupted", "fault"):
        if bad in reasons:
            return bad
    return reasons[0]
