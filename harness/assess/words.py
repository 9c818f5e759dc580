"""Numbers and times in words, the same on the screen and on paper."""

from __future__ import annotations

import math
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any

from harness.record import Note
from harness.statistics import notation

ENDED_BY: Mapping[str, str] = {
    "plan": "its plan decided",
    "bits": "the profile's limit of bits was reached",
    "seconds": "the profile's limit of time was reached",
    "errors": "the profile's limit of errors was reached",
    "end_of_data": "the data came to their end",
    "interrupted": "it was interrupted",
    "fault": "something failed",
}
STATUS: Mapping[str, str] = {
    "running": "the run goes on",
    "cut": "the run was cut: the process that measured is gone",
    "failed": "something failed",
    "interrupted": "the run was interrupted",
    "completed": "the run was completed",
}


def how_it_ended(status: str, ended_by: str | None) -> str:
    """Say why a run is over, or that it is not."""
    return ENDED_BY.get(ended_by or "", "") if status == "completed" else STATUS[status]


def count(number: int, noun: str) -> str:
    """Write a count with its noun: ``1 error``, ``2 995 732 bits``."""
    digits = f"{number:,}".replace(",", "\u202f")
    return f"{digits} {noun}{'' if number == 1 else 's'}"


def slip_words(bits: int) -> str:
    """Say a slip in words: ``one byte lost``, ``3 bits inserted``."""
    verb = "lost" if bits < 0 else "inserted"
    size = abs(bits)
    number, noun = (size // 8, "byte") if size % 8 == 0 else (size, "bit")
    if number == 1:
        return f"one {noun} {verb}"
    return f"{count(number, noun)} {verb}"


def ratio(value: float | None) -> str:
    """Write a ratio such as a BER: ``1e-06`` becomes ``1e-6``, 1.234e-6 keeps three digits."""
    if value is None:
        return "none"
    return notation.ratio(value)


def percent(value: float, beside: float | None = None) -> str:
    """Write a share as a percentage, to three digits, that never rounds to 0 or 100 what is not.

    Parameters
    ----------
    beside
        Another share that stands beside it: digits are added until the two do not read alike.

    Examples
    --------
    >>> percent(0.05), percent(0.000899), percent(0.99996), percent(0.0010004, beside=0.001)
    ('5 %', '0.0899 %', '99.996 %', '0.10004 %')
    """
    share = 100 * value
    if 0 < share < 1e-3:
        return "under 0.001 %"
    if share in (0, 100) or share > 1_000:
        return f"{share:.0f} %"
    apart_from = [0.0, 100.0] if beside is None or beside == value else [0.0, 100.0, 100 * beside]
    for digits in range(3, 16):
        text = f"{share:.{digits}g}"
        if not any(math.isclose(float(text), other, rel_tol=1e-12) for other in apart_from):
            return f"{text} %"
    return f"{share:.16g} %"


def duration(seconds: float) -> str:
    """Write a duration: ``0.25 s``, ``12.3 s``, ``4 min 05 s``, ``11 h 02 min``."""
    if 0 < seconds < 0.1:
        return f"{1e3 * seconds:.3g} ms"
    if seconds < 60:
        return f"{seconds:.3g} s"
    whole = round(seconds)
    if whole < 3600:
        return f"{whole // 60} min {whole % 60:02d} s"
    if whole < 48 * 3600:
        return f"{whole // 3600} h {whole % 3600 // 60:02d} min"
    days = whole / 86_400
    return f"{days:.1f} days" if days < 1_000 else f"{days / 365.25:.3g} years"


def rate(bits_per_second: float | None) -> str:
    """Write a bit rate: ``48 kbit/s``."""
    if bits_per_second is None:
        return "unknown rate"
    if bits_per_second <= 0 or not math.isfinite(bits_per_second):
        return f"{bits_per_second:g} bit/s"
    for unit, scale in (("Gbit/s", 1e9), ("Mbit/s", 1e6), ("kbit/s", 1e3)):
        if bits_per_second >= scale:
            return f"{bits_per_second / scale:.4g} {unit}"
    return f"{bits_per_second:.4g} bit/s"


def iso(at_ns: int | None) -> str | None:
    """Write a UTC time in ns as ISO 8601 with milliseconds."""
    if at_ns is None:
        return None
    moment = datetime.fromtimestamp(at_ns // 1_000_000 / 1000, tz=UTC)
    return moment.strftime("%Y-%m-%dT%H:%M:%S.") + f"{moment.microsecond // 1000:03d}Z"


def local_time(at_ns: int | None) -> str:
    """Write the local time of day, to the second."""
    if at_ns is None:
        return ""
    return datetime.fromtimestamp(at_ns / 1e9).astimezone().strftime("%H:%M:%S")


def local_date(at_ns: int | None) -> str:
    """Write the local date and time, to the second, with its offset."""
    if at_ns is None:
        return ""
    return datetime.fromtimestamp(at_ns / 1e9).astimezone().strftime("%Y-%m-%d %H:%M:%S %z")


def note_words(note: Note) -> str:
    """Say what was noted, who did it and when."""
    return f"“{note.text}” — {note.who}, {local_date(note.at)}"


def value_words(value: Any) -> str:
    """Write a setting's value for people: no braces, and powers of ten as everywhere else."""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return ratio(value) if 0 < abs(value) < 0.01 else f"{value:g}"
    if isinstance(value, Mapping):
        return ", ".join(f"{k} {value_words(v)}" for k, v in value.items() if v is not None)
    if isinstance(value, list | tuple):
        return ", ".join(value_words(v) for v in value) or "none"
    return "nothing" if value is None else str(value)
