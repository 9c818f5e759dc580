"""Drawing many units' values with their bounds."""

from __future__ import annotations

from matplotlib.axes import Axes
from matplotlib.figure import Figure as Sheet
from matplotlib.ticker import MaxNLocator

from harness.report.figures.canvas import BAR, INK, LINE, PAPER, RED, SOFT, sheet
from harness.report.figures.draw_counts import draw_mark, make_room_for_labels, short_label
from harness.report.figures.drawings import Span, Spans

_HALF = 0.26  # of a bar's height


def spans(drawing: Spans) -> Sheet:
    """Draw one row a unit, its bounds as a bar; an arrow where a side has no bound."""
    rows = len(drawing.spans)
    height = 88 + rows * (18 if rows > 1 else 22)
    made, axes = sheet(height)
    make_room_for_labels(made, [span.label for span in drawing.spans], height)
    made.subplots_adjust(bottom=46 / height)
    left, right = drawing.edges
    axes.spines["left"].set_visible(False)
    axes.set_xlim(left, right)
    axes.set_ylim(rows - 0.4, -0.75)
    axes.xaxis.set_major_locator(MaxNLocator(7))
    axes.set_yticks(range(rows), [short_label(span.label) for span in drawing.spans])
    axes.tick_params(axis="y", length=0)
    axes.grid(axis="x", color=LINE, linewidth=0.5)
    axes.set_axisbelow(True)
    axes.set_xlabel(drawing.axis)
    if drawing.median is not None:
        axes.axvline(drawing.median, color=SOFT, linewidth=0.9, linestyle=(0, (4, 2)))
    for row, span in enumerate(drawing.spans):
        _draw_span(axes, row, span, drawing.edges)
    if drawing.mark is not None:
        middle = (left + right) / 2
        draw_mark(axes, drawing.mark, rows, f"{drawing.flag} {drawing.mark:g}", right=drawing.mark < middle)
    return made


def _draw_span(axes: Axes, row: int, span: Span, edges: tuple[float, float]) -> None:
    colour = RED if span.against else BAR
    start = edges[0] if span.lower is None else span.lower
    stop = edges[1] if span.upper is None else span.upper
    axes.fill_between([start, stop], row - _HALF, row + _HALF, color=colour, linewidth=0)
    for open_side, edge, inward in ((span.lower, edges[0], 1), (span.upper, edges[1], -1)):
        if open_side is None:
            length = 0.03 * (edges[1] - edges[0]) * inward
            axes.annotate("", (edge, row), xytext=(edge + length, row),
                          arrowprops={"arrowstyle": "->", "color": PAPER, "linewidth": 1.2})  # fmt: skip
    axes.plot([span.value], [row], marker="D", markersize=6, color=PAPER, markeredgecolor=INK,
              markeredgewidth=1.2)  # fmt: skip
