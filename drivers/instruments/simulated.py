"""An instrument that turns a knob of the link's own channel: for trying a sweep out without hardware."""

from __future__ import annotations

from collections.abc import Sequence
from difflib import get_close_matches
from threading import Event
from typing import Any

from pydantic import Field, model_validator

from drivers.contract import (
    Applied,
    Identity,
    Instrument,
    InstrumentLost,
    Interrupted,
    Knob,
    Link,
    OpenFailed,
)
from drivers.instruments.condition import BoundedSection


class SimulatedSection(BoundedSection):
    """Which knob, and how far it may be turned."""

    knob: str = Field(min_length=1, description="Name of the knob: ber, ebn0_db, attenuation_db ...")
    quantity: str = Field(default="", description="Left out: by the knob's name.")
    unit: str = Field(default="", description="Left out: by the knob's name.")

    @model_validator(mode="before")
    @classmethod
    def _by_knob(cls, keys: Any) -> Any:
        if not isinstance(keys, dict) or "knob" not in keys:
            return keys
        knob = str(keys["knob"]).partition("@")[0]
        known = {
            "ber": ("ratio", "1"),
            "ebn0_db": ("ebn0", "dB"),
            "attenuation_db": ("attenuation", "dB"),
            "gap_bits": ("other", "bit"),
            "ber_inside": ("ratio", "1"),
            "ber_outside": ("ratio", "1"),
        }
        if knob not in known:
            if not (keys.get("quantity") and keys.get("unit")):
                raise ValueError(f"the knob {knob!r} needs a quantity and a unit")
            return keys
        quantity, unit = known[knob]
        return {"quantity": quantity, "unit": unit, **keys}


class SimulatedInstrument(Instrument):
    """Turns a knob of the link, live."""

    Section = SimulatedSection
    section: SimulatedSection
    readable = True
    lasting = False

    def __init__(self, section: SimulatedSection) -> None:
        super().__init__(section)
        self._link: Link | None = None
        self._knob: Knob | None = None

    def attach(self, link: Link | None, others: Sequence[Instrument]) -> None:
        """Remember the link whose knob it turns."""
        del others
        self._link = link

    def open(self) -> None:
        """Find the knob."""
        knobs = self._link.knobs() if self._link is not None else {}
        wanted = self.section.knob
        if wanted not in knobs:
            near = get_close_matches(wanted, knobs, n=1)
            has = f"it has {', '.join(knobs)}" if knobs else "it has none"
            raise OpenFailed(
                f"the link has no knob {wanted!r}: {has}",
                f"did you mean {near[0]!r}?" if near else "choose a channel model with such a knob",
            )
        knob = knobs[wanted]
        low, high = self.section.limits
        if not (knob.minimum <= low and high <= knob.maximum):
            raise OpenFailed(
                f"the knob {wanted!r} goes from {knob.minimum:g} to {knob.maximum:g}, "
                f"and the limits from {low:g} to {high:g}",
                "narrow the limits",
            )
        self._knob = knob

    def close(self) -> None:
        """Let go of the knob, which stays where it is."""
        self._knob = None

    def identity(self) -> Identity:
        """Say that it is simulated."""
        return Identity("bitassay", f"simulated {self.section.quantity}")

    def read(self) -> float:
        """Read where the knob stands."""
        return self._turned().get()

    def _apply(self, value: float, cancel: Event) -> Applied:
        knob = self._turned()
        knob.turn(value)
        if cancel.wait(self.section.settle_s):
            raise Interrupted
        return Applied(value, knob.get())

    def make_safe(self) -> None:
        """Turn the knob to the safe value; without one there is nothing that could do harm."""
        if self._knob is not None:
            self._knob.turn(self.section.safe)

    def _turned(self) -> Knob:
        if self._knob is None:
            raise InstrumentLost(f"the knob {self.section.knob!r} is not at hand", "open it first")
        return self._knob
