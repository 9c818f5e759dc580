"""The set-up dialogue with modems in a separate process: late, refusing, silent, echoing, talkative."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from drivers.contract import Interrupted, Link
from drivers.dialogue import DialogueFailed, Exchange, Step, run_dialogue
from drivers.links.capture import CaptureLink, CaptureSection
from drivers.links.process import ProcessLink, ProcessSection
from drivers.links.serial import SerialLink, SerialSection

Start = Callable[..., str]


def pty(port: str) -> Link:
    return SerialLink(SerialSection(port=port))


def talk(link: Link, *steps: dict[str, Any]) -> list[Exchange]:
    return run_dialogue(link, [Step(**step) for step in steps], threading.Event())


def failing(link: Link, *steps: dict[str, Any]) -> DialogueFailed:
    with pytest.raises(DialogueFailed) as caught:
        talk(link, *steps)
    assert "\n" not in caught.value.what + caught.value.advice
    assert caught.value.advice
    return caught.value


def left_over(link: Link) -> bytes:
    room = bytearray(1000)
    return bytes(room[: link.receive(memoryview(room), 0.3)])


DATA = {"send": "AT+DATA=1\r", "expect": "OK"}


@pytest.mark.parametrize("modem", ["ok", "late", "echoing", "talkative"])
def test_a_modem_that_answers_is_set_up_and_nothing_of_it_is_left(modem: str, device: Start) -> None:
    with pty(device("pty", "--modem", modem)) as link:
        first, second = talk(link, DATA, {"send": "ATE0\r", "expect": "OK"})
        assert (first.sent, first.received, first.attempts) == (r"AT+DATA=1\r", r"\r\nOK", 1) or (
            modem == "echoing" and first.received == r"\r\r\nOK"
        )
        assert second.sent == r"ATE0\r"
        assert left_over(link) == b""


def test_a_late_answer_is_too_late_where_the_profile_says_so(device: Start) -> None:
    with pty(device("pty", "--modem", "late")) as link:
        error = failing(link, {**DATA, "timeout_s": 0.1})
    assert error.what == r'set-up step 1: the device did not answer "AT+DATA=1\r" within 0.1 s'


def test_a_refusal_is_told_in_the_devices_own_words(device: Start) -> None:
    with pty(device("pty", "--modem", "error")) as link:
        error = failing(link, {**DATA, "timeout_s": 0.2})
    assert error.what == 'set-up step 1: the device answered "ERROR" within 0.2 s, not "OK" as expected'


def test_silence_is_told_as_silence_and_names_the_step(device: Start) -> None:
    with pty(device("pty", "--modem", "silent")) as link:
        error = failing(link, {"pause_s": 0.01}, {**DATA, "timeout_s": 0.1, "retries": 1})
    assert error.what == r'set-up step 2: the device did not answer "AT+DATA=1\r" within 0.1 s, in 2 attempts'
    assert "baud rate" in error.advice


def test_an_echo_of_the_command_is_no_answer(device: Start) -> None:
    with pty(device("pty", "--modem", "echoing")) as link:
        error = failing(link, {"send": "ATOK\r", "expect": "OK", "timeout_s": 0.2})
        assert 'answered "ERROR"' in error.what


def test_a_retry_reaches_a_modem_that_overheard_the_first_command(device: Start) -> None:
    with pty(device("pty", "--modem", "second-time")) as link:
        (exchange,) = talk(link, {**DATA, "timeout_s": 0.2, "retries": 3})
        assert exchange.attempts == 2
        assert left_over(link) == b""


def test_the_late_answer_to_a_first_attempt_is_neither_counted_nor_taken_for_the_next_steps(
    device: Start,
) -> None:
    # It answers each line after 0.4 s: to both attempts, and the last answer comes after the step is done.
    with pty(device("pty", "--modem", "late")) as link:
        first, second = talk(
            link,
            {**DATA, "timeout_s": 0.3, "retries": 2},
            {"send": "wrong\r", "expect": "ERROR", "timeout_s": 2},
        )
        assert first.attempts == 2
        assert second.received == r"\r\nERROR"
        assert left_over(link) == b""


def test_what_follows_an_answer_is_there_for_a_step_that_only_expects(device: Start) -> None:
    with pty(device("pty", "--modem", "connecting")) as link:
        exchanges = talk(link, {"send": "ATD9\r", "expect": "OK"}, {"expect": "CONNECT", "timeout_s": 0.2})
        assert exchanges[1].received == r"\r\nCONNECT"
        assert left_over(link) == b""  # "9600", noise and all


def test_what_came_before_a_command_is_no_answer_to_it(device: Start) -> None:
    with pty(device("pty", "--modem", "silent")) as link:
        silent = failing(link, {"expect": "OK", "timeout_s": 0.1})
        assert silent.what == 'set-up step 1: the device said nothing within 0.1 s, where "OK" was expected'
    with ProcessLink(ProcessSection(command=("sh", "-c", "echo OK; cat > /dev/null"))) as link:
        time.sleep(0.3)
        error = failing(link, {"send": "AT\r", "expect": "OK", "timeout_s": 0.2})
        assert "did not answer" in error.what
    with ProcessLink(ProcessSection(command=("sh", "-c", "echo OK; cat > /dev/null"))) as link:
        assert talk(link, {"expect": "OK"})[0].received == "OK"


def test_a_device_that_never_pauses_does_not_hold_the_end_up() -> None:
    with ProcessLink(ProcessSection(command=("yes", "OK"))) as link:
        assert talk(link, {"expect": "OK"})[0].received == "OK"


def test_a_device_that_ends_in_mid_dialogue_is_a_failure_with_its_words() -> None:
    with ProcessLink(ProcessSection(command=("echo", "BYE"))) as link:
        error = failing(link, {"expect": "OK", "timeout_s": 10})
        assert (
            error.what
            == 'set-up step 1: the device answered "BYE" before the stream ended, not "OK" as expected'
        )


def test_a_line_that_is_on_is_waited_for_and_one_that_stays_off_is_named() -> None:
    with SerialLink(SerialSection(port="loop://")) as link:  # its DCD is always on, its CTS follows RTS
        talk(link, {"wait_for": "DCD"})
        error = failing(link, {"wait_for": "CTS", "timeout_s": 0.1})
        assert error.what == "set-up step 1: CTS did not come on within 0.1 s"
    with SerialLink(SerialSection(port="loop://", rts=True)) as link:
        talk(link, {"wait_for": "CTS"})


def test_a_line_that_comes_on_later_is_noticed() -> None:
    with SerialLink(SerialSection(port="loop://")) as link:
        timer = threading.Timer(0.2, lambda: setattr(link._serial, "rts", True))
        timer.start()
        (exchange,) = talk(link, {"wait_for": "CTS", "timeout_s": 20})
        timer.join()
        assert exchange.seconds > 0.1


def test_a_link_without_lines_says_so(device: Start) -> None:
    with pty(device("pty")) as link:
        assert "cannot say whether DCD is on" in failing(link, {"wait_for": "DCD"}).what


def test_a_port_that_takes_nothing_is_told_in_time(device: Start) -> None:
    with pty(device("pty", "--mute")) as link:
        while link.send(memoryview(bytes(4096)), 0.1):
            pass
        error = failing(link, {"send": "AT\r" * 2000, "timeout_s": 0.2})
        assert "the port did not take" in error.what
        assert "flow control" in error.advice


def test_cancelling_ends_a_dialogue_in_mid_wait(device: Start) -> None:
    with pty(device("pty", "--modem", "silent")) as link:
        for step in ({**DATA, "timeout_s": 600}, {"pause_s": 600}, {"send": "x", "pause_s": 600}):
            cancel = threading.Event()
            timer = threading.Timer(0.1, cancel.set)
            timer.start()
            with pytest.raises(Interrupted):
                run_dialogue(link, [Step(**step)], cancel)
            timer.join()


def test_no_steps_cost_nothing_and_touch_nothing(tmp_path: Path) -> None:
    path = tmp_path / "received.bin"
    path.write_bytes(b"data")
    with CaptureLink(CaptureSection(path=path)) as link:
        assert talk(link) == []
        assert left_over(link) == b"data"


@pytest.mark.parametrize(
    "step",
    [{}, {"expect": ""}, {"send": "€"}, {"send": "x", "timeout_s": 0}, {"wait_for": "RI"}, {"reply": "x"}],
)
def test_steps_that_do_nothing_or_cannot_be_sent_are_refused(step: dict[str, Any]) -> None:
    with pytest.raises(ValidationError):
        Step(**step)
