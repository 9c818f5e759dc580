"""Figures over time: errors, slips, outages and what was not measured, second by second or in columns of several."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np

from harness.assess.words import count, duration
from harness.report.document import Figure
from harness.report.figures.drawings import Course
from harness.report.material import Material, Measured
from harness.report.phrases import number, point_label, point_name

COLUMNS = 360
_S = 1e-9


def course_figures(material: Material) -> list[Figure]:
    """Draw errors over time: one figure for each direction, or one for all points of a sweep."""
    points = [m for m in material.points if len(m.series.at)]
    if not points:
        return []
    if material.swept:
        return [_course(material, points, "")]
    several = len(points) > 1
    return [_course(material, [m], f", {point_name(m)}" if several else "") for m in points]


def _course(material: Material, points: Sequence[Measured], name: str) -> Figure:
    series = [m.series for m in points]
    start = int(min(s.at[0] for s in series))
    at = np.concatenate([s.at for s in series])
    order = np.argsort(at, kind="stable")
    begins = (at[order] - start) * _S
    lasts = np.concatenate([s.duration_ns for s in series])[order] * _S
    errors = np.concatenate([s.errors for s in series])[order]
    received = np.concatenate([s.received for s in series])[order]
    unaligned = np.concatenate([s.unaligned for s in series])[order]
    silent = np.concatenate([s.silent for s in series])[order]
    slips = np.concatenate([s.slips for s in series])[order]
    whole = float(begins[-1] + max(lasts[-1], 1e-3))
    column_s = 1.0 if whole <= COLUMNS else float(_round_up(whole / COLUMNS))
    place = (begins // column_s).astype(np.int64)
    # Stored seconds begin within a whisker of whole ones: what begins just before a column belongs to it.
    place = np.where(begins - place * column_s > column_s - 1e-3, place + 1, place)
    columns, first = np.unique(place, return_index=True)
    ends_at = np.append(first[1:], len(place))
    n = ends_at - first

    def summed(values: np.ndarray) -> np.ndarray:
        return np.add.reduceat(values.astype(np.float64), first)

    seconds = np.maximum(n, 1)
    bits = np.maximum(summed(received), 1)
    drawn = Course(
        begins=np.where(n == 1, begins[first], columns * column_s),
        ends=np.where(n == 1, begins[first] + lasts[first], (columns + 1) * column_s),
        mean=summed(errors) / seconds,
        most=np.maximum.reduceat(errors.astype(np.float64), first),
        unaligned=summed(unaligned) / bits,
        silent=summed(silent) / seconds,
        slips=np.repeat(begins[slips > 0], 1),
        gaps=tuple(_gaps(material, start, whole)),
        marks=tuple(
            (max(0.0, (int(m.series.at[0]) - start) * _S), point_label(m)) for m in points if len(points) > 1
        ),
        column_s=column_s,
    )
    title = f"Errors over time{name}" + (
        "" if column_s == 1 else f", in columns of {duration(column_s)}: mean and worst second"
    )
    worst = int(errors.max())
    words = (
        f"{count(len(errors), 'second')}; the worst has {count(worst, 'error')}, "
        f"{number(int(np.count_nonzero(errors)))} have any; {count(int(slips.sum()), 'slip')}, "
        f"{number(int(np.count_nonzero(unaligned)))} seconds with unaligned bits, "
        f"{number(int(np.count_nonzero(silent)))} without bits"
    )
    return Figure(title, words, drawn)


def _round_up(seconds: float) -> int:
    steps = (2, 5, 10, 15, 20, 30, 60, 120, 180, 300, 600, 900, 1800, 3600)
    return next((s for s in steps if s >= seconds), int(-(-seconds // 3600)) * 3600)


def _gaps(material: Material, start: int, whole: float) -> list[tuple[float, float]]:
    """List what lies between sittings, s from the start."""
    sittings = material.run.sittings
    seconds = [s for m in material.points for s in m.series.seconds]
    found = []
    for before, after in pairwise(sittings):
        ends = [s.at + s.duration_ns for s in seconds if s.sitting == before.index]
        begins = [s.at for s in seconds if s.sitting == after.index]
        if ends and begins and min(begins) > max(ends):
            found.append(((max(ends) - start) * _S, min(whole, (min(begins) - start) * _S)))
    return found
