"""An instrument that a person sets by hand, such as a step attenuator: the program asks and waits."""

from __future__ import annotations

import select
import sys
import termios
from threading import Event

from pydantic import Field

from drivers.contract import Applied, Identity, Instrument, InstrumentLost, Interrupted, NotConfirmed
from drivers.instruments.commands import parse_number
from drivers.instruments.condition import BoundedSection

_LOOK_EVERY_S = 0.2
_TRIES = 3


class ManualSection(BoundedSection):
    """What the operator is asked to do."""

    name: str = Field(default="", description="What to call it: the step attenuator beside the shielded box.")
    instruction: str = Field(default="", description="A further sentence for the operator.")
    tolerance: float = Field(
        default=0.0,
        ge=0,
        description="How far a value that the operator types may lie from the one asked for.",
    )


class Terminal:
    """The person at the terminal: asked on standard error, since standard output may carry a result."""

    def tell(self, text: str) -> None:
        """Say something without waiting."""
        print(text, file=sys.stderr, flush=True)

    def ask(self, text: str, cancel: Event) -> str:
        """Say something and wait for a line.

        Raises
        ------
        Interrupted
            When `cancel` is set meanwhile.
        InstrumentLost
            When nobody can answer.
        """
        if not sys.stdin.isatty():
            raise InstrumentLost(
                "there is no terminal at which somebody could answer",
                "run it at a terminal, or use an instrument that needs no hands",
            )
        termios.tcflush(sys.stdin, termios.TCIFLUSH)  # an Enter typed before is no answer to this
        print(text, end=" ", file=sys.stderr, flush=True)
        while not cancel.is_set():
            if select.select([sys.stdin], [], [], _LOOK_EVERY_S)[0]:
                line = sys.stdin.readline()
                if not line:
                    raise InstrumentLost("the terminal was closed", "run it again and answer there")
                return line.strip()
        raise Interrupted


class ManualInstrument(Instrument):
    """Asks a person to set a value and to confirm it.

    Parameters
    ----------
    section
        Its keys.
    operator
        Who is asked; the person at the terminal by default.
    """

    Section = ManualSection
    section: ManualSection
    unattended = False

    def __init__(self, section: ManualSection, operator: Terminal | None = None) -> None:
        super().__init__(section)
        self._operator = operator or Terminal()
        self._told_safe = False

    def open(self) -> None:
        """Do nothing: the person is asked when there is something to set."""

    def close(self) -> None:
        """Do nothing."""

    def identity(self) -> Identity:
        """Say that a person sets it."""
        return Identity(model=f"{self._name} (set by hand)")

    @property
    def _name(self) -> str:
        return self.section.name or f"the {self.section.quantity}"

    def _apply(self, value: float, cancel: Event) -> Applied:
        self._told_safe = False
        text = f"Set {self._name} to {value:g} {self.section.unit}."
        if self.section.instruction:
            text += f" {self.section.instruction}"
        reading = self._answer(text, value, cancel)
        if cancel.wait(self.section.settle_s):
            raise Interrupted
        return Applied(value, reading, ("set by hand",))

    def _answer(self, text: str, value: float, cancel: Event) -> float:
        question = f"{text} Enter: done; a number: what it shows; n: it cannot be set."
        for _ in range(_TRIES):
            answer = self._operator.ask(question, cancel)
            if not answer or answer.casefold() in ("y", "yes", "done", "ok"):
                return value
            if answer.casefold() in ("n", "no"):
                raise NotConfirmed(
                    f"the operator could not set {self._name} to {value:g} {self.section.unit}",
                    "leave this value out, or mend the instrument",
                )
            shown = parse_number(answer, self.section.unit)
            if shown is not None and abs(shown - value) <= self.section.tolerance + 1e-9 * abs(value):
                return shown
            question = f"That is not {value:g} {self.section.unit}. {text} Enter: done; n: it cannot be set."
        raise NotConfirmed(
            f"{self._name} was not confirmed at {value:g} {self.section.unit} in {_TRIES} tries",
            "run it again",
        )

    def make_safe(self) -> None:
        """Tell the operator, without waiting for an answer."""
        if self._told_safe:
            return
        self._told_safe = True
        self._operator.tell(
            f"Now set {self._name} to its safe value: {self.section.safe:g} {self.section.unit}."
        )
