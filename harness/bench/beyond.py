"""What came after the last bit sent: no errors against a pattern that was never sent, but inserted bits."""

from __future__ import annotations

from collections.abc import Iterator

from harness.assess.words import slip_words
from harness.record import Event, Segment, Tally


def beyond_words(bits: int) -> str:
    """Say it: ``one byte inserted after the last bit sent``."""
    return f"{slip_words(bits)} after the last bit sent"


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
