"""Drawing a sweep's curve."""

from __future__ import annotations

import math

from matplotlib.axes import Axes
from matplotlib.figure import Figure as Sheet
from matplotlib.ticker import LogLocator, NullFormatter

from harness.report.figures.canvas import BLUE, INK, LINE, PALE, PAPER, RED, SOFT, legend, sheet
from harness.report.figures.drawings import Curve, CurvePoint, CurveSeries
from harness.report.figures.scales import power

_MARKERS = "osD^v<>"
_LINES = ("-", "--", ":", "-.")


def curve(drawing: Curve) -> Sheet:
    """Draw BER on a scale of decades against what was stepped."""
    made, axes = sheet(300)
    points = [p for s in drawing.series for p in s.points]
    lowest = _lowest(drawing, points)
    axes.set_yscale("log")
    axes.set_ylim(lowest, 1.0)
    at = [p.at for p in points]
    room = max((max(at) - min(at)) * 0.05, 0.5)
    axes.set_xlim(min(at) - room, max(at) + room)
    _show_sensitivity(axes, drawing, lowest)
    if drawing.theory is not None:
        axes.plot(
            *drawing.theory, color=BLUE, linewidth=1.2, linestyle=(0, (5, 2)), label=drawing.theory_label
        )
    several = len(drawing.series) > 1
    for number, series in enumerate(drawing.series):
        if series.fit is not None:
            line = _LINES[number % len(_LINES)]
            label = None if several else "fitted"
            axes.plot(*series.fit, color=INK, linewidth=1.4, linestyle=line, label=label)
        _points(axes, series, number, lowest, several=several)
    axes.yaxis.set_major_locator(LogLocator(numticks=10))
    axes.yaxis.set_minor_formatter(NullFormatter())
    axes.yaxis.set_major_formatter(lambda value, _at: power(round(math.log10(value))) if value > 0 else "0")
    axes.grid(axis="y", color=LINE, linewidth=0.5)
    axes.set_axisbelow(True)
    axes.set_xlabel(drawing.axis)
    axes.set_ylabel("BER")
    handles, labels = axes.get_legend_handles_labels()
    above = 18 + legend(axes, handles, labels)
    height = 246 + 45 + above
    made.set_figheight(height / 72)
    made.subplots_adjust(left=0.125, right=0.975, top=1 - above / height, bottom=45 / height)
    return made


def _lowest(drawing: Curve, points: list[CurvePoint]) -> float:
    shown = [p.lower for p in points if p.lower > 0]
    shown += [p.upper / 3 for p in points if p.ber is not None and p.lower <= 0]
    shown += [drawing.target / 3] if drawing.target else []
    return float(10 ** math.floor(math.log10(max(min(shown, default=1e-9), 1e-18))))


def _points(axes: Axes, series: CurveSeries, number: int, lowest: float, *, several: bool) -> None:
    marker = _MARKERS[number % len(_MARKERS)]
    label = series.label or "points with bounds"
    for p in series.points:
        if p.ber is None:
            axes.plot(
                [p.at], [0.5], marker="x", color=RED, markersize=7, markeredgewidth=1.4, linestyle="none"
            )
            continue
        bottom = p.lower if p.lower > 0 else lowest
        axes.plot([p.at, p.at], [bottom, p.upper], color=INK, linewidth=1.1)
        axes.plot([p.at], [p.upper], marker="_", color=INK, markersize=7, linestyle="none")
        if p.lower > 0:
            axes.plot([p.at], [p.lower], marker="_", color=INK, markersize=7, linestyle="none")
            axes.plot([p.at], [p.ber], marker=marker, color=PAPER, markeredgecolor=INK, markersize=5.5,
                      markeredgewidth=1.2, linestyle="none")  # fmt: skip
        else:
            axes.plot([p.at], [lowest * 1.15], marker="v", color=INK, markersize=5, linestyle="none")
    axes.plot(
        [], [], marker=marker, color=PAPER, markeredgecolor=INK, markersize=5.5, linestyle="none", label=label
    )
    if several and series.fit is None:
        drawn = [p for p in series.points if p.ber]
        axes.plot([p.at for p in drawn], [p.ber or 0.0 for p in drawn], color=SOFT, linewidth=0.9,
                  linestyle=_LINES[number % len(_LINES)], zorder=1)  # fmt: skip
    if any(p.ber is None for p in series.points):
        axes.plot([], [], marker="x", color=RED, markersize=7, linestyle="none", label="never aligned")


def _show_sensitivity(axes: Axes, drawing: Curve, lowest: float) -> None:
    if drawing.target is None:
        return
    axes.axhline(drawing.target, color=RED, linewidth=0.9, linestyle=(0, (4, 2)))
    for series in drawing.series:
        if series.sensitivity is not None:
            _mark_sensitivity(axes, drawing.target, series.sensitivity, lowest)


def _mark_sensitivity(
    axes: Axes, target: float, found: tuple[float | None, float | None, float | None], lowest: float
) -> None:
    value, lower, upper = found
    left, right = axes.get_xlim()
    if lower is not None or upper is not None:
        start = left if lower is None else max(lower, left)
        stop = right if upper is None else min(upper, right)
        axes.axvspan(start, stop, color=PALE, linewidth=0, zorder=0)
    if value is not None:
        axes.plot([value, value], [lowest, target], color=RED, linewidth=1.1)
        axes.plot([value], [target], marker="o", color=RED, markersize=4)
