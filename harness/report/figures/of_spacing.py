"""Figures of how errors lie: distances between neighbours, and sizes of error events."""

from __future__ import annotations

import numpy as np

from harness.assess.words import count
from harness.report.document import Figure
from harness.report.figures.drawings import Bursts, Gaps
from harness.report.material import Material, Measured
from harness.report.phrases import number, point_name

_FEWEST = 10  # errors: fewer make no distribution
_SIZES = 20


def gaps_of(material: Material, m: Measured) -> Figure | None:
    """Draw distances between neighbouring errors against those of independent ones; none under ten errors."""
    places = m.series.compared_positions()
    compared = m.assessed.tally.compared
    if places is None or len(places) < _FEWEST:
        return None
    gaps = np.diff(places)
    # Octaves: a gap of g bits lies in [2^i, 2^(i+1)).
    top = int(np.log2(max(int(gaps.max()), 2))) + 1
    edges = np.exp2(np.arange(top + 1, dtype=np.float64))
    counted, _ = np.histogram(gaps, edges)
    p = len(places) / compared
    below = -np.expm1((edges - 1) * np.log1p(-min(p, 1 - 1e-12)))  # P(gap < edge), geometric
    expected = len(gaps) * np.diff(below)
    c = m.assessed.clustering
    gap = c.more.get("event_gap_bits") if c is not None else None
    short = int(np.count_nonzero(gaps <= 64))
    words = (
        f"{count(len(gaps), 'gap')} between neighbouring errors, median {number(int(np.median(gaps)))} bits; "
        f"{number(short)} of 64 bits or less, where independent errors would have "
        f"{len(gaps) * -float(np.expm1(64 * np.log1p(-min(p, 1 - 1e-12)))):.3g}"
    )
    name = f", {point_name(m)}" if len(material.points) > 1 else ""
    title = f"Gaps between neighbouring errors{name}"
    return Figure(title, words, Gaps(edges, counted.astype(np.int64), expected, int(gap) if gap else None))


def bursts_of(material: Material, m: Measured) -> Figure | None:
    """Draw the sizes of error events; none where every error stands alone or errors are few."""
    places = m.series.compared_positions()
    c = m.assessed.clustering
    gap = c.more.get("event_gap_bits") if c is not None else None
    if places is None or len(places) < _FEWEST or not gap:
        return None
    from harness.statistics.bursts import event_sizes

    sizes = event_sizes(places, int(gap))
    largest = int(sizes.max())
    if largest < 2:
        return None
    shown = min(largest, _SIZES)
    counted = np.bincount(np.minimum(sizes, shown), minlength=shown + 1)[1:]
    words = (
        f"{count(len(sizes), 'error event')} (errors at most {count(int(gap), 'bit')} apart belong together), "
        f"{number(int(np.count_nonzero(sizes == 1)))} of a single error, the largest of {number(largest)}"
    )
    name = f", {point_name(m)}" if len(material.points) > 1 else ""
    drawing = Bursts(np.arange(1, shown + 1), counted.astype(np.int64), largest > shown)
    return Figure(f"Sizes of error events{name}", words, drawing)
