"""What is on its way: bits sent and received so far, with times, and what was written off.

Sender, receiver and consumer share it. Loop delay and the true size of a slip come from it: a bit
cannot return before it was sent, and no more bits can be on their way than were ever under way.
"""

from __future__ import annotations

import bisect
import threading
from collections import deque

HISTORY = 4096  # moments kept; older ones are thinned out by being forgotten


class Traffic:
    """Counts of bits, all monotonic, with a short history of when each count was reached."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._changed = threading.Condition(self._lock)
        self._sent = 0
        self._offered = 0
        self._received = 0
        self._written_off = 0
        self._invented = 0
        self._taken_back = 0  # given up, then received after all, or so it seemed
        self._sent_at: deque[tuple[int, int]] = deque(maxlen=HISTORY)  # (bits, ns)
        self.first_sent_ns: int | None = None
        self.last_received_ns: int | None = None
        self.last_sent_ns: int | None = None

    @property
    def sent_bits(self) -> int:
        """Bits that the link accepted."""
        return self._sent

    @property
    def received_bits(self) -> int:
        """Bits that came, those that the host lost included."""
        return self._received

    @property
    def written_off_bits(self) -> int:
        """Bits given up as lost, so that sending can go on."""
        return self._written_off

    def in_flight(self) -> int:
        """Bits sent, neither received nor given up; what was invented on the way does not count as received."""
        with self._lock:
            return max(0, self._out())

    def surplus(self) -> int:
        """Bits that came beside those sent and were not seen to be invented; late ones may be among them."""
        with self._lock:
            return max(0, -self._out()) + self._taken_back

    def _out(self) -> int:
        return self._sent - (self._received - self._invented) - self._written_off

    def offered(self, bits: int) -> None:
        """Say that so many more bits are being handed to the link: some may come back before it says so."""
        self._offered = self._sent + bits

    def sent(self, bits: int, now_ns: int) -> None:
        """Count bits that the link accepted."""
        with self._changed:
            if self.first_sent_ns is None:
                self.first_sent_ns = now_ns
            self._sent += bits
            self.last_sent_ns = now_ns
            self._sent_at.append((self._sent, now_ns))

    def received(self, bits: int, now_ns: int) -> None:
        """Count bits that came."""
        with self._changed:
            self._received += bits
            # More came back than was thought to be out: it had been given up too early.
            over = self._received - self._invented + self._written_off - max(self._sent, self._offered)
            if over > 0:
                back = min(over, self._written_off)
                self._written_off -= back
                self._taken_back += back
            self.last_received_ns = now_ns
            self._changed.notify_all()

    def write_off(self) -> int:
        """Give up what is on its way; returns how many bits that was."""
        with self._changed:
            bits = max(0, self._out())
            self._written_off += bits
            self._changed.notify_all()
            return bits

    def lose(self, bits: int) -> None:
        """Give up bits that a slip has shown to be lost."""
        with self._changed:
            # Bits may be back before the link has said that it took them: then those offered are out.
            out = max(0, self._out() + max(0, self._offered - self._sent))
            given_up = min(bits, out)
            self._written_off += given_up
            self._taken_back += bits - given_up  # made up ones have come in their stead already
            self._changed.notify_all()

    def invent(self, bits: int) -> None:
        """Say that so many of the bits received were never sent: a slip has shown it."""
        with self._changed:
            self._invented += bits
            # Too many may have come because of them, and not because some had been given up too early.
            again = min(bits, self._taken_back)
            self._taken_back -= again
            self._written_off += again

    def wait_for_room(self, most_in_flight: int, bits: int, timeout: float) -> bool:
        """Wait until `bits` more may be sent without more than `most_in_flight` under way."""

        def fits() -> bool:
            return self._out() + bits <= most_in_flight

        with self._changed:
            return self._changed.wait_for(fits, timeout)

    def wait_for_quiet(self, timeout: float) -> bool:
        """Wait until nothing is on its way; False at time-out."""
        with self._changed:
            return self._changed.wait_for(lambda: self._out() <= 0, timeout)

    def sent_by(self, at_ns: int) -> int:
        """Bits sent up to a time."""
        with self._lock:
            moments = list(self._sent_at)
        at = bisect.bisect_right(moments, at_ns, key=lambda moment: moment[1])
        if at == 0:
            return moments[0][0] if moments and len(moments) == HISTORY else 0
        return moments[at - 1][0]

    def perhaps_sent_by(self, at_ns: int) -> int:
        """Bits that can have been sent up to a time, those just being handed over included."""
        with self._lock:
            moments = list(self._sent_at)
            most = max(self._sent, self._offered)
        at = bisect.bisect_right(moments, at_ns, key=lambda moment: moment[1])
        return moments[at][0] if at < len(moments) else most

    def when_sent(self, bit: int) -> int | None:
        """Monotonic time at which a bit had been accepted, None where that is no longer known."""
        with self._lock:
            moments = list(self._sent_at)
        at = bisect.bisect_right(moments, bit, key=lambda moment: moment[0])
        if at == len(moments) or (at == 0 and len(moments) == HISTORY):
            return None
        return moments[at][1]
