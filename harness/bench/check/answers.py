"""What an answer says of the path: bytes sent against bytes that came. No ports and no clock here."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.assess.words import count, ratio
from harness.bench.check.findings import Finding
from harness.record import BitOrder, Segment
from harness.signal.counter import Counter
from harness.signal.identify import identify
from harness.signal.patterns import Pattern

STEP = "known errors"
FLIPS = 16  # known errors in a stretch: told from chance also on a path with many errors of its own
LOST_AT_MOST = 0.005  # of the bytes; a device may lose a byte, a path that loses more is not set up
BESIDE = 16  # bytes that may come or be missing beside, of short bursts before
LIKE = 0.5  # share of bytes that agree, from which on two streams are taken for one; chance gives 0.01 to 0.2
SHOWN = 60  # characters of a text


@dataclass(frozen=True, slots=True)
class Stretch:
    """What was sent: a stretch of the pattern with known errors in it.

    Attributes
    ----------
    place
        The pattern's bit that the first bit is.
    data
        Bytes as sent, errors included, shape (n,).
    flips
        Bits of the stretch that were turned over, ascending.
    """

    pattern: Pattern
    bit_order: BitOrder
    place: int
    data: NDArray[np.uint8]
    flips: tuple[int, ...]


def make_stretch(pattern: Pattern, bit_order: BitOrder, place: int, size: int) -> Stretch:
    """Make a stretch of `size` bytes with `FLIPS` errors at uneven distances."""
    data = pattern.packed(place, size, bit_order).copy()
    bits = 8 * size
    flips = tuple(sorted({int(bits * (0.25 + 0.7 * ((0.618034 * k) % 1.0))) for k in range(1, FLIPS + 1)}))
    for bit in flips:
        inside = bit % 8
        data[bit // 8] ^= 1 << (inside if bit_order == "lsb" else 7 - inside)
    return Stretch(pattern, bit_order, place, data, flips)


def count_stretch(pattern: Pattern, bit_order: BitOrder, heard: bytes, unit: int) -> list[Segment]:
    """Align and count what came."""
    counter = Counter(pattern, bit_order=bit_order, slip_unit=unit)
    return [*counter.feed(heard), *counter.finish()]


def judge(stretch: Stretch, heard: bytes, unit: int) -> Finding:
    """Say what came back for a stretch; `heard` holds everything that came until it was quiet again."""
    size = len(stretch.data)
    if not heard:
        return silence(size)
    if len(heard) >= 1.5 * size:
        return twice(size, len(heard))
    mangled = _mangled(stretch.data, heard)
    if mangled is not None:
        return mangled
    segments = count_stretch(stretch.pattern, stretch.bit_order, heard, unit)
    if sum(s.tally.compared for s in segments) < 4 * len(heard):  # under half of the bits
        return _another_stream(stretch, heard)
    return _errors_at_their_places(stretch, heard, segments)


def silence(size: int) -> Finding:
    """Nothing came back at all."""
    return Finding(
        STEP,
        "bad",
        f"silence: {count(size, 'byte')} were sent and not a single one came back",
        "check power and cables, that the far end loops back, and that the device is in its data mode",
        cause="silence",
    )


def twice(sent: int, heard: int) -> Finding:
    """Everything came back more than once."""
    return Finding(
        STEP,
        "bad",
        f"local echo: {count(sent, 'byte')} were sent and {count(heard, 'byte')} came back: each one comes "
        "more than once, from this end of the line, and again from the far end",
        "switch the device's echo off in [[link.before]] (many modems: ATE0), or the adapter's (two-wire RS-485)",
        cause="local_echo",
    )


def _errors_at_their_places(stretch: Stretch, heard: bytes, segments: Sequence[Segment]) -> Finding:
    size, wanted = len(stretch.data), len(stretch.flips)
    found = _found(stretch, segments)
    errors = sum(s.tally.errors for s in segments)
    compared = sum(s.tally.compared for s in segments)
    lost = size - len(heard)
    if abs(lost) > LOST_AT_MOST * size + BESIDE:
        return _bytes_missing(size, len(heard))
    if found < (wanted if errors <= found else 0.5 * wanted):
        return Finding(
            STEP,
            "bad",
            f"the pattern came back, but only {found} of {wanted} known errors did: the device sends a pattern of "
            "its own making, or mends what it is sent, so its errors would not be seen",
            "end the device's own test mode; it must give back the very bits that it received",
            cause="made_anew",
        )
    came = f"all {wanted}" if found == wanted else f"{found} of {wanted}"
    text = f"{came} known errors came back at their places"
    own = errors - found
    if own > 0:
        text += f"; beside them {count(own, 'error')} of the path's own (a BER of {ratio(own / compared)})"
    if lost:
        text += f"; {count(abs(lost), 'byte')} {'lost' if lost > 0 else 'too many'}"
    if any(s.inverted for s in segments if s.aligned):
        text += "; every bit comes back inverted, and is counted so"
    return Finding(STEP, "good", text, own=(max(0, own), compared, abs(lost)))


def _found(stretch: Stretch, segments: Sequence[Segment]) -> int:
    """How many known errors came, each at its place in what was sent, also where bytes are missing before."""
    return len(
        {bit for s in segments if s.place is not None for bit in _sent_bits(stretch, s)} & {*stretch.flips}
    )


def _sent_bits(stretch: Stretch, segment: Segment) -> Iterator[int]:
    """Which bits of the stretch a segment's errors were: the nearest that the pattern's place allows."""
    assert segment.place is not None
    shift = segment.place - stretch.place - segment.start
    period = stretch.pattern.period
    if period is not None:
        shift = (shift + period // 2) % period - period // 2
    for position in segment.positions:
        yield int(position) + shift


def _bytes_missing(sent: int, heard: int) -> Finding:
    if heard > sent:
        return Finding(
            STEP,
            "bad",
            f"{count(heard - sent, 'byte')} more came than the {count(sent, 'byte')} that were sent: the device "
            "puts in bytes of its own",
            "switch off its messages, its fill bytes and its command echo while it carries data",
            cause="bytes_added",
        )
    return Finding(
        STEP,
        "bad",
        f"{_part(sent - heard, sent)} did not come back: bytes are sent faster than the device "
        "carries them, and nothing holds the sender back",
        "set link.pace_bps to the rate on the air, or link.max_in_flight_bits to what the device buffers, or use "
        'flow = "rtscts" with the wires for it',
        cause="bytes_lost",
    )


def _mangled(sent: NDArray[np.uint8], heard: bytes) -> Finding | None:
    """Recognise our own stream with some byte values changed; parts of it may well align."""
    came = np.frombuffer(heard, dtype=np.uint8)
    number = min(len(sent), len(came))
    if sent.max() > 127 >= came.max() and np.mean((sent[:number] & 0x7F) == came[:number]) > LIKE:
        return Finding(
            STEP,
            "bad",
            "our bytes came back without their eighth bit: some port on the way has 7 data bits",
            "set 8 data bits and no parity on the device and on every port in between, or link.data_bits = 7 here",
            cause="seven_bits",
        )
    mangles = _control_share(came) < 0.25 * _control_share(sent)
    if mangles and text_likeness(sent, heard) > LIKE:
        return Finding(
            STEP,
            "bad",
            "echo: our own bytes came back as a terminal or a command interpreter shows them, their control "
            "characters mangled",
            "bring the device into its data mode with [[link.before]], and switch its command echo off (many modems: "
            "ATE0)",
            cause="text_echo",
        )
    return None


def _control_share(data: NDArray[np.uint8]) -> float:
    """Share of control characters, those that end a line left out."""
    return float(np.mean(((data < 32) & (data != 10) & (data != 13)) | (data == 127)))


def _part(part: int, whole: int) -> str:
    return f"{count(part, 'byte').rsplit(' ', 1)[0]} of {count(whole, 'byte')}"


def _another_stream(stretch: Stretch, heard: bytes) -> Finding:
    sent = stretch.data
    came = np.frombuffer(heard, dtype=np.uint8)
    number = min(len(sent), len(came))
    bits = np.unpackbits(sent.reshape(-1, 1), axis=1)
    mirrored = np.packbits(bits[:, ::-1], axis=1).ravel()
    if np.mean(mirrored[:number] == came[:number]) > LIKE:
        return Finding(
            STEP,
            "bad",
            "our bytes came back with their bits in the other order: the device takes the first bit of a byte for "
            "the last one, in one direction only",
            "set the device's bit order the same in both directions; pattern.bit_order cannot mend a loop",
            cause="bit_order",
        )
    found = identify(came)
    if found.pattern is not None:
        inverted = ", inverted" if found.inverted else ""
        return Finding(
            STEP,
            "bad",
            f"another pattern came back: {found.pattern}{inverted}, {found.bit_order} first; the device sends it "
            "by itself",
            "end the device's own test mode, so that it loops back what it receives",
            cause="other_pattern",
        )
    return Finding(
        STEP,
        "bad",
        f"{count(len(heard), 'byte')} came back that have no likeness to what was sent ({looks_like(heard)})",
        "check baud, parity and data bits on both sides, that the device is in its data mode, and its scrambler",
        cause="no_likeness",
    )


def text_likeness(sent: NDArray[np.uint8], heard: bytes) -> float:
    """How much of what came is our printable characters in their order: 0 to 1 (chance: about 0.2)."""
    import difflib

    def printable(data: bytes) -> bytes:
        return bytes(byte for byte in data if 32 < byte < 127)

    came = printable(heard[:1024])
    if len(came) < 8:
        return 0.0
    ours = printable(sent[:1024].tobytes())
    blocks = difflib.SequenceMatcher(None, ours, came, autojunk=False).get_matching_blocks()
    return sum(block.size for block in blocks) / min(len(came), len(ours) or 1)


def looks_like(heard: bytes) -> str:
    """Say in a few words what bytes that nobody sent look like."""
    from harness.bench.identification import in_words

    if is_text(heard):
        return f"text: {shown(heard)}"
    return in_words(np.frombuffer(heard, dtype=np.uint8))


def is_text(heard: bytes) -> bool:
    """Whether it could be words of the device."""
    return len(heard) >= 2 and all(32 <= byte < 127 or byte in b"\r\n\t" for byte in heard)


def shown(heard: bytes) -> str:
    """Write bytes out as a person would read them, cut to a line."""
    names = {9: "\\t", 10: "\\n", 13: "\\r"}
    words = "".join(
        chr(b) if 32 <= b < 127 else names.get(b, f"\\x{b:02x}") for b in heard[:SHOWN].strip(b"\r\n")
    )
    return f'"{words[:SHOWN]}{"..." if len(words) > SHOWN or len(heard) > SHOWN else ""}"'
