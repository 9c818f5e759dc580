"""Run keys: UUIDs of version 7 (RFC 9562), which sort by the time at which they were made."""

from __future__ import annotations

import secrets
import uuid


def new_key(now_ns: int) -> str:
    """Make a run's key.

    Parameters
    ----------
    now_ns
        UTC, ns since 1970. The millisecond fills the first 48 bits and its fraction the next 12
        (RFC 9562, section 6.2, method 3), so keys of one bench sort to a quarter of a microsecond.
    """
    milliseconds, rest = divmod(now_ns, 1_000_000)
    fraction = rest * 4096 // 1_000_000
    value = (
        (milliseconds & (1 << 48) - 1) << 80 | 0x7 << 76 | fraction << 64 | 0b10 << 62 | secrets.randbits(62)
    )
    return str(uuid.UUID(int=value))
