"""The channel models there are, and the chain that puts several of them one behind another."""

from __future__ import annotations

import secrets
from collections.abc import Mapping, Sequence
from typing import Annotated

import numpy as np
from pydantic import Field

from drivers.channel.burst import BurstSection
from drivers.channel.independent import IndependentSection
from drivers.channel.noise import AwgnSection, RayleighSection, RicianSection
from drivers.channel.outage import DropoutSection, InversionSection
from drivers.channel.slips import ByteLossSection, SlipSection
from drivers.channel.stage import MAX_STEP_BYTES, Bytes, ChannelSection, Line
from drivers.contract import Knob

AnyChannel = Annotated[
    IndependentSection
    | BurstSection
    | SlipSection
    | ByteLossSection
    | DropoutSection
    | InversionSection
    | AwgnSection
    | RayleighSection
    | RicianSection,
    Field(discriminator="model"),
]


class Chain:
    """Stages in the order in which the bits meet them.

    Parameters
    ----------
    sections
        One for each stage; two stages with the same seed still draw from different streams.
    line
        What they may know of the line.
    sitting
        Of the run. In each the stages draw from streams of their own, or a run that goes on would meet the errors
        of its beginning once more.

    Raises
    ------
    OpenFailed
        Where the line does not know what a model's keys need.
    """

    def __init__(self, sections: Sequence[ChannelSection], line: Line, sitting: int = 0) -> None:
        self.seeds = tuple(
            section.seed if section.seed is not None else secrets.randbits(48) for section in sections
        )
        self._stages = tuple(
            section.stage(line, np.random.default_rng([seed, index, sitting] if sitting else [seed, index]))
            for index, (section, seed) in enumerate(zip(sections, self.seeds, strict=True))
        )
        self.whole_bytes = all(stage.whole_bytes for stage in self._stages)
        self.step_bytes = min((stage.step_bytes for stage in self._stages), default=MAX_STEP_BYTES)

    def apply(self, data: Bytes) -> Bytes:
        """Pass bytes through all stages; `data` may be changed in place."""
        for stage in self._stages:
            data = stage.apply(data)
        return data

    def flush(self) -> Bytes:
        """Give out what the stages hold back, each through those behind it."""
        out = []
        for index, stage in enumerate(self._stages):
            held = stage.flush()
            for later in self._stages[index + 1 :]:
                held = later.apply(held) if len(held) else held
            out.append(held)
        return np.concatenate(out) if out else np.empty(0, dtype=np.uint8)

    def knobs(self) -> Mapping[str, Knob]:
        """All knobs; where two stages have one of the same name, the later one's is ``NAME@N``, N from 1."""
        found: dict[str, Knob] = {}
        for number, stage in enumerate(self._stages, start=1):
            for name, knob in stage.knobs().items():
                found[name if name not in found else f"{name}@{number}"] = knob
        return found
