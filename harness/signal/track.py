"""Following one place: the reference, its XOR with what was received, counts, and when to look closer.

The stream is followed in words of 64 bits counted from its beginning, so that nothing depends on how it was
cut into chunks. Words stay pending until enough evidence has come after them that no later split can reach
back to them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.signal import rules
from harness.signal.bits import unpack
from harness.signal.ledger import Ledger
from harness.signal.places import Place, Reference

_WORD_BYTES = rules.WORD_BITS // 8
SLAB_BYTES = 1 << 18  # compared at once, so that the work stays in the processor's cache


@dataclass(frozen=True, slots=True)
class Trouble:
    """More errors than usual.

    Attributes
    ----------
    begins
        The stream's bit from which on there are too many.
    noticed
        The bit at which they are.
    level
        Index of the level of errors that was usual.
    """

    begins: int
    noticed: int
    level: int


class Scratch:
    """Memory for one slab, allocated once."""

    def __init__(self) -> None:
        self.differs = np.empty(SLAB_BYTES // 8, dtype=np.uint64).view(np.uint8)
        self.counts = np.empty(SLAB_BYTES // 8, dtype=np.uint8)


class Track:
    """Compares a stream with the pattern at one place, word by word.

    Parameters
    ----------
    reference, place
        What the stream is compared with.
    start
        The stream's bit from which on it is.
    watch_from
        The bit from which on trouble is looked for; what lies before it has been judged.
    level
        Index of the level of errors that is usual to begin with.
    """

    def __init__(
        self,
        reference: Reference,
        place: Place,
        start: int,
        watch_from: int,
        level: int,
        weights: rules.Weights,
        scratch: Scratch,
    ) -> None:
        self.place = place
        self.start = start
        self.level = level
        self._watch_from = watch_from
        self._full_gain = -rules.AGREES * rules.WORD_BITS * weights.scale  # of a word without errors
        self._loss = (rules.DIFFERS - rules.AGREES) * weights.heaviest  # of an error, at most
        self._enough = rules.DECIDED_AFTER * weights.scale
        self._scratch = scratch
        self._order = reference.order
        self._first = start // rules.WORD_BITS  # word that is first in the held arrays
        self._reader = reference.reader(place, self._first * rules.WORD_BITS)
        self._received = np.empty(0, dtype=np.uint8)  # held: words not yet handed out
        self._differs = np.empty(0, dtype=np.uint8)
        self._counts = np.empty(0, dtype=np.uint8)
        self._watched = -(-watch_from // rules.WORD_BITS)  # words before it are beyond doubt or were judged
        self._block_errors = 0  # in the words of the current block before `_watched`
        self._block_words = 0
        self._sure = start  # bits before it are decided
        self._written = start  # bits before it are in the ledger

    @property
    def next_word(self) -> int:
        """The stream's word that is to be scanned next."""
        return self._first + len(self._counts)

    def scan(self, data: NDArray[np.uint8], ledger: Ledger) -> tuple[int, Trouble | None]:
        """Follow the stream through whole words, and write down what is decided.

        Parameters
        ----------
        data
            Received bytes from word `next_word` on, at most `SLAB_BYTES`; a partial word at the end waits.
        ledger
            Takes what is decided.

        Returns
        -------
        tuple[int, Trouble | None]
            Words taken, and the trouble met, if any. After trouble the track is at its end.
        """
        words = len(data) // _WORD_BYTES
        if not words:
            return 0, None
        data = data[: words * _WORD_BYTES]
        differs = self._scratch.differs[: len(data)]
        self._reader.xor_into(data, differs)
        if self.next_word * rules.WORD_BITS < self.start:
            self._blank(differs)
        counts = self._scratch.counts[:words]
        if np.bitwise_or.reduce(differs.view(np.uint64)):
            np.bitwise_count(differs.view(np.uint64), out=counts)
        else:
            counts[:] = 0
        slab_first = self.next_word
        judged = max(self._watched - slab_first, 0)
        still_open = self._counts[self._watched - self._first :] if not judged else self._counts[:0]
        trouble = self._watch(
            np.concatenate([still_open, counts]) if len(still_open) else counts[judged:], differs, slab_first
        )
        self._settle(counts, slab_first)
        self._write(data, differs, counts, slab_first, ledger)
        return words, trouble

    def decide_all(self, ledger: Ledger, end: int) -> None:
        """Write down everything up to a bit that has been scanned."""
        self._sure = max(self._sure, end)
        empty = np.empty(0, dtype=np.uint8)
        self._write(empty, empty, empty, self.next_word, ledger)

    def held(self) -> tuple[int, NDArray[np.uint8]]:
        """The first bit of what was received and is not wholly written, and the bytes from there on."""
        return self._first * rules.WORD_BITS, self._received

    @property
    def written(self) -> int:
        """The stream's bit up to which the ledger is filled."""
        return self._written

    def _blank(self, differs: NDArray[np.uint8]) -> None:
        """Take the bits before the start out of the first word."""
        before = self.start - self.next_word * rules.WORD_BITS
        differs[: before // 8] = 0
        if before % 8:
            left = (255 << before % 8) & 255 if self._order == "lsb" else 255 >> before % 8
            differs[before // 8] &= left

    # ---- trouble

    def _watch(
        self, counts: NDArray[np.uint8], differs: NDArray[np.uint8], slab_first: int
    ) -> Trouble | None:
        """Look through the words from `_watched` on; move it to where nothing is open any more."""
        if not len(counts):
            return None
        if counts.max() <= rules.FEW_IN_WORD:
            self._pass(counts)
            return None
        levels, drifts = self._levels(counts)
        above = np.cumsum(counts - drifts)
        lowest = np.minimum.accumulate(np.minimum(above, 0.0))
        excess = above - lowest
        edges = np.flatnonzero(np.diff(excess > 0, prepend=False))
        first = self._watched
        for at in range(0, len(edges), 2):
            begin = int(edges[at])
            closed = at + 1 < len(edges)
            end = int(edges[at + 1]) + 1 if closed else len(counts)
            level = int(levels[begin])
            rule = rules.LEVELS[level]
            if rule.by_word:
                peak = excess[begin:end] >= rule.alarm
                if not peak.any():
                    if not closed:
                        self._pass(counts[:begin])
                        return None
                    continue
                noticed = begin + int(np.argmax(peak)) + 1
                trouble = Trouble(
                    max((first + begin) * rules.WORD_BITS, self._watch_from),
                    (first + noticed) * rules.WORD_BITS,
                    level,
                )
            else:
                found = self._look_closer(first + begin - 1, first + end, level, differs, slab_first)
                if found is None:
                    if not closed:
                        self._pass(counts[:begin])
                        return None
                    continue
                trouble = found
            self._pass(counts[:begin])
            return trouble
        self._pass(counts)
        return None

    def _look_closer(
        self, begin: int, end: int, level: int, differs: NDArray[np.uint8], slab_first: int
    ) -> Trouble | None:
        """Look for an excess of errors bit by bit in the words from `begin` up to `end`."""
        begin = max(begin, self._first)
        split = max(begin, slab_first)
        held = self._differs[(begin - self._first) * _WORD_BYTES : (split - self._first) * _WORD_BYTES]
        new = differs[(split - slab_first) * _WORD_BYTES : (end - slab_first) * _WORD_BYTES]
        wrong = unpack(np.concatenate([held, new]), self._order)
        offset = begin * rules.WORD_BITS
        if offset < self._watch_from:
            wrong = wrong[self._watch_from - offset :]
            offset = self._watch_from
        rule = rules.LEVELS[level]
        above = np.cumsum(wrong - rule.share)
        lowest = np.minimum.accumulate(np.minimum(above, 0.0))
        over = above - lowest >= rule.alarm
        if not over.any():
            return None
        noticed = int(np.argmax(over))
        before = np.concatenate([[0.0], above[: noticed + 1]])
        begins = noticed + 1 - int(np.argmin(before[::-1]))
        return Trouble(offset + begins, offset + noticed + 1, level)

    def _levels(self, counts: NDArray[np.uint8]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Index of the level and drift for each word from `_watched` on."""
        size = rules.BLOCK_WORDS
        left = size - self._watched % size  # words up to the end of the current block
        levels = np.full(len(counts), self.level, dtype=np.int64)
        if len(counts) > left:
            ends = np.arange(left, len(counts), size)
            running = np.concatenate([[0], np.cumsum(counts, dtype=np.int64)])
            errors = running[ends] - running[np.maximum(ends - size, 0)]
            after = np.searchsorted(rules.LEVEL_MOST, errors)
            after[0] = self._next_level(
                self.level, self._block_errors + int(errors[0]), self._block_words + left
            )
            levels[left:] = np.repeat(after, size)[: len(counts) - left]
        return levels, rules.LEVEL_DRIFT[levels]

    @staticmethod
    def _next_level(level: int, errors: int, words: int) -> int:
        """The level after a block, of which so many words were seen; a small part of a block says nothing."""
        if words < rules.BLOCK_WORDS // 4:
            return level
        return rules.level_of(errors, words * rules.WORD_BITS)

    def _pass(self, counts: NDArray[np.uint8]) -> None:
        """Move `_watched` on over words, with the level that blocks leave behind."""
        size = rules.BLOCK_WORDS
        left = size - self._watched % size
        self._watched += len(counts)
        if len(counts) < left:
            self._block_errors += int(counts.sum(dtype=np.int64))
            self._block_words += len(counts)
            return
        tail = (len(counts) - left) % size
        whole = len(counts) - tail
        if whole == left:
            errors = self._block_errors + int(counts[:left].sum(dtype=np.int64))
            words = self._block_words + left
        else:
            errors, words = int(counts[whole - size : whole].sum(dtype=np.int64)), size
        self.level = self._next_level(self.level, errors, words)
        self._block_errors = int(counts[whole:].sum(dtype=np.int64))
        self._block_words = tail

    # ---- what is decided

    def _settle(self, counts: NDArray[np.uint8], slab_first: int) -> None:
        """Move the decided bit to where enough evidence follows before `_watched`."""
        upto = min(self._watched, slab_first + len(counts))
        earliest = max(self._first, -(-self.start // rules.WORD_BITS))  # the first whole word
        size = 64
        while upto > earliest:
            first = max(earliest, upto - size)
            split = max(first, slab_first)
            held = self._counts[first - self._first : split - self._first]
            new = counts[split - slab_first : max(upto - slab_first, 0)]
            part = np.concatenate([held, new])[: upto - first].astype(np.int64)
            gains = self._full_gain - self._loss * part
            total = np.zeros(len(gains) + 1, dtype=np.int64)
            np.cumsum(gains, out=total[1:])
            best = np.maximum.accumulate(total[::-1])[::-1]
            enough = np.flatnonzero(best - total >= self._enough)
            if len(enough):
                self._sure = max(self._sure, (first + int(enough[-1])) * rules.WORD_BITS)
                return
            if first == earliest:
                return
            size *= 8

    def _write(
        self,
        data: NDArray[np.uint8],
        differs: NDArray[np.uint8],
        counts: NDArray[np.uint8],
        slab_first: int,
        ledger: Ledger,
    ) -> None:
        """Write down what is decided, from the held words and then from the slab; hold the rest."""
        slab_bit = slab_first * rules.WORD_BITS
        held_until = min(self._sure, slab_bit)
        if held_until > self._written:
            self._compare(self._received, self._differs, self._first * rules.WORD_BITS, held_until, ledger)
        if self._sure > max(self._written, slab_bit):
            self._compare(data, differs, slab_bit, self._sure, ledger)
        keep = max(self._first, self._written // rules.WORD_BITS)
        if keep >= slab_first:
            lead = keep - slab_first
            self._received = data[lead * _WORD_BYTES :].copy()
            self._differs = differs[lead * _WORD_BYTES :].copy()
            self._counts = counts[lead:].copy()
        else:
            lead = keep - self._first
            self._received = np.concatenate([self._received[lead * _WORD_BYTES :], data])
            self._differs = np.concatenate([self._differs[lead * _WORD_BYTES :], differs])
            self._counts = np.concatenate([self._counts[lead:], counts])
        self._first = keep

    def _compare(
        self,
        received: NDArray[np.uint8],
        differs: NDArray[np.uint8],
        first_bit: int,
        until: int,
        ledger: Ledger,
    ) -> None:
        ledger.compare(
            received,
            differs,
            self._written - first_bit,
            until - self._written,
            self.place.anchor + self._written,
            self.place.inverted,
        )
        self._written = until
