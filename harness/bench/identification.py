"""Which pattern a capture holds, found out where it is not told, and said in words."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from harness.bench.examine import Capture
from harness.record import BitOrder
from harness.signal.identify import Identification, identify
from harness.signal.patterns import parse_pattern

Order = BitOrder | Literal["auto"]


@dataclass(frozen=True, slots=True)
class Identified:
    """What came of looking: a capture that can be counted, or words about what the stream looks like."""

    capture: Capture | None
    words: str
    confidence: float


def identify_capture(
    data: NDArray[np.uint8],
    pattern: str,
    order: Order,
    rate_bps: float | None,
    read: Callable[[str], bytes] | None,
) -> Identified:
    """Find pattern and order; raises `PatternError` for a name that is none."""
    found = identify(data, pattern, order, read=read)
    if found.pattern is None or found.bit_order is None:
        what = "no known pattern fits" if pattern.lower() == "auto" else f"it is not {pattern}"
        return Identified(None, f"{what}: {describe(found)}", 0.0)
    named = parse_pattern(found.pattern, bit_order=found.bit_order, read=read)
    capture = Capture(data, named, found.bit_order, rate_bps, tuple(found.alternatives))
    return Identified(capture, describe(found), found.confidence)


def describe(found: Identification) -> str:
    """Say what was found."""
    if found.pattern is None:
        return found.look.text if found.look is not None else "it looks like nothing in particular"
    inverted = ", inverted" if found.inverted else ""
    also = f"; {', '.join(found.alternatives)} fits as well" if found.alternatives else ""
    doubt = 1 - found.confidence
    chance = "" if found.confidence <= 0 else f" (chance of a mistake under {max(doubt, 1e-15):.0e})"
    return f"{found.pattern}{inverted}, {found.bit_order} first{chance}{also}"


def in_words(data: NDArray[np.uint8]) -> str:
    """Say in a few words what a stretch of received bytes looks like."""
    found = identify(data)
    return f"it looks like {describe(found)}" if found.pattern is not None else describe(found)
