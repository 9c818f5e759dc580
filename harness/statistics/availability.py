"""Availability by second: errored and severely errored seconds and the ten-second rules of G.821 and G.826.

Rules where the recommendations leave room:

- A second with an error, an unaligned bit or a slip is errored. It is severely errored when its BER is
  1e-3 or more (G.826: 30 % or more of its blocks errored), when more than half of its bits were unaligned
  or lost, or when no bit came although bits were due.
- Unavailable time begins with the first of ten consecutive severely errored seconds and ends with the first
  of ten consecutive seconds that are not. The path counts as available at the start. At the end, fewer than
  ten change nothing.
- A second in which nothing was due and nothing came says nothing: it is left out as though it had not been.
- A partial second (the last of a sitting) is no second of the recommendations: it is left out, and counted.
- A new sitting or a new point begins anew: seconds on both sides of a gap are not consecutive.

Stored seconds are never rewritten: the look-ahead of ten seconds lives in what is derived here.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from harness.record import Second
from harness.statistics.blocks import block_length, count_blocks, rate_class
from harness.statistics.bursts import gamma_lower, gamma_upper
from harness.statistics.objectives import Judged, Objectives, judge

Standard = Literal["G.821", "G.826"]
TEN = 10
SECONDS_A_YEAR = 31_557_600  # 365.25 days
_WHOLE_SECOND_NS = 999_000_000  # a clock may be a millisecond off; less is a partial second
_SLOW_BPS = 1_000


@dataclass(frozen=True, slots=True)
class Judgement:
    """What one second is by itself."""

    errored: bool
    severe: bool
    blocks: int = 0  # G.826
    errored_blocks: int = 0
    exact: bool = True  # G.826: all error positions were known


@dataclass(frozen=True, slots=True)
class Period:
    """A stretch of unavailable time."""

    first: int  # index of its first second
    at: int  # UTC, ns
    seconds: int
    ended: bool  # False: it lasted until the end of the sitting, at least


@dataclass(frozen=True, slots=True)
class AvailabilityResult:
    """What the seconds so far come to.

    Counts of errored, severely errored seconds and blocks are of available time only.
    """

    standard: Standard
    seconds: int  # available + unavailable
    available: int
    unavailable: int
    errored: int
    severely_errored: int
    periods: tuple[Period, ...]
    partial: int  # left out: shorter than a second
    partial_errored: int  # of these, with errors
    idle: int  # left out: nothing was due, nothing came
    confidence: float
    ratio_lower: float | None  # bounds on the share of available time
    ratio_upper: float | None
    block_bits: int | None = None  # G.826
    blocks: int = 0  # in available seconds that are not severely errored
    background_errors: int = 0  # errored blocks among these
    unplaced: int = 0  # seconds whose errored blocks are counted at most, positions not being known
    warnings: tuple[str, ...] = ()
    judged: tuple[Judged, ...] = ()

    @property
    def esr(self) -> float | None:
        """Errored second ratio; None without available time."""
        return self.errored / self.available if self.available else None

    @property
    def sesr(self) -> float | None:
        """Severely errored second ratio; None without available time."""
        return self.severely_errored / self.available if self.available else None

    @property
    def bber(self) -> float | None:
        """Background block error ratio of G.826; None for G.821 or without such blocks."""
        return self.background_errors / self.blocks if self.blocks else None

    @property
    def ratio(self) -> float | None:
        """Share of available time."""
        return self.available / self.seconds if self.seconds else None

    @property
    def objectives_met(self) -> bool | None:
        """Whether every objective stated is met; None where none is stated or one cannot be judged."""
        outcomes = [j.met for j in self.judged]
        if False in outcomes:
            return False
        return None if not outcomes or None in outcomes else True


def nines(ratio: float) -> float:
    """Availability in nines: 0.999 has 3, 1 has infinitely many."""
    return math.inf if ratio >= 1 else -math.log10(1 - ratio)


def outage_seconds_a_year(ratio: float) -> float:
    """Unavailable seconds in a year of 365.25 days at this share of available time."""
    return (1 - ratio) * SECONDS_A_YEAR


def judge_second(second: Second, standard: Standard = "G.821", block_bits: int | None = None) -> Judgement:
    """Say what a second is by itself, before the ten-second rules.

    `block_bits` is needed for G.826.
    """
    tally = second.tally
    silent = second.due and tally.received == 0
    missing = tally.unaligned + second.bits_lost
    defect = silent or 2 * missing > tally.received + second.bits_lost
    errored = defect or tally.errors > 0 or tally.unaligned > 0 or second.slips > 0 or second.bits_lost > 0
    if standard == "G.821":
        severe = defect or (tally.errors > 0 and 1_000 * tally.errors >= tally.compared)
        return Judgement(errored, severe)
    if block_bits is None:
        raise ValueError("G.826 needs a block length")
    count = count_blocks(second, block_bits)
    return Judgement(errored, defect or count.severe, count.blocks, count.errored, count.exact)


@dataclass(frozen=True, slots=True)
class _Counts:
    """Sums over seconds whose fate is the same."""

    seconds: int = 0
    errored: int = 0
    severe: int = 0
    blocks: int = 0
    background: int = 0

    def plus(self, other: _Counts) -> _Counts:
        return _Counts(
            self.seconds + other.seconds,
            self.errored + other.errored,
            self.severe + other.severe,
            self.blocks + other.blocks,
            self.background + other.background,
        )


def _counts_of(judgement: Judgement) -> _Counts:
    if judgement.severe:
        return _Counts(1, 1, 1)
    return _Counts(1, int(judgement.errored), 0, judgement.blocks, judgement.errored_blocks)


class Availability:
    """The ten-second rules, one second at a time; memory grows with unavailable periods only.

    Parameters
    ----------
    standard
        ``"G.821"`` (bits) or ``"G.826"`` (blocks).
    rate_bps
        Payload rate, for the warning under 1 kbit/s and the block length of G.826.
    block_bits
        G.826: bits in a block; None takes it from the rate by Table 1.
    objectives
        What a profile asks.
    confidence
        Of the bounds on the share of available time.

    Raises
    ------
    ValueError
        G.826 where the block length is neither stated nor to be had from the rate.
    """

    def __init__(
        self,
        standard: Standard = "G.821",
        *,
        rate_bps: float | None = None,
        block_bits: int | None = None,
        objectives: Objectives | None = None,
        confidence: float = 0.95,
    ) -> None:
        if standard not in ("G.821", "G.826"):
            raise ValueError("the standard is G.821 or G.826")
        if standard == "G.826" and block_bits is None:
            block_bits = block_length(rate_bps)
        self.standard: Standard = standard
        self.block_bits = block_bits if standard == "G.826" else None
        self.objectives = objectives or Objectives()
        self._rate_bps = rate_bps
        self._confidence = confidence
        self._up = True
        self._settled_up = _Counts()
        self._settled_down = 0  # seconds
        self._waiting = _Counts()  # consecutive seconds that would change the state if they become ten
        self._waiting_first = (0, 0)  # index and time of the first of them
        self._periods: list[Period] = []
        self._sitting: tuple[int, int] | None = None
        self._partial = self._partial_errored = self._idle = self._unplaced = 0
        self._one_error_is_severe = False

    def advance(self, second: Second) -> None:
        """Take the next second, in the order of their indices."""
        sitting = (second.point, second.sitting)
        if sitting != self._sitting:
            self._begin_anew()
            self._sitting = sitting
        if not second.due and second.tally.received == 0 and second.bits_lost == 0:
            self._idle += 1
            return
        judgement = judge_second(second, self.standard, self.block_bits)
        if second.duration_ns < _WHOLE_SECOND_NS:
            self._partial += 1
            self._partial_errored += judgement.errored
            return
        self._unplaced += not judgement.exact
        self._one_error_is_severe |= 0 < second.tally.compared <= _SLOW_BPS and second.tally.unaligned == 0
        self._count(judgement, second)

    def _count(self, judgement: Judgement, second: Second) -> None:
        counts = _counts_of(judgement)
        if judgement.severe != self._up:  # it goes with the present state
            self._settle()
            if self._up:
                self._settled_up = self._settled_up.plus(counts)
            else:
                self._stay_down(1)
            return
        if self._waiting.seconds == 0:
            self._waiting_first = (second.index, second.at)
        self._waiting = self._waiting.plus(counts)
        if self._waiting.seconds == TEN:
            self._turn()

    def _turn(self) -> None:
        """Ten in a row: they belong to the new state, from the first of them."""
        waiting, self._waiting = self._waiting, _Counts()
        self._up = not self._up
        if self._up:
            self._periods[-1] = replace(self._periods[-1], ended=True)
            self._settled_up = self._settled_up.plus(waiting)
        else:
            self._periods.append(Period(*self._waiting_first, 0, ended=False))
            self._stay_down(waiting.seconds)

    def _settle(self) -> None:
        """Fewer than ten in a row: they belong to the present state."""
        waiting, self._waiting = self._waiting, _Counts()
        if self._up:
            self._settled_up = self._settled_up.plus(waiting)
        elif waiting.seconds:
            self._stay_down(waiting.seconds)

    def _stay_down(self, seconds: int) -> None:
        self._settled_down += seconds
        last = self._periods[-1]
        self._periods[-1] = replace(last, seconds=last.seconds + seconds)

    def _begin_anew(self) -> None:
        self._settle()
        self._up = True

    def result(self) -> AvailabilityResult:
        """Return what the seconds so far come to, as though the run ended here; changes nothing."""
        up, down, periods = self._settled_up, self._settled_down, list(self._periods)
        if self._up:
            up = up.plus(self._waiting)
        elif self._waiting.seconds:
            down += self._waiting.seconds
            periods[-1] = replace(periods[-1], seconds=periods[-1].seconds + self._waiting.seconds)
        lower, upper = _ratio_bounds(up.seconds + down, periods, self._confidence)
        plain = AvailabilityResult(
            self.standard,
            seconds=up.seconds + down,
            available=up.seconds,
            unavailable=down,
            errored=up.errored,
            severely_errored=up.severe,
            periods=tuple(periods),
            partial=self._partial,
            partial_errored=self._partial_errored,
            idle=self._idle,
            confidence=self._confidence,
            ratio_lower=lower,
            ratio_upper=upper,
            block_bits=self.block_bits,
            blocks=up.blocks,
            background_errors=up.background,
            unplaced=self._unplaced,
        )
        return replace(plain, warnings=self._warnings(plain), judged=_judge(plain, self.objectives))

    def _warnings(self, result: AvailabilityResult) -> tuple[str, ...]:
        found: list[str] = []
        slow = self._rate_bps is not None and self._rate_bps <= _SLOW_BPS
        if self.standard == "G.821" and (slow or (self._rate_bps is None and self._one_error_is_severe)):
            found.append("at 1 kbit/s or less one error makes a second severely errored")
        if self.block_bits is not None and self._rate_bps is not None:
            column = rate_class(self._rate_bps)
            if column and not column.shortest_block <= self.block_bits <= column.longest_block:
                found.append(
                    f"blocks of {self.block_bits} bits lie outside G.826's {column.shortest_block} to "
                    f"{column.longest_block} at this rate"
                )
        if result.unplaced:
            found.append(
                f"in {result.unplaced} s not all error positions are known: errored blocks there are "
                "counted at most"
            )
        if result.partial_errored:
            one = result.partial_errored == 1
            found.append(
                f"{result.partial_errored} partial {'second' if one else 'seconds'} with errors "
                f"{'is' if one else 'are'} left out"
            )
        return tuple(found)


def assess_availability(
    seconds: Iterable[Second],
    standard: Standard = "G.821",
    *,
    rate_bps: float | None = None,
    block_bits: int | None = None,
    objectives: Objectives | None = None,
) -> AvailabilityResult:
    """Take all seconds at once; see `Availability`."""
    rule = Availability(standard, rate_bps=rate_bps, block_bits=block_bits, objectives=objectives)
    for second in seconds:
        rule.advance(second)
    return rule.result()


def _judge(result: AvailabilityResult, objectives: Objectives) -> tuple[Judged, ...]:
    asked = (
        ("esr", objectives.esr, result.esr, result.available),
        ("sesr", objectives.sesr, result.sesr, result.available),
        ("bber", objectives.bber, result.bber, result.available - result.severely_errored),
        ("availability", objectives.availability, result.ratio, result.seconds),
    )
    return tuple(judge(name, limit, value, n) for name, limit, value, n in asked if limit is not None)


def _ratio_bounds(
    seconds: int, periods: list[Period], confidence: float
) -> tuple[float, float] | tuple[None, None]:
    """Bounds on the share of available time.

    Seconds are not independent, unavailable periods are: their lengths go through the bounds of Fay and
    Feuer (1997). A period not yet seen is taken to last as long as the longest seen, ten seconds at least.
    """
    if not seconds:
        return None, None
    lengths = np.array([p.seconds for p in periods], dtype=np.int64)
    risk = (1 - confidence) / 2
    most = gamma_upper(lengths, risk, largest=float(TEN)) / seconds
    least = gamma_lower(lengths, risk) / seconds
    return 1 - min(1.0, most), 1 - min(1.0, least)
