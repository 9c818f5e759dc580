"""A simulated instrument turns the loopback's own channel, within limits, and back to what is safe."""

from __future__ import annotations

import threading
import time

import numpy as np
import pytest
from pydantic import ValidationError

from drivers.contract import InstrumentLost, Interrupted, OpenFailed, OutOfLimits
from drivers.instruments.simulated import SimulatedInstrument, SimulatedSection
from drivers.links.loopback import LoopbackLink, LoopbackSection

NEVER = threading.Event()


def simulated(**changed: object) -> SimulatedInstrument:
    keys: dict[str, object] = {"knob": "attenuation_db", "limits": [0, 60], "safe": 60, **changed}
    return SimulatedInstrument(SimulatedSection.model_validate(keys))


def noisy_loopback() -> LoopbackLink:
    channel = {"model": "awgn", "modulation": "bpsk", "ebn0_db": 30, "seed": 4}
    return LoopbackLink(LoopbackSection.model_validate({"channel": channel}))


def share_wrong(link: LoopbackLink) -> float:
    data = np.zeros(20_000, dtype=np.uint8)
    with link:
        link.send(memoryview(data), 1.0)
        back = np.empty(20_000, dtype=np.uint8)
        assert link.receive(memoryview(back), 1.0) == 20_000
    return float(np.bitwise_count(back).sum()) / 160_000


def test_the_error_ratio_of_the_link_follows_it() -> None:
    link = noisy_loopback()
    instrument = simulated()
    instrument.attach(link, [])
    with instrument:
        assert instrument.apply(10, NEVER).reading == 10
        assert share_wrong(link) == 0
        instrument.apply(30, NEVER)
        # BPSK at Eb/N0 of 0 dB: 0.0786; six standard deviations are 0.004.
        assert abs(share_wrong(link) - 0.0786) < 0.004
        instrument.make_safe()
        instrument.make_safe()
        assert instrument.read() == 60
        assert abs(share_wrong(link) - 0.5) < 0.03


def test_it_keeps_within_its_limits() -> None:
    instrument = simulated()
    instrument.attach(noisy_loopback(), [])
    with instrument:
        for wrong in (float("nan"), -1, 60.5):
            with pytest.raises(OutOfLimits):
                instrument.apply(wrong, NEVER)
        assert instrument.read() == 0


def test_settling_is_cut_short_by_cancelling() -> None:
    instrument = simulated(settle_s=60)
    instrument.attach(noisy_loopback(), [])
    cancel = threading.Event()
    threading.Timer(0.1, cancel.set).start()
    began = time.monotonic()
    with instrument, pytest.raises(Interrupted):
        instrument.apply(5, cancel)
    assert time.monotonic() - began < 30


def test_a_knob_that_is_not_there_is_named_with_its_neighbours() -> None:
    instrument = simulated(knob="attenuation_bd", quantity="attenuation", unit="dB")
    instrument.attach(noisy_loopback(), [])
    with pytest.raises(OpenFailed, match="ebn0_db, attenuation_db") as caught:
        instrument.open()
    assert "attenuation_db" in caught.value.advice
    alone = simulated()
    with pytest.raises(OpenFailed, match="it has none"):
        alone.open()
    with pytest.raises(InstrumentLost):
        alone.read()
    alone.make_safe()


def test_limits_beyond_the_knob_are_refused() -> None:
    instrument = simulated(limits=[0, 300], safe=60)
    instrument.attach(noisy_loopback(), [])
    with pytest.raises(OpenFailed, match="0 to 200"):
        instrument.open()


def test_quantity_and_unit_follow_from_a_knob_that_is_known() -> None:
    section = SimulatedSection.model_validate({"knob": "ebn0_db@2", "limits": [0, 10], "safe": 0})
    assert (section.quantity, section.unit) == ("ebn0", "dB")
    for wrong in (
        {"knob": "colour", "limits": [0, 1], "safe": 0},
        {"knob": "ber", "limits": [0, 1]},
        {"knob": "attenuation_db", "unit": "dBm", "limits": [0, 1], "safe": 0},
    ):
        with pytest.raises(ValidationError):
            SimulatedSection.model_validate(wrong)
