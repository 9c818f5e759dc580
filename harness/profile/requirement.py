"""The sections [pattern], [requirement] and [stop]: what is sent, what is required, and when to end."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from .basics import Count, CountOrZero, Positive, ProfileSection, Share, ShareOrZero, problem


class PatternChoice(ProfileSection):
    """A pattern and the order of its bits in a byte."""

    name: str = "PRBS15"
    """The pattern's name, read without regard to case; `bitassay patterns` lists them."""
    bit_order: Literal["lsb", "msb"] = "lsb"
    """Which bit of a byte is sent first."""


class PatternSettings(PatternChoice):
    """[pattern]: what is sent and expected."""

    reverse: PatternChoice | None = None
    """The other direction's pattern where link.duplex is on."""


class Objectives(ProfileSection):
    """[requirement.availability]: objectives that PASS needs too."""

    standard: Literal["G.821", "G.826"] = "G.821"
    """The recommendation whose definitions count."""
    esr: ShareOrZero | None = None
    """Highest errored second ratio."""
    sesr: ShareOrZero | None = None
    """Highest severely errored second ratio."""
    bber: ShareOrZero | None = None
    """G.826: highest background block error ratio."""
    block_bits: Count | None = None
    """G.826: block length in bits; to be stated under about 1.5 Mbit/s."""
    available: ShareOrZero | None = None
    """Lowest share of available seconds."""

    @model_validator(mode="after")
    def _complete(self) -> Objectives:
        if self.standard == "G.821" and (self.bber is not None or self.block_bits is not None):
            raise problem("counts blocks, and G.821 knows none", 'set standard = "G.826", or leave them out')
        if self.esr is None and self.sesr is None and self.bber is None and self.available is None:
            raise problem("states no objective", "add esr, sesr, bber or available")
        return self


class Requirement(ProfileSection):
    """[requirement]: what the device must keep, and by which plan it is decided. Left out: measure only."""

    ber: Annotated[float, Field(gt=0, lt=1)]
    """The bit error ratio that the device must stay under."""
    confidence: Share = 0.95
    """One less the consumer's risk: a device at `ber` gets PASS with probability 1 - confidence at most."""
    plan: Literal["fixed", "curtailed", "sequential"] = "fixed"
    """The rule that decides."""
    accept_errors: Annotated[CountOrZero, Field(le=1_000_000)] = 0
    """fixed, curtailed: accept at most this many errors."""
    margin: Annotated[float, Field(gt=1)] = 2.0
    """Good devices are this many times better than `ber`; sequential plans need it."""
    producer_risk: Share = 0.05
    """sequential: the probability that a device at ber / margin gets FAIL."""
    max_slips: CountOrZero = 0
    """PASS needs at most this many slips; a polarity that turns over in mid-stream counts as one."""
    max_unaligned_ratio: ShareOrZero = 0.001
    """PASS needs (unaligned + lost) / (received + lost) bits at or under this."""
    lost_link: Literal["fail", "undecided"] = "fail"
    """What a lost link makes of the verdict."""
    clustered: Literal["pass", "undecided"] = "pass"
    """What clustered errors make of a PASS: it stays with a warning, or becomes UNDECIDED."""
    count: Literal["bits", "events"] = "bits"
    """What the plan counts: errored bits, or error events."""
    event_gap_bits: Count | None = None
    """count = "events": errors at most this many bits apart are one event; fixed before the run."""
    availability: Objectives | None = None
    """Availability objectives."""
    at: dict[str, float] = Field(default_factory=dict)
    """Sweeps: the point to which the requirement applies, {instrument = value}."""
    sensitivity_at_least: float | None = None
    """Sweeps and searches: the sensitivity must reach this value, in the instrument's unit."""

    @model_validator(mode="after")
    def _consistent(self) -> Requirement:
        if self.plan == "sequential" and self.producer_risk + (1 - self.confidence) >= 1:
            raise problem(
                "has risks that add up to 1 or more, which a coin would meet",
                "raise confidence or lower producer_risk",
            )
        if self.count == "events" and self.event_gap_bits is None:
            raise problem(
                "counts events without saying what an event is",
                "add event_gap_bits: errors at most that many bits apart are one event",
            )
        if self.count == "bits" and self.event_gap_bits is not None:
            raise problem("has event_gap_bits but counts bits", 'set count = "events", or leave it out')
        return self


class Stop(ProfileSection):
    """[stop]: whichever comes first, for each point; a plan's own end counts too."""

    bits: Count | None = None
    """Bits sent (received where nothing is sent)."""
    seconds: Positive | None = None
    """Seconds of measurement."""
    errors: Count | None = None
    """Errors counted."""
