"""The sender's thread: the pattern, paced, into the link."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable

import numpy as np

from drivers.contract import DriverError, Interrupted, Link
from harness.bench.traffic import Traffic
from harness.signal.patterns import Reader

CHUNK_BYTES = 256 << 10
TICK_S = 0.02  # a paced sender hands over this much time's worth of bits at once
WAIT_S = 0.1


class Sender(threading.Thread):
    """Sends until told to stop, until `limit_bits`, or until the link fails.

    Parameters
    ----------
    link
        An open link that sends.
    reader
        The pattern from the place at which sending begins.
    pace_bps
        Payload bit/s; None: as fast as the port takes it.
    most_in_flight
        Bits sent and not yet received, at most; None: no limit.
    limit_bits
        Bits to send in all; None: no limit. Rounded up to whole bytes.
    """

    def __init__(
        self,
        link: Link,
        reader: Reader,
        traffic: Traffic,
        *,
        pace_bps: float | None,
        most_in_flight: int | None,
        limit_bits: int | None,
        on_end: Callable[[], None],
    ) -> None:
        super().__init__(name="sender", daemon=True)
        self._link = link
        self._reader = reader
        self._traffic = traffic
        self._pace_bps = pace_bps
        self._most_in_flight = most_in_flight
        self._limit_bits = limit_bits
        self._on_end = on_end
        self._halt = threading.Event()
        self._pause = threading.Event()
        self.fault: DriverError | None = None
        self.defect: BaseException | None = None
        self.done = False  # all of `limit_bits` was handed over

    def halt(self) -> None:
        """Stop sending at the next whole chunk."""
        self._halt.set()

    def pause(self, paused: bool) -> None:
        """Hold sending, or go on."""
        if paused:
            self._pause.set()
        else:
            self._pause.clear()

    def run(self) -> None:
        """Send."""
        try:
            self._send_all()
        except Interrupted:
            pass
        except DriverError as error:
            self.fault = error
        except BaseException as error:
            self.defect = error
        finally:
            self._on_end()

    def _chunk_bytes(self) -> int:
        most = CHUNK_BYTES
        message = self._link.traits.message_bytes
        if self._pace_bps is not None:
            most = min(most, max(1, int(self._pace_bps * TICK_S / 8)))
        if self._most_in_flight is not None:
            most = max(1, min(most, self._most_in_flight // 16))
        return message if message else most

    def _send_all(self) -> None:
        size = self._chunk_bytes()
        buffer = np.empty(size, dtype=np.uint8)
        limit = None if self._limit_bits is None else -(-self._limit_bits // 8)
        sent = 0
        begun = time.monotonic()
        while not self._halt.is_set():
            if self._pause.is_set():
                paused_at = time.monotonic()
                while self._pause.is_set() and not self._halt.wait(TICK_S):
                    pass
                begun += time.monotonic() - paused_at
                continue
            count = size if limit is None else min(size, limit - sent)
            if count <= 0:
                self.done = True
                return
            chunk = buffer[:count]
            self._reader.read_into(chunk)
            if not self._hand_over(chunk.data):
                return
            sent += count
            if self._pace_bps is not None:
                ahead = begun + sent * 8 / self._pace_bps - time.monotonic()
                if ahead > 0:
                    self._halt.wait(ahead)
                elif ahead < -1.0:  # held up by the port: do not catch up in a burst
                    begun -= ahead

    def _hand_over(self, chunk: memoryview) -> bool:
        """Send one chunk whole; False when told to stop before anything of it that is left."""
        while len(chunk):
            if self._most_in_flight is not None:
                while not self._traffic.wait_for_room(
                    self._most_in_flight, min(8 * len(chunk), self._most_in_flight), WAIT_S
                ):
                    if self._halt.is_set():
                        return False
            self._traffic.offered(8 * len(chunk))
            accepted = self._link.send(chunk, WAIT_S)
            if accepted:
                self._traffic.sent(8 * accepted, time.monotonic_ns())
                chunk = chunk[accepted:]
            if self._halt.is_set():
                return False
        return True
