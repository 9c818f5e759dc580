"""Bits that a plan left behind: sent before it decided, and come after."""

from __future__ import annotations

from harness.assess.assessment import PointAssessment


def came_later(p: PointAssessment) -> int:
    """Bits sent before the plan decided that came after it; beside those received they would look lost."""
    if p.plan is None or p.plan.get("decided_at_bit") is None or not p.bits_sent:
        return 0
    return max(0, p.bits_sent + p.bits_inserted - p.tally.received - p.bits_lost)
