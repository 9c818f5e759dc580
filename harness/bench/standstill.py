"""When this computer stood still: suspended, paused, or far too busy. That is not the device's fault."""

from __future__ import annotations

LEAST_NS = 1_000_000_000


def standstill_ns(begun_ns: int, ended_ns: int, wait_s: float) -> int:
    """By how much a wait took longer than was asked for; 0 where that is no more than can happen at any time.

    Parameters
    ----------
    begun_ns, ended_ns
        Monotonic times around the wait.
    wait_s
        The longest time that it was to take.
    """
    over = ended_ns - begun_ns - int(wait_s * 1e9)
    return over if over >= LEAST_NS else 0
