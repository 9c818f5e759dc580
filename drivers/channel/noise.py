"""White noise, alone or with fading, on a modulation: samples are made and decided symbol by symbol."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Literal

import numpy as np
from pydantic import Field, field_validator

from drivers.channel.fading import Gains
from drivers.channel.modulation import Modulation, modulations
from drivers.channel.packing import pack, unpack
from drivers.channel.stage import BitOrder, Bytes, ChannelSection, Line, Stage
from drivers.contract import Knob, OpenFailed

ModulationName = Literal[
    "bpsk",
    "qpsk",
    "8psk",
    "16psk",
    "16qam",
    "64qam",
    "256qam",
    "dbpsk",
    "dqpsk",
    "8dpsk",
    "2fsk",
    "4fsk",
    "8fsk",
    "16fsk",
]
_SYMBOLS_AT_ONCE = 1 << 14


class NoiseSection(ChannelSection):
    """What all models with noise have in common."""

    modulation: ModulationName = Field(description="How bits become samples.")
    ebn0_db: float = Field(
        ge=-60, le=100, description="Energy a bit over noise density, in dB, before any attenuation."
    )
    attenuation_db: float = Field(
        default=0.0, ge=0, le=200, description="Taken off ebn0_db, as a pad before the receiver would."
    )

    @field_validator("modulation", mode="before")
    @classmethod
    def _plain(cls, value: object) -> object:
        if not isinstance(value, str):
            return value
        plain = value.lower().replace("-", "")
        return {"2psk": "bpsk", "4psk": "qpsk", "4qam": "qpsk", "2dpsk": "dbpsk", "4dpsk": "dqpsk"}.get(
            plain, plain
        )

    def _stage(self, line: Line, rng: np.random.Generator, gains: Gains | None) -> Stage:
        return Noisy(self, modulations()[self.modulation](), gains, line.bit_order, rng)


class AwgnSection(NoiseSection):
    """White Gaussian noise and nothing else."""

    model: Literal["awgn"]

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        return self._stage(line, rng, None)


class FadedSection(NoiseSection):
    """What the models with fading have in common; ebn0_db is the mean over the fading."""

    doppler_hz: float | None = Field(
        default=None, gt=0, description="How fast the gain wanders; left out: each symbol has its own gain."
    )

    def _faded(self, line: Line, rng: np.random.Generator, k_factor: float) -> Stage:
        doppler = None
        if self.doppler_hz is not None:
            doppler = self.doppler_hz * modulations()[self.modulation]().bits / _rate(line)
            if doppler > 0.5:
                raise OpenFailed(
                    f"a Doppler frequency of {self.doppler_hz:g} Hz is more than half the symbol rate",
                    "lower doppler_hz, or leave it out: then each symbol has its own gain",
                )
        noise, gains = rng.spawn(2)
        return self._stage(line, noise, Gains(k_factor, doppler, gains))


class RayleighSection(FadedSection):
    """White noise, on many paths of which none stands out: flat Rayleigh fading."""

    model: Literal["rayleigh"]

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        return self._faded(line, rng, 0.0)


class RicianSection(FadedSection):
    """White noise, on many paths of which one stands out: flat Rician fading."""

    model: Literal["rician"]
    k_factor_db: float = Field(
        ge=-60, le=100, description="Power of the path that stands out over all others, in dB."
    )

    def stage(self, line: Line, rng: np.random.Generator) -> Stage:
        """Build the stage."""
        return self._faded(line, rng, 10 ** (self.k_factor_db / 10))


def _rate(line: Line) -> float:
    if line.rate_bps is None:
        raise OpenFailed(
            "the channel's doppler_hz needs to know how fast bits pass, but the link has no rate",
            "state link.rate_bps, or leave doppler_hz out",
        )
    return line.rate_bps


class Noisy(Stage):
    """Sends whole symbols; bits that fill none yet wait for the next ones, or for `flush`."""

    step_bytes = 1 << 13

    def __init__(
        self,
        section: NoiseSection,
        modulation: Modulation,
        gains: Gains | None,
        order: BitOrder,
        rng: np.random.Generator,
    ) -> None:
        self._ebn0_db = section.ebn0_db
        self._attenuation_db = section.attenuation_db
        self._modulation = modulation
        self._gains = gains
        self._order: BitOrder = order
        self._rng = rng
        self._waiting = np.empty(0, dtype=np.uint8)  # bits that fill no symbol yet
        self._decided = np.empty(0, dtype=np.uint8)  # bits that fill no byte yet

    def apply(self, data: Bytes) -> Bytes:
        """Send bits as symbols, give the bits decided."""
        bits = unpack(data, self._order)
        if len(self._waiting):
            bits = np.concatenate([self._waiting, bits])
        whole = len(bits) // self._modulation.bits * self._modulation.bits
        self._waiting = bits[whole:].copy()
        return self._packed(self._through(bits[:whole]))

    def flush(self) -> Bytes:
        """Fill the last symbol with idle bits, as a modulator does when nothing more comes."""
        if not len(self._waiting):
            return np.empty(0, dtype=np.uint8)
        count = len(self._waiting)
        idle = np.ones(self._modulation.bits - count, dtype=np.uint8)
        bits = np.concatenate([self._waiting, idle])
        self._waiting = np.empty(0, dtype=np.uint8)
        return self._packed(self._through(bits)[:count])

    def knobs(self) -> Mapping[str, Knob]:
        """Eb/N0 before the attenuation, and the attenuation."""
        return {
            "ebn0_db": Knob("dB", -60.0, 100.0, lambda: self._ebn0_db, self._turn_ebn0),
            "attenuation_db": Knob("dB", 0.0, 200.0, lambda: self._attenuation_db, self._turn_attenuation),
        }

    def _turn_ebn0(self, value: float) -> None:
        self._ebn0_db = value

    def _turn_attenuation(self, value: float) -> None:
        self._attenuation_db = value

    def _packed(self, bits: Bytes) -> Bytes:
        if len(self._decided):
            bits = np.concatenate([self._decided, bits])
        whole = len(bits) // 8 * 8
        self._decided = bits[whole:].copy()
        return pack(bits[:whole], self._order)

    def _through(self, bits: Bytes) -> Bytes:
        each = self._modulation.bits
        weights = 1 << np.arange(each - 1, -1, -1)
        # A symbol has unit energy, a bit its share of it; the density falls half on each dimension.
        ebn0 = 10 ** ((self._ebn0_db - self._attenuation_db) / 10)
        sigma = (1 / (2 * each * ebn0)) ** 0.5
        out = np.empty(len(bits), dtype=np.uint8)
        for start in range(0, len(bits), each * _SYMBOLS_AT_ONCE):
            stretch = bits[start : start + each * _SYMBOLS_AT_ONCE].reshape(-1, each)
            labels = stretch @ weights
            gains = None if self._gains is None else self._gains.take(len(labels))
            decided = self._modulation.over(labels, gains, sigma, self._rng)
            out[start : start + stretch.size] = ((decided[:, None] & weights) != 0).reshape(-1)
        return out
