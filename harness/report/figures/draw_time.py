"""Drawing errors over time."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure as Sheet
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator, SymmetricalLogLocator

from harness.report.figures.canvas import BAR, BLUE, INK, LINE, PALE, RED, SOFT, legend, sheet
from harness.report.figures.drawings import Course, Floats
from harness.report.figures.scales import short_count, time_ticks

_WIDE = 30.0  # times the median: beyond it the scale is logarithmic


def course(drawing: Course) -> Sheet:
    """Draw errors a second, with slips, outages and gaps marked above and behind."""
    made, axes = sheet(214)
    whole = float(drawing.ends[-1])
    ceiling = _scale(axes, drawing)
    edges, mean, most = _steps(drawing)
    keys: list[Patch | Line2D] = []
    if drawing.column_s > 1:
        axes.fill_between(edges, most, step="post", color=PALE, linewidth=0)
        axes.plot(edges, most, drawstyle="steps-post", color=SOFT, linewidth=0.6)
        keys.append(Patch(facecolor=PALE, edgecolor=SOFT, linewidth=0.6, label="worst second"))
    axes.fill_between(edges, mean, step="post", color=BAR, linewidth=0)
    keys.insert(
        0, Patch(color=BAR, label="errors a second" if drawing.column_s == 1 else "mean errors a second")
    )
    _bands(axes, drawing, keys)
    if len(drawing.slips):
        at_height = np.full(len(drawing.slips), 0.85 if drawing.marks else 1.03)
        axes.plot(drawing.slips, at_height, marker="v", markersize=5, color=RED, linestyle="none",
                  transform=axes.get_xaxis_transform(), clip_on=False)  # fmt: skip
        keys.append(Line2D([], [], marker="v", color=RED, linestyle="none", markersize=5, label="slip"))
    _name_marks(axes, drawing)
    places, labels, unit = time_ticks(whole)
    axes.set_xticks(places, labels)
    axes.set_xlabel(f"time from the start, {unit}")
    axes.set_xlim(0, whole)
    axes.set_ylim(0, ceiling)
    lift = 0.09 if drawing.marks else 0.02
    above = 16 + 160 * lift + legend(axes, keys, [str(key.get_label()) for key in keys], lift=lift)
    height = 160 + 44 + above
    made.set_figheight(height / 72)
    made.subplots_adjust(left=0.115, right=0.98, top=1 - above / height, bottom=44 / height)
    return made


def _scale(axes: Axes, drawing: Course) -> float:
    """Choose the scale of errors; returns its upper end."""
    highest = float(drawing.most.max())
    some = drawing.most[drawing.most > 0]
    if highest > 50 and highest > _WIDE * float(np.median(some)):
        axes.set_yscale("symlog", linthresh=1, linscale=0.4)
        axes.yaxis.set_major_locator(SymmetricalLogLocator(base=10, linthresh=1))
        axes.yaxis.set_major_formatter(lambda value, _at: short_count(value))
        return highest * 2
    axes.yaxis.set_major_locator(MaxNLocator(5, integer=True, min_n_ticks=1))
    axes.yaxis.set_major_formatter(lambda value, _at: short_count(value))
    return max(highest * 1.08, 1.0)


def _steps(drawing: Course) -> tuple[Floats, Floats, Floats]:
    """Lay columns out as steps, with zero where there is no column."""
    edges: list[float] = []
    rows: list[tuple[float, float]] = []
    end = None
    for begin, stop, mean, most in zip(drawing.begins, drawing.ends, drawing.mean, drawing.most, strict=True):
        if end is not None and begin > end + 1e-3:
            edges.append(end)
            rows.append((0.0, 0.0))
        edges.append(float(begin))
        rows.append((float(mean), float(most)))
        end = float(stop)
    edges.append(float(end or 0.0))
    rows.append((0.0, 0.0))
    values = np.array(rows)
    return np.array(edges), values[:, 0], values[:, 1]


def _bands(axes: Axes, drawing: Course, keys: list[Patch | Line2D]) -> None:
    """Mark what was unaligned, silent or not measured, over the whole height behind the columns."""
    least = float(drawing.ends[-1]) / 300  # a band is seen, however short
    kinds = (
        ("unaligned", drawing.unaligned > 0, BLUE, ""),
        ("no bits came", drawing.silent > 0, RED, ""),
    )
    for label, where, colour, _hatch in kinds:
        if not where.any():
            continue
        for begin, stop in _joined(drawing, where):
            axes.axvspan(begin, max(stop, begin + least), ymin=0.94 if label == "unaligned" else 0.88,
                         ymax=1.0 if label == "unaligned" else 0.94, color=colour, linewidth=0)  # fmt: skip
            axes.axvspan(begin, max(stop, begin + least), color=colour, alpha=0.12, linewidth=0)
        keys.append(Patch(color=colour, label=label))
    for begin, stop in drawing.gaps:
        axes.axvspan(
            begin, max(stop, begin + least), facecolor="none", edgecolor=LINE, hatch="////", linewidth=0
        )
    if drawing.gaps:
        keys.append(Patch(facecolor="none", edgecolor=LINE, hatch="////", label="not measured"))


def _joined(drawing: Course, where: np.ndarray) -> list[tuple[float, float]]:
    found: list[tuple[float, float]] = []
    for begin, stop in zip(drawing.begins[where].tolist(), drawing.ends[where].tolist(), strict=True):
        if found and begin <= found[-1][1] + 1e-3:
            found[-1] = (found[-1][0], stop)
        else:
            found.append((begin, stop))
    return found


def _name_marks(axes: Axes, drawing: Course) -> None:
    """Name what begins where, as far as there is room."""
    whole = float(drawing.ends[-1])
    free_from = 0.0
    for at, label in drawing.marks:
        axes.axvline(at, color=LINE, linewidth=0.7, zorder=0)
        text = _short(label)
        room = whole * (len(text) * 0.0145 + 0.012)
        if at >= free_from and at + room <= whole * 1.02:
            free_from = at + room
            axes.text(at, 1.015, text, transform=axes.get_xaxis_transform(), color=INK, ha="left",
                      va="bottom", fontsize="small")  # fmt: skip


def _short(label: str) -> str:
    return label if len(label) <= 8 else f"{label[:7]}…"
