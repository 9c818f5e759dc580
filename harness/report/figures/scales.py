"""What is written beside axes: powers of ten, counts, times, as the rest of the report writes them."""

from __future__ import annotations

from collections.abc import Sequence


def power(exponent: int) -> str:
    """Write a power of ten as the report does: 1e-6, and 1."""
    return "1" if exponent == 0 else f"1e{exponent}"


def short_count(value: float) -> str:
    """Write a count shortly: 1 200 as 1.2k, 3 000 000 as 3M."""
    for limit, unit in ((1e15, "P"), (1e12, "T"), (1e9, "G"), (1e6, "M"), (1e3, "k")):
        if abs(value) >= limit:
            return f"{value / limit:.4g}{unit}"
    return f"{value:.4g}"


def octave(exponent: int) -> str:
    """Write a power of two shortly: 64, 1k (1 024), 1M."""
    value, units = 2**exponent, ("", "k", "M", "G", "T", "P")
    step = exponent // 10
    return f"{value >> (10 * step)}{units[step]}" if step < len(units) else f"2^{exponent}"


def time_ticks(whole_s: float) -> tuple[list[float], list[str], str]:
    """Give (places in s, labels, unit) for a time axis from 0 on."""
    unit, scale = ("s", 1.0) if whole_s <= 240 else ("min", 60.0) if whole_s <= 4 * 3600 else ("h", 3600.0)
    whole = whole_s / scale
    steps: Sequence[float] = (0.1, 0.2, 0.5, 1, 2, 5, 10, 15, 20, 30, 60, 120, 240, 480, 960, 1920)
    step = next((s for s in steps if whole / s <= 8), whole / 8)
    ticks = [k * step for k in range(int(whole / step + 1e-9) + 1)]
    return [t * scale for t in ticks], [f"{t:g}" for t in ticks], unit
