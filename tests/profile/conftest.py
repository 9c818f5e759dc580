"""A fictional instrument, installed the way that a plug-in is, and a profile that uses it."""

from __future__ import annotations

import importlib
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

MODULE = """
from drivers.contract import Instrument, Section
from pydantic import Field


class Keys(Section):
    resource: str = "somewhere"
    channel: int = 1
    quantity: str | None = None
    unit: str | None = None
    limits: tuple[float, float] = (0.0, 95.0)
    safe: float | None = None
    low_power: bool = False


class Attenuator(Instrument):
    Section = Keys

    def open(self) -> None: ...
    def close(self) -> None: ...
    def make_safe(self) -> None: ...
    def _apply(self, value, cancel): raise NotImplementedError
"""


@pytest.fixture(autouse=True)
def plug_in(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    site = tmp_path / "site"
    info = site / "fictional_attenuator-1.0.dist-info"
    info.mkdir(parents=True)
    (site / "fictional_attenuator.py").write_text(MODULE)
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: fictional-attenuator\nVersion: 1.0\n")
    (info / "entry_points.txt").write_text(
        "[bitassay.instruments]\nstep-box = fictional_attenuator:Attenuator\n"
    )
    monkeypatch.syspath_prepend(str(site))
    importlib.invalidate_caches()
    yield
    sys.modules.pop("fictional_attenuator", None)


@pytest.fixture
def sweep_text() -> str:
    return """
title = "Wader-9, attenuation"

[device]
model = "Wader-9"
serial_number = "0031"

[link]
driver = "loopback"
rate_bps = 48_000

[[link.channel]]
model = "independent"
ber = 1e-6
seed = 7

[requirement]
ber = 1e-5

[stop]
bits = 1e6

[instruments.attenuator]
driver = "step-box"
quantity = "attenuation"
unit = "dB"
limits = [0, 95]
safe = 95

[sweep]
instrument = "attenuator"
values = { start = 20, stop = 60, step = 2 }
sensitivity_ber = 1e-6
"""
