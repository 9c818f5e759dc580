"""The accepting and rejecting stairs as lines of text: errors upwards, compared bits to the right."""

from __future__ import annotations

from dataclasses import dataclass

from harness.statistics.plans.plan import Boundary, Plan


@dataclass(frozen=True, slots=True)
class Ink:
    """What the three areas are drawn with."""

    reject: str = "▒"
    open: str = " "
    accept: str = "·"
    corner: str = "└"
    axis: str = "─"
    side: str = "│"


PLAIN = Ink("#", " ", ".", "+", "-", "|")


def draw_stairs(plan: Plan, width: int = 72, height: int = 18, ink: Ink | None = None) -> list[str]:
    """Draw where the plan accepts, goes on and rejects.

    Parameters
    ----------
    plan
        Any plan.
    width, height
        Columns of the whole drawing and rows of its area, at most; several counts share a row where there are
        more of them.
    ink
        Its characters; `PLAIN` for terminals without others.

    Returns
    -------
    list of str
        Lines without line ends, none longer than `width` where that is at least 40.
    """
    ink = ink or Ink()
    rows = _rows(plan)
    step = -(-len(rows) // max(2, height))
    shown = rows[::step] if rows[::step][-1] is rows[-1] else [*rows[::step], rows[-1]]
    margin = max(len("errors"), len(str(rows[-1].errors)))
    columns = max(20, width - margin - 2)
    lines = []
    for row in reversed(shown):
        area = "".join(
            _zone(row, plan.longest_bits * (i + 1) / columns, plan.longest_bits / columns, ink)
            for i in range(columns)
        )
        lines.append(f"{row.errors:>{margin}} {ink.side}{area}".rstrip())
    lines.append(f"{'errors':>{margin}} {ink.corner}{ink.axis * columns}")
    right = f"{plan.longest_bits:,} bits".replace(",", " ")
    lines.append(" " * (margin + 2) + "0" + right.rjust(columns - 1))
    legend = f"{ink.reject * 3} fails  {ink.accept * 3} passes  blank: goes on"
    lines.append(" " * min(margin + 2, max(0, width - len(legend))) + legend)
    return lines


def _rows(plan: Plan) -> tuple[Boundary, ...]:
    """One row for each count, also for the plans with one corner only."""
    if plan.boundaries:
        return plan.boundaries
    assert plan.accept_errors is not None
    n, last = plan.longest_bits, plan.accept_errors + 1
    return (*(Boundary(k, n, None) for k in range(last)), Boundary(last, n, n))


def _zone(row: Boundary, bits: float, column: float, ink: Ink) -> str:
    """What is drawn in the column that ends at `bits`: a corner belongs to the area that it opens."""
    if row.reject_at is not None and row.reject_at > bits - column:
        return ink.reject
    return ink.accept if row.accept_at <= bits + 1e-6 * column else ink.open
