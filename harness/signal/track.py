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
from harness.signal.bits import pack, unpack
from harness.signal.ledger import Ledger
from harness.signal.levels import Levels, next_level
from harness.signal.patterns.readers import ROW_BYTES
from harness.signal.places import Place, Reference

_WORD_BYTES = rules.WORD_BITS // 8
_FULL_GAIN = -rules.AGREES * rules.WORD_BITS  # of evidence, by a word without errors
_LOSS = rules.DIFFERS - rules.AGREES  # by an error in it
_FIRST_SLAB_BYTES = 1 << 15  # at first, as there is often trouble again soon
_ROW_WORDS = ROW_BYTES // _WORD_BYTES
SLAB_BYTES = 1 << 21  # at most at once: calls a slab cost more than a smaller one gains in the cache


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


@dataclass(frozen=True, slots=True)
class _Slab:
    """What is being scanned: words from `first` on, as received and where they differ."""

    first: int
    received: NDArray[np.uint8]
    differs: NDArray[np.uint8]


class Scratch:
    """Memory for one slab, allocated once."""

    def __init__(self) -> None:
        self.differs = np.empty(SLAB_BYTES // 8, dtype=np.uint64).view(np.uint8)
        self.counts = np.empty(SLAB_BYTES // 8, dtype=np.uint8)
        self.zeros = np.zeros(SLAB_BYTES, dtype=np.uint8)
        self.no_errors = np.zeros(SLAB_BYTES // 8, dtype=np.uint8)


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
        self._weights = weights
        self._scratch = scratch
        self._order = reference.order
        self._first = start // rules.WORD_BITS  # word that is first in the held arrays
        self._reader = reference.reader(place, self._first * rules.WORD_BITS)
        self._received = np.empty(0, dtype=np.uint8)  # held: words not yet handed out
        self._differs = np.empty(0, dtype=np.uint8)
        self._counts = np.empty(0, dtype=np.uint8)
        self._watched = watch_from // rules.WORD_BITS  # words before it are beyond doubt or were judged
        self._plain = weights.scale == 1 and not watch_from % rules.WORD_BITS  # held counts are errors
        self._block_errors = 0  # in the words of the current block before `_watched`
        self._block_words = 0
        self.appetite = _FIRST_SLAB_BYTES  # bytes that it is worth while to scan at once
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
        self.appetite = min(4 * self.appetite, SLAB_BYTES)
        differs = self._scratch.differs[: len(data)]
        touched = self._reader.compare(data, differs)
        if self.next_word * rules.WORD_BITS < self.start:
            self._blank(differs)
        if not len(touched) and self._watched == self.next_word:
            self._scan_clean(data, ledger)
            return words, None
        counts = self._scratch.counts[:words]
        wrong = _count_words(differs.view(np.uint64), touched, counts)
        slab = _Slab(self.next_word, data, differs)
        slab_first = slab.first
        weighed = self._weighed(slab, counts)
        judged = max(self._watched - slab_first, 0)
        still_open = self._counts[self._watched - self._first :] if not judged else self._counts[:0]
        if len(still_open):
            trouble = self._watch(np.concatenate([still_open, weighed]), None, slab)
        else:
            trouble = self._watch(weighed[judged:], wrong if not judged else None, slab)
        self._settle(weighed, slab_first)
        self._write(slab, counts, weighed, wrong, ledger)
        return words, trouble

    def _scan_clean(self, data: NDArray[np.uint8], ledger: Ledger) -> None:
        """The same for words without errors while nothing is open: the usual case, made short."""
        words = len(data) // _WORD_BYTES
        slab_first = self.next_word
        differs, counts = self._scratch.zeros[: len(data)], self._scratch.no_errors[:words]
        self._pass_clean(words)
        self._settle(counts, slab_first)
        slab = _Slab(slab_first, data, differs)
        self._write(slab, counts, counts, np.empty(0, dtype=np.intp), ledger)

    def decide_all(self, ledger: Ledger, end: int) -> None:
        """Write down everything up to a bit that has been scanned."""
        self._sure = max(self._sure, end)
        empty = np.empty(0, dtype=np.uint8)
        self._write(_Slab(self.next_word, empty, empty), empty, empty, None, ledger)

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
        self,
        counts: NDArray[np.uint8],
        wrong: NDArray[np.intp] | None,
        slab: _Slab,
    ) -> Trouble | None:
        """Look through the words from `_watched` on; move it to where nothing is open any more."""
        some = np.flatnonzero(counts > rules.FEW_IN_WORD) if wrong is None else wrong
        high = some[counts[some] > rules.FEW_IN_WORD]
        if len(high):
            levels, first = self._levels(counts), self._watched
            for begin, end, closed in levels.stretches_above(high):
                level = levels.at(begin)
                if rules.LEVELS[level].by_word:
                    drifts = levels.drifts(begin, end)
                    trouble = self._excess_in_words(counts[begin:end] - drifts, first + begin, level)
                else:
                    trouble = self._excess_in_bits(first + begin - 1, first + end, level, slab)
                if trouble is not None or not closed:
                    self._pass(counts[:begin])
                    return trouble
        self._pass(counts)
        return None

    def _excess_in_words(self, over: NDArray[np.float64], first: int, level: int) -> Trouble | None:
        """Look for an excess of errors by whole words, of which `first` is the first."""
        enough = np.cumsum(over) >= rules.LEVELS[level].alarm
        if not enough.any():
            return None
        noticed = first + int(np.argmax(enough)) + 1
        return Trouble(max(first * rules.WORD_BITS, self._watch_from), noticed * rules.WORD_BITS, level)

    def _excess_in_bits(self, begin: int, end: int, level: int, slab: _Slab) -> Trouble | None:
        """Look for an excess of errors bit by bit in the words from `begin` up to `end`."""
        begin = max(begin, self._first)
        upto = begin + 16
        while True:  # an excess is met soon, if at all
            upto = min(upto, end)
            wrong = unpack(self._between(self._differs, slab.differs, slab.first, begin, upto), self._order)
            if self._weights.scale != 1:
                received = self._between(self._received, slab.received, slab.first, begin, upto)
                expected = unpack(received, self._order) ^ wrong
                weights = np.where(expected, self._weights.one, self._weights.zero)
                trouble = self._excess(wrong * weights / self._weights.scale, begin * rules.WORD_BITS, level)
            else:
                trouble = self._excess(wrong, begin * rules.WORD_BITS, level)
            if trouble is not None or upto == end:
                return trouble
            upto = begin + 4 * (upto - begin)

    def _between(
        self, held: NDArray[np.uint8], new: NDArray[np.uint8], slab_first: int, begin: int, end: int
    ) -> NDArray[np.uint8]:
        """Words from `begin` up to `end`, of which some are held and some new."""
        split = min(max(begin, slab_first), end)
        return np.concatenate(
            [
                held[(begin - self._first) * _WORD_BYTES : (split - self._first) * _WORD_BYTES],
                new[max(split - slab_first, 0) * _WORD_BYTES : max(end - slab_first, 0) * _WORD_BYTES],
            ]
        )

    def _excess(
        self, wrong: NDArray[np.uint8] | NDArray[np.float64], offset: int, level: int
    ) -> Trouble | None:
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

    def _weighed(self, slab: _Slab, counts: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """Errors in each word as trouble is looked for: with weights, from where it is looked for on."""
        weighed = counts
        if self._weights.scale != 1:
            weighed = self._with_weights(slab.received, slab.differs, counts)
        at = self._watch_from // rules.WORD_BITS - slab.first
        if self._watch_from % rules.WORD_BITS and 0 <= at < len(counts):
            # Errors before the bit from which on trouble is looked for were judged and are not met again.
            word = slice(at * _WORD_BYTES, (at + 1) * _WORD_BYTES)
            bits = unpack(slab.differs[word], self._order)
            bits[: self._watch_from % rules.WORD_BITS] = 0
            later = pack(bits, self._order)
            one = np.array([bits.sum()], dtype=np.uint8)
            weighed = weighed.copy()
            weighed[at : at + 1] = self._with_weights(slab.received[word], later, one)
        return weighed

    def _with_weights(
        self, received: NDArray[np.uint8], differs: NDArray[np.uint8], counts: NDArray[np.uint8]
    ) -> NDArray[np.uint8]:
        lost = np.bitwise_count((differs & ~received).view(np.uint64)).astype(np.int64)
        weighed = lost * self._weights.one + (counts - lost) * self._weights.zero
        capped: NDArray[np.uint8] = np.minimum(weighed // self._weights.scale, 255).astype(np.uint8)
        return capped

    def _levels(self, counts: NDArray[np.uint8]) -> Levels:
        """The levels that stand for the words from `_watched` on."""
        offset = self._watched % rules.BLOCK_WORDS
        return Levels(counts, offset, self.level, self._block_errors, self._block_words)

    def _pass_clean(self, words: int) -> None:
        """The same as `_pass` for words without errors."""
        size = rules.BLOCK_WORDS
        left = size - self._watched % size
        self._watched += words
        if words < left:
            self._block_words += words
            return
        if words >= left + size:
            self.level = 0
        else:
            self.level = next_level(self.level, self._block_errors, self._block_words + left)
        self._block_errors, self._block_words = 0, (words - left) % size

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
        self.level = next_level(self.level, errors, words)
        self._block_errors = int(counts[whole:].sum(dtype=np.int64))
        self._block_words = tail

    # ---- what is decided

    def _settle(self, counts: NDArray[np.uint8], slab_first: int) -> None:
        """Move the decided bit to where enough evidence follows before `_watched`."""
        upto = min(self._watched, slab_first + len(counts))
        earliest = max(self._first, -(-self.start // rules.WORD_BITS))  # the first whole word
        if upto == slab_first + len(counts) and len(counts) >= 4 and not counts[-4:].any():
            # The usual case: two words without errors are enough, one is not.
            self._sure = max(self._sure, (upto - 2) * rules.WORD_BITS)
            return
        size = 64
        while upto > earliest:
            first = max(earliest, upto - size)
            split = max(first, slab_first)
            held = self._counts[first - self._first : split - self._first]
            new = counts[split - slab_first : max(upto - slab_first, 0)]
            part = np.concatenate([held, new])[: upto - first].astype(np.int64)
            gains = _FULL_GAIN - _LOSS * part
            total = np.zeros(len(gains) + 1, dtype=np.int64)
            np.cumsum(gains, out=total[1:])
            best = np.maximum.accumulate(total[::-1])[::-1]
            enough = np.flatnonzero(best - total >= rules.DECIDED_AFTER)
            if len(enough):
                self._sure = max(self._sure, (first + int(enough[-1])) * rules.WORD_BITS)
                return
            if first == earliest:
                return
            size *= 8

    def _write(
        self,
        slab: _Slab,
        counts: NDArray[np.uint8],
        weighed: NDArray[np.uint8],
        wrong: NDArray[np.intp] | None,
        ledger: Ledger,
    ) -> None:
        """Write down what is decided, from the held words and then from the slab; hold the rest."""
        data, differs, slab_first = slab.received, slab.differs, slab.first
        slab_bit = slab_first * rules.WORD_BITS
        held_until = min(self._sure, slab_bit)
        if held_until > self._written:
            held = self._counts if self._plain else None
            self._compare(self._received, self._differs, held, self._first, held_until, ledger)
        if self._sure > max(self._written, slab_bit):
            if wrong is not None and not len(wrong):
                at = self._written
                ledger.clean(self._sure - at, self.place.anchor + at, self.place.inverted)
                self._written = self._sure
            else:
                self._compare(data, differs, counts, slab_first, self._sure, ledger, wrong)
        keep = max(self._first, self._written // rules.WORD_BITS)
        if keep >= slab_first:
            lead = keep - slab_first
            self._received = data[lead * _WORD_BYTES :].copy()
            self._differs = differs[lead * _WORD_BYTES :].copy()
            self._counts = weighed[lead:].copy()
        else:
            lead = keep - self._first
            self._received = np.concatenate([self._received[lead * _WORD_BYTES :], data])
            self._differs = np.concatenate([self._differs[lead * _WORD_BYTES :], differs])
            self._counts = np.concatenate([self._counts[lead:], weighed])
        self._first = keep

    def _compare(
        self,
        received: NDArray[np.uint8],
        differs: NDArray[np.uint8],
        counts: NDArray[np.uint8] | None,
        first_word: int,
        until: int,
        ledger: Ledger,
        wrong: NDArray[np.intp] | None = None,
    ) -> None:
        skip = self._written // rules.WORD_BITS - first_word
        begin = self._written - (first_word + skip) * rules.WORD_BITS
        exact = until % rules.WORD_BITS == 0 and (not begin or self._written == self.start)
        words = -(-until // rules.WORD_BITS) - first_word
        # Bits before the track's start are blank in `differs` and `counts`.
        ledger.compare(
            received[skip * _WORD_BYTES : words * _WORD_BYTES],
            differs[skip * _WORD_BYTES : words * _WORD_BYTES],
            begin,
            until - self._written,
            self.place.anchor + self._written,
            self.place.inverted,
            None if counts is None or not exact else counts[skip:words],
            None if wrong is None else wrong[(wrong >= skip) & (wrong < words)] - skip,
        )
        self._written = until


def _count_words(
    differs: NDArray[np.uint64], touched: NDArray[np.intp], counts: NDArray[np.uint8]
) -> NDArray[np.intp] | None:
    """Count the ONEs of each word, in the rows that have any; the words with any, where they are few."""
    rows = -(-len(differs) // _ROW_WORDS)
    if 2 * len(touched) > rows:
        np.bitwise_count(differs, out=counts)
        return None
    counts[:] = 0
    words = [np.empty(0, dtype=np.intp)]
    for row in touched.tolist():
        part = slice(row * _ROW_WORDS, (row + 1) * _ROW_WORDS)
        np.bitwise_count(differs[part], out=counts[part])
        words.append(np.flatnonzero(counts[part] != 0) + part.start)
    return np.concatenate(words)
