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
from harness.signal.nearby import Nearby, agrees, log_candidates, log_tail
from harness.signal.places import Place, Reference
from harness.signal.slips import Gap, gap_between, split_path, worst_stretch

_MOST_PLACES = 24  # in one stretch of trouble
_MOST_IN_VAIN = 4  # stretches of a trouble in which places are looked for and none is found
_CAREFUL = 0.5  # of the alarm: once there is trouble, less of it is looked into
_AROUND = 512  # bits around trouble in which a place is looked for as well, at most
_FILLS = 0.75  # a place that holds for so much of the trouble was not picked out of many stretches
_GUARD = 0.75  # of the evidence must remain when the shares of ONEs are taken into account
_LOG_BETTER = math.log(3e-4)  # chance of being better than what explained the bits before
_LEAST_GAIN = 5  # mismatches that a place more must save
_TRIED = 6  # places that explain a stretch best are tried


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
class Path:
    """Places in order, each different from its neighbours, and where one goes over into the next."""

    places: list[Place]
    cuts: list[int]

    def edges(self, end: int) -> list[int]:
        """Where each place begins, and where the last one ends."""
        return [0, *self.cuts, end]


class _Differing(dict[Place, NDArray[np.uint8]]):
    """1 where a stretch differs from a place, for every place that is asked for."""

    def __init__(self, reference: Reference, stretch: Stretch) -> None:
        self._reference = reference
        self.stretch = stretch

    def __missing__(self, place: Place) -> NDArray[np.uint8]:
        self[place] = differing(self._reference, place, self.stretch)
        return self[place]

    def along(self, path: Path) -> NDArray[np.uint8]:
        """Mismatches along a path."""
        edges = path.edges(len(self.stretch.bits))
        return np.concatenate(
            [self[p][a:b] for p, a, b in zip(path.places, edges[:-1], edges[1:], strict=True)]
        )


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
    earlier = None
    if old is not None:
        earlier = later if old == new else evidence_walk(reference, old, stretch, weights)
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
        self._log_candidates = log_candidates(reference.pattern, unit)

    def shortest(self, ends: list[Place], stretch: Stretch) -> Path:
        """The path through these places only."""
        path = _cut(list(dict.fromkeys(ends)), _Differing(self._reference, stretch))
        return Path(path.places, [stretch.first + cut for cut in path.cuts])

    def path(self, ends: list[Place], stretch: Stretch, level: int, sure: bool) -> Path:
        """The places that a stretch runs through, and the cuts between them.

        Parameters
        ----------
        ends
            The place before and the one after; one only where they are the same, or where one is unknown.
        stretch
            What is to be explained.
        level
            Index of the level of errors that is usual.
        sure
            Whether the first of `ends` is known to hold where the stretch begins.
        """
        wrong = _Differing(self._reference, stretch)
        path = _cut(list(ends), wrong)
        settled = np.zeros(len(stretch.bits), dtype=np.bool_)  # stretches in which no place was found
        rule = rules.LEVELS[level]
        in_vain = 0
        seen = {tuple(path.places)}
        while in_vain < _MOST_IN_VAIN and len(path.places) < _MOST_PLACES:
            left = wrong.along(path)
            left[settled] = 0
            begin, end, excess = worst_stretch(left, rule.careful_share)
            if excess < _CAREFUL * rule.alarm:
                break
            longer = self._with_another(path, wrong, begin, end, rule.share)
            if longer is not None:
                longer = self._without_unproven(longer, wrong, sure, rule.share)
            # A place that is taken in only for it, or another, to be left out again would come back for ever.
            if longer is None or tuple(longer.places) in seen:
                settled[begin:end] = True
                in_vain += 1
            else:
                path = longer
                seen.add(tuple(path.places))
        return Path(path.places, [stretch.first + cut for cut in path.cuts])

    def _with_another(self, path: Path, wrong: _Differing, begin: int, end: int, share: float) -> Path | None:
        """The path with one more place in the stretch from `begin` to `end`, if it is proven there."""
        begin_at = int(np.searchsorted(path.cuts, begin, side="right"))
        end_at = int(np.searchsorted(path.cuts, end, side="left"))
        known = {path.places[begin_at], path.places[end_at]}
        beside = set(path.places[max(begin_at - 1, 0) : end_at + 2])
        old = wrong.along(path)
        best, least = None, int(old.sum()) - _LEAST_GAIN
        for centre in dict.fromkeys([path.places[begin_at], path.places[end_at]]):
            for place in self._best_between(centre, (known, beside), wrong.stretch, begin, end, share):
                for longer, at in _ways_in(path, place, begin, end):
                    cuts, total = split_path([wrong[p] for p in longer])
                    if total > least:
                        continue
                    first, last = Path(longer, cuts).edges(len(wrong.stretch.bits))[at : at + 2]
                    limit = self._limit(longer[at - 1 : at], longer[at + 1 : at + 2])
                    better = self._better(place, wrong, old, first, last, share)
                    if better and self._proven(place, wrong, first, last, share, limit, end - begin):
                        best, least = longer, total - 1
        return None if best is None else _cut(best, wrong)

    def _better(
        self, place: Place, wrong: _Differing, old: NDArray[np.uint8], first: int, last: int, share: float
    ) -> bool:
        """Whether a place agrees where the path so far does not, rather than the other way round.

        Places of a register may be alike for a while: then both agree with the stream, and only the bits in
        which they differ can tell which of them it follows.
        """
        new = wrong[place]
        begin, end, _ = worst_stretch(1 - new[first:last], 1 - share)
        begin, end = first + begin, first + end
        other = old[begin:end] != new[begin:end]
        return log_tail(int(np.count_nonzero(other)), int(new[begin:end][other].sum())) <= _LOG_BETTER

    def _limit(self, before: list[Place], after: list[Place]) -> float:
        """What chance a place between two others may have: more where the stream is known to slip there."""
        slips = bool(before and after and before != after)
        return math.log(rules.FALSE_AT_SLIP if slips else rules.FALSE_IN_BURST) - self._log_candidates

    def _without_unproven(self, path: Path, wrong: _Differing, sure: bool, share: float) -> Path:
        """Leave out places that, beside the others, no longer explain enough to be believed."""
        while True:
            edges = path.edges(len(wrong.stretch.bits))
            last = len(path.places) - 1
            doubtful = [
                index
                for index, place in enumerate(path.places)
                if (index or not sure)
                and not (last == 1 and sure)
                and not self._proven(
                    place,
                    wrong,
                    edges[index],
                    edges[index + 1],
                    share,
                    self._limit(path.places[max(index - 1, 0) : index], path.places[index + 1 : index + 2]),
                )
            ]
            if not doubtful or not last:
                return path
            shortest = min(doubtful, key=lambda index: edges[index + 1] - edges[index])
            places = path.places[:shortest] + path.places[shortest + 1 :]
            path = _cut([p for i, p in enumerate(places) if not i or places[i - 1] != p], wrong)

    def _proven(
        self,
        place: Place,
        wrong: _Differing,
        first: int,
        last: int,
        share: float,
        limit: float,
        trouble: int = 0,
    ) -> bool:
        """Whether a place holds somewhere between two cuts better than chance lets it.

        It may hold in a part only, as long as its neighbours are not known; then chance had as many tries as
        there are parts of that length, and so it had where the trouble is longer than the part.
        """
        begin, end, _ = worst_stretch(1 - wrong[place][first:last], 1 - share)
        bits, among = end - begin, max(last - first, trouble)
        if bits < _FILLS * among:
            limit -= 2 * math.log(among / max(bits, 1))
        begin, end = first + begin, first + end
        if log_tail(bits, int(wrong[place][begin:end].sum())) > limit:
            return False
        received = wrong.stretch.bits[begin:end]
        return agrees(self._reference, place, received, wrong.stretch.first + begin, _GUARD * limit)

    def _best_between(
        self,
        centre: Place,
        known: tuple[set[Place], ...],
        stretch: Stretch,
        begin: int,
        end: int,
        share: float,
    ) -> list[Place]:
        """The places near another one that explain some part of a stretch best, beside those known."""
        length = end - begin
        size = 8 if length <= 128 else 16 if length <= 1024 else 32 if length <= 4096 else 64
        around = min(max(length, size), _AROUND)
        begin = max(0, begin - around)
        bits = stretch.bits[begin : min(len(stretch.bits), end + around)]
        bits = bits[: max(len(bits) // size, 1) * size]
        if len(bits) < size:
            bits = np.concatenate([bits, np.zeros(size - len(bits), dtype=np.uint8)])
        first = stretch.first + begin
        near = Nearby(self._reference, centre, self._unit, first, len(bits))
        cells = near.cells(bits, first, size)
        same = _highest_sum(np.float32(share * size) - cells)
        turned = _highest_sum(np.float32(share * size) - (size - cells.astype(np.float32)))
        found = []
        for places in known:
            for place in places:
                shift = near.shift_of(place)
                if shift is not None:
                    (same if place.inverted == centre.inverted else turned)[shift] = -np.inf
            scores = np.concatenate([same, turned])
            for index in np.argsort(-scores, kind="stable")[:_TRIED]:
                inverted, shift = divmod(int(index), near.shifts)
                found.append(self._reference.normal(near.place_of(shift, bool(inverted))))
        return list(dict.fromkeys(found))


def _highest_sum(scores: NDArray[np.float32]) -> NDArray[np.float32]:
    """The highest sum of neighbouring cells for each shift: scores (cells, shifts) to (shifts,)."""
    current = np.zeros(scores.shape[1], dtype=np.float32)
    highest = np.full(scores.shape[1], -np.inf, dtype=np.float32)
    for row in scores:
        np.maximum(current, 0, out=current)
        current += row
        np.maximum(highest, current, out=highest)
    return highest


def _ways_in(path: Path, place: Place, begin: int, end: int) -> list[tuple[list[Place], int]]:
    """Where in a path another place may belong that holds somewhere in a stretch, each with its index."""
    places, ways = path.places, []
    for index, cut in enumerate(path.cuts):
        if begin - _AROUND <= cut <= end + _AROUND:
            ways.append(([*places[: index + 1], place, *places[index + 1 :]], index + 1))
    at = int(np.searchsorted(path.cuts, (begin + end) // 2, side="right"))
    ways.append(([*places[: at + 1], place, *places[at:]], at + 1))
    return ways


def _cut(places: list[Place], wrong: _Differing) -> Path:
    """Cut where the total of mismatches is least; places that hold nowhere are left out."""
    cuts, _ = split_path([wrong[place] for place in places])
    kept: list[Place] = []
    begins: list[int] = []
    for place, begin, end in zip(places, [0, *cuts], [*cuts, len(wrong.stretch.bits)], strict=True):
        if end > begin and (not kept or kept[-1] != place):
            kept.append(place)
            begins.append(begin)
    return Path(kept, begins[1:])
