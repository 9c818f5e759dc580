"""The keys that all instruments share: what is set, in which unit, between which limits, and what is safe."""

from __future__ import annotations

from collections.abc import Mapping
from difflib import get_close_matches
from types import MappingProxyType
from typing import Self

from pydantic import Field, FiniteFloat, field_validator, model_validator

from drivers.contract import Section

_FREE = "other"  # any unit

# A ratio is given in dB, a level in dBm or in watts: 30 dB and 30 dBm are never the same thing.
QUANTITIES: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {
        "attenuation": ("dB",),
        "loss": ("dB",),
        "gain": ("dB",),
        "ebn0": ("dB",),
        "snr": ("dB",),
        "level": ("dBm", "dBW", "dBmV", "dBuV", "dBµV", "W", "mW", "uW", "µW"),
        "power": ("dBm", "dBW", "W", "mW", "uW", "µW"),
        "frequency": ("Hz", "kHz", "MHz", "GHz", "ppm"),
        "temperature": ("°C", "degC", "K"),
        "humidity": ("%",),
        "pressure": ("Pa", "hPa", "kPa", "mbar", "bar"),
        "voltage": ("V", "mV", "kV"),
        "current": ("A", "mA", "uA", "µA"),
        "resistance": ("ohm", "Ω", "kohm", "kΩ"),
        "phase": ("deg", "°", "rad"),
        "delay": ("s", "ms", "us", "µs", "ns", "ps"),
        "time": ("s", "ms", "min", "h"),
        "distance": ("m", "km", "mm"),
        "speed": ("m/s", "km/h"),
        "rate": ("bit/s", "kbit/s", "Mbit/s", "Bd"),
        "ratio": ("1", "%"),
        _FREE: (),
    }
)


class ConditionSection(Section):
    """What an instrument sets or reads."""

    quantity: str = Field(description="What it sets or reads: attenuation, level, temperature ...")
    unit: str = Field(min_length=1, description="Its unit; attenuation is in dB, a level in dBm.")
    limits: tuple[FiniteFloat, FiniteFloat] | None = Field(
        default=None, description="Lowest and highest value that may ever be set."
    )
    safe: FiniteFloat | None = Field(
        default=None, description="Value to go to at the end and after any fault; within the limits."
    )
    settle_s: float = Field(default=0.0, ge=0, le=86_400, description="Wait this long after setting.")

    @field_validator("quantity", mode="after")
    @classmethod
    def _known(cls, quantity: str) -> str:
        name = quantity.strip().casefold()
        if name not in QUANTITIES:
            near = get_close_matches(name, QUANTITIES, n=1)
            hint = f"did you mean {near[0]!r}?" if near else f"known are {', '.join(QUANTITIES)}"
            raise ValueError(f"unknown quantity {quantity!r}: {hint} ({_FREE!r} takes any unit)")
        return name

    @model_validator(mode="after")
    def _agrees(self) -> Self:
        units = QUANTITIES[self.quantity]
        if units and self.unit not in units:
            wanted = " or ".join(units) if len(units) < 3 else ", ".join(units)
            raise ValueError(f"{self.quantity} is stated in {wanted}, not in {self.unit!r}")
        if self.limits is not None:
            low, high = self.limits
            if low > high:
                raise ValueError(f"the lower limit {low:g} lies above the upper limit {high:g}")
            if self.safe is not None and not low <= self.safe <= high:
                raise ValueError(f"the safe value {self.safe:g} lies outside the limits {low:g} to {high:g}")
        return self


class BoundedSection(ConditionSection):
    """What an instrument that always sets something needs to state."""

    limits: tuple[FiniteFloat, FiniteFloat] = Field(
        description="Lowest and highest value that may ever be set."
    )
    safe: FiniteFloat = Field(description="Value to go to at the end and after any fault; within the limits.")
