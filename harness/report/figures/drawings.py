"""What the figures show, as data: any form of the report can say it in words without drawing it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Counts = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Bar:
    """Where a BER lies; `lower` 0 and `upper` 1 where that side is open."""

    label: str
    lower: float
    upper: float
    measured: float | None = None
    fades_from: float | None = None  # towards 0: nothing is claimed from here on
    against: bool = False


@dataclass(frozen=True, slots=True)
class Ruler:
    """Bit error ratios on a scale of decades, the bounds as bars, the requirement as a mark."""

    bars: tuple[Bar, ...]
    mark: float | None
    flag: str
    first: int = 0  # the scale's left end: a BER of 1
    last: int = 15  # its right end: 1e-15


@dataclass(frozen=True, slots=True)
class Span:
    """Where a value lies; None where a side has no bound."""

    label: str
    value: float
    lower: float | None
    upper: float | None
    against: bool = False


@dataclass(frozen=True, slots=True)
class Spans:
    """Values of many units on one scale, the bounds as bars, the requirement and the median as marks."""

    axis: str
    spans: tuple[Span, ...]
    mark: float | None
    flag: str
    median: float | None
    edges: tuple[float, float]  # of the scale: the same where the units need several figures


@dataclass(frozen=True, slots=True, eq=False)
class Course:
    """Errors over time, in columns of equal length; all arrays of shape (columns,)."""

    begins: Floats  # s from the start
    ends: Floats
    mean: Floats  # errors a second
    most: Floats  # of the worst second in the column
    unaligned: Floats  # share of the bits
    silent: Floats  # share of the seconds in which bits were due and none came
    slips: Floats  # (k,) s from the start
    gaps: tuple[tuple[float, float], ...]  # not measured: between sittings
    marks: tuple[tuple[float, str], ...] = ()  # (s from the start, what begins there)
    column_s: float = 1.0


@dataclass(frozen=True, slots=True, eq=False)
class Stairs:
    """The plan's stairs, and the path that the run took between them."""

    kind: str
    longest_bits: int
    errors: Counts  # (rows,) rows of the stairs
    accept_at: Counts  # bits; with so many errors the plan accepts from here on
    reject_at: Counts  # bits; -1: never
    path_bits: Floats  # (k,) compared bits, ascending
    path_errors: Floats  # (k,) errors so far
    decided: Literal["accepted", "rejected", ""]
    total_errors: int


@dataclass(frozen=True, slots=True, eq=False)
class Gaps:
    """Distances between neighbouring errors, in bits, over octaves; arrays of shape (octaves,)."""

    edges: Floats  # (octaves + 1,) bits
    counted: Counts
    expected: Floats  # of as many independent errors at the same BER
    event_gap_bits: int | None


@dataclass(frozen=True, slots=True, eq=False)
class Bursts:
    """Sizes of error events, in errors; arrays of shape (sizes,)."""

    sizes: Counts
    counted: Counts
    last_is_more: bool  # the last size stands for all larger ones too


@dataclass(frozen=True, slots=True)
class CurvePoint:
    """A sweep's point on the curve."""

    at: float
    ber: float | None  # None: no bit was compared
    lower: float
    upper: float
    errors: int


@dataclass(frozen=True, slots=True, eq=False)
class CurveSeries:
    """The points of one curve; several where a sweep has several axes."""

    label: str
    points: tuple[CurvePoint, ...]
    fit: tuple[Floats, Floats] | None = None  # (values, BER)
    sensitivity: tuple[float | None, float | None, float | None] | None = None  # value, lower, upper


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """BER against a condition: points with bounds, the fit, theory, and the sensitivity."""

    axis: str
    series: tuple[CurveSeries, ...]
    theory: tuple[Floats, Floats] | None = None
    theory_label: str = ""
    target: float | None = None


Drawing = Ruler | Course | Stairs | Gaps | Bursts | Curve | Spans
