"""What happened in a stretch of trouble: a burst, one slip, several, an inversion, or an outage.

The old place is sure at the stretch's beginning and the new one at its end. Places in between are found
where the best cut between those known leaves more errors than usual and another place has few.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.signal import rules
from harness.signal.evidence import log_chance
from harness.signal.nearby import Candidate, Nearby, agrees
from harness.signal.places import Place, Reference
from harness.signal.slips import Gap, gap_between, split_path, worst_stretch

_MOST_PLACES = 24  # in one stretch of trouble


@dataclass(frozen=True, slots=True)
class Stretch:
    """A piece of the stream that is to be judged: bits (0 and 1) from stream bit `first` on."""

    first: int
    bits: NDArray[np.uint8]

    @property
    def end(self) -> int:
        """The stream's bit after it."""
        return self.first + len(self.bits)


@dataclass(frozen=True, slots=True)
class Verdict:
    """Places in order and where they are cut (stream bits); `evidence` is where the last one's begins."""

    path: list[Place]
    cuts: list[int]
    evidence: int


def differing(reference: Reference, place: Place, stretch: Stretch) -> NDArray[np.uint8]:
    """1 where a stretch differs from a place."""
    return stretch.bits ^ reference.bits(place, stretch.first, len(stretch.bits))


def evidence_walk(
    reference: Reference, place: Place, stretch: Stretch, weights: rules.Weights
) -> NDArray[np.int64]:
    """The walk of evidence of a place over a stretch."""
    expected = reference.bits(place, stretch.first, len(stretch.bits))
    return rules.walk(stretch.bits ^ expected, expected, weights)


def gap(reference: Reference, old: Place | None, new: Place, stretch: Stretch, weights: rules.Weights) -> Gap:
    """The stretch without evidence between two places, in stream bits."""
    later = evidence_walk(reference, new, stretch, weights)
    earlier = None if old is None else evidence_walk(reference, old, stretch, weights)
    found = gap_between(earlier, later)
    return Gap(stretch.first + found.begin, stretch.first + found.end)


