"""Drawing the ruler and the stairs."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure as Sheet
from matplotlib.ticker import MaxNLocator

from harness.assess.words import ratio
from harness.report.figures.canvas import BAR, INK, LINE, PALE, PAPER, RED, SOFT, sheet
from harness.report.figures.drawings import Bar, Ruler, Stairs
from harness.report.figures.scales import power, short_count

_HALF = 0.30  # of a bar's height


def _place(value: float, drawing: Ruler) -> float:
    """Where a ratio stands, in decades under 1; beyond an end of the scale, at that end."""
    end = float(drawing.last)
    return min(max(-math.log10(value), float(drawing.first)), end) if value > 0 else end


def ruler(drawing: Ruler) -> Sheet:
    """Draw the bounds as bars on a scale of decades, with the requirement as a mark."""
    rows = len(drawing.bars)
    labelled = any(bar.label for bar in drawing.bars)
    height = 74 + rows * (18 if rows > 1 else 22)
    made, axes = sheet(height)
    make_room_for_labels(made, [bar.label for bar in drawing.bars], height)
    decades = range(drawing.first, drawing.last + 1)
    room = len(decades) / 32  # to the right: for the arrow towards 0
    axes.spines["left"].set_visible(False)
    axes.set_xlim(drawing.first - 0.008 * len(decades), drawing.last + room)
    axes.set_ylim(rows - 0.4, -0.75)
    every = 3 if len(decades) > 8 else 1
    axes.set_xticks(decades, [power(-k) if k % every == 0 else "" for k in decades])
    axes.set_yticks(
        range(rows), [short_label(bar.label) for bar in drawing.bars] if labelled else [""] * rows
    )
    axes.tick_params(axis="y", length=0)
    axes.grid(axis="x", color=LINE, linewidth=0.5)
    axes.set_axisbelow(True)
    for row, bar in enumerate(drawing.bars):
        _draw_bar(axes, row, bar, drawing)
    if drawing.mark is not None:
        at = _place(drawing.mark, drawing)
        right = at < drawing.first + (drawing.last - drawing.first) * 0.55
        draw_mark(axes, at, rows, f"{drawing.flag} {ratio(drawing.mark)}", right=right)
    return made


def make_room_for_labels(made: Sheet, labels: Sequence[str], height_px: float) -> None:
    """Set the margins so that the rows' labels stand left of the axes."""
    longest = max(len(short_label(label)) for label in labels)
    left = min(0.30, 0.03 + 0.0135 * longest) if longest else 0.02
    made.subplots_adjust(left=left, right=0.965, top=1 - 26 / height_px, bottom=32 / height_px)


def draw_mark(axes: Axes, at: float, rows: int, words: str, *, right: bool) -> None:
    """Draw a line through all rows with its words above."""
    axes.plot([at, at], [rows - 0.4, -0.75], color=INK, linewidth=1.4)
    axes.annotate(
        words,
        (at, -0.75),
        xytext=(5 if right else -5, 3),
        textcoords="offset points",
        ha="left" if right else "right",
        va="bottom",
        annotation_clip=False,
    )


def short_label(label: str) -> str:
    """Cut a label that would take too much of the figure's width."""
    return label if len(label) <= 18 else f"{label[:17]}…"


def _draw_bar(axes: Axes, row: int, bar: Bar, drawing: Ruler) -> None:
    width = (drawing.last - drawing.first) / 15
    start, end = _place(bar.upper, drawing), _place(bar.lower, drawing)
    end = max(end, start + 0.06 * width)  # a bar is seen, however narrow
    colour = RED if bar.against else BAR
    solid = end
    if bar.fades_from is not None:
        solid = min(max(_place(bar.fades_from, drawing), start + 0.06 * width), end)
    axes.fill_between([start, solid], row - _HALF, row + _HALF, color=colour, linewidth=0)
    if solid < end or bar.lower <= 0:
        # Nothing is claimed of how good the unit is: the bar thins out towards 0.
        axes.fill_between([solid, end], row - _HALF, row + _HALF, color=PALE, linewidth=0)
        axes.plot([solid, end], [row - _HALF] * 2, color=colour, linewidth=0.7)
        axes.plot([solid, end], [row + _HALF] * 2, color=colour, linewidth=0.7)
        axes.annotate("0", (drawing.last, row), xytext=(12, 0), textcoords="offset points", va="center",
                      color=SOFT, annotation_clip=False)  # fmt: skip
        axes.annotate("", (drawing.last + 0.35 * width, row), xytext=(drawing.last - 0.35 * width, row),
                      arrowprops={"arrowstyle": "->", "color": SOFT, "linewidth": 0.9})  # fmt: skip
    if bar.measured:
        axes.plot([_place(bar.measured, drawing)], [row], marker="D", markersize=6, color=PAPER,
                  markeredgecolor=INK, markeredgewidth=1.2)  # fmt: skip


