"""The sections [sweep] and [search]: at which conditions to measure, and in which order."""

from __future__ import annotations

import itertools
import random
from decimal import Decimal
from typing import Annotated, Any, Literal

from pydantic import Discriminator, Field, Tag, field_validator, model_validator

from .basics import (
    Clock,
    Count,
    CountOrZero,
    FromList,
    NotNegative,
    Positive,
    ProfileSection,
    Share,
    WholeNumber,
    problem,
)

MOST_POINTS = 10_000


class Range(ProfileSection):
    """From start to stop, the end included where the steps meet it; steps are decimal."""

    start: float
    stop: float
    step: Positive

    @field_validator("step", mode="before")
    @classmethod
    def _without_a_sign(cls, step: Any) -> Any:
        if isinstance(step, int | float) and step < 0:
            raise problem(
                f"must be over 0, not {step:g}",
                "write it without the minus: start and stop say which way it goes",
            )
        return step

    @property
    def meets_its_end(self) -> bool:
        """Whether the last value is `stop`."""
        return self.values()[-1] == self.stop

    def values(self) -> tuple[float, ...]:
        """Give the values, downwards where stop lies under start. 20.1 to 20.3 by 0.1 are three."""
        start, stop, step = (Decimal(repr(v)) for v in (self.start, self.stop, self.step))
        count = int(abs(stop - start) / step) + 1
        if count > MOST_POINTS:
            raise problem(f"has {count} values, more than {MOST_POINTS}", "choose a larger step")
        way = step if stop >= start else -step
        return tuple(float(start + k * way) for k in range(count))


def _form(given: Any) -> str:
    return "range" if isinstance(given, dict | Range) else "list"


ValueList = Annotated[tuple[float, ...], FromList, Field(min_length=1, max_length=MOST_POINTS)]
Values = Annotated[Annotated[ValueList, Tag("list")] | Annotated[Range, Tag("range")], Discriminator(_form)]


class Axis(ProfileSection):
    """One condition of a sweep."""

    instrument: str
    """The name of an instrument in [instruments]."""
    values: Values
    """A list of values, or { start, stop, step } with the end included."""
    order: Literal["given", "ascending", "descending", "shuffled"] = "given"
    """The order in which the values are visited."""
    seed: WholeNumber = 1
    """shuffled: which order; the same seed gives the same one."""

    def listed(self) -> tuple[float, ...]:
        """Give the values one by one, as given."""
        return self.values.values() if isinstance(self.values, Range) else self.values

    def ordered(self) -> tuple[float, ...]:
        """Give the values in the order in which they are visited."""
        if self.order == "given":
            return self.listed()
        rising = sorted(self.listed())
        if self.order == "descending":
            rising.reverse()
        elif self.order == "shuffled":
            random.Random(self.seed).shuffle(rising)
        return tuple(rising)


class TheoryMap(ProfileSection):
    """[sweep.theory]: where the instrument's values lie on a textbook curve."""

    modulation: str
    """As for `bitassay theory`."""
    value: float
    """A value of the axis along which curves run …"""
    ebn0_db: float
    """… and the Eb/N0 there, dB."""
    slope: Literal[-1, 1] = -1
    """Eb/N0 falls by 1 dB for each dB of an attenuator (-1), rises with a level (1)."""


