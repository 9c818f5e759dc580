"""The ring between the receiver, which only receives, and the consumer, which counts.

Preallocated, one writer and one reader. Each piece keeps the time of its arrival, so that a bit belongs
to the second in which it came, however late it is counted. What did not fit is kept as a number, in its
place in the stream: a lost byte of ours must never look like one of the device's.
"""

from __future__ import annotations

import threading
from collections import deque
from dataclasses import dataclass

RING_BYTES = 16 << 20
PIECE_BYTES = 256 << 10  # a piece stays in the second-level cache while it is counted

JOIN_NS = 2_000_000  # bytes that trickle in are counted together within this time


@dataclass(frozen=True, slots=True)
class Piece:
    """Bytes that arrived at one time, or a count of bytes that the host lost."""

    arrived_ns: int  # monotonic
    data: memoryview  # empty where bytes were lost
    lost_bytes: int = 0


class Ring:
    """A bounded byte queue without copies: the receiver writes into `room`, the reader reads `next_piece`."""

    def __init__(self, size: int = RING_BYTES) -> None:
        self._buffer = memoryview(bytearray(size))
        self._size = size
        self._write = 0  # bytes written since the beginning
        self._read = 0  # bytes given back since the beginning
        self._taken = 0  # bytes handed to the reader since the beginning
        self._pieces: deque[tuple[int, int, int]] = deque()  # (arrived_ns, bytes, lost bytes)
        self._changed = threading.Condition()
        self._closed = False

    def room(self, most: int = PIECE_BYTES) -> memoryview:
        """Give the writer the free bytes that lie in one piece; empty when the ring is full."""
        with self._changed:
            free = self._size - (self._write - self._read)
        at = self._write % self._size
        return self._buffer[at : at + min(free, most, self._size - at)]

    def wait_for_room(self, timeout: float) -> bool:
        """Wait until there is room; False at time-out."""
        with self._changed:
            return self._changed.wait_for(lambda: self._write - self._read < self._size, timeout)

    def written(self, count: int, arrived_ns: int, *, join: bool = True) -> None:
        """Say that `count` bytes were put at the start of `room`; `join`: perhaps to the piece before them."""
        with self._changed:
            starts_at = self._write % self._size
            self._write += count
            if join and self._pieces and starts_at:
                at, before, lost = self._pieces[-1]
                if not lost and arrived_ns - at < JOIN_NS and before + count <= PIECE_BYTES:
                    self._pieces[-1] = (at, before + count, 0)
                    self._changed.notify_all()
                    return
            self._pieces.append((arrived_ns, count, 0))
            self._changed.notify_all()

    def lost(self, count: int, arrived_ns: int) -> None:
        """Say that `count` bytes came for which there was no room."""
        with self._changed:
            if self._pieces and self._pieces[-1][2]:
                at, _, before = self._pieces.pop()
                self._pieces.append((at, 0, before + count))
            else:
                self._pieces.append((arrived_ns, 0, count))
            self._changed.notify_all()

    def close(self) -> None:
        """Say that nothing more will come."""
        with self._changed:
            self._closed = True
            self._changed.notify_all()

    def next_piece(self, timeout: float) -> Piece | None:
        """Take the oldest piece, None at time-out; its bytes stay valid until `give_back`."""
        with self._changed:
            if not self._pieces:
                self._changed.wait_for(lambda: self._pieces or self._closed, timeout)
            if not self._pieces:
                return None
            arrived_ns, count, lost = self._pieces.popleft()
            at = self._taken % self._size
            self._taken += count
        return Piece(arrived_ns, self._buffer[at : at + count], lost)

    def give_back(self, piece: Piece) -> None:
        """Free the bytes of a piece."""
        with self._changed:
            self._read += len(piece.data)
            self._changed.notify_all()

    @property
    def drained(self) -> bool:
        """Whether nothing more will come and all was taken."""
        with self._changed:
            return self._closed and not self._pieces
