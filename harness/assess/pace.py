"""How fast bits came: over the time in which they came, without the wait for the first and after the last."""

from __future__ import annotations

from harness.record import Second

LEAST_SHARE = 0.1  # of the time: less between the first and the last bit tells no rate
WHOLE_SECONDS = (
    3  # from so many seconds with bits on, the last one is left out: when in it they ended is not known
)


class Pace:
    """Takes seconds in order and knows the rate at which bits came."""

    def __init__(self) -> None:
        self._before_ns = 0  # until the second in which the first bit came
        self._between_ns = 0  # without bits, since the last second that had any
        self._ns = self._bits = 0  # up to the last second with bits
        self._last_ns = self._last_bits = 0  # of that second
        self._seconds = 0  # with bits

    def take(self, second: Second) -> None:
        """Take a second."""
        bits = second.tally.received
        if bits:
            self._ns += self._last_ns + self._between_ns
            self._bits += self._last_bits
            self._last_ns, self._last_bits = second.duration_ns, bits
            self._between_ns = 0
            self._seconds += 1
        elif self._seconds:
            self._between_ns += second.duration_ns
        else:
            self._before_ns += second.duration_ns

    def bps(self, delay_s: float | None) -> float | None:
        """Give the rate.

        Parameters
        ----------
        delay_s
            The loop delay for which the first bit was waited, where it is known.

        Returns
        -------
        float | None
            bit/s; None where nothing came, or nearly all of the time was waiting.
        """
        ns, bits = self._ns, self._bits
        if self._seconds < WHOLE_SECONDS:
            ns, bits = ns + self._last_ns, bits + self._last_bits
        waited_ns = max(0, round(1e9 * (delay_s or 0.0)) - self._before_ns)
        came_ns = ns - waited_ns
        return 1e9 * bits / came_ns if bits and came_ns > LEAST_SHARE * ns else None
