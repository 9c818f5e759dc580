"""When bits came: the received stream's bits by the time of the piece that each came in."""

from __future__ import annotations

from collections import deque

KEPT = 65_536  # pieces; older ones are thinned out by being forgotten
TAIL_BYTES = 64  # of the stream's end, kept as they came


class Arrivals:
    """Times of arrival by received bit, and the stream's last bytes.

    Parameters
    ----------
    started_ns
        Monotonic time from which on bits can have come.
    """

    def __init__(self, started_ns: int) -> None:
        self._pieces: deque[tuple[int, int]] = deque([(0, started_ns)], maxlen=KEPT)  # (bits so far, ns)
        self.newest: tuple[int, bytes] = (0, b"")  # bits so far and the last bytes, read from other threads

    def came(self, received_bits: int, at_ns: int, data: memoryview | bytes) -> None:
        """Take a piece by the number of bits received with it; without data where the host lost it."""
        self._pieces.append((received_bits, at_ns))
        tail = bytes(data[-TAIL_BYTES:])
        if data and len(tail) < TAIL_BYTES:
            tail = (self.newest[1] + tail)[-TAIL_BYTES:]
        self.newest = (received_bits, tail)

    def forget_before(self, bit: int) -> None:
        """Let go of pieces that nobody asks for any more."""
        while len(self._pieces) > 1 and self._pieces[0][0] <= bit:
            self._pieces.popleft()

    def when(self, bit: int) -> int:
        """Monotonic time at which a received bit came, ns."""
        return next((at for end, at in self._pieces if bit < end), self._pieces[-1][1])

    def came_with(self, bit: int) -> int:
        """Received bits up to the end of the piece in which a bit came."""
        return next((end for end, _ in self._pieces if bit < end), bit + 1)