class Sweep(ProfileSection):
    """[sweep]: one axis in short form, or several as [[sweep.axes]], the first one slowest."""

    instrument: str | None = None
    """Short form: the name of an instrument in [instruments]."""
    values: Values | None = None
    """Short form: a list of values, or { start, stop, step } with the end included."""
    order: Literal["given", "ascending", "descending", "shuffled"] = "given"
    """Short form: the order in which the values are visited."""
    seed: WholeNumber = 1
    """Short form, shuffled: which order."""
    axes: Annotated[tuple[Axis, ...], FromList] = ()
    """Several conditions. Curves run along the one in decibels, and of several such the one with the most values."""
    return_trip: bool = False
    """Visit the points again in reverse order, which shows hysteresis."""
    reference: float | None = None
    """One axis: this value is revisited, which shows drift."""
    reference_every: Count = 5
    """Points between two visits to the reference."""
    warm_up_s: NotNegative = 0.0
    """Wait before the first point."""
    settle_s: NotNegative = 0.0
    """Wait at each point, beyond the instrument's own settling, before bits count."""
    guard: CountOrZero = 3
    """End a climb after this many points in a row that never aligned, and say so; 0: never."""
    finish_by: Clock | None = None
    """Local time of day, "HH:MM", at which the sweep shall be over. Time is shared out among the points, more
    where the sensitivity is decided; what is left over at the end goes to such points once more."""
    sensitivity_ber: Annotated[float, Field(gt=0, lt=0.5)] | None = None
    """The bit error ratio that defines the sensitivity."""
    theory: TheoryMap | None = None
    """The textbook curve to compare with."""

    @model_validator(mode="after")
    def _one_form(self) -> Sweep:
        short = self.instrument is not None or self.values is not None
        if short and self.axes:
            raise problem(
                "has both a short form and axes", "use either instrument and values, or [[sweep.axes]]"
            )
        if not self.axes and (self.instrument is None or self.values is None):
            raise problem("lacks its instrument or its values", "add both, or [[sweep.axes]]")
        names = [axis.instrument for axis in self.all_axes()]
        if len(set(names)) < len(names):
            raise problem("has two axes for one instrument", "give each axis an instrument of its own")
        if self.reference is not None and len(names) > 1:
            raise problem("has a reference point and several axes", "leave reference out")
        count = 1
        for axis in self.all_axes():
            count *= len(axis.listed())
        if count > MOST_POINTS:
            raise problem(f"has {count} points, more than {MOST_POINTS}", "choose larger steps")
        return self

    def all_axes(self) -> tuple[Axis, ...]:
        """Give the axes, the short form as one."""
        if self.axes or self.instrument is None or self.values is None:
            return self.axes
        return (Axis(instrument=self.instrument, values=self.values, order=self.order, seed=self.seed),)

    def visits(self) -> tuple[dict[str, float], ...]:
        """Give each point's settings {instrument: value} in the order of visiting, references included."""
        axes = self.all_axes()
        names = [axis.instrument for axis in axes]
        grid = [dict(zip(names, row, strict=True)) for row in itertools.product(*(a.ordered() for a in axes))]
        if self.return_trip:
            grid += grid[::-1]
        if self.reference is None:
            return tuple(grid)
        out: list[dict[str, float]] = []
        for k, point in enumerate(grid):
            if k % self.reference_every == 0:
                out.append({names[0]: self.reference})
            out.append(point)
        return (*out, {names[0]: self.reference})


class Search(ProfileSection):
    """[search]: find the value at which the BER crosses a target, with the fewest bits."""

    instrument: str
    """The name of an instrument in [instruments]."""
    low: float
    """Search from here …"""
    high: float
    """… to here, in the instrument's unit."""
    ber: Annotated[float, Field(gt=0, lt=0.5)]
    """The bit error ratio whose crossing is sought."""
    resolution: Positive = 0.5
    """End when the crossing is known to within this, in the instrument's unit."""
    confidence: Share = 0.95
    """Confidence of the bounds on the crossing."""
    max_bits: Count | None = None
    """Most bits in all."""
    max_seconds: Positive | None = None
    """Longest time in all."""
    step: Positive | None = None
    """The instrument is set in steps of this, from `low` on; left out: a power of ten under the resolution."""
    warm_up_s: NotNegative = 0.0
    """Wait before the first point."""
    settle_s: NotNegative = 0.0
    """Wait at each point, beyond the instrument's own settling, before bits count."""

    @model_validator(mode="after")
    def _a_stretch(self) -> Search:
        if not self.low < self.high:
            raise problem("has low at or over high", "give a stretch to search in")
        return self
