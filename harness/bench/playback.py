"""The time of bytes that lie in a file: when they came, at the rate that is stated for them.

How fast a file can be read says nothing of the link that its bytes came over: seconds and availability follow
from the rate, as they do where `examine` is told one.
"""

from __future__ import annotations

import math

from harness.bench.arrivals import Arrivals

SECOND_NS = 1_000_000_000


class Playback:
    """From received bits to the monotonic time at which they came.

    Parameters
    ----------
    started_ns
        Monotonic time at which the first bit came.
    rate_bps
        At which they came, over 0.
    """

    def __init__(self, started_ns: int, rate_bps: float) -> None:
        self._started_ns = started_ns
        self._rate_bps = rate_bps

    def when(self, bit: int) -> int:
        """Time of a bit's beginning, ns."""
        return self._started_ns + round(bit / self._rate_bps * 1e9)

    def bits(self, seconds: float) -> int:
        """Bits that come in so many seconds."""
        return math.ceil(seconds * self._rate_bps)

    def piece(self, received_bits: int, most: int) -> tuple[int, int]:
        """Say how many bytes may be taken as one piece, which no second's end divides, and its time.

        Parameters
        ----------
        received_bits
            Bits before the piece, whole bytes.
        most
            Bytes at hand, over 0.

        Returns
        -------
        bytes, arrived_ns
            A byte that a second's end divides belongs to the second in which it began.
        """
        second = math.floor(received_bits / self._rate_bps) + 1
        while (end := math.ceil(second * self._rate_bps / 8)) <= received_bits // 8:
            second += 1
        count = min(most, end - received_bits // 8)
        ends_ns = min(self.when(received_bits + 8 * count), self._started_ns + second * SECOND_NS)
        return count, ends_ns - 1


class PlayedArrivals(Arrivals):
    """Arrivals at a stated rate: every bit has its own time, however large the pieces are."""

    def __init__(self, started_ns: int, playback: Playback) -> None:
        super().__init__(started_ns)
        self._playback = playback

    def when(self, bit: int) -> int:
        """Monotonic time at which a received bit came, ns."""
        return self._playback.when(bit)
