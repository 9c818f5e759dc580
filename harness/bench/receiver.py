"""The receiver's thread: it only receives, into the ring, and notes when."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable

from drivers.contract import DriverError, EndOfStream, Interrupted, Link
from harness.bench.playback import Playback
from harness.bench.ring import PIECE_BYTES, Ring
from harness.bench.traffic import Traffic

WAIT_S = 0.1


class Receiver(threading.Thread):
    """Receives until told to stop, until the stream ends, or until the link fails.

    Where a link holds unread bytes back at their sender, a full ring makes it wait; where it does not,
    what finds no room is counted as lost by the host.

    Parameters
    ----------
    playback
        Says when the bytes of a file came; None where they come now.
    limit_bits
        Where nothing is sent: so many are received at most, rounded up to whole bytes.
    """

    def __init__(
        self,
        link: Link,
        ring: Ring,
        traffic: Traffic,
        on_end: Callable[[], None],
        *,
        playback: Playback | None = None,
        limit_bits: int | None = None,
    ) -> None:
        super().__init__(name="receiver", daemon=True)
        self._link = link
        self._ring = ring
        self._traffic = traffic
        self._on_end = on_end
        self._playback = playback
        self._limit_bits = limit_bits
        self._halt = threading.Event()
        self._scratch = memoryview(bytearray(PIECE_BYTES))
        self.fault: DriverError | None = None
        self.defect: BaseException | None = None
        self.ended = False  # the stream came to its end
        self.full = False  # as much came as is wanted

    def halt(self) -> None:
        """Stop at the next time-out."""
        self._halt.set()

    def run(self) -> None:
        """Receive."""
        try:
            while not (self._halt.is_set() or self.full):
                self._receive_once()
        except EndOfStream:
            self.ended = True
        except Interrupted:
            pass
        except DriverError as error:
            self.fault = error
        except BaseException as error:
            self.defect = error
        finally:
            self._on_end()

    def _receive_once(self) -> None:
        room = self._ring.room()
        if not len(room):
            if self._link.traits.holds_back:
                self._ring.wait_for_room(WAIT_S)
                return
            count = self._link.receive(self._scratch, WAIT_S)
            if count:
                now = time.monotonic_ns()
                self._ring.lost(count, now)
                self._traffic.received(8 * count, now)
            return
        message = self._link.traits.message_bytes
        if message is not None and len(room) < message:
            self._receive_message(room)
            return
        if message is None:
            room = room[: self._wanted(len(room))]
        count = self._link.receive(room, WAIT_S)
        if count:
            self._arrived(count)
            self.full = message is None and self._wanted(1) == 0

    def _wanted(self, most: int) -> int:
        """Bytes to take in one piece: no more than are wanted in all, nor beyond the end of a played second."""
        if self._limit_bits is not None:
            most = min(most, max(0, -(-(self._limit_bits - self._traffic.received_bits) // 8)))
        if self._playback is not None and most:
            most, _ = self._playback.piece(self._traffic.received_bits, most)
        return most

    def _receive_message(self, room: memoryview) -> None:
        """Take a message that may not fit before the ring's turn, by way of the scratch buffer."""
        count = self._link.receive(self._scratch, WAIT_S)
        left = self._scratch[:count]
        while len(left):
            part = min(len(left), len(room))
            if part:
                room[:part] = left[:part]
                self._arrived(part)
            else:
                now = time.monotonic_ns()
                self._ring.lost(len(left), now)
                self._traffic.received(8 * len(left), now)
                return
            left = left[part:]
            room = self._ring.room()

    def _arrived(self, count: int) -> None:
        now = time.monotonic_ns()
        if self._playback is None:
            self._traffic.received(8 * count, now)
            self._ring.written(count, now)
            return
        _, came_ns = self._playback.piece(self._traffic.received_bits, count)
        self._traffic.received(8 * count, now)
        self._ring.written(count, came_ns, join=False)
