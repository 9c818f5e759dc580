"""The counter: compares a received stream with the pattern, bit by bit, wherever in the pattern it is.

It gives back final segments, whatever the size of the chunks that come in. The rules that it follows (what
is a burst, what an outage, where a slip is cut) stand in `rules` and `slips`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from harness.record import BitOrder, Segment
from harness.signal import rules
from harness.signal.acquire import Acquirer
from harness.signal.bits import as_bytes, pack
from harness.signal.ledger import Ledger
from harness.signal.patterns import Pattern
from harness.signal.places import Place, Reference
from harness.signal.resolve import Path, Resolver, Stretch, differing, evidence_walk, gap
from harness.signal.search import Hit, Search
from harness.signal.stream import Undecided
from harness.signal.track import SLAB_BYTES, Scratch, Track, Trouble

_LOSS_AFTER = rules.OUTAGE_BITS + 2 * rules.LONGEST_WINDOW  # bits without evidence until loss is stated
_LONGEST_PUZZLE = 4 * rules.LONGEST_WINDOW  # bits in which places between two are looked for
_LEAST_FOR_LEVEL = 512  # bits that tell by themselves how many errors are usual


class Counter:
    """Counts errors in a received stream.

    Parameters
    ----------
    pattern
        What is expected; not a constant one.
    bit_order
        Which bit of a byte comes first.
    slip_unit
        Bits in which the link loses and invents: 8 on byte links, else 1.
    position_limit
        Error positions listed at most between two marks. Counts are exact beyond it.
    cut_compared
        No segment straddles this count of compared bits.

    Raises
    ------
    PatternError
        For a constant pattern.
    """

    def __init__(
        self,
        pattern: Pattern,
        *,
        bit_order: BitOrder = "lsb",
        slip_unit: int = 1,
        position_limit: int = 65536,
        cut_compared: int | None = None,
    ) -> None:
        self.pattern = pattern
        self._order: BitOrder = bit_order
        self._unit = slip_unit
        self._reference = Reference(pattern, bit_order)
        self._acquirer = Acquirer(pattern)
        self._weights = rules.weights_of(pattern)
        self._resolver = Resolver(self._reference, slip_unit)
        self._ledger = Ledger(bit_order, pattern.period, position_limit, cut_compared)
        self._scratch = Scratch()
        self.received = 0
        self._track: Track | None = None
        self._run_on: Place | None = None  # the last place held, also while it is lost
        self._begin_stretch(None)

    @property
    def decided(self) -> int:
        """Bits in segments that have been handed out or will be by the next call."""
        return self._ledger.at

    def feed(self, data: bytes | bytearray | memoryview | NDArray[np.uint8]) -> list[Segment]:
        """Count the bytes that have come; what is decided is given back.

        Parameters
        ----------
        data
            Any number of bytes.

        Returns
        -------
        list[Segment]
            Contiguous and final, following on those of the last call. While the stream is aligned and clean
            fewer than 256 bits stay undecided; in trouble at most about `_LOSS_AFTER`.
        """
        rest = as_bytes(data)
        self.received += 8 * len(rest)
        while len(rest):
            rest = rest[self._take(rest) :]
        return self._ledger.take()

    def skip(self, bits: int) -> list[Segment]:
        """Pass over bits that the host lost: unaligned, and the place is assumed to have run on.

        Everything before them is decided. What follows is looked at like a stream that goes on.
        """
        self._decide_all()
        self._ledger.event("skipped", f"{bits} bits were lost on the host's side")
        self._ledger.unaligned(bits)
        self.received += bits
        place = self._run_on
        if place is not None:
            place = self._reference.normal(Place(place.anchor + self._stream.end + bits, place.inverted))
        self._begin_stretch(place)
        return self._ledger.take()

    def mark(self) -> None:
        """Let no segment straddle the count of bits received so far."""
        self._ledger.mark(self.received)

    def finish(self) -> list[Segment]:
        """Decide everything that is still undecided; the stream has ended."""
        self._decide_all()
        self._begin_stretch(None)
        return self._ledger.take()

    # ---- the stretch of stream since the start or the last skip

    def _begin_stretch(self, place: Place | None) -> None:
        """Begin to count bits from 0 again, at a place that is assumed or at none."""
        self._stream = Undecided(self._order)
        self._written = 0  # bits before it are in the ledger
        self._lost_at: int | None = None
        self._search: Search | None = None
        self._track = None
        self._run_on = place
        if place is None:
            self._search = self._new_search(None, 0)
        else:
            self._track = self._new_track(place, 0, 0, 0)

    def _new_search(self, old: Place | None, begin: int) -> Search:
        return Search(self._reference, self._acquirer, old, begin, self._unit, self._weights)

    def _new_track(self, place: Place, start: int, watch_from: int, level: int) -> Track:
        return Track(self._reference, place, start, watch_from, level, self._weights, self._scratch)

    def _take(self, data: NDArray[np.uint8]) -> int:
        """Take in some bytes at the front of `data` and go as far as they allow: how many."""
        if self._track is None:
            assert self._search is not None
            need = (self._search.next_end + 7) // 8 - self._stream.end // 8
            taken = min(len(data), max(need, 1))
            self._stream.append(data[:taken])
            self._go_on(final=False)
            return taken
        waiting = len(self._stream)
        if waiting:
            taken = min(len(data), 8 - waiting % 8 if waiting % 8 else SLAB_BYTES)
            self._stream.append(data[:taken])
            self._go_on(final=False)
            return taken
        if len(data) < 8:
            self._stream.append(data)
            return len(data)
        words, trouble = self._track.scan(data[: self._track.appetite], self._ledger)
        self._stream.first += 8 * words
        if trouble is not None:
            self._meet(trouble)
            self._go_on(final=False)
        return 8 * words

    def _go_on(self, final: bool) -> None:
        """Follow and search in turn through what is at hand."""
        while True:
            if self._track is not None:
                words, trouble = self._track.scan(self._stream.data[: self._track.appetite], self._ledger)
                self._stream.drop_until(self._stream.first * 8 + 64 * words)
                if trouble is not None:
                    self._meet(trouble)
                elif not words:
                    return
            elif not self._look(final):
                return

    def _meet(self, trouble: Trouble, filled_up: bool = False) -> None:
        """Stop following and search; the bits that are not sure come back into play."""
        track, self._track = self._track, None
        assert track is not None
        first_bit, held = track.held()
        if filled_up:
            held = held[:-8]  # the last word was not all received, and is still in the stream
        self._stream.restart(first_bit // 8, held)
        self._written = track.written
        self._trouble = trouble
        self._search = self._new_search(track.place, trouble.begins)

    # ---- searching

    def _look(self, final: bool) -> bool:
        """Take one look for a place, if the bits for it are there; whether there was one to take."""
        search = self._search
        assert search is not None
        end = search.next_end
        if end > self._stream.end:
            if not final or self._stream.end <= search.last_end:
                return False
            end = self._stream.end
        hit = search.look(self._stream, end)
        if hit is None and final and end == self._stream.end and self._unknown(search):
            hit = search.last_look(self._stream)
        if hit is not None:
            self._found(search, hit)
        elif not final:
            self._consider_loss(search, end)
        return True

    def _unknown(self, search: Search) -> bool:
        return search.old is None or self._lost_at is not None

    def _consider_loss(self, search: Search, end: int) -> None:
        """State that alignment is lost, once no place can come any more that makes a burst of it."""
        if self._lost_at is None:
            lost_at = self._evidence_end(search.old, end)
            if end - lost_at < _LOSS_AFTER:
                return
            self._lose(search.old, lost_at)
        keep = end - search.spacing - 2 * rules.LONGEST_WINDOW
        if keep > self._written:
            self._write_unaligned(keep)

    def _evidence_end(self, old: Place | None, end: int) -> int:
        """Where the old place's evidence ends; the beginning where there is none."""
        if old is None:
            return self._written
        walk = evidence_walk(self._reference, old, self._stretch(end), self._weights)
        return self._written + int(np.argmin(walk))

    def _lose(self, old: Place | None, at: int) -> None:
        if old is not None:
            self._write_compared(old, at)
            self._ledger.event("alignment_lost", "the pattern is no longer found in the stream")
        self._lost_at = at

    def _stretch(self, end: int) -> Stretch:
        return Stretch(self._written, self._stream.bits(self._written, end))

    def _found(self, search: Search, hit: Hit) -> None:
        """Judge what lies between the old place and the new one, and follow the last one."""
        old = search.old if self._lost_at is None else None
        stretch = self._stretch(hit.end)
        path = self._path(old, hit, stretch)
        places, cuts = path.places, path.cuts
        if old is None:
            evidence = self._begin(search.old, places[0], [*cuts, stretch.end][0])
        elif places == [old]:
            evidence = self._pass_over(old, old, stretch.first, stretch.end)
        elif places[0] != old:
            # The old place holds nowhere in the stretch: the stream slipped where it begins.
            places, cuts = [old, *places], [stretch.first, *cuts]
        ends = [*cuts, stretch.end][1:]
        for before, after, cut, end in zip(places[:-1], places[1:], cuts, ends, strict=True):
            evidence = self._pass_over(before, after, cut, end)
        place = path.places[-1]
        level = self._level(place, Stretch(evidence, stretch.bits[evidence - stretch.first :]))
        if search.old is not None and stretch.end - evidence < _LEAST_FOR_LEVEL:
            level = max(level, self._trouble.level)
        if search.old is not None:
            # Trouble that was judged is not met again, so every search is further on than the last.
            evidence = max(evidence, self._trouble.noticed if old == place else search.begin + 8)
        self._follow(place, self._written, max(evidence, self._written), level)

    def _path(self, old: Place | None, hit: Hit, stretch: Stretch) -> Path:
        """The places from the old one to the one that was hit upon."""
        if self._lost_at is not None or len(stretch.bits) > _LONGEST_PUZZLE:
            return self._resolver.shortest([p for p in (old, hit.place) if p], stretch)
        begins = gap(self._reference, None, hit.place, stretch, self._weights).end
        level = self._level(hit.place, Stretch(begins, stretch.bits[begins - stretch.first :]))
        if old is None:
            return self._resolver.path([hit.place], stretch, level, sure=False)
        ends = [old] if old == hit.place else [old, hit.place]
        return self._resolver.path(ends, stretch, min(level, self._trouble.level), sure=True)

    def _begin(self, run_on: Place | None, place: Place, end: int) -> int:
        """Begin to compare where the evidence of a first place begins, or before; where it begins."""
        stretch = self._stretch(end)
        evidence = gap(self._reference, None, place, stretch, self._weights).end
        outage = self._lost_at is not None or evidence - self._written >= rules.OUTAGE_BITS
        if outage and self._lost_at is None:
            without = gap(self._reference, place, place, stretch, self._weights)
            if self._held(place, without.begin):
                self._begin(run_on, place, without.begin)
                return self._pass_over(place, place, without.begin, end)
        if outage:
            self._write_unaligned(evidence)
        self._announce(place, self._stretch(end))
        if outage:
            self._turn(run_on, place, after_outage=True)
        return evidence

    def _held(self, place: Place, end: int) -> bool:
        """Whether a place gathers enough evidence before a bit to have been held there."""
        height = evidence_walk(self._reference, place, self._stretch(end), self._weights)
        rise = np.maximum.accumulate(height) - height
        return int(rise.max()) >= rules.RESUMED_AFTER * self._weights.scale

    def _pass_over(self, before: Place, after: Place, cut: int, end: int) -> int:
        """Go over from one place to the next, by a cut or an outage; where the next one's evidence begins."""
        empty = gap(self._reference, before, after, self._stretch(end), self._weights)
        if empty.bits < rules.OUTAGE_BITS:
            if before != after:
                self._write_compared(before, cut)
                self._turn(before, after, after_outage=False)
            return empty.end
        self._lose(before, empty.begin)
        self._write_unaligned(empty.end)
        self._announce(after, self._stretch(end))
        self._turn(before, after, after_outage=True)
        return empty.end

    def _level(self, place: Place, stretch: Stretch) -> int:
        """The level of errors that is usual in a stretch."""
        wrong = differing(self._reference, place, stretch)
        return rules.level_of(int(wrong.sum()), len(wrong))

    def _announce(self, place: Place, stretch: Stretch) -> None:
        here = self._reference.normal(Place(place.anchor + self._written, place.inverted))
        self._ledger.event(
            "aligned",
            "the pattern was found, inverted" if place.inverted else "the pattern was found",
            place=here.anchor,
            inverted=place.inverted,
            bits=len(stretch.bits),
            mismatches=int(differing(self._reference, place, stretch).sum()),
        )

    def _turn(self, old: Place | None, new: Place, after_outage: bool) -> None:
        """Note how the stream went from one place to another, at the next bit to be written."""
        if old is None:
            return
        bits, modulus = rules.nearest_slip(old.anchor - new.anchor, self.pattern.period, self._unit)
        if bits:
            text = _slip_text(bits, self._unit) + (" over an outage" if after_outage else "")
            more = {"after_outage": True} if after_outage else {}
            self._ledger.event("slip", text, bits=bits, modulo=modulus, **more)
        if old.inverted != new.inverted:
            self._ledger.event("inversion", "polarity turned over", inverted=new.inverted)

    def _follow(self, place: Place, start: int, watch_from: int, level: int) -> None:
        self._search = None
        self._lost_at = None
        self._run_on = place
        self._track = self._new_track(place, start, watch_from, level)
        self._forget(start)

    # ---- the ledger

    def _write_compared(self, place: Place, until: int) -> None:
        """Write down bits up to `until` as compared with a place."""
        if until <= self._written:
            return
        received = self._stream.bytes(self._written, until)
        first = self._written // 8 * 8
        differs = np.empty_like(received)
        self._reference.reader(place, first).xor_into(received, differs)
        self._ledger.compare(
            received,
            differs,
            self._written - first,
            until - self._written,
            place.anchor + self._written,
            place.inverted,
        )
        self._written = until

    def _write_unaligned(self, until: int) -> None:
        self._ledger.unaligned(until - self._written)
        self._written = until
        self._forget(until)

    def _forget(self, until: int) -> None:
        """Let go of whole words before a bit: a track begins with the word in which its first bit lies."""
        self._stream.drop_until(until // rules.WORD_BITS * rules.WORD_BITS)

    # ---- the end

    def _decide_all(self) -> None:
        self._go_on(final=True)
        while self._track is not None:
            trouble = self._scan_last_word(self._track)
            if trouble is None:
                self._track.decide_all(self._ledger, self._stream.end)
                return
            self._meet(trouble, filled_up=True)
            self._go_on(final=True)
        self._end_in_trouble()

    def _scan_last_word(self, track: Track) -> Trouble | None:
        """Follow the place through what is left of a word, filled up with what is expected."""
        left = self._stream.data
        end = self._stream.end
        fill = self._reference.bits(track.place, end, rules.WORD_BITS - 8 * len(left))
        word = np.concatenate([left, pack(fill, self._order)])
        _, trouble = track.scan(word, self._ledger)
        return trouble

    def _end_in_trouble(self) -> None:
        """The stream ends with no place found: what is short enough counts at the old one."""
        search, end = self._search, self._stream.end
        assert search is not None
        old = search.old if self._lost_at is None else None
        if old is not None:
            path = Path([old], [])
            if end - self._written <= _LONGEST_PUZZLE:
                path = self._resolver.path([old], self._stretch(end), self._trouble.level, sure=True)
            edges = [*path.cuts, end]
            for before, after, cut, until in zip(
                path.places[:-1], path.places[1:], edges[:-1], edges[1:], strict=True
            ):
                self._pass_over(before, after, cut, until)
            last = path.places[-1]
            self._run_on = last
            lost_at = self._evidence_end(last, end)
            if end - lost_at < rules.OUTAGE_BITS:
                self._write_compared(last, end)
                return
            self._lose(last, lost_at)
        self._write_unaligned(end)


def _slip_text(bits: int, unit: int) -> str:
    count, noun = (abs(bits) // 8, "byte") if unit == 8 and bits % 8 == 0 else (abs(bits), "bit")
    return f"{count or 'no'} {noun}{'' if count == 1 else 's'} {'lost' if bits < 0 else 'inserted'}"
