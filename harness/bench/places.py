"""Loop delay and the true size of slips: from places in the pattern to bits that were sent.

The counter knows a place in the pattern only modulo its period. Which of the bits sent it was is decided,
where anything decides it, by causality: it was sent before it came, and it was not sent before the first;
and by ``max_in_flight_bits``: no more than that can have been on its way.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from harness.bench.traffic import Traffic

MOST_TURNS = 10_000  # periods that a slip may be looked for over


@dataclass(frozen=True, slots=True)
class Delay:
    """Between sending a place in the pattern and receiving it."""

    bits: int
    seconds: float | None
    modulo: int | None  # None: nothing else was possible


class Places:
    """Follows which bit sent each bit received was.

    Parameters
    ----------
    period
        Bits of the pattern; None where it does not repeat.
    unit
        Slips come in multiples of so many bits.
    most_in_flight
        Bits that can have been on their way, None where nothing limits them.
    """

    def __init__(
        self,
        traffic: Traffic,
        *,
        period: int | None,
        unit: int,
        most_in_flight: int | None,
        first_place: int = 0,
    ) -> None:
        self._traffic = traffic
        self._period = period
        self._modulo = None if period is None else math.lcm(period, unit)
        self._most = most_in_flight
        self._first_place = first_place
        self._sure = True  # the place that was taken was possible: bits of it had been sent
        self.ahead: int | None = None  # sent bit minus received bit, for the stretch that is aligned
        self._least_out: int | None = None  # bits on their way when aligned bits came: least and most so far
        self._most_out = 0
        self._first_delay: int | None = None  # bits

    def _window(self, received_bit: int, arrived_ns: int) -> tuple[int, int]:
        """Sent bits that the received bit can have been, [low, high)."""
        high = self._traffic.perhaps_sent_by(arrived_ns)
        low = 0
        if self._most is not None:
            low = max(0, high - self._most - 1)
        return low, max(high, received_bit + 1 if high == 0 else high)

    def aligned(self, bit: int, place: int, arrived_ns: int, came_with: int) -> Delay | None:
        """Take the place of a received bit where a stretch becomes aligned; gives the loop delay.

        `came_with` counts the received bits up to the end of the piece that the bit came in: bits travel in
        pieces, and the last of a piece says best how many were on their way.
        """
        sent_by = self._traffic.sent_by(arrived_ns)
        # The last bit of the piece, as the first ones of a stream may never have been sent; nor may the last ones,
        # where more came than was sent.
        last = max(min(came_with, self._traffic.perhaps_sent_by(arrived_ns)) - 1, bit)
        offset, bit = place - self._first_place + last - bit, last
        if self._period is None or self._modulo is None:
            sent_bit, modulo = offset, None
        else:
            low, high = self._window(bit, arrived_ns)
            step = (
                self._modulo
                if (offset - bit) % self._period == 0 or self._modulo == self._period
                else self._period
            )
            near = bit + (offset - bit) % step
            options = [near + k * step for k in (-2, -1, 0, 1)]
            inside = [o for o in options if low <= o < high]
            self._sure = bool(inside)
            sent_bit = min(inside or [o for o in options if o >= 0], key=lambda o: (abs(o - bit), o))
            alone = low > sent_bit - step and sent_bit + step >= high
            modulo = None if alone or sent_bit == bit else step
        self.ahead = sent_bit - bit
        sent_at = self._traffic.when_sent(sent_bit)
        seconds = None if sent_at is None else max(0.0, (arrived_ns - sent_at) / 1e9)
        if sent_by <= sent_bit:
            return None
        delay = Delay(max(0, sent_by - sent_bit - 1), seconds, modulo)
        self._first_delay = delay.bits if self._first_delay is None else self._first_delay
        return delay

    @property
    def sent_end(self) -> int | None:
        """Received bit that the bit after the last one sent would be; None before anything was aligned."""
        return None if self.ahead is None else self._traffic.sent_bits - self.ahead

    @property
    def usually_out(self) -> int:
        """Bits on their way as a matter of course: the fewest that were, when aligned bits came."""
        first = self._first_delay or 0
        return first if self._least_out is None else min(first, self._least_out)

    def never_sent(self, received_end: int, arrived_ns: int) -> int:
        """Count the bits that must have been made up without a trace, by what had come until a time.

        Whole periods that come twice leave no slip in a periodic pattern; only the count of bits tells, once
        more of them have come than can have been sent.

        Parameters
        ----------
        received_end
            Received bits; the last one is aligned.
        arrived_ns
            When that last one came.
        """
        if self.ahead is None or self._modulo is None or not self._sure:
            return 0
        over = received_end + self.ahead - self._traffic.perhaps_sent_by(arrived_ns)
        return 0 if over <= 0 else -(-over // self._modulo) * self._modulo

    def follow(self, received_end: int, arrived_ns: int) -> None:
        """Take how many bits were on their way when aligned bits, up to `received_end`, came."""
        if self.ahead is None:
            return
        out = self._traffic.sent_by(arrived_ns) - (received_end + self.ahead)
        if out < 0:
            return
        self._least_out = out if self._least_out is None else min(out, self._least_out)
        self._most_out = max(out, self._most_out)

    def _continues(self, out: int, modulo: int) -> bool:
        """Whether so many bits on their way are as many as before, where that tells sizes apart at all."""
        if self._least_out is None or 4 * (self._most_out - self._least_out) > modulo:
            return False
        return self._least_out - modulo // 4 <= out <= self._most_out + modulo // 4

    def slipped(self, bit: int, size: int, modulo: int | None, arrived_ns: int) -> tuple[int, int | None]:
        """Resolve a slip's size where bits sent and received decide it; returns (size, modulus or None)."""
        if modulo is None or self.ahead is None:
            self.ahead = None if self.ahead is None else self.ahead - size
            return size, modulo
        low, high = self._window(bit, arrived_ns)
        span = 3 + max(0, high - low) // modulo
        options = [size + k * modulo for k in range(-span, 4)] if span < MOST_TURNS else [size]
        inside = [s for s in options if low <= bit + self.ahead - s < high]
        steady = [s for s in inside if self._continues(high - (bit + self.ahead - s), modulo)]
        self._sure = self._sure and bool(inside)
        if len(steady) == 1:  # the loop delay says which
            size, modulo = steady[0], None
        elif inside:
            size = min(inside, key=abs)
            if len(inside) == 1:
                modulo = None
        self.ahead -= size
        return size, modulo
