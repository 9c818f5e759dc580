"""The end of a point: the wait for what is still on its way, and when it has all come."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable
from typing import Literal

import numpy as np

from drivers.contract import DriverError, Link
from harness.bench.terms import Setup
from harness.bench.traffic import Traffic
from harness.record import BitOrder
from harness.signal.bits import unpack
from harness.signal.patterns import Pattern
from harness.signal.rules import AGREES, DIFFERS

POLL_S = 0.05
LOOK_S = 0.01  # between two looks at the stream's end
PERHAPS_S = 0.5  # to wait for more where errors leave it open whether the last bit has come
PROMPT_S = 0.2  # a device that answers promptly is not told that its input has ended
MOST_AT_ONCE_S = 0.25

Answer = Literal["yes", "perhaps", "no"]


class Patience:
    """How long nothing has come, by a clock that stands still while this computer does.

    A computer that was held up (suspended, overloaded) looks late. What waited in the meantime, and a device
    that was held up with it, must not be taken for lost: between two looks no more counts than `MOST_AT_ONCE_S`.
    """

    def __init__(self, seconds: float) -> None:
        self._seconds = seconds
        self._waited_s = 0.0
        self._looked_s = time.monotonic()
        self._last_ns: int | None = None

    def spent(self, last_received_ns: int | None) -> bool:
        """Take when the last bit came; whether nothing more has come for long enough."""
        now = time.monotonic()
        if last_received_ns != self._last_ns:
            self._last_ns, self._waited_s = last_received_ns, 0.0
        else:
            self._waited_s += min(now - self._looked_s, MOST_AT_ONCE_S)
        self._looked_s = now
        return self._waited_s >= self._seconds


def ends_with(tail: bytes, pattern: Pattern, order: BitOrder, end_place: int) -> Answer:
    """Whether a stream's last bytes are the pattern's before a place.

    As many bits may have come as were sent while some are still on their way: a byte that the device made up
    stands in for one of them. Then the stream ends with bits of an earlier place. Told by the counter's walk of
    evidence, backwards from the end, in the better polarity: yes where it nowhere speaks against the place, no
    where all of it does.

    Parameters
    ----------
    tail
        The last bytes that came.
    pattern, order
        What was sent.
    end_place
        Place of the bit after the last one sent.
    """
    tail = tail[-max(1, end_place // 8) :]
    expected = pattern.packed(max(0, end_place - 8 * len(tail)), len(tail), order)
    differs = unpack(np.frombuffer(tail, dtype=np.uint8) ^ expected, order)[::-1].astype(np.int64)
    walks = [np.cumsum(np.where(wrong, DIFFERS, AGREES)) for wrong in (differs, 1 - differs)]
    if not tail or any(int(walk.max()) <= 0 for walk in walks):
        return "yes"
    return "perhaps" if any(walk[-1] < 0 for walk in walks) else "no"


class TheRest:
    """What is on its way once sending has ended.

    Parameters
    ----------
    sending, setup, traffic
        Of the point.
    came
        Gives the bits that the consumer has taken, the last bytes among them, and whether they are but noise.
    listens, interrupted
        Whether there is still anything to wait with, and whether waiting was cut short.
    """

    def __init__(
        self,
        sending: Link,
        setup: Setup,
        traffic: Traffic,
        *,
        came: Callable[[], tuple[int, bytes, bool]],
        listens: Callable[[], bool],
        interrupted: Callable[[], bool],
    ) -> None:
        self._sending = sending
        self._setup = setup
        self._traffic = traffic
        self._came = came
        self._listens = listens
        self._interrupted = interrupted

    def wait(self) -> None:
        """Wait until it has all come, or nothing has come for `drain_s`.

        Where nothing is sent afterwards, and the device still answers once its input has ended, it is told so
        first, lest it keep its last bytes for good.
        """
        begun, drain_s = time.monotonic(), self._setup.drain_s
        patience, for_a_little = Patience(drain_s), Patience(min(drain_s, PERHAPS_S))
        told = not (self._setup.last and self._sending.traits.ends_with_input)
        while True:
            came = self._all_came() if self._traffic.wait_for_quiet(POLL_S) else "no"
            last = self._traffic.last_received_ns
            if came == "yes" or patience.spent(last) or (for_a_little.spent(last) and came == "perhaps"):
                return
            if not self._listens() or self._interrupted():
                return
            if not told and time.monotonic() - begun >= PROMPT_S:
                told = True
                with contextlib.suppress(DriverError):
                    self._sending.finish_sending()

    def _all_came(self) -> Answer:
        """Whether the last bit that came, with as many as were sent, is the last that was sent."""
        received, tail, noise = self._came()
        if noise:
            return "yes"  # no place in it will ever tell
        answer: Answer = "no"
        if received == self._traffic.received_bits:
            end = self._setup.first_place + self._traffic.sent_bits
            answer = ends_with(tail, self._setup.pattern, self._setup.bit_order, end)
        if answer != "yes":
            time.sleep(LOOK_S)
        return answer
