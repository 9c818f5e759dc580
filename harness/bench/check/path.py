"""Proving the path: is what comes back what we send, and does it come from the far end?

Each probe has one answer that only a proper path gives: known errors come back at their places, a pause in
sending silences reception, a jump in the pattern comes back. What answers otherwise is named.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from drivers.contract import Link
from harness.assess.words import count, duration, percent
from harness.bench.check.findings import Finding
from harness.bench.check.probe import Probe
from harness.record import BitOrder, Segment
from harness.signal.counter import Counter
from harness.signal.patterns import Pattern

LISTEN_S = 1.0
PING_BYTES = 16
PINGS = 8
AT_ONCE_S = 0.002  # beyond the time that the bits themselves take
JUMP_BITS = 8 * 4_099
FLIPS = (0.31, 0.37, 0.5, 0.66, 0.9)  # places of the known errors, as shares of the stretch
LEAST_BYTES, MOST_BYTES = 2_048, 65_536
STRETCH_S = 2.0  # how long a stretch may take, where the rate allows


@dataclass(frozen=True, slots=True)
class Line:
    """What is probed."""

    sending: Link
    receiving: Link
    pattern: Pattern
    bit_order: BitOrder
    rate_bps: float | None
    pace_bps: float | None
    max_in_flight_bits: int | None
    drain_s: float
    wired: bool  # False: a simulated link, where an answer at once proves nothing


class PathCheck:
    """Probes an open line and says what it found."""

    def __init__(self, line: Line, cancel: threading.Event) -> None:
        self._line = line
        self._cancel = cancel
        self._place = 0
        self._patience_s = max(2.0, line.drain_s)
        self.delay_s: float | None = None

    def findings(self) -> Iterator[Finding]:
        """Probe, step by step; stops at what makes further steps pointless."""
        line = self._line
        with Probe(
            line.sending,
            line.receiving,
            pace_bps=line.pace_bps,
            most_in_flight=line.max_in_flight_bits,
            cancel=self._cancel,
        ) as probe:
            foreign = self._listen(probe)
            yield foreign
            if foreign.outcome == "bad":
                return
            for step in (self._known_errors, self._pause, self._jump, self._delay):
                found = step(probe)
                yield found
                if found.outcome == "bad":
                    return

    def _bytes(self) -> int:
        rate = self._line.pace_bps or self._line.rate_bps
        size = MOST_BYTES if rate is None else int(rate * STRETCH_S / 8)
        return max(LEAST_BYTES, min(MOST_BYTES, size))

    def _stretch(self, size: int) -> NDArray[np.uint8]:
        data = self._line.pattern.packed(self._place, size, self._line.bit_order)
        self._place += 8 * size
        return data

    def _came(self, probe: Probe) -> bytes:
        return b"".join(data for _at, data in probe.take())

    # -- the steps

    def _listen(self, probe: Probe) -> Finding:
        self._cancel.wait(LISTEN_S)
        probe.check()
        heard = self._came(probe)
        if not heard:
            return Finding("listen", "good", f"silent for {LISTEN_S:g} s while nothing was sent")
        return Finding(
            "listen",
            "bad",
            f"{count(len(heard), 'byte')} came in {LISTEN_S:g} s though nothing was sent: another generator is on "
            f"the line ({self._looks_like(heard)})",
            "disconnect the other generator, or end the device's own test mode",
        )

    def _looks_like(self, heard: bytes) -> str:
        from harness.bench.identification import in_words

        return in_words(np.frombuffer(heard, dtype=np.uint8))

    def _known_errors(self, probe: Probe) -> Finding:
        size = self._bytes()
        data = self._stretch(size).copy()
        flips = sorted({int(share * 8 * size) for share in FLIPS})
        for bit in flips:
            inside = bit % 8
            data[bit // 8] ^= 1 << (inside if self._line.bit_order == "lsb" else 7 - inside)
        if not probe.send(data, self._patience_s):
            return Finding(
                "known errors",
                "bad",
                "the port takes no bytes",
                "check flow control (RTS/CTS wiring, XON/XOFF) and that the device is powered",
            )
        probe.wait_until(lambda: probe.received_bytes >= size, self._patience_s)
        probe.wait_for_quiet(0.3, self._patience_s)
        heard = self._came(probe)
        if not heard:
            return Finding(
                "known errors",
                "bad",
                f"{count(size, 'byte')} were sent and not a single one came back",
                "check power and cable, that the far end loops back, and that the device is in its data mode",
            )
        return self._judge_errors(heard, size, flips)

    def _judge_errors(self, heard: bytes, size: int, flips: list[int]) -> Finding:
        if len(heard) > 1.5 * size:
            return Finding(
                "known errors",
                "bad",
                f"{count(size, 'byte')} were sent and {len(heard)} came back: each one more than once, so the "
                "device's local echo is on beside the far end's loop",
                "switch the local echo off in [[link.before]] (many modems: ATE0), then check again",
            )
        segments = self._count(heard)
        compared = sum(s.tally.compared for s in segments)
        if compared < 4 * size:
            return Finding(
                "known errors",
                "bad",
                f"{count(len(heard), 'byte')} came back, but not our pattern ({self._looks_like(heard)})",
                "check [pattern] bit_order, baud and framing, and that the device is in its data mode",
            )
        places = {p for s in segments if s.place is not None for p in _places(s)}
        start = self._place - 8 * size
        period = self._line.pattern.period
        wanted = {(start + bit) % period if period else start + bit for bit in flips}
        found = wanted & {place % period if period else place for place in places}
        errors = sum(s.tally.errors for s in segments)
        if len(found) < len(wanted):
            return Finding(
                "known errors",
                "bad",
                f"{len(wanted)} known errors were sent, and only {len(found)} came back at their places: the device "
                "corrects errors, or makes the pattern anew",
                'state device.error_control = "fec" or "arq" if that is so: the BER is then a residual one',
            )
        own = errors - len(wanted)
        more = f"; beside them {count(own, 'error')} of the path's own" if own > 0 else ""
        return Finding("known errors", "good", f"{len(wanted)} known errors came back at their places{more}")

    def _count(self, heard: bytes) -> list[Segment]:
        unit = 8 if self._line.receiving.traits.whole_bytes else 1
        counter = Counter(self._line.pattern, bit_order=self._line.bit_order, slip_unit=unit)
        return [*counter.feed(heard), *counter.finish()]

    def _pause(self, probe: Probe) -> Finding:
        self._cancel.wait(0.5)
        probe.check()
        heard = self._came(probe)
        if not heard:
            return Finding("pause", "good", "nothing came while sending paused")
        return Finding(
            "pause",
            "bad",
            f"{count(len(heard), 'byte')} came while sending paused: something else sends on this line",
            "look for a second generator, a repeater, or fill bytes of the device, and switch them off",
        )

    def _jump(self, probe: Probe) -> Finding:
        size = self._bytes() // 2
        first = self._stretch(size)
        self._place += JUMP_BITS
        second = self._stretch(size)
        data = np.concatenate([first, second])
        if not probe.send(data, self._patience_s):
            return Finding("jump", "bad", "the port stopped taking bytes", "check flow control and power")
        probe.wait_until(lambda: probe.received_bytes >= len(data), self._patience_s)
        heard = self._came(probe)
        slips = [e for s in self._count(heard) for e in s.events if e.kind == "slip"]
        period = self._line.pattern.period
        jumped = [s for s in slips if period is None or (int(s.data["bits"]) + JUMP_BITS) % period == 0]
        if period is not None and JUMP_BITS % period == 0:
            return Finding("jump", "note", f"{self._line.pattern.name} is too short for a jump to be seen")
        if jumped:
            return Finding("jump", "good", "a jump in the pattern came back: it is our own stream")
        return Finding(
            "jump",
            "bad",
            "a jump in the pattern did not come back: what is received is not what we send",
            "look for another generator with the same pattern on the line",
        )

    def _delay(self, probe: Probe) -> Finding:
        """Measure the loop delay with short bursts; an answer at once comes from this end of the line."""
        times = []
        for _ in range(PINGS):
            probe.wait_for_quiet(0.02, 1.0)
            probe.take()
            begun = time.monotonic_ns()
            probe.send(self._stretch(PING_BYTES), self._patience_s)
            if probe.wait_until(lambda: probe.received_bytes >= PING_BYTES, self._patience_s):
                times.append((probe.take()[-1][0] - begun) / 1e9)
        if not times:
            return Finding(
                "delay",
                "bad",
                f"bursts of {PING_BYTES} bytes do not come back by themselves",
                "the device waits for more before it sends: set its packet time-out, or raise link.drain_s",
            )
        best = min(times)
        self.delay_s = best
        rate = self._line.rate_bps
        own_s = 8 * PING_BYTES / rate if rate else 0.0
        if self._line.wired and best < own_s + AT_ONCE_S:
            return Finding(
                "delay",
                "bad",
                f"our own bytes come back at once (in {duration(best)}): a shorted connector, or a loop at this end "
                "of the line; they never reached the far end",
                "check the connector and take the loop off at this end; the device must loop at its far end",
            )
        spread = max(times) - best
        return Finding("delay", "good", f"loop delay {duration(best)}, wandering by {duration(spread)}")


def _places(segment: Segment) -> Iterator[int]:
    assert segment.place is not None
    for position in segment.positions:
        yield segment.place + int(position) - segment.start


def lost_at_most(line: Line, cancel: threading.Event) -> Finding:
    """Prove that the link is lost: at the highest attenuation nothing may come around the attenuator."""
    with Probe(
        line.sending,
        line.receiving,
        pace_bps=line.pace_bps,
        most_in_flight=line.max_in_flight_bits,
        cancel=cancel,
    ) as probe:
        data = line.pattern.packed(0, LEAST_BYTES, line.bit_order)
        probe.send(data, 1.0)
        probe.wait_for_quiet(0.5, max(2.0, line.drain_s))
        heard = b"".join(piece for _at, piece in probe.take())
    counter = Counter(line.pattern, bit_order=line.bit_order, slip_unit=8)
    segments = [*counter.feed(heard), *counter.finish()]
    compared = sum(s.tally.compared for s in segments)
    errors = sum(s.tally.errors for s in segments)
    if not compared:
        return Finding("isolation", "good", "at the highest attenuation the link is lost, as it must be")
    return Finding(
        "isolation",
        "bad",
        f"at the highest attenuation the pattern still came, with {percent(errors / compared)} errors: there is a "
        "path around the attenuator, or its range is too small",
        "look for leaking cables, open connectors, antennas too near; screen the device; add a fixed pad",
    )
