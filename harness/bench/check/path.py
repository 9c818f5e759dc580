"""Proving the path: is what comes back what we send, and does it come from the far end?

Each probe has one answer that only a proper path gives: known errors come back at their places, a pause in
sending silences reception, a jump in the pattern comes back. What answers otherwise is named.

An answer at once comes from this end of the line. Short bursts tell: the best of many counts, so that a busy
computer does not make a short look like a far end. Where the burst came back exactly and at once, the rest
tells the two apart that answer so: a local echo is followed by the far end's copy, a short by nothing more.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from drivers.contract import Link
from harness.assess.words import count, duration
from harness.bench.check.answers import (
    count_stretch,
    is_text,
    judge,
    looks_like,
    make_stretch,
    shown,
)
from harness.bench.check.findings import Finding, Outcome
from harness.bench.check.probe import Probe
from harness.record import BitOrder
from harness.signal.patterns import Pattern

LISTEN_S = 1.0
PAUSE_S = 0.5
QUIET_S = 0.3
PING_BYTES = 8
PINGS = 40  # at most: on a busy computer only some of them show how fast the path is
FEW_PINGS = 4  # where the answer is clearly slow
AT_ONCE_S = 0.002  # beyond the time that the bits themselves take
ADAPTER_S = 0.020  # a USB adapter collects what came for up to 16 ms
SLOW_S = 0.05  # beyond the limit: clearly slow
JUMP_BITS = 8 * 4_099  # half a period, where that is less
LEAST_BYTES, MOST_BYTES = 512, 65_536
ASK_THE_PEER = (
    "check that host and port are those of the device's data, that the far end loops back, and that the device "
    "is in its data mode"
)
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
    at_once: Outcome  # what an answer at once is: good where the path is simulated and proves nothing
    least_delay_s: float | None = None  # what the profile says of an answer at once
    wired: bool = True  # False: a connection to a program or a server, which has neither plug nor cable here

    @property
    def speed_bps(self) -> float | None:
        """The lower of pace and rate."""
        known = [bps for bps in (self.pace_bps, self.rate_bps) if bps is not None]
        return min(known) if known else None

    @property
    def stretch_bytes(self) -> int:
        """Bytes of a stretch, so that it takes about `STRETCH_S`."""
        size = MOST_BYTES if self.speed_bps is None else int(self.speed_bps * STRETCH_S / 8)
        return max(LEAST_BYTES, min(MOST_BYTES, size))

    @property
    def takes_s(self) -> float:
        """Seconds that probing takes at the least."""
        bits = 8 * (2 * self.stretch_bytes + FEW_PINGS * PING_BYTES)
        return LISTEN_S + PAUSE_S + 3 * QUIET_S + (bits / self.speed_bps if self.speed_bps else 0.0)

    def probe(self, cancel: threading.Event) -> Probe:
        """Make a probe of it."""
        return Probe(
            self.sending,
            self.receiving,
            pace_bps=self.pace_bps,
            most_in_flight=self.max_in_flight_bits,
            cancel=cancel,
        )


class PathCheck:
    """Probes an open line and says what it found."""

    def __init__(self, line: Line, cancel: threading.Event) -> None:
        self._line = line
        self._cancel = cancel
        self._place = 0
        self._patience_s = max(2.0, line.drain_s)
        self._unit = 8 if line.receiving.traits.whole_bytes else 1
        self._unanswered = b""  # a short burst that did not come back by itself
        self.delay_s: float | None = None

    def findings(self) -> Iterator[Finding]:
        """Probe, step by step; stops at what makes further steps pointless."""
        with self._line.probe(self._cancel) as probe:
            for step in (self._listen, self._delay, self._known_errors, self._pause, self._jump):
                found = step(probe)
                if found is None:
                    continue
                if found.cause == "silence" and not self._line.wired:
                    found = replace(found, advice=ASK_THE_PEER)
                yield found
                if found.outcome == "bad":
                    return
            if self.delay_s is None:
                yield self._holds_back()

    def _holds_back(self) -> Finding:
        return Finding(
            "delay",
            "bad",
            f"bursts of {PING_BYTES} bytes do not come back by themselves: the device waits for more to send",
            "set the device's packet time-out; the last bits of every run would count as lost",
            cause="holds_back",
        )

    def _stretch(self, size: int) -> NDArray[np.uint8]:
        data = self._line.pattern.packed(self._place, size, self._line.bit_order)
        self._place += 8 * size
        return data

    # -- the steps

    def _listen(self, probe: Probe) -> Finding:
        self._cancel.wait(LISTEN_S)
        probe.check()
        heard = probe.take_bytes()
        if not heard:
            return Finding("listen", "good", f"silent for {LISTEN_S:g} s while nothing was sent")
        if is_text(heard):
            return Finding(
                "listen",
                "bad",
                f"the device talks by itself: {shown(heard)} came though nothing was sent",
                "bring it into its data mode with [[link.before]], and switch its messages off",
                cause="talks",
            )
        return Finding(
            "listen",
            "bad",
            f"{count(len(heard), 'byte')} came in {LISTEN_S:g} s though nothing was sent: another generator is on "
            f"the line ({looks_like(heard)})",
            "disconnect the other generator, or end the device's own test mode",
            cause="other_generator",
        )

    def _delay(self, probe: Probe) -> Finding | None:
        """Measure the loop delay with short bursts; None where they do not come back by themselves."""
        limit_s = self._at_once_s()
        times: list[float] = []
        sent = heard = 0
        pings = PINGS if limit_s is not None else 2 * FEW_PINGS
        while len(times) < pings:
            data = self._stretch(PING_BYTES)
            begun = time.monotonic_ns()
            if not probe.send(data, self._patience_s):
                return None
            sent += PING_BYTES
            came = probe.wait_until(lambda: probe.received_bytes >= PING_BYTES, self._patience_s)
            pieces = probe.take()
            answer = b"".join(piece for _at, piece in pieces)
            heard += len(answer)
            if not came:
                self._unanswered = data.tobytes()
                return None
            times.append((pieces[-1][0] - begun) / 1e9)
            exact = answer[:PING_BYTES] == data.tobytes()
            if exact and limit_s is not None and times[-1] < limit_s:
                return self._at_once(probe, times[-1], sent, heard)
            probe.wait_for_quiet(0.02, 0.5)
            if len(times) >= FEW_PINGS and min(times) > SLOW_S + (limit_s or 0.0):
                break
        probe.wait_for_quiet(max(QUIET_S, min(times)), self._patience_s)
        heard += len(probe.take_bytes())
        if heard >= 1.5 * sent:
            return self._echoed(min(times))
        self.delay_s = min(times)
        spread = max(times) - self.delay_s
        return Finding(
            "delay", "good", f"loop delay {duration(self.delay_s)}, at times {duration(spread)} more"
        )

    def _at_once_s(self) -> float | None:
        """What is at once, in seconds; None where an answer at once is as good as any."""
        line = self._line
        if line.least_delay_s is not None:
            return line.least_delay_s or None
        if line.at_once == "good":
            return None
        # A port that is read over USB hands over what came late, also what came from a short.
        slack = ADAPTER_S if "adapter" in line.receiving.describe() else AT_ONCE_S
        return slack + (8 * PING_BYTES / line.rate_bps if line.rate_bps else 0.0)

    def _at_once(self, probe: Probe, took_s: float, sent: int, heard: int) -> Finding:
        """Name what answered exactly and at once: the far end's copy follows a local echo, nothing a short."""
        line = self._line
        begun = time.monotonic()
        probe.wait_until(lambda: heard + probe.received_bytes >= 2 * sent, self._patience_s)
        far_s = time.monotonic() - begun
        heard += len(probe.take_bytes())
        if heard >= 1.5 * sent:
            return self._echoed(took_s, far_s)
        # A command interpreter's echo may have given so few bytes back unchanged: not so many more.
        stretch = make_stretch(line.pattern, line.bit_order, self._place, LEAST_BYTES)
        self._place += 8 * LEAST_BYTES
        probe.send(stretch.data, self._patience_s)
        probe.wait_for_bytes(LEAST_BYTES, self._patience_s)
        probe.wait_for_quiet(QUIET_S, self._patience_s)
        found = judge(stretch, probe.take_bytes(), self._unit)
        if found.outcome == "bad":
            return found
        self.delay_s = took_s
        if line.at_once != "bad" and line.least_delay_s is None:
            return self._soon(took_s)
        return Finding(
            "delay",
            "bad",
            f"short: our own bytes come back at once (in {duration(took_s)}) and nothing follows: a shorted "
            "connector, or a loop or an echo at this end of the line; the far end has no part in it",
            "check plug and cable, take loops off at this end, loop back at the far end; if this path may answer "
            "so soon (a simulator, a fibre), say link.least_delay_s = 0",
            cause="short",
        )

    def _soon(self, took_s: float) -> Finding:
        """Say that an answer came at once where it may be the far end's: what proves it is for a person to see."""
        refuse = "link.least_delay_s makes the check refuse an answer that comes too soon"
        if self._line.sending is self._line.receiving:
            text = (
                f"our own bytes come back at once (in {duration(took_s)}): from a far end without delay, or "
            )
            text += "from an echo or a short at this end (a loop behind a serial server is one)"
            advice = "be sure that the far end loops them back, and no server or gateway before it; " + refuse
        else:
            text = f"what is sent comes out of the other port at once (in {duration(took_s)})"
            past = "no cable" if self._line.wired else "nothing"
            advice = f"be sure that the device is between the two ports, and {past} past it; " + refuse
        return Finding("delay", "note", text, advice, cause="at_once")

    def _echoed(self, near_s: float, far_s: float | None = None) -> Finding:
        again = "" if far_s is None else f" (after {duration(near_s + far_s)})"
        return Finding(
            "delay",
            "bad",
            f"local echo: each byte comes back from this end of the line (after {duration(near_s)}), and again from "
            f"the far end{again}",
            "switch the device's echo off in [[link.before]] (many modems: ATE0), or the adapter's (two-wire RS-485)",
            cause="local_echo",
        )

    def _known_errors(self, probe: Probe) -> Finding:
        size = self._line.stretch_bytes
        stretch = make_stretch(self._line.pattern, self._line.bit_order, self._place, size)
        self._place += 8 * size
        probe.take()
        if not probe.send(stretch.data, self._patience_s):
            return self._stuck(probe, size)
        probe.wait_for_bytes(size, self._patience_s)
        probe.wait_for_quiet(QUIET_S, self._patience_s)
        heard = probe.take_bytes()
        found = judge(stretch, heard, self._unit)
        due = self._unanswered + stretch.data.tobytes()
        if self._unanswered and heard and found.outcome == "bad" and due.startswith(heard):
            return self._holds_back()
        return found

    def _stuck(self, probe: Probe, size: int) -> Finding:
        taken = probe.sent_bytes
        if probe.held:
            return Finding(
                "known errors",
                "bad",
                f"silence: {count(taken, 'byte')} were sent, and so little came back that "
                "link.max_in_flight_bits holds the rest",
                "check power and cables, that the far end loops back, and that the device is in its data mode",
                cause="silence",
            )
        return Finding(
            "known errors",
            "bad",
            f"the port takes no more: {count(taken, 'byte')} went out, and in {self._patience_s:g} s not one of the "
            f"other {count(size - taken, 'byte')}",
            "flow control holds: check that the device is on and in its data mode, the RTS/CTS wires, and link.flow",
            cause="flow_control",
        )

    def _pause(self, probe: Probe) -> Finding:
        self._cancel.wait(PAUSE_S)
        probe.check()
        heard = probe.take_bytes()
        if not heard:
            return Finding("pause", "good", "nothing came while sending paused")
        if is_text(heard):
            return Finding(
                "pause",
                "bad",
                f"the device talks by itself: {shown(heard)} came while sending paused",
                "switch its messages off while it carries data",
                cause="talks",
            )
        return Finding(
            "pause",
            "bad",
            f"{count(len(heard), 'byte')} came while sending paused: something else sends on this line "
            f"({looks_like(heard)})",
            "look for a second generator, a repeater, or fill bytes of the device, and switch them off",
            cause="other_generator",
        )

    def _jump(self, probe: Probe) -> Finding:
        period = self._line.pattern.period
        jump = JUMP_BITS if period is None else min(JUMP_BITS, 8 * (period // 16))
        if not jump:
            return Finding(
                "jump", "note", f"{self._line.pattern.name} repeats too soon for a jump in it to be seen"
            )
        size = self._line.stretch_bytes // 2
        first = self._stretch(size)
        self._place += jump
        expected = self._place - 8 * size  # place less bits received, beyond the jump
        data = np.concatenate([first, self._stretch(size)])
        before = expected - jump
        if not probe.send(data, self._patience_s):
            return self._stuck(probe, len(data))
        probe.wait_for_bytes(len(data), self._patience_s)
        segments = count_stretch(self._line.pattern, self._line.bit_order, probe.take_bytes(), self._unit)
        # A path that loses a byte now and then shifts the rest a little; the jump is far larger.
        near = min(8 * max(2, size // 100), jump // 2)

        def off(place: int, wanted: int) -> int:
            distance = place - wanted
            return distance if period is None else (distance + near) % period - near

        aligned = [s.place - s.start for s in segments if s.aligned and s.place is not None]
        if aligned and abs(off(aligned[-1], expected)) <= near and abs(off(aligned[0], before)) <= near:
            return Finding("jump", "good", "a jump in the pattern came back: it is our own stream")
        return Finding(
            "jump",
            "bad",
            "a jump in the pattern did not come back: what is received is not what we send",
            "look for another generator with the same pattern on the line, or the device's own test mode",
            cause="other_generator",
        )
