"""The report as a page: one file that asks nothing of anybody, for screens large and small, and for paper."""

from __future__ import annotations

from collections.abc import Sequence
from importlib import resources

from harness.report.document import Document
from harness.report.figures.drawing import draw_all


def to_html(document: Document, drawn: Sequence[str] | None = None) -> str:
    """Write a report as one self-contained HTML page.

    Parameters
    ----------
    drawn
        The document's figures as `draw_all` gives them, where they are drawn already.
    """
    from jinja2 import Environment, PackageLoader, StrictUndefined
    from markupsafe import Markup

    from harness.report.figures.canvas import ON_A_PAGE, coloured

    environment = Environment(
        loader=PackageLoader("harness.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals["kind"] = lambda block: type(block).__name__
    figures = document.figures()
    drawn = draw_all(figures) if drawn is None else drawn
    # Figures are ours: text in them is escaped where they are written.
    pictures = [Markup(coloured(svg, ON_A_PAGE)) for svg in drawn]
    style = (resources.files("harness.report") / "templates" / "report.css").read_text(encoding="utf-8")
    numbered = {id(figure): number for number, figure in enumerate(figures)}
    environment.globals["picture"] = lambda figure: pictures[numbered[id(figure)]]
    return environment.get_template("report.html").render(document=document, style=Markup(style))
