"""Where one place ends and the next begins: cuts of least total, edges of evidence, stretches of trouble."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


def split_path(mismatches: list[NDArray[np.uint8]]) -> tuple[list[int], int]:
    """Cut a stretch so that the places follow one another with the fewest mismatches in total.

    Parameters
    ----------
    mismatches
        For each place in order, shape (n,): 1 where the stretch differs from it.

    Returns
    -------
    tuple[list[int], int]
        Ascending cuts, one fewer than places: place j holds from cut j-1 up to cut j. Where several cuts are
        equally good the earliest is taken. And the total of mismatches.
    """
    sums = [running(m) for m in mismatches]
    best = sums[0]
    gains = []
    for later in sums[1:]:
        gain = best - later
        gains.append(gain)
        best = np.minimum.accumulate(gain) + later
    end = len(sums[0]) - 1
    total = int(best[end])
    cuts: list[int] = []
    for gain in reversed(gains):
        end = int(np.argmin(gain[: end + 1]))
        cuts.append(end)
    return cuts[::-1], total


def running(values: NDArray[np.uint8]) -> NDArray[np.int64]:
    """Running sum, shape (n + 1,), beginning with 0."""
    out = np.zeros(len(values) + 1, dtype=np.int64)
    np.cumsum(values, out=out[1:])
    return out


@dataclass(frozen=True, slots=True)
class Gap:
    """A stretch without evidence, in bits of the stretch that was looked at."""

    begin: int
    end: int

    @property
    def bits(self) -> int:
        """Its length."""
        return self.end - self.begin


def gap_between(old: NDArray[np.int64] | None, new: NDArray[np.int64]) -> Gap:
    """The stretch between the end of the old place's evidence and the beginning of the new one's.

    Parameters
    ----------
    old, new
        Walks of evidence (`rules.walk`) of the two places over the same n bits, shape (n + 1,); they may be
        one. None for an old place: the gap begins with the stretch.

    Returns
    -------
    Gap
        Of all pairs of a first bit and a later last one, the pair between which the new walk's height above
        the old one's is greatest, the earliest where several are equal: where the old walk is lowest and the
        new one highest. Empty where the new place's evidence begins before the old one's ends. A new place
        counts up to where its evidence ends.
    """
    if old is None:
        return Gap(0, int(np.argmax(new[: _evidence_end(new)])))
    if new is not old:
        upto = _evidence_end(new)
        old, new = old[:upto], new[:upto]
    end = int(np.argmax(new - np.minimum.accumulate(old)))
    return Gap(int(np.argmin(old[: end + 1])), end)


def _evidence_end(height: NDArray[np.int64]) -> int:
    """One past the bit at which a walk has come down furthest."""
    return int(np.argmax(np.maximum.accumulate(height) - height)) + 1


def worst_stretch(wrong: NDArray[np.uint8], share: float) -> tuple[int, int, float]:
    """The stretch with the greatest excess of errors over a share of its bits: begin, end, excess."""
    above = np.zeros(len(wrong) + 1)
    np.cumsum(wrong - share, out=above[1:])
    excess = above - np.minimum.accumulate(above)
    end = int(np.argmax(excess))
    begin = end - int(np.argmin(above[end::-1])) if end else 0
    return begin, end, float(excess[end])
