"""The sections [link], [link.receive], [counter] and [instruments.NAME]: our keys beside the driver's own."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, Field, InstanceOf, SerializeAsAny

from drivers.dialogue import Step

from .basics import Count, FromList, NotNegative, Positive, ProfileSection

Topology = Literal["far-end-loop", "two-port", "one-way"]
Options = Annotated[SerializeAsAny[InstanceOf[BaseModel]], Field(description="the driver's own keys")]


class DrivenSection(ProfileSection):
    """A section that names a driver; what is not among its own keys goes to the driver's `Section`."""

    driver: str
    """The driver's name; `bitassay drivers` lists them, `bitassay drivers NAME` their keys."""
    options: Options

    def flat(self) -> dict[str, Any]:
        """Give the section as it stands in TOML: the driver's keys beside our own."""
        keys: dict[str, Any] = {}
        for name in type(self).model_fields:
            value = getattr(self, name)
            if name == "options":
                keys |= value.model_dump(mode="json")
            elif isinstance(value, DrivenSection):
                keys[name] = value.flat()
            elif isinstance(value, tuple):
                keys[name] = [v.model_dump(mode="json") if isinstance(v, BaseModel) else v for v in value]
            else:
                keys[name] = value
        return keys


class ReceiveSettings(DrivenSection):
    """[link.receive]: the second port of a two-port measurement."""

    rate_bps: Positive | None = None
    """Nominal payload rate, bit/s; left out: as [link]."""


class LinkSettings(DrivenSection):
    """[link]: the path that carries bytes to the device and back."""

    topology: Topology = "far-end-loop"
    """What the path is: far-end-loop (both directions in series), two-port, or one-way.

    Left out: two-port with [link.receive], one-way where the driver only sends or only receives.
    """
    rate_bps: Positive | None = None
    """Nominal payload rate, bit/s: for times, availability and forecasts; it does not pace."""
    pace_bps: Positive | None = None
    """Send at this rate, bit/s; left out: as fast as the port takes it."""
    max_in_flight_bits: Count | None = None
    """Most bits sent and not yet received; left out: no limit of our own."""
    drain_s: Positive = 5.0
    """Wait this long for what is still on its way; after that it counts as lost."""
    reconnect_s: NotNegative = 0.0
    """Wait this long for a link that went away to come back; 0: do not wait."""
    least_delay_s: NotNegative | None = None
    """`check` takes what comes back sooner for a short at this end; 0: this path may answer at once.

    Left out: a few milliseconds on serial ports; tcp and udp may answer at once, which is said.
    """
    duplex: bool = False
    """Two ports: measure both directions at once, with two patterns and separate tallies."""
    direction: Literal["forward", "reverse"] = "forward"
    """Two ports: forward sends on [link] and receives on [link.receive], reverse the other way round."""
    receive: ReceiveSettings | None = None
    """Two ports: the port at the other end."""
    before: Annotated[tuple[Step, ...], FromList] = ()
    """Set-up dialogue, before the pattern is sent; never counted."""
    after: Annotated[tuple[Step, ...], FromList] = ()
    """Dialogue on every way out."""


class CounterSettings(DrivenSection):
    """[counter]: an instrument that counts errors itself, in place of a link."""

    rate_bps: Positive | None = None
    """Nominal payload rate, bit/s."""
    interval_s: Positive = 1.0
    """Seconds between two readings."""


class InstrumentSettings(DrivenSection):
    """[instruments.NAME]: something that sets or reads a condition."""

    value: float | None = None
    """The value to set where no sweep and no search sets it, in the instrument's unit."""