def stairs(drawing: Stairs) -> Sheet:
    """Draw where the plan accepts, goes on and rejects, and the path of the run between."""
    made, axes = sheet(236)
    made.subplots_adjust(left=0.115, right=0.97, top=0.94, bottom=0.2)
    n = float(drawing.longest_bits)
    top = _top(drawing)
    seen = max(float(drawing.path_bits[-1]), n) if drawing.kind == "fixed" else n
    right = min(seen, 1.15 * n) * 1.03
    leaves = bool(drawing.path_errors[-1] > top)
    cut = int(np.searchsorted(drawing.path_errors, top, side="right"))
    early = leaves and float(drawing.path_bits[min(cut, len(drawing.path_bits) - 1)]) < 0.35 * right
    _zones(axes, drawing, n, top, right, words_right=early)
    axes.plot([n, n], [0, top], color=SOFT, linewidth=0.9, linestyle=(0, (4, 2)))
    bits, errors = drawing.path_bits[: cut + 1], np.minimum(drawing.path_errors[: cut + 1], top)
    axes.plot(bits, errors, color=INK, linewidth=1.6, drawstyle="steps-post")
    if leaves:
        words = f"goes on to {drawing.total_errors:,} errors".replace(",", "\u202f")
        near_right = bits[-1] > 0.62 * right
        axes.annotate(words, (bits[-1], top), xytext=(-6 if near_right else 8, -4), textcoords="offset points",
                      ha="right" if near_right else "left", va="top")  # fmt: skip
        axes.plot([bits[-1]], [top], marker="^", color=INK, markersize=6, clip_on=False)
    elif drawing.decided:
        against = drawing.decided == "rejected"
        axes.plot([bits[-1]], [errors[-1]], marker="s" if against else "o", markersize=7, clip_on=False,
                  color=RED if against else PAPER, markeredgecolor=RED if against else INK,
                  markeredgewidth=1.4, zorder=5)  # fmt: skip
    else:  # where the run ended, undecided
        axes.plot([bits[-1]], [errors[-1]], marker="D", markersize=5, clip_on=False, color=PAPER,
                  markeredgecolor=INK, markeredgewidth=1.2, zorder=5)  # fmt: skip
    axes.set_xlim(0, right)
    axes.set_ylim(0, top)
    axes.xaxis.set_major_locator(_nice(6))
    axes.xaxis.set_major_formatter(lambda value, _at: short_count(value))
    axes.yaxis.set_major_locator(_nice(6))
    axes.yaxis.set_major_formatter(lambda value, _at: short_count(value))
    axes.set_xlabel("compared bits")
    axes.set_ylabel("errors so far")
    return made


def _nice(most: int) -> MaxNLocator:
    return MaxNLocator(most, integer=True)


def _top(drawing: Stairs) -> float:
    """Give the highest count shown: the plan's own reach and some room."""
    reach = float(drawing.errors[-1])
    return max(reach * 1.12, reach + 0.8)


def _zones(axes: Axes, drawing: Stairs, n: float, top: float, right: float, *, words_right: bool) -> None:
    """Fill the areas: lower right accepts, upper left rejects; a fixed plan rejects at its end only."""
    if drawing.kind == "sequential":
        rows = drawing.errors.astype(float)
        accept = np.minimum(drawing.accept_at.astype(float), n)
        reject = np.where(drawing.reject_at < 0, 0.0, drawing.reject_at.astype(float))
        # Each row is the band from its count to the next one.
        edges = np.append(rows, top)
        axes.fill_betweenx(edges, np.append(accept, accept[-1]), right, step="post", color=PALE, linewidth=0)
        axes.fill_betweenx(edges, 0, np.append(reject, reject[-1]), step="post", color=LINE, linewidth=0)
        axes.text(0.955, 0.06, "passes", transform=axes.transAxes, ha="right", color=SOFT)
        axes.text(0.03, 0.90, "fails", transform=axes.transAxes, color=SOFT)
        return
    limit = float(drawing.errors[-1])
    axes.fill_between([0, right], limit, top, color=LINE, linewidth=0)
    axes.fill_between([n, right], 0, limit, color=PALE, linewidth=0)
    axes.plot([0, right], [limit, limit], color=SOFT, linewidth=0.9)
    middle = (limit + top) / 2 / top
    axes.text(
        n / right - 0.02 if words_right else 0.02, middle, "too many: fails", transform=axes.transAxes,
        color=SOFT, va="center", ha="right" if words_right else "left",
    )  # fmt: skip
    axes.annotate("passes at the line", (n, limit / 2 if limit > 1 else 0.5), xytext=(-5, 0),
                  textcoords="offset points", ha="right", va="center", color=SOFT)  # fmt: skip
