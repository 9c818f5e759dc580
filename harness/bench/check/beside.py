"""What is looked at beside a loop: isolation, an echo at one end of two ports, and links that only receive."""

from __future__ import annotations

import threading
from collections.abc import Iterator

from drivers.contract import Link
from harness.assess.words import count, percent
from harness.bench.check.answers import count_stretch, looks_like
from harness.bench.check.findings import Finding
from harness.bench.check.path import LEAST_BYTES, LISTEN_S, QUIET_S, Line
from harness.bench.check.probe import Probe
from harness.record import BitOrder
from harness.signal.patterns import Pattern

LISTEN_LONGEST_S = 6.0  # where nothing is sent, for a pattern to come


def lost_at_most(line: Line, cancel: threading.Event) -> Finding:
    """Prove that the link is lost: at the highest attenuation nothing may come around the attenuator."""
    with line.probe(cancel) as probe:
        data = line.pattern.packed(0, max(2_048, line.stretch_bytes // 4), line.bit_order)
        probe.send(data, 1.0)
        probe.wait_for_bytes(len(data), max(2.0, line.drain_s))
        heard = probe.take_bytes()
    segments = count_stretch(line.pattern, line.bit_order, heard, 8)
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
        cause="leak",
    )


def echo_on(link: Link, cancel: threading.Event) -> Finding:
    """Look whether the port that has just sent also hears: both directions at once would count that."""
    with Probe(None, link, pace_bps=None, most_in_flight=None, cancel=cancel) as probe:
        cancel.wait(QUIET_S)
        probe.check()
        heard = probe.take_bytes()
    if not heard:
        return Finding("echo", "good", "the port that sent heard nothing of it")
    return Finding(
        "echo",
        "bad",
        f"local echo: the port that sent heard {count(len(heard), 'byte')} meanwhile, which would be counted in the "
        "other direction",
        "switch the echo off at that end",
        cause="local_echo",
    )


def listen_only(
    link: Link, pattern: Pattern, bit_order: BitOrder, cancel: threading.Event
) -> Iterator[Finding]:
    """Listen where nothing is sent: the pattern has to come by itself."""
    with Probe(None, link, pace_bps=None, most_in_flight=None, cancel=cancel) as probe:
        probe.wait_for_bytes(LEAST_BYTES, LISTEN_LONGEST_S)
        if not link.traits.finite:
            cancel.wait(LISTEN_S)
        heard = probe.take_bytes()
        if not heard:
            probe.check()
    if not heard:
        yield Finding(
            "listen",
            "bad",
            f"silence: nothing came in {LISTEN_LONGEST_S:g} s",
            "start the transmitter at the far end, check power, cable and the device's data mode",
            cause="silence",
        )
        return
    segments = count_stretch(pattern, bit_order, heard, 8 if link.traits.whole_bytes else 1)
    compared, errors = (sum(getattr(s.tally, what) for s in segments) for what in ("compared", "errors"))
    if compared < 4 * len(heard):
        yield Finding(
            "listen",
            "bad",
            f"{count(len(heard), 'byte')} came, and they are not {pattern.name}, {bit_order} first "
            f"({looks_like(heard)})",
            "set [pattern] name and bit_order to what the far end sends; check baud, parity and data bits",
            cause="other_pattern",
        )
        return
    yield Finding(
        "listen", "good", f"{pattern.name} comes, with {percent(errors / compared)} of its bits wrong"
    )
    yield Finding("path", "note", "one-way: where the pattern is made cannot be proven from here")
