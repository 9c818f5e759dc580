"""What every channel model is built on: a stage that bytes pass through, and the line that it lies in."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import Field, GetCoreSchemaHandler, GetJsonSchemaHandler
from pydantic_core import CoreSchema, core_schema

from drivers.contract import Knob, OpenFailed, Section

Bytes = NDArray[np.uint8]
BitOrder = Literal["lsb", "msb"]

MAX_STEP_BYTES = 1 << 18  # the most that a stage is ever given at once


class OneOrSeveral:
    """Marks a tuple whose only entry may stand by itself, in the profile and in its JSON schema."""

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        """Put what stands by itself into a tuple, before it is validated."""
        return core_schema.no_info_before_validator_function(_several, handler(source))

    def __get_pydantic_json_schema__(self, core: CoreSchema, handler: GetJsonSchemaHandler) -> dict[str, Any]:
        """Allow an entry in place of the list."""
        several = handler(core)
        return {"anyOf": [several, several["items"]]}


def _several(value: object) -> object:
    return value if isinstance(value, list | tuple) else (value,)


@dataclass(frozen=True, slots=True)
class Line:
    """What a stage may know of the line that it lies in."""

    bit_order: BitOrder = "lsb"  # which bit of a byte goes first
    rate_bps: float | None = None  # payload; what turns seconds into bits

    def bits(self, seconds: float, key: str) -> int:
        """Bits that pass in `seconds`, at least one.

        Raises
        ------
        OpenFailed
            If the rate is not known.
        """
        if self.rate_bps is None:
            raise OpenFailed(
                f"the channel's {key} counts seconds, but the link has no rate",
                "state link.rate_bps, or use the key that counts bits",
            )
        return max(1, round(seconds * self.rate_bps))


class Stage(ABC):
    """One thing that happens to the bits.

    What comes out depends on the bits that went in and on the seed, never on how they were cut into chunks.
    """

    whole_bytes: bool = True  # bits are lost and invented in whole bytes only
    step_bytes: int = MAX_STEP_BYTES  # give it no more at once: keeps its scratch memory small

    @abstractmethod
    def apply(self, data: Bytes) -> Bytes:
        """Pass bytes through; `data` may be changed in place and given back, or another array given back."""

    def flush(self) -> Bytes:
        """Give out what is held back, since the sender has paused or finished."""
        return np.empty(0, dtype=np.uint8)

    def knobs(self) -> Mapping[str, Knob]:
        """What may be turned while bits pass."""
        return {}


class ChannelSection(Section, ABC):
    """Base of the keys of a channel model; `model` names it."""

    seed: int | None = Field(
        default=None, ge=0, description="Makes the same stream again; left out: another one each time."
    )

    @abstractmethod
    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage; raises `OpenFailed` where the line does not know what the keys need."""
