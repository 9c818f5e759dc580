"""Levels of errors along a stream, and the stretches of words in which more than that is seen."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from harness.signal import rules

_PIECE_WORDS = 1024


def next_level(level: int, errors: int, words: int) -> int:
    """The level after a block, of which so many words were seen; a small part of a block says nothing."""
    if words < rules.BLOCK_WORDS // 4:
        return level
    return rules.level_of(errors, words * rules.WORD_BITS)


class Levels:
    """The level that stands for each of some words, which changes from block to block.

    Parameters
    ----------
    counts
        Errors in each word, shape (n,).
    offset
        Words of the first block that lie before the first word.
    level
        Index of the level in the first block.
    block_errors, block_words
        What was seen of the first block before the first word.
    """

    def __init__(
        self, counts: NDArray[np.uint8], offset: int, level: int, block_errors: int, block_words: int
    ) -> None:
        self._counts = counts
        self._offset = offset
        first = counts[: rules.BLOCK_WORDS - offset]
        after = next_level(level, block_errors + int(first.sum(dtype=np.int64)), block_words + len(first))
        self._first_two = (level, after)

    def at(self, word: int) -> int:
        """The level of a word."""
        block = (word + self._offset) // rules.BLOCK_WORDS
        if block < 2:
            return self._first_two[block]
        end = block * rules.BLOCK_WORDS - self._offset
        errors = int(self._counts[end - rules.BLOCK_WORDS : end].sum(dtype=np.int64))
        return rules.level_of(errors, rules.BLOCK_WORDS * rules.WORD_BITS)

    def drifts(self, begin: int, end: int) -> NDArray[np.float64]:
        """What is taken off the errors of each word, shape (end - begin,)."""
        size = rules.BLOCK_WORDS
        blocks = range((begin + self._offset) // size, (end - 1 + self._offset) // size + 1)
        drifts = [rules.LEVELS[self.at(max(b * size - self._offset, 0))].word_drift for b in blocks]
        lead = begin + self._offset - blocks.start * size
        return np.repeat(np.array(drifts), size)[lead : lead + end - begin]

    def stretches_above(self, high: NDArray[np.intp]) -> Iterator[tuple[int, int, bool]]:
        """Stretches of words in which the running excess of errors over the drift is above zero.

        Parameters
        ----------
        high
            Words, ascending, among which are all that have more errors than their drift.

        Yields
        ------
        tuple[int, int, bool]
            First word, one past the last (the word with which the excess is gone, unless it never is), and
            whether it is gone.
        """
        if len(high) > len(self._counts) // 256 + 8:
            yield from self._many()
            return
        end = 0
        for begin in high.tolist():
            if begin < end or self._counts[begin] <= rules.LEVELS[self.at(begin)].word_drift:
                continue
            end = self._end_of(begin)
            yield begin, end or len(self._counts), bool(end)
            if not end:
                return

    def _end_of(self, begin: int) -> int:
        """One past the word with which an excess is gone; 0 where it never is."""
        size = 16
        while True:
            part = self._counts[begin : begin + size]
            gone = np.flatnonzero(np.cumsum(part - self.drifts(begin, begin + len(part))) <= 0)
            if len(gone):
                return begin + int(gone[0]) + 1
            if begin + size >= len(self._counts):
                return 0
            size *= 8

    def _many(self) -> Iterator[tuple[int, int, bool]]:
        """The same where many words are high: piece by piece, as the first stretch may be all that is asked."""
        begin, size = 0, _PIECE_WORDS
        while begin < len(self._counts):
            end = min(begin + size, len(self._counts))
            above = np.cumsum(self._counts[begin:end] - self._all_drifts(begin, end))
            excess = above - np.minimum.accumulate(np.minimum(above, 0.0))
            edges = np.flatnonzero(np.diff(excess > 0, prepend=False, append=False)) + begin
            starts, stops = edges[::2].tolist(), edges[1::2].tolist()
            open_at = starts[-1] if stops and stops[-1] == end else None
            for start, stop in zip(starts, stops, strict=True):
                if stop < end:
                    yield start, stop + 1, True
            if open_at is None:
                begin, size = end, _PIECE_WORDS
            elif end < len(self._counts):
                begin, size = open_at, 4 * size
            else:
                yield open_at, end, False
                return

    def _all_drifts(self, begin: int, end: int) -> NDArray[np.float64]:
        """As `drifts`, quicker for many words."""
        size = rules.BLOCK_WORDS
        first = (begin + self._offset) // size
        ends = np.arange(max(first, 1), (end - 1 + self._offset) // size + 1) * size - self._offset
        levels = [self.at(begin)]
        if first == 0 and len(ends):
            levels.append(self._first_two[1])
            ends = ends[1:]
        elif first:
            ends = ends[1:]
        if len(ends):
            blocks = self._counts[ends[0] - size : ends[-1]].reshape(-1, size)
            levels += np.searchsorted(rules.LEVEL_MOST, blocks.sum(axis=1, dtype=np.int64)).tolist()
        lead = begin + self._offset - first * size
        return np.repeat(rules.LEVEL_DRIFT[levels], size)[lead : lead + end - begin]
