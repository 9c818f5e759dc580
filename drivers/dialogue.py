"""The set-up dialogue: commands sent to a modem and answers waited for, before and after it carries data.

What becomes of bytes that nobody asked for:

- before a step sends, everything that has arrived until then is discarded;
- what comes after the expected answer stays for the next step, if that one only expects;
- after a step that had to be repeated, the answers still due to its other attempts are waited for, at most
  for as long as the step took and its time-out, and discarded;
- at the end everything is discarded until the line has been quiet for 0.1 s (for the time of 20 characters
  on slow links), for 2 s at most.

So no byte of the dialogue is ever counted, and a device that transmits without a pause loses up to 2 s of a
stream whose beginning nobody knows anyway.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from threading import Event
from time import monotonic
from typing import Literal

from pydantic import Field, field_validator, model_validator

from drivers.contract import EndOfStream, Interrupted, Link, LinkError, Section

_SLICE_S = 0.05  # a cancelled dialogue ends within this time
_QUIET_S = 0.1
_QUIET_CHARACTERS = 20
_QUIET_LIMIT_S = 2.0
_KEPT_BYTES = 65_536  # of an answer in which the expected text does not come


class DialogueFailed(LinkError):
    """The device did not answer as the profile expects."""


class Step(Section):
    """One step of a set-up dialogue: pause, send, expect, wait for a line, in this order."""

    send: str | None = Field(None, description='Text to send, line end included: "AT\\r".')
    expect: str | None = Field(
        None, min_length=1, description="Text that the answer must contain; an echo of `send` is passed over."
    )
    timeout_s: float = Field(2.0, gt=0, le=3600, description="Wait at most this long for answer and line.")
    retries: int = Field(0, ge=0, le=1000, description="Further attempts after the first.")
    wait_for: Literal["DCD", "CTS"] | None = Field(
        None, description="Wait until this modem line is on: DCD (carrier) or CTS (clear to send)."
    )
    pause_s: float = Field(
        0.0, ge=0, le=3600, description="Silence before sending: the guard time of an escape."
    )

    @field_validator("send", "expect")
    @classmethod
    def _bytes(cls, text: str | None) -> str | None:
        if text is not None and any(ord(c) > 255 for c in text):
            raise ValueError("must consist of single bytes: characters up to \\u00ff")
        return text

    @model_validator(mode="after")
    def _does_something(self) -> Step:
        if self.send is None and self.expect is None and self.wait_for is None and not self.pause_s:
            raise ValueError("a step must send, expect, wait for a line, or pause")
        return self


@dataclass(frozen=True, slots=True)
class Exchange:
    """What was said in one step, with control characters written out."""

    sent: str
    received: str  # up to and with the expected text, of the last attempt
    attempts: int
    seconds: float


def run_dialogue(link: Link, steps: Sequence[Step], cancel: Event) -> list[Exchange]:
    """Carry out a dialogue over an open link.

    Parameters
    ----------
    link
        An open link that nobody else is using.
    steps
        What to say and what to expect, in order.
    cancel
        Ends the dialogue at once when set.

    Returns
    -------
    One exchange for each step.

    Raises
    ------
    DialogueFailed
        With the device's own words.
    Interrupted
        `cancel` was set, or the link interrupted.
    LinkLost, SendRefused
    """
    if not steps:
        return []
    talk = _Talk(link, cancel)
    link.carry("characters")
    try:
        exchanges = [talk.carry_out(step, number) for number, step in enumerate(steps, 1)]
        talk.discard_until_quiet()
    finally:
        link.carry("payload")
    return exchanges


class _Talk:
    """A dialogue under way: the link, and what has arrived and was not used."""

    def __init__(self, link: Link, cancel: Event) -> None:
        self._link = link
        self._cancel = cancel
        self._heard = bytearray()
        self._room = bytearray(4096)

    def carry_out(self, step: Step, number: int) -> Exchange:
        """Attempt a step as often as it allows; raises the last attempt's failure."""
        start = monotonic()
        attempt = 1
        while True:
            try:
                answer = self._attempt(step, number)
                break
            except DialogueFailed as failure:
                if attempt > step.retries:
                    if attempt > 1:
                        raise DialogueFailed(
                            f"{failure.what}, in {attempt} attempts", failure.advice
                        ) from None
                    raise
            except EndOfStream as end:
                raise DialogueFailed(
                    f"set-up step {number}: {end.what}", "see why the device ended the connection"
                ) from None
            attempt += 1
        if attempt > 1 and step.send is not None and step.expect is not None:
            # The answer may be the first attempt's, so the last one's may take as long as all of this did.
            took_s = monotonic() - start
            self._pass_over(_encoded(step.expect), attempt - 1, monotonic() + took_s + step.timeout_s)
        sent = "" if step.send is None else _shown(_encoded(step.send))
        return Exchange(sent, _shown(answer), attempt, monotonic() - start)

    def discard_until_quiet(self) -> None:
        """Throw away what still comes, so that nothing of it is counted."""
        rate_bps = self._link.rate_bps
        quiet_s = max(_QUIET_S, 8 * _QUIET_CHARACTERS / rate_bps) if rate_bps else _QUIET_S
        now = monotonic()
        end, quiet_at = now + max(_QUIET_LIMIT_S, quiet_s), now + quiet_s
        try:
            while (now := monotonic()) < min(end, quiet_at):
                if self._listen(min(end, quiet_at)):
                    quiet_at = monotonic() + quiet_s
        except EndOfStream:
            pass  # whoever receives next is told the same
        self._heard.clear()

    def _attempt(self, step: Step, number: int) -> bytes:
        """Carry a step out once and return the answer."""
        self._sleep(step.pause_s)
        deadline = monotonic() + step.timeout_s
        sent = b""
        if step.send is not None:
            sent = _encoded(step.send)
            self._listen_to_what_is_there()
            self._heard.clear()
            self._say(sent, step, number, deadline)
        answer = b""
        if step.expect is not None:
            answer = self._expect(sent, step, number, deadline)
        if step.wait_for is not None:
            self._await_line(step.wait_for, step, number, deadline)
        return answer

    def _say(self, text: bytes, step: Step, number: int, deadline: float) -> None:
        left = memoryview(text)
        while len(left):
            self._check()
            wait = deadline - monotonic()
            left = left[self._link.send(left, max(0.0, min(_SLICE_S, wait))) :]
            if len(left) and wait <= 0:
                break
        if len(left) or not self._link.drain(max(0.0, deadline - monotonic())):
            raise DialogueFailed(
                f'set-up step {number}: the port did not take "{_shown(text)}" within {step.timeout_s:g} s',
                "check flow control: CTS may be off, or the device has sent XOFF",
            )

    def _expect(self, sent: bytes, step: Step, number: int, deadline: float) -> bytes:
        assert step.expect is not None
        wanted = _encoded(step.expect)
        ended = False
        while True:
            start = _after_echo(self._heard, sent)
            found = -1 if start is None else self._heard.find(wanted, start)
            if found >= 0:
                answer = bytes(self._heard[start : found + len(wanted)])
                del self._heard[: found + len(wanted)]
                return answer
            if ended or monotonic() >= deadline:
                break
            try:
                self._listen(deadline)
            except EndOfStream:
                ended = True
            del self._heard[:-_KEPT_BYTES]
        raise _no_answer(bytes(self._heard[start or 0 :]), ended, step, number)

    def _await_line(self, line: str, step: Step, number: int, deadline: float) -> None:
        while True:
            self._check()
            lines = self._link.lines()
            if line not in lines:
                raise DialogueFailed(
                    f"set-up step {number}: this link cannot say whether {line} is on",
                    "leave `wait_for` out, or use a serial port with modem lines",
                )
            if lines[line]:
                return
            if monotonic() >= deadline:
                break
            # Listening meanwhile empties the port's buffer, and hears what the next step expects.
            self._listen(min(deadline, monotonic() + _SLICE_S))
        raise DialogueFailed(
            f"set-up step {number}: {line} did not come on within {step.timeout_s:g} s",
            "check that the far modem is on and the cable carries this line, or raise `timeout_s`",
        )

    def _pass_over(self, wanted: bytes, missing: int, deadline: float) -> None:
        """Discard answers that come late."""
        while True:
            while missing and (found := self._heard.find(wanted)) >= 0:
                del self._heard[: found + len(wanted)]
                missing -= 1
            if not missing or monotonic() >= deadline:
                return
            self._listen(deadline)

    def _listen_to_what_is_there(self) -> None:
        deadline = monotonic() + _QUIET_LIMIT_S
        while self._listen(0.0) and monotonic() < deadline:
            del self._heard[:-_KEPT_BYTES]

    def _listen(self, deadline: float) -> int:
        """Take what comes until then, or for a slice; the number of bytes."""
        self._check()
        wait = max(0.0, min(_SLICE_S, deadline - monotonic()))
        if not self._link.traits.receives:
            self._sleep(wait)
            return 0
        count = self._link.receive(memoryview(self._room), wait)
        self._heard += memoryview(self._room)[:count]
        return count

    def _sleep(self, seconds: float) -> None:
        if self._cancel.wait(seconds) if seconds else self._cancel.is_set():
            raise Interrupted

    def _check(self) -> None:
        if self._cancel.is_set():
            raise Interrupted


