"""The receiver's thread: it only receives, into the ring, and notes when."""

from __future__ import annotations

import threading
import time

from drivers.contract import DriverError, EndOfStream, Interrupted, Link
from harness.bench.ring import PIECE_BYTES, Ring
from harness.bench.traffic import Traffic

WAIT_S = 0.1


class Receiver(threading.Thread):
    """Receives until told to stop, until the stream ends, or until the link fails.

    Where a link holds unread bytes back at their sender, a full ring makes it wait; where it does not,
    what finds no room is counted as lost by the host.
    """

    def __init__(self, link: Link, ring: Ring, traffic: Traffic) -> None:
        super().__init__(name="receiver", daemon=True)
        self._link = link
        self._ring = ring
        self._traffic = traffic
        self._halt = threading.Event()
        self._scratch = memoryview(bytearray(PIECE_BYTES))
        self.fault: DriverError | None = None
        self.defect: BaseException | None = None
        self.ended = False  # the stream came to its end

    def halt(self) -> None:
        """Stop at the next time-out."""
        self._halt.set()

    def run(self) -> None:
        """Receive."""
        try:
            while not self._halt.is_set():
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
            self._ring.close()

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
        count = self._link.receive(room, WAIT_S)
        if count:
            now = time.monotonic_ns()
            self._traffic.received(8 * count, now)
            self._ring.written(count, now)
