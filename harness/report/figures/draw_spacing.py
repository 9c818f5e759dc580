"""Drawing gaps between errors, and sizes of error events."""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure as Sheet
from matplotlib.ticker import MaxNLocator

from harness.report.figures.canvas import BAR, INK, RED, legend, sheet
from harness.report.figures.drawings import Bursts, Gaps
from harness.report.figures.scales import octave, short_count

_MANY = 40  # events of one size: beyond it the scale is logarithmic


def gaps(drawing: Gaps) -> Sheet:
    """Draw how often each octave of gaps was counted, and how often independent errors would have it."""
    made, axes = sheet(204)
    made.subplots_adjust(left=0.115, right=0.96, top=0.86, bottom=0.2)
    octaves = np.arange(len(drawing.counted))
    axes.bar(octaves + 0.5, drawing.counted, width=0.82, color=BAR, label="counted")
    axes.plot(octaves + 0.5, drawing.expected, color=INK, marker="o", markersize=3.2, linewidth=1.0,
              label="of independent errors")  # fmt: skip
    if drawing.event_gap_bits:
        at = float(np.log2(drawing.event_gap_bits))
        axes.axvline(at, color=RED, linewidth=1.1, linestyle=(0, (4, 2)), label="one event up to here")
    last = len(drawing.counted)
    step = max(1, -(-last // 9))
    axes.set_xticks(range(0, last + 1, step), [octave(k) for k in range(0, last + 1, step)])
    axes.set_xlim(0, last)
    axes.set_xlabel("gap, bits")
    axes.set_ylabel("gaps")
    _counts(axes)
    legend(axes, *axes.get_legend_handles_labels())
    return made


def bursts(drawing: Bursts) -> Sheet:
    """Draw how many error events had how many errors."""
    made, axes = sheet(176)
    made.subplots_adjust(left=0.115, right=0.98, top=0.95, bottom=0.25)
    axes.bar(drawing.sizes, drawing.counted, width=0.7, color=BAR)
    axes.set_xlim(0.3, max(float(drawing.sizes[-1]), 8.0) + 0.7)
    most = float(drawing.counted.max())
    if most > _MANY:
        axes.set_yscale("symlog", linthresh=1, linscale=0.5)
        axes.set_ylim(0, most * 2)
    else:
        axes.yaxis.set_major_locator(MaxNLocator(4, integer=True, min_n_ticks=1))
        axes.set_ylim(0, most * 1.08)
    labels = [f"{size}" for size in drawing.sizes.tolist()]
    if drawing.last_is_more:
        labels[-1] += "+"
    step = max(1, -(-len(labels) // 10))
    shown = [(s, text) for s, text in zip(drawing.sizes.tolist(), labels, strict=True)]
    ticks = [tick for tick in shown[::step] if tick[0] <= shown[-1][0] - step]
    ticks.append(shown[-1])
    axes.set_xticks([s for s, _text in ticks], [text for _s, text in ticks])
    axes.yaxis.set_major_formatter(lambda value, _at: short_count(value))
    axes.set_xlabel("errors in an event")
    axes.set_ylabel("events")
    return made


def _counts(axes: object) -> None:
    axes.yaxis.set_major_locator(MaxNLocator(5, integer=True, min_n_ticks=1))  # type: ignore[attr-defined]
    axes.yaxis.set_major_formatter(lambda value, _at: short_count(value))  # type: ignore[attr-defined]
