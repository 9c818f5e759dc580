"""The end of a point: the wait for what is still on its way, and when it has all come."""

from __future__ import annotations

import time
from typing import Literal

import numpy as np

from harness.record import BitOrder
from harness.signal.bits import unpack
from harness.signal.patterns import Pattern
from harness.signal.rules import AGREES, DIFFERS

MOST_AT_ONCE_S = 0.25


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


def ends_with(
    tail: bytes, pattern: Pattern, order: BitOrder, end_place: int
) -> Literal["yes", "perhaps", "no"]:
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
