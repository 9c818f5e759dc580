"""A person is asked on standard error, and believed only when the value that was set agrees."""

from __future__ import annotations

import os
import pty
import subprocess
import sys
import threading

import pytest
from pydantic import ValidationError

from drivers.contract import InstrumentLost, Interrupted, NotConfirmed, OutOfLimits
from drivers.instruments.manual import ManualInstrument, ManualSection, Terminal

NEVER = threading.Event()
KEYS = {"quantity": "attenuation", "unit": "dB", "limits": [0, 60], "safe": 60, "name": "the step attenuator"}


class Colleague(Terminal):
    """Answers what it was told to, and remembers what it was asked."""

    def __init__(self, *answers: str) -> None:
        self.answers = list(answers)
        self.heard: list[str] = []

    def tell(self, text: str) -> None:
        self.heard.append(text)

    def ask(self, text: str, cancel: threading.Event) -> str:
        self.heard.append(text)
        return self.answers.pop(0)


def by_hand(*answers: str, **changed: object) -> tuple[ManualInstrument, Colleague]:
    colleague = Colleague(*answers)
    return ManualInstrument(ManualSection.model_validate(KEYS | changed), colleague), colleague


def test_the_operator_is_asked_for_the_value_and_confirms_it() -> None:
    instrument, colleague = by_hand("", "21", "21.5 dB", tolerance=0.6)
    with instrument:
        assert instrument.apply(20, NEVER).reading == 20
        assert instrument.apply(21, NEVER).reading == 21
        assert instrument.apply(21, NEVER).reading == 21.5
    assert colleague.heard[0].startswith("Set the step attenuator to 20 dB.")
    assert not instrument.unattended


def test_another_value_than_the_one_asked_for_is_not_believed() -> None:
    instrument, colleague = by_hand("30", "twenty", "20")
    assert instrument.apply(20, NEVER).reading == 20
    assert colleague.heard[1].startswith("That is not 20 dB.")
    instrument, _ = by_hand("30", "30", "30")
    with pytest.raises(NotConfirmed):
        instrument.apply(20, NEVER)
    instrument, _ = by_hand("n")
    with pytest.raises(NotConfirmed, match="could not set"):
        instrument.apply(20, NEVER)


def test_nobody_is_asked_for_a_value_outside_the_limits() -> None:
    instrument, colleague = by_hand()
    with pytest.raises(OutOfLimits):
        instrument.apply(61, NEVER)
    assert colleague.heard == []


def test_on_the_way_out_the_operator_is_told_once_and_not_waited_for() -> None:
    instrument, colleague = by_hand("")
    instrument.apply(20, NEVER)
    instrument.make_safe()
    instrument.make_safe()
    assert colleague.heard[1:] == ["Now set the step attenuator to its safe value: 60 dB."]


def test_limits_and_a_safe_value_are_required() -> None:
    for key in ("limits", "safe", "unit", "quantity"):
        with pytest.raises(ValidationError):
            ManualSection.model_validate({name: value for name, value in KEYS.items() if name != key})


ASK = """
import threading, sys
from drivers.contract import DriverError
from drivers.instruments.manual import ManualInstrument, ManualSection
cancel = threading.Event()
if "cancel" in sys.argv:
    threading.Timer(0.5, cancel.set).start()
instrument = ManualInstrument(ManualSection.model_validate({keys}))
try:
    print("result", instrument.apply(20.0, cancel).reading)
except DriverError as error:
    print("error", type(error).__name__)
""".replace("{keys}", repr(KEYS))


@pytest.mark.parametrize(
    ("typed", "arguments", "result"),
    [
        (b"20 dB\n", [], "result 20.0"),
        (b"\n", [], "result 20.0"),
        (b"", ["cancel"], "error Interrupted"),
        (b"\x04", [], "error InstrumentLost"),
    ],
)
def test_at_a_real_terminal(typed: bytes, arguments: list[str], result: str) -> None:
    ours, theirs = pty.openpty()
    try:
        os.write(ours, b"n\n")  # typed before the question: no answer to it
        with subprocess.Popen(
            [sys.executable, "-c", ASK, *arguments],
            stdin=theirs,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
        ) as process:
            assert process.stderr is not None
            assert process.stdout is not None
            asked = b""
            while b"n: it cannot be set." not in asked:
                more = os.read(process.stderr.fileno(), 1000)
                assert more, asked
                asked += more
            os.write(ours, typed)
            assert process.stdout.read().decode().strip() == result
    finally:
        os.close(ours)
        os.close(theirs)
    assert asked.startswith(b"Set the step attenuator to 20 dB.")


def test_without_a_terminal_nobody_can_answer() -> None:
    done = subprocess.run(
        [sys.executable, "-c", ASK], stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=60
    )
    assert done.stdout.strip() == "error InstrumentLost"


def test_cancelling_beforehand_asks_for_nothing_at_a_terminal() -> None:
    cancelled = threading.Event()
    cancelled.set()
    instrument = ManualInstrument(ManualSection.model_validate(KEYS))
    with pytest.raises((Interrupted, InstrumentLost)):
        instrument.apply(20, cancelled)
