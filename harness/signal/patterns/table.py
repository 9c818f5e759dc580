"""The table of known register patterns: stages, polarity, and where each one is laid down."""

from __future__ import annotations

from dataclasses import dataclass

from harness.signal.registers import Register


@dataclass(frozen=True, slots=True)
class KnownPattern:
    """A row of the table."""

    name: str
    taps: tuple[int, ...]  # stages that are added, ascending
    sent_inverted: bool  # the register's bits are sent inverted
    longest_zeros: int  # longest run of ZEROs sent
    source: str
    force_after_zeros: int | None = None  # a ONE is forced where so many bits that follow would all be ZERO

    @property
    def stages(self) -> int:
        """Number of stages."""
        return self.taps[-1]

    @property
    def period(self) -> int:
        """Bits in a period; all of these registers are maximal."""
        return (1 << self.stages) - 1

    @property
    def register(self) -> Register:
        """The register behind it."""
        return Register(self.taps)


def known_patterns() -> list[KnownPattern]:
    """All rows, by stages. Each one also exists ``-reversed``, ``-inverted`` and both."""
    return [
        KnownPattern("PRBS7", (6, 7), False, 6, "common practice"),
        KnownPattern("PRBS9", (5, 9), False, 8, "ITU-T O.150 (05/1996) 5.1"),
        KnownPattern("PRBS11", (9, 11), False, 10, "ITU-T O.150 (05/1996) 5.2"),
        KnownPattern("PRBS13", (1, 2, 12, 13), False, 12, "IEEE 802.3, x^13+x^12+x^2+x+1"),
        KnownPattern("PRBS15", (14, 15), True, 15, "ITU-T O.150 (05/1996) 5.3"),
        KnownPattern("PRBS20", (3, 20), False, 19, "ITU-T O.150 (05/1996) 5.4"),
        KnownPattern("QRSS", (17, 20), False, 14, "ITU-T O.150 (05/1996) 5.5", force_after_zeros=14),
        KnownPattern("PRBS23", (18, 23), True, 23, "ITU-T O.150 (05/1996) 5.6"),
        KnownPattern("PRBS29", (27, 29), True, 29, "ITU-T O.150 (05/1996) 5.7"),
        KnownPattern("PRBS31", (28, 31), True, 31, "ITU-T O.150 (05/1996) 5.8"),
    ]