def _after_echo(heard: bytes | bytearray, sent: bytes) -> int | None:
    """Where the answer begins: after an echo of what was sent; None while that cannot be told."""
    text = sent.strip(b"\r\n")
    begin = len(heard) - len(heard.lstrip(b"\r\n"))
    if not text:
        return 0
    if heard.startswith(text, begin):
        return begin + len(text)
    if text.startswith(bytes(heard[begin:])):
        return None
    return 0


def _no_answer(heard: bytes, ended: bool, step: Step, number: int) -> DialogueFailed:
    wanted = _shown(_encoded(step.expect or ""))
    said = heard.strip(b"\r\n\0 ")
    end = "before the stream ended" if ended else f"within {step.timeout_s:g} s"
    if said:
        return DialogueFailed(
            f'set-up step {number}: the device answered "{_shown(said)}" {end}, not "{wanted}" as expected',
            "see the device's manual for this answer, and correct `send` or `expect`",
        )
    if step.send is None:
        return DialogueFailed(
            f'set-up step {number}: the device said nothing {end}, where "{wanted}" was expected',
            "check power, cable and baud rate, or raise `timeout_s`",
        )
    return DialogueFailed(
        f'set-up step {number}: the device did not answer "{_shown(_encoded(step.send))}" {end}',
        "check power, cable and baud rate, whether the device wants DTR on, or raise `timeout_s`",
    )


def _encoded(text: str) -> bytes:
    return text.encode("latin-1")


def _shown(text: bytes) -> str:
    """Write control characters out, and cut what is too long for a line."""
    names = {9: "\\t", 10: "\\n", 13: "\\r"}
    words = "".join(chr(b) if 32 <= b < 127 else names.get(b, f"\\x{b:02x}") for b in text[:200])
    return words + ("..." if len(text) > 200 else "")