class Resolver:
    """Finds the places in a stretch of trouble.

    Parameters
    ----------
    reference
        The pattern.
    unit
        Bits in which the link slips.
    """

    def __init__(self, reference: Reference, unit: int) -> None:
        self._reference = reference
        self._unit = unit

    def path(self, ends: list[Place], stretch: Stretch, level: int) -> tuple[list[Place], list[int]]:
        """The places that a stretch runs through, and the cuts between them.

        Parameters
        ----------
        ends
            The place before and the one after; one only where they are the same, or where one is unknown.
        stretch
            What is to be explained.
        level
            Index of the level of errors that is usual.

        Returns
        -------
        tuple[list[Place], list[int]]
            Places, each different from its neighbours, and cuts as stream bits.
        """
        path = list(ends)
        wrong = {place: differing(self._reference, place, stretch) for place in path}
        cuts, _ = split_path([wrong[place] for place in path])
        settled = np.zeros(len(stretch.bits), dtype=np.bool_)  # stretches in which no place was found
        for _ in range(_MOST_PLACES):
            left = _along([wrong[place] for place in path], cuts)
            left[settled] = 0
            begin, end, excess = worst_stretch(left, rules.LEVELS[level].share)
            if excess < rules.LEVELS[level].alarm:
                break
            longer = self._with_another(path, cuts, wrong, stretch, begin, end, level)
            if longer is None:
                settled[begin:end] = True
                continue
            path, cuts = longer
        return path, [stretch.first + cut for cut in cuts]

    def _with_another(
        self,
        path: list[Place],
        cuts: list[int],
        wrong: dict[Place, NDArray[np.uint8]],
        stretch: Stretch,
        begin: int,
        end: int,
        level: int,
    ) -> tuple[list[Place], list[int]] | None:
        """The path with one more place in the stretch from `begin` to `end`, if it is proven there."""
        before = path[int(np.searchsorted(cuts, begin, side="right"))]
        after = path[int(np.searchsorted(cuts, end, side="left"))]
        at = int(np.searchsorted(cuts, begin, side="right"))
        old = _along([wrong[place] for place in path], cuts)
        for centre in dict.fromkeys([before, after]):
            candidate, log_candidates = self._best_between(centre, stretch, begin, end, level)
            place = self._reference.normal(candidate.place)
            if place in (before, after):
                continue
            wrong.setdefault(place, differing(self._reference, place, stretch))
            longer = (
                [*path[: at + 1], place, *path[at:]]
                if before == after
                else [*path[: at + 1], place, *path[at + 1 :]]
            )
            new_cuts, _ = split_path([wrong[p] for p in longer])
            first, last = new_cuts[at] if at < len(new_cuts) else 0, 0
            first = ([0, *new_cuts, len(stretch.bits)])[at + 1]
            last = ([0, *new_cuts, len(stretch.bits)])[at + 2]
            limit = math.log(rules.FALSE_BETWEEN) - log_candidates
            if last - first < 0.75 * (end - begin):
                limit -= math.log(end - begin)
            if self._proven(place, stretch, first, last, old, wrong[place], limit):
                return _without_empty(longer, new_cuts, len(stretch.bits))
        return None

    def _proven(
        self,
        place: Place,
        stretch: Stretch,
        first: int,
        last: int,
        old: NDArray[np.uint8],
        new: NDArray[np.uint8],
        limit: float,
    ) -> bool:
        """Whether a place holds between two cuts, against chance and against what explained it before."""
        if last <= first:
            return False
        other = old[first:last] != new[first:last]
        if log_chance(int(np.count_nonzero(other)), int(new[first:last][other].sum())) > limit / 2:
            return False
        return agrees(self._reference, place, stretch.bits[first:last], stretch.first + first, limit)

    def _best_between(
        self, centre: Place, stretch: Stretch, begin: int, end: int, level: int
    ) -> tuple[Candidate, float]:
        """The place near another one that explains some part of a stretch best."""
        length = end - begin
        size = 16 if length <= 1024 else 32 if length <= 4096 else 64
        begin = max(0, begin - size // 2)
        bits = stretch.bits[begin : min(len(stretch.bits), end + size // 2)]
        bits = bits[: max(len(bits) // size, 1) * size]
        if len(bits) < size:
            bits = np.concatenate([bits, np.zeros(size - len(bits), dtype=np.uint8)])
        first = stretch.first + begin
        near = Nearby(self._reference, centre, self._unit, first, len(bits))
        cells = near.cells(bits, first, size)
        share = rules.LEVELS[level].share
        same = _highest_sum(np.float32(share * size) - cells)
        turned = _highest_sum(np.float32(share * size) - (size - cells.astype(np.float32)))
        inverted = bool(turned.max() > same.max())
        scores = turned if inverted else same
        best = np.flatnonzero(scores == scores.max())
        shift = int(best[np.argmin(np.abs(best - near.shifts // 2))])
        return Candidate(near.place_of(shift, inverted), 0), near.log_candidates()


def _highest_sum(scores: NDArray[np.float32]) -> NDArray[np.float32]:
    """The highest sum of neighbouring cells for each shift: scores (cells, shifts) to (shifts,)."""
    current = np.zeros(scores.shape[1], dtype=np.float32)
    highest = np.full(scores.shape[1], -np.inf, dtype=np.float32)
    for row in scores:
        np.maximum(current, 0, out=current)
        current += row
        np.maximum(highest, current, out=highest)
    return highest


def _along(wrong: list[NDArray[np.uint8]], cuts: list[int]) -> NDArray[np.uint8]:
    """Mismatches along a path."""
    edges = [0, *cuts, len(wrong[0])]
    return np.concatenate([w[a:b] for w, a, b in zip(wrong, edges, edges[1:], strict=False)])


def _without_empty(path: list[Place], cuts: list[int], length: int) -> tuple[list[Place], list[int]]:
    """Leave out places that hold nowhere, and join neighbours that are the same."""
    edges = [0, *cuts, length]
    places: list[Place] = []
    begins: list[int] = []
    for place, begin, end in zip(path, edges, edges[1:], strict=False):
        if end > begin and (not places or places[-1] != place):
            places.append(place)
            begins.append(begin)
    return places, begins[1:]
