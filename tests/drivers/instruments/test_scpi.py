"""A declared instrument is set only within its limits, believed only when it confirms, and left safe."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from drivers.contract import (
    DriverError,
    InstrumentError,
    InstrumentLost,
    Interrupted,
    NotConfirmed,
    OpenFailed,
    OutOfLimits,
    WrongInstrument,
)
from drivers.instruments.commands import SetCommand, error_text, parse_number
from drivers.instruments.scpi import ScpiInstrument, ScpiSection

Start = Callable[..., Any]
NEVER = threading.Event()


def instrument(bench: Any, **changed: object) -> ScpiInstrument:
    return ScpiInstrument(ScpiSection.model_validate(bench.keys(**changed)))


def test_a_value_is_set_read_back_and_its_errors_asked_for(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench) as device:
        applied = device.apply(20.0, NEVER)
        assert (applied.value, applied.reading) == (20.0, 20.0)
        assert device.read() == 20.0
        named = device.identity()
        assert (named.manufacturer, named.model, named.serial_number, named.firmware) == (
            "Fictional Bench",
            "SA-95",
            "0042",
            "1.3",
        )
        device.make_safe()
    assert bench.commands() == [
        *("*IDN?", "SYST:ERR?"),
        *("ATT 20.0", "SYST:ERR?", "ATT?"),
        "ATT?",
        *("ATT 95.0", "SYST:ERR?", "ATT?"),
    ]


@pytest.mark.parametrize("wrong", [float("nan"), float("inf"), -0.1, 95.1, 1e300])
def test_nothing_is_sent_for_a_value_outside_the_limits(attenuator: Start, wrong: float) -> None:
    bench = attenuator()
    with instrument(bench) as device, pytest.raises(OutOfLimits):
        device.apply(wrong, NEVER)
    assert bench.settings() == []


def test_a_value_that_rounding_would_carry_over_the_limit_is_not_sent(attenuator: Start) -> None:
    bench = attenuator()
    keys = {"limits": [0, 29.96], "safe": 29.9, "tolerance": 0.1}
    with instrument(bench, **keys) as device, pytest.raises(OutOfLimits, match="sent as 30"):
        device.apply(29.96, NEVER)
    assert bench.settings() == []


def test_a_value_that_the_command_cannot_express_is_not_sent(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench, tolerance=None) as device:
        with pytest.raises(OutOfLimits, match=r"sent as 20\.2"):
            device.apply(20.25, NEVER)
        device.apply(0.1 + 0.2, NEVER)
    assert bench.settings() == [0.3]


def test_rounding_within_a_stated_tolerance_is_noted(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench, tolerance=0.06) as device:
        assert device.apply(20.25, NEVER).notes == ("sent as 20.2",)
        assert device.apply(20.0, NEVER).notes == ()


def test_a_reading_one_decibel_off_is_not_confirmed(attenuator: Start) -> None:
    bench = attenuator(offset=1.0)
    with instrument(bench) as device, pytest.raises(NotConfirmed, match="reads 21"):
        device.apply(20.0, NEVER)


def test_the_text_of_the_error_queue_is_shown(attenuator: Start) -> None:
    bench = attenuator(refuse='-222,"Data out of range"')
    with instrument(bench) as device, pytest.raises(NotConfirmed, match="Data out of range"):
        device.apply(20.0, NEVER)


def test_old_entries_of_the_error_queue_are_not_taken_for_new_ones(attenuator: Start) -> None:
    bench = attenuator(stale='-350,"Queue overflow"')
    with instrument(bench) as device:
        assert device.apply(20.0, NEVER).reading == 20.0


def test_an_answer_that_is_no_number_is_not_confirmed(attenuator: Start) -> None:
    bench = attenuator(answer="20.0 dBm")
    with instrument(bench) as device, pytest.raises(NotConfirmed, match="no number"):
        device.apply(20.0, NEVER)


def test_late_answers_within_the_time_limit_are_waited_for(attenuator: Start) -> None:
    bench = attenuator(late=0.3)
    with instrument(bench) as device:
        assert device.apply(20.0, NEVER).reading == 20.0


def test_an_answer_that_comes_too_late_is_never_taken_for_the_next_one(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench, timeout_s=0.3, error_queue=None) as device:
        device.apply(20.0, NEVER)
        bench.fault("late", 0.6)
        with pytest.raises(InstrumentLost, match="no answer"):
            device.read()
        bench.fault("late", 0)
        time.sleep(0.5)  # now the late 20.0 has been sent
        assert device.apply(33.0, NEVER).reading == 33.0
        assert device.read() == 33.0


def test_an_instrument_that_dies_is_lost_and_says_so_in_plain_words(attenuator: Start) -> None:
    bench = attenuator(die_after=5)
    with instrument(bench) as device:
        device.apply(20.0, NEVER)
        with pytest.raises(InstrumentLost) as caught:
            device.apply(21.0, NEVER)
        assert "127.0.0.1" in caught.value.what
        assert caught.value.advice
        assert "\n" not in caught.value.what
        began = time.monotonic()
        with pytest.raises(DriverError):
            device.make_safe()
        assert time.monotonic() - began < 8


def test_nobody_at_the_address_and_a_mute_device_fail_to_open(attenuator: Start) -> None:
    bench = attenuator(mute="yes")
    with pytest.raises(OpenFailed, match="no answer"):
        instrument(bench, timeout_s=0.3).open()
    bench.process.kill()
    bench.process.wait()
    with pytest.raises(OpenFailed):
        instrument(bench, timeout_s=0.3).open()


def test_another_instrument_at_the_address_is_refused(attenuator: Start) -> None:
    bench = attenuator()
    with pytest.raises(WrongInstrument, match="SA-95"):
        instrument(bench, expect_identity="SA-60").open()
    instrument(bench, expect_identity="sa-95,0042").open()
    assert bench.settings() == []


def test_another_instrument_after_a_fault_is_refused_and_not_even_sent_to_safe(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench, timeout_s=0.3, expect_identity="SA-95") as device:
        device.apply(20.0, NEVER)
        bench.fault("late", 0.6)
        with pytest.raises(InstrumentLost):
            device.read()
        bench.fault("late", 0)
        bench.fault("identity", "Somebody,Else,1,1")
        with pytest.raises(WrongInstrument):
            device.apply(30.0, NEVER)
        with pytest.raises(WrongInstrument):
            device.make_safe()
    assert bench.settings() == [20.0]


def test_an_instrument_that_was_exchanged_meanwhile_is_refused_though_none_was_expected(
    attenuator: Start,
) -> None:
    bench = attenuator()
    with instrument(bench, timeout_s=0.3) as device:
        bench.fault("late", 0.6)
        with pytest.raises(InstrumentLost):
            device.read()
        bench.fault("late", 0)
        bench.fault("identity", "Fictional Bench,SA-95,0043,1.3")
        with pytest.raises(WrongInstrument, match="another instrument before"):
            device.apply(30.0, NEVER)
    assert bench.settings() == []


def test_it_is_made_safe_after_a_fault_and_twice_and_without_being_open(attenuator: Start) -> None:
    bench = attenuator()
    device = instrument(bench, timeout_s=0.3)
    device.make_safe()
    with device:
        device.apply(20.0, NEVER)
        bench.fault("late", 0.6)
        with pytest.raises(InstrumentLost):
            device.read()
        bench.fault("late", 0)
        device.make_safe()
        device.make_safe()
    device.make_safe()
    assert bench.settings() == [95.0, 20.0, 95.0, 95.0, 95.0]


def test_a_device_that_no_longer_answers_is_still_sent_to_its_safe_value(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench, timeout_s=0.3, expect_identity="SA-95") as device:
        device.apply(20.0, NEVER)
        bench.fault("mute", "yes")
        with pytest.raises(InstrumentLost):
            device.make_safe()
    assert bench.settings()[-1] == 95.0
    stranger = instrument(bench, timeout_s=0.3, expect_identity="SA-95")
    sent = len(bench.settings())
    with pytest.raises(InstrumentLost):
        stranger.make_safe()  # never met: it cannot be asked, and is sent there all the same
    assert bench.settings()[sent:].count(95.0) >= 1


def test_an_attenuator_that_does_not_go_to_its_safe_value_is_reported(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench) as device:
        device.apply(20.0, NEVER)
        bench.fault("stuck", "yes")
        with pytest.raises(NotConfirmed, match="reads 20") as caught:
            device.make_safe()
        assert "by hand" in caught.value.advice


def test_settling_is_cut_short_by_cancelling(attenuator: Start) -> None:
    bench = attenuator()
    cancel = threading.Event()
    threading.Timer(0.2, cancel.set).start()
    with instrument(bench, settle_s=60) as device:
        began = time.monotonic()
        with pytest.raises(Interrupted):
            device.apply(20.0, cancel)
        assert time.monotonic() - began < 30
        with pytest.raises(Interrupted):
            device.apply(30.0, cancel)  # cancelled beforehand: nothing is sent
    assert bench.settings() == [20.0]


def test_a_slow_instrument_is_read_until_it_is_there(attenuator: Start) -> None:
    bench = attenuator(offset=5.0)
    threading.Timer(0.5, bench.fault, ("offset", 0.0)).start()
    with instrument(bench, confirm_s=20) as device:
        assert device.apply(20.0, NEVER).reading == 20.0


def test_without_reading_or_error_queue_it_must_at_least_still_answer(attenuator: Start) -> None:
    bench = attenuator()
    with instrument(bench, read=None, tolerance=None, error_queue=None, timeout_s=0.3) as device:
        assert not device.readable
        assert device.apply(20.0, NEVER).reading is None
        bench.fault("mute", "yes")
        with pytest.raises(InstrumentLost):
            device.apply(30.0, NEVER)


def test_two_instruments_on_one_resource_share_a_session(attenuator: Start) -> None:
    bench = attenuator()
    first, second = instrument(bench), instrument(bench)
    for one, other in ((first, second), (second, first)):
        one.attach(None, [other])
    assert first._session is second._session
    first.open()
    second.open()
    values = list(range(10, 20))
    failed: list[Exception] = []

    def turn(device: ScpiInstrument) -> None:
        # Each sees its own value: nobody comes between a setting and the questions after it.
        for value in values:
            try:
                device.apply(float(value), NEVER)
            except Exception as error:
                failed.append(error)

    threads = [threading.Thread(target=turn, args=(device,)) for device in (first, second)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    # The two turn the same attenuator here, so a reading may show the other's value; but no answer may
    # ever be out of step.
    assert all(isinstance(error, NotConfirmed) and "reads" in str(error) for error in failed)
    asked = bench.commands()
    for at, command in enumerate(asked[:-1]):
        if command.startswith("ATT "):
            assert asked[at + 1] == "SYST:ERR?"
    first.close()
    assert second.read() >= 10
    second.close()
    assert second._session._handle is None


def test_the_same_commands_work_on_a_serial_port(attenuator: Start) -> None:
    bench = attenuator(serial=True)
    with instrument(bench, baud=19200) as device:
        assert device.apply(20.0, NEVER).reading == 20.0
        device.make_safe()
    assert bench.settings() == [20.0, 95.0]


def test_the_same_profile_works_against_a_simulated_library() -> None:
    library = Path(__file__).with_name("sim.yaml")
    section = ScpiSection.model_validate(
        {
            "resource": "TCPIP0::192.0.2.9::5025::SOCKET",
            "backend": f"{library}@sim",
            "quantity": "attenuation",
            "unit": "dB",
            "limits": [0, 95],
            "safe": 60,
            "set": "ATT {value:.1f}",
            "read": "ATT?",
            "error_queue": "SYST:ERR?",
            "tolerance": 0.05,
            "expect_identity": "SIM",
        }
    )
    with ScpiInstrument(section) as device:
        assert device.apply(20.0, NEVER).reading == 20.0
        with pytest.raises(NotConfirmed, match="Undefined header"):
            device.apply(70.0, NEVER)  # the simulated device ends at 60 dB
        device.make_safe()
        assert device.read() == 60.0


def test_no_library_and_no_such_resource_are_told_apart() -> None:
    keys = {"quantity": "attenuation", "unit": "dB", "read": "ATT?"}
    for backend, resource, words in (
        ("/nowhere/libvisa.so", "GPIB0::1::INSTR", "VISA library"),
        ("@py", "NONSENSE::1", "cannot be opened"),
    ):
        section = ScpiSection.model_validate({**keys, "backend": backend, "resource": resource})
        with pytest.raises(OpenFailed, match=words):
            ScpiInstrument(section).open()


def test_an_instrument_without_a_set_command_is_only_read(attenuator: Start) -> None:
    bench = attenuator(start=12.5)
    with instrument(bench, set=None, limits=None, safe=None, tolerance=None) as device:
        assert not device.settable
        assert device.read() == 12.5
        with pytest.raises(InstrumentError):
            device.apply(1.0, NEVER)
        device.make_safe()
    assert bench.settings() == []


@pytest.mark.parametrize(
    "changed",
    [
        {"unit": None},
        {"quantity": None},
        {"unit": "dBm"},
        {"quantity": "level", "unit": "dB"},
        {"quantity": "power", "unit": "dB"},
        {"quantity": "atenuation"},
        {"unit": ""},
        {"limits": None},
        {"safe": None},
        {"safe": 96},
        {"limits": [95, 0]},
        {"limits": [0, float("inf")]},
        {"limits": [0, 94.96], "safe": 94.96},
        {"set": "ATT 20"},
        {"set": "ATT {value} {value}"},
        {"set": "ATT {level:.1f}"},
        {"set": "ATT {value.real}"},
        {"set": "ATT {value!r}"},
        {"set": "ATT {value:s}"},
        {"set": "ATT {value:\n<9}"},
        {"set": "ATT {value:{value}}"},
        {"set": "ATT {value:.1f}\n*RST"},
        {"set": "ATT {value:.1f"},
        {"set": None, "read": None},
        {"read": "ATT?\rX"},
        {"identity": "", "expect_identity": "SA"},
        {"expect_identity": "("},
        {"termination": ";"},
        {"tolerance": -1},
        {"timeout_s": 0},
        {"colour": "green"},
    ],
)
def test_keys_that_make_no_sense_are_refused(changed: dict[str, object]) -> None:
    keys = {
        "resource": "TCPIP::192.0.2.7::5025::SOCKET",
        "quantity": "attenuation",
        "unit": "dB",
        "limits": [0, 95],
        "safe": 95,
        "set": "ATT {value:.1f}",
        "read": "ATT?",
        "tolerance": 0.05,
    }
    ScpiSection.model_validate(keys)
    with pytest.raises(ValidationError):
        ScpiSection.model_validate(
            {key: value for key, value in (keys | changed).items() if value is not None}
        )


def test_levels_are_stated_in_dbm() -> None:
    section = ScpiSection.model_validate(
        {"resource": "X", "quantity": "Level", "unit": "dBm", "read": "POW?"}
    )
    assert section.quantity == "level"


def test_only_finite_numbers_become_commands() -> None:
    for template, value, text in (
        ("ATT {value:.1f}", 20, "ATT 20.0"),
        ("ATT {value}", 0.5, "ATT 0.5"),
        ("ATT {value:+08.3E}DB", -3.25, "ATT -3.250E+00DB"),
        ("ATT {{x}} {value:g}", 1e6, "ATT {x} 1e+06"),
    ):
        assert SetCommand(template).text(value) == text
    for value in (float("nan"), float("inf"), float("-inf")):
        with pytest.raises(ValueError, match="finite"):
            SetCommand("ATT {value:.1f}").text(value)


def test_answers_are_read_strictly() -> None:
    good = {"20": 20, "+2.000E+01": 20, " -3.5 dB ": -3.5, ".5": 0.5, "1e-3DB": 1e-3}
    for answer, number in good.items():
        assert parse_number(answer, "dB") == number
    for answer in ("", "dB", "20 dBm", "20,1", "nan", "inf", "9.91E37", "-9.9E+37", "0x14", "ATT 20", "2 0"):
        assert parse_number(answer, "dB") is None
    assert error_text('+0,"No error"') is None
    assert error_text("0") is None
    assert error_text('-222,"Data out of range"') == '-222,"Data out of range"'
    assert error_text("20.0") == "20.0"
    assert error_text("") == "an empty answer"
