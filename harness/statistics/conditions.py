"""Which way the bit error ratio goes with a condition, and along which of several conditions a curve runs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

RISES = ("attenuation", "loss")  # the more of it, the more errors
FALLS = ("level", "power", "gain", "ebn0", "snr")


@dataclass(frozen=True, slots=True)
class Condition:
    """One axis of a sweep."""

    name: str
    quantity: str  # as its instrument states it; empty where it does not
    values: int  # how many


def rises_with(quantity: str) -> bool | None:
    """Whether the BER rises with a quantity; None where that cannot be said of it."""
    return True if quantity in RISES else False if quantity in FALLS else None


def curve_along(axes: Sequence[Condition]) -> str:
    """Name the condition along which curves run; empty where there is none.

    It goes along decibels where one does, and has the most values; the first of equals.

    Examples
    --------
    >>> curve_along([Condition("oven", "temperature", 5), Condition("att", "attenuation", 3)])
    'att'
    """
    levels = [axis for axis in axes if rises_with(axis.quantity) is not None]
    return max(levels or axes, key=lambda axis: axis.values).name if axes else ""
