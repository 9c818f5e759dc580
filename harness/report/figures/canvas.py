"""The sheet that figures are drawn on: matplotlib without its global state, and SVG whose colours are names.

Figures are drawn once, in stand-in colours; a page then gives them its own, dark and light, a PDF those of ink.
"""

from __future__ import annotations

import io
import logging
import re
import warnings
from collections.abc import Mapping, Sequence
from typing import Any

import matplotlib
from matplotlib.axes import Axes
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure as Sheet

WIDTH_PX = 440.0  # small, so that a phone shows letters of a readable size
LETTERS_PX = 10.5
LETTER_PX = 5.6  # mean width of a letter in a legend
KEY_PX = 33.0  # of a legend's key with the room around it

# Stand-ins, one for each part that a colour plays.
INK, SOFT, LINE, RED, BAR, PALE, PAPER, BLUE = (f"#01020{k}" for k in range(1, 9))
ON_PAPER: Mapping[str, str] = {
    INK: "#1c1b19",
    SOFT: "#5d5a54",
    LINE: "#cfcac0",
    RED: "#9c2f22",
    BAR: "#51606b",
    PALE: "#e7e2d8",
    PAPER: "#ffffff",
    BLUE: "#2d5d86",
}
ON_A_PAGE: Mapping[str, str] = {
    INK: "var(--ink)",
    SOFT: "var(--soft)",
    LINE: "var(--line)",
    RED: "var(--red)",
    BAR: "var(--bar)",
    PALE: "var(--pale)",
    PAPER: "var(--paper)",
    BLUE: "var(--blue)",
}


def settings(name: str) -> Any:
    """Give matplotlib's settings for one figure; `name` keeps its identifiers apart from other figures'."""
    return {
        "svg.fonttype": "none",
        "svg.hashsalt": name,
        "font.family": ["DejaVu Sans"],
        "font.size": LETTERS_PX,
        "text.parse_math": False,  # a dollar sign in a device's name is a dollar sign
        "text.color": INK,
        "axes.edgecolor": SOFT,
        "axes.labelcolor": SOFT,
        "axes.linewidth": 0.8,
        "axes.facecolor": "none",
        "figure.facecolor": "none",
        "savefig.facecolor": "none",
        "xtick.color": SOFT,
        "ytick.color": SOFT,
        "xtick.labelsize": LETTERS_PX - 1,
        "ytick.labelsize": LETTERS_PX - 1,
        "legend.fontsize": LETTERS_PX - 1,
        "legend.labelcolor": SOFT,
        "patch.linewidth": 0.0,
        "lines.linewidth": 1.2,
        "hatch.linewidth": 0.6,
        "path.simplify": True,
    }


def sheet(height_px: float) -> tuple[Sheet, Axes]:
    """Give an empty sheet with one pair of axes, free of the frame's upper and right side."""
    made = Sheet(figsize=(WIDTH_PX / 72, height_px / 72), dpi=72)
    FigureCanvasSVG(made)
    axes = made.add_subplot()
    axes.spines[["top", "right"]].set_visible(False)
    return made, axes


def legend(axes: Axes, handles: Sequence[Any], labels: Sequence[str], *, lift: float = 0.0) -> float:
    """Set the legend above the axes, in as many rows as its words need; returns its height in px.

    Parameters
    ----------
    lift
        Axes' heights that it stands above the axes.
    """
    if not labels:
        return 0.0
    widest = max(len(label) for label in labels) * LETTER_PX + KEY_PX
    whole = sum(len(label) * LETTER_PX + KEY_PX for label in labels)
    columns = len(labels) if whole <= WIDTH_PX - 50 else max(1, int((WIDTH_PX - 50) // widest))
    axes.legend(
        handles, labels, loc="lower left", bbox_to_anchor=(-0.01, 1.01 + lift), ncols=columns, frameon=False,
        handlelength=1.5, columnspacing=1.2, borderpad=0, handletextpad=0.5, labelspacing=0.3,
    )  # fmt: skip
    return 14.0 * -(-len(labels) // columns)


def svg_of(made: Sheet) -> str:
    """Write a sheet as SVG: no head, no foreign addresses, no identifiers but those it uses itself."""
    written = io.StringIO()
    with warnings.catch_warnings():
        # Names may hold characters that the font has not: the reader's own fonts show them.
        warnings.filterwarnings("ignore", message=r"Glyph .* missing from font", category=UserWarning)
        warnings.filterwarnings(
            "ignore", message=r"Matplotlib currently does not support", category=UserWarning
        )
        made.savefig(
            written, format="svg", metadata={"Date": None, "Creator": None, "Format": None, "Type": None}
        )
    return tidy(written.getvalue())


def quietly(name: str) -> Any:
    """Draw under our settings only; for use in a `with`."""
    logging.getLogger("matplotlib").setLevel(logging.ERROR)
    return matplotlib.rc_context(settings(name))


def tidy(svg: str) -> str:
    """Take out of matplotlib's SVG what only a file of its own needs."""
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<style type=\"text/css\">.*?</style>", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<g id=\"[^\"]*\"", "<g", svg)
    svg = re.sub(r"<!--.*?-->", "", svg, flags=re.DOTALL)
    head, rest = svg.split(">", 1)
    box = re.search(r'viewBox="[^"]*"', head)
    assert box is not None
    names = 'xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink"'
    head = f'<svg {names} {box.group()} stroke-linejoin="round" stroke-linecap="butt"'
    return re.sub(r">\s+<", "><", re.sub(r"\n\s*", "\n", f"{head}>{rest}")).strip()


def coloured(svg: str, colours: Mapping[str, str]) -> str:
    """Put colours in the place of their stand-ins."""
    for stand_in, colour in colours.items():
        svg = svg.replace(stand_in, colour)
    return svg
