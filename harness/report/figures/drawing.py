"""From a figure's data to SVG: which room draws which figure."""

from __future__ import annotations

from collections.abc import Sequence

from harness.report.document import Figure
from harness.report.figures.drawings import Bursts, Course, Curve, Gaps, Ruler, Spans, Stairs


def draw_all(figures: Sequence[Figure]) -> list[str]:
    """Draw figures, in stand-in colours (see `canvas.coloured`); one SVG for each, in their order."""
    return [draw(figure, f"figure-{number}") for number, figure in enumerate(figures)]


def draw(figure: Figure, name: str) -> str:
    """Draw one figure; `name` keeps its identifiers apart from those of others on the page."""
    from harness.report.figures import canvas, draw_counts, draw_spacing, draw_time

    drawing = figure.drawing
    with canvas.quietly(name):
        if isinstance(drawing, Ruler):
            sheet = draw_counts.ruler(drawing)
        elif isinstance(drawing, Stairs):
            sheet = draw_counts.stairs(drawing)
        elif isinstance(drawing, Course):
            sheet = draw_time.course(drawing)
        elif isinstance(drawing, Curve):
            from harness.report.figures import draw_sweep

            sheet = draw_sweep.curve(drawing)
        elif isinstance(drawing, Spans):
            from harness.report.figures import draw_lot

            sheet = draw_lot.spans(drawing)
        elif isinstance(drawing, Gaps):
            sheet = draw_spacing.gaps(drawing)
        else:
            assert isinstance(drawing, Bursts)
            sheet = draw_spacing.bursts(drawing)
        return canvas.svg_of(sheet)
