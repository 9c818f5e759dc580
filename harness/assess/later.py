"""The balance of bits: what was sent was received, was lost, was on its way at a cut, or came after the decision."""

from __future__ import annotations

from dataclasses import dataclass

from harness.assess.assessment import PointAssessment
from harness.assess.words import count


@dataclass(frozen=True, slots=True)
class Balance:
    """Where the bits are that were sent: ``sent + inserted = received + lost + at_a_cut + after_decision``."""

    sent: int
    received: int
    lost: int
    inserted: int
    at_a_cut: int  # on their way when the run was cut or broken off
    after_decision: int  # sent before the plan decided, and come after it


def balance_of(p: PointAssessment) -> Balance | None:
    """Draw the balance; None where nothing was sent here."""
    if not p.bits_sent:
        return None
    rest = max(0, p.bits_sent + p.bits_inserted - p.tally.received - p.bits_lost)
    decided = p.plan is not None and p.plan.get("decided_at_bit") is not None
    # Each resumption says what all cuts before it have left out.
    cuts = [int(e.data.get("bits", 0)) for e in p.events if e.kind == "resumed"]
    at_a_cut = min(rest, cuts[-1]) if cuts else 0
    if not decided and p.status in ("cut", "interrupted", "failed"):
        at_a_cut = rest
    return Balance(
        p.bits_sent,
        p.tally.received,
        p.bits_lost,
        p.bits_inserted,
        at_a_cut,
        rest - at_a_cut if decided else 0,
    )


def balance_words(p: PointAssessment, speed: str = "") -> str:
    """Say where the bits are that were sent; `speed`: at which rate they came, in words."""
    balance = balance_of(p)
    received = f"{count(p.tally.received, 'bit')} received{speed}"
    if balance is None:
        return received
    parts = [
        (balance.lost, "lost"),
        (balance.inserted, "inserted"),
        (balance.at_a_cut, "on their way when the run was cut or broken off"),
        (balance.after_decision, "came after the decision"),
    ]
    said = [received, *(f"{count(bits, 'bit')} {what}" for bits, what in parts if bits)]
    return (
        f"{count(balance.sent, 'bit')} sent: {', '.join(said)}"
        if len(said) > 1
        else (f"{count(balance.sent, 'bit')} sent, {received}")
    )
