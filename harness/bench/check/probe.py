"""The probe: sends what it is told, and keeps every byte that comes with the time at which it came."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from drivers.contract import DriverError, EndOfStream, Interrupted, Link, LinkLost

WAIT_S = 0.02
KEEP_BYTES = 8 << 20


class Probe:
    """Sending and receiving by hand on an open link.

    Parameters
    ----------
    sending
        None where it only listens.
    pace_bps
        Never send faster; None: as fast as the port takes it.
    most_in_flight
        Bits sent and not yet received, at most.
    """

    def __init__(
        self,
        sending: Link | None,
        receiving: Link,
        *,
        pace_bps: float | None,
        most_in_flight: int | None,
        cancel: threading.Event,
    ) -> None:
        self._sending = sending
        self._receiving = receiving
        self._pace_bps = pace_bps
        self._most_in_flight = most_in_flight
        self._cancel = cancel
        self._lock = threading.Lock()
        self._heard: list[tuple[int, bytes]] = []
        self._bytes = 0
        self._halt = threading.Event()
        self._thread = threading.Thread(target=self._listen, name="probe", daemon=True)
        self.fault: DriverError | None = None
        self.ended = False  # a link that ends by itself is at its end
        self.sent_bytes = 0
        self.held = False  # sending gave up since too much was on its way, not since the port took nothing

    def __enter__(self) -> Probe:
        self._thread.start()
        return self

    def __exit__(self, *_exc: object) -> None:
        self._halt.set()
        self._thread.join()

    def _listen(self) -> None:
        buffer = memoryview(bytearray(65_536))
        try:
            while not self._halt.is_set():
                count = self._receiving.receive(buffer, WAIT_S)
                if count:
                    with self._lock:
                        self._heard.append((time.monotonic_ns(), bytes(buffer[:count])))
                        self._bytes += count
                        if self._bytes > KEEP_BYTES:
                            return
        except EndOfStream:
            self.ended = self._receiving.traits.finite
            if self.ended:
                return
            self.fault = LinkLost(
                "the far side closed the connection during the check", "look why the device closed it"
            )
        except Interrupted:
            pass
        except DriverError as error:
            self.fault = error

    @property
    def received_bytes(self) -> int:
        """Bytes that came so far."""
        with self._lock:
            return self._bytes

    def take(self) -> list[tuple[int, bytes]]:
        """Give what came since the last call, as (monotonic ns, bytes)."""
        with self._lock:
            heard, self._heard = self._heard, []
            self._bytes = 0
        self.sent_bytes = 0
        return heard

    def take_bytes(self) -> bytes:
        """Give the bytes that came since the last call."""
        return b"".join(data for _at, data in self.take())

    def send(self, data: NDArray[np.uint8], patience_s: float) -> bool:
        """Send all of it at the pace; False where the port or the far side takes no more."""
        assert self._sending is not None
        view = np.ascontiguousarray(data).data
        begun, done = time.monotonic(), 0
        stuck_since = begun
        step = 4096 if self._pace_bps is None else max(1, int(self._pace_bps * 0.02 / 8))
        if self._most_in_flight is not None:
            step = max(1, min(step, self._most_in_flight // 8))
        self.held = False
        while done < len(view):
            self.check()
            if self._blocked(step):
                if time.monotonic() - stuck_since > patience_s:
                    self.held = True
                    return False
                self._cancel.wait(0.005)
                continue
            accepted = self._sending.send(view[done : done + step], 0.1)
            done += accepted
            self.sent_bytes += accepted
            now = time.monotonic()
            if accepted:
                stuck_since = now
            elif now - stuck_since > patience_s:
                return False
            if self._pace_bps is not None:
                self._cancel.wait(max(0.0, begun + done * 8 / self._pace_bps - now))
        return True

    def _blocked(self, step: int) -> bool:
        if self._most_in_flight is None:
            return False
        out = 8 * (self.sent_bytes - self.received_bytes)
        return out > 0 and out + 8 * step > self._most_in_flight

    def wait_until(self, happened: Callable[[], bool], longest_s: float) -> bool:
        """Wait for something to be true; False at time-out."""
        ends = time.monotonic() + longest_s
        while not happened():
            self.check()
            if time.monotonic() >= ends:
                return False
            self._cancel.wait(0.002)
        return True

    def wait_for_bytes(self, size: int, patience_s: float) -> bool:
        """Wait until so many bytes have come; False once nothing has come for `patience_s`."""
        seen, since = self.received_bytes, time.monotonic()
        while seen < size and not self.ended:
            self.check()
            self._cancel.wait(0.005)
            now = self.received_bytes
            if now != seen:
                seen, since = now, time.monotonic()
            elif time.monotonic() - since > patience_s:
                return False
        return True

    def wait_for_quiet(self, quiet_s: float, longest_s: float) -> bool:
        """Wait until nothing has come for `quiet_s`; False where it never gets quiet."""
        ends = time.monotonic() + longest_s
        seen, since = self.received_bytes, time.monotonic()
        while time.monotonic() - since < quiet_s:
            self.check()
            self._cancel.wait(0.005)
            now = self.received_bytes
            if now != seen:
                seen, since = now, time.monotonic()
            if time.monotonic() > ends:
                return False
        return True

    def check(self) -> None:
        """Raise what ended the probe, if anything did."""
        if self.fault is not None:
            raise self.fault
        if self._cancel.is_set():
            raise Interrupted
