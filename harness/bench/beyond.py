"""What came after the last bit sent: no errors against a pattern that was never sent, but inserted bits."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.words import slip_words
from harness.record import Event, Segment, Tally


def beyond_words(bits: int) -> str:
    """Say it: ``one byte inserted after the last bit sent``."""
    return f"{slip_words(bits)} after the last bit sent"


def bits_beyond(segment: Segment, sent_end: int | None, surplus: int) -> int:
    """How many of a segment's last bits were never sent: by its place and by the count of bits, the fewer.

    Parameters
    ----------
    segment
        Compared; 0 where the positions of its errors are not known so far.
    sent_end
        Received bit that the bit after the last one sent would be; None where that is not known.
    surplus
        Bits that came beside those that were sent.
    """
    extra = 0 if sent_end is None else min(segment.end - sent_end, surplus, segment.tally.received)
    known = segment.aligned and segment.known_bits >= segment.tally.received - extra
    return extra if known and extra > 0 else 0


def cut_off(segment: Segment, bit: int, slip: Event) -> Iterator[Segment]:
    """Give a compared segment up to a received bit, if it has any there, and the rest as unaligned with a slip.

    Parameters
    ----------
    segment
        Compared; the positions of errors before the bit must be known.
    bit
        The first bit that was never sent.
    slip
        The event that the rest carries.
    """
    if bit > segment.start:
        head, rest = segment.split(bit - segment.start)
        yield head
    else:
        rest = segment
    bits = rest.tally.received
    yield Segment(rest.start, Tally(bits, 0, bits), aligned=False, events=(*rest.events, slip))
