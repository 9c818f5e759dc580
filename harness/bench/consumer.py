"""The consumer's thread: bytes from the ring through the counter into seconds, plan and recorder."""

from __future__ import annotations

import threading
import time
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import replace

from harness.assess.words import count, duration, slip_words
from harness.bench.arrivals import Arrivals
from harness.bench.beyond import beyond_words, bits_beyond, cut_off
from harness.bench.book import Book
from harness.bench.chronicle import Chronicle
from harness.bench.missing import Missing
from harness.bench.places import Places
from harness.bench.playback import Playback, PlayedArrivals
from harness.bench.ring import Piece, Ring
from harness.bench.standstill import standstill_ns
from harness.bench.terms import Rules
from harness.bench.traffic import Traffic
from harness.bench.watch import LinkWatch
from harness.record import Event, Second, Segment, Tally
from harness.signal.counter import Counter
from harness.statistics.plans import Decision

SECOND_NS, WAIT_S = 1_000_000_000, 0.05
SURE_BITS = 512  # a split is off by more than this with a chance under 1e-9 up to a BER of 0.3


class Consumer(threading.Thread):
    """Counts what arrives until the ring is drained.

    `commit` is called once a second with complete seconds and new events; `stop` when a rule ends the point.
    """

    def __init__(
        self,
        *,
        ring: Ring,
        counter: Counter,
        traffic: Traffic,
        book: Book,
        places: Places | None,
        watch: LinkWatch | None,
        rules: Rules,
        started_ns: int,
        wall_ns: int,
        drain_ns: int,
        sending: Callable[[], bool],
        commit: Callable[[list[Second], list[Event], int], None],
        stop: Callable[[str], None],
        each_second: Callable[[], list[Event]] = list,
        playback: Playback | None = None,
        base_bit: int = 0,
        base_compared: int = 0,
    ) -> None:
        super().__init__(name="consumer", daemon=True)
        self._ring = ring
        self._counter = counter
        self._traffic = traffic
        self._book = book
        self._places = places
        self._watch = watch
        self._rules = rules
        self._boundary_ns = started_ns + SECOND_NS
        self._sending = sending
        self._commit = commit
        self._ask_stop = stop
        self._each_second = each_second
        self._base_compared = base_compared  # what the point had in earlier sittings
        self._chronicle = Chronicle(wall_ns, base_bit)
        self._missing = Missing(traffic, self._chronicle, drain_ns)
        self._playback = playback  # of a file; None where bytes come now
        self._flushed_ns = started_ns
        self._arrivals = Arrivals(started_ns) if playback is None else PlayedArrivals(started_ns, playback)
        self._sent_before = 0
        self._held: list[Segment] = []  # of a second whose positions were cut: one look at its end
        self._mark_bits: deque[int] = deque()
        self._ending = False  # nothing more will come
        self._excused_until_ns = 0
        self.tally = Tally()
        self.after = Tally()
        self.decision: Decision | None = None
        self.defect: BaseException | None = None
        self.waited_for_the_rest = True  # False: broken off, so that what was on its way tells nothing
        self.last_aligned_ns: int | None = None

    def post(self, event: Event) -> None:
        """Take an event from another thread."""
        self._chronicle.post(event)

    def gave_up(self, bits: int) -> None:
        """Take from another thread that bits on their way were given up: the link went away."""
        self._missing.gave_up(bits)

    def newest(self) -> tuple[int, bytes, bool]:
        """Say how many bits were taken, the last bytes among them, and whether they are but noise so far."""
        tally = self.tally
        return *self._arrivals.newest, tally.received > 0 and not tally.compared

    # -- the thread

    def run(self) -> None:
        """Consume until nothing more will come."""
        try:
            while not self._ring.drained:
                begun = time.monotonic_ns()
                piece = self._ring.next_piece(WAIT_S)
                self._excuse(standstill_ns(begun, time.monotonic_ns(), WAIT_S))
                if piece is None:
                    if self._playback is None:
                        self._pass_time(time.monotonic_ns(), idle=True)
                else:
                    self._pass_time(piece.arrived_ns, idle=False)
                    self._take(piece)
            self._finish()
        except BaseException as error:
            self.defect = error
            self._ask_stop("defect")

    def _take(self, piece: Piece) -> None:
        if piece.lost_bytes:
            bits = 8 * piece.lost_bytes
            text = f"this computer could not keep up: {count(bits, 'bit')} were not counted"
            self._happened("host_overrun", text, piece.arrived_ns, {"bits": bits})
            segments = self._counter.skip(bits)
        else:
            segments = self._counter.feed(piece.data)
        self._arrivals.came(self._counter.received, piece.arrived_ns, piece.data)
        self._ring.give_back(piece)
        self._absorb(segments)
        limit = self._rules.received_bits
        if limit is not None and self._counter.received >= limit:
            self._ask_stop("bits")

    def _finish(self) -> None:
        self._ending = True
        self._absorb(self._counter.finish())
        self._look(whole_second=True)
        self._missing.take_given_up()
        came_ns = self._playback.when(self._counter.received) if self._playback else time.monotonic_ns()
        now = max(came_ns, self._boundary_ns - SECOND_NS)
        bit = self._counter.received
        if self.decision is not None:
            usual = 0 if self._places is None else self._places.usually_out
            self._missing.say_what_was_missing(usual, bit, now)
        else:
            self._missing.say_what_never_returned(bit, now, over=self.waited_for_the_rest)
            if not self.waited_for_the_rest:
                self._missing.say_what_is_out(bit, now)
            sent = self._traffic.sent_bits - self._sent_before
            self._book.end(ends_ns=now, received_bits=self._counter.received, sent=sent, due=self._due(now))
        self._flush()

    # -- time

    def _due(self, now_ns: int) -> bool:
        if self._watch is None:
            return True
        came = self._traffic.last_received_ns is not None
        return self._watch.due(self._sending(), now_ns, self._traffic.first_sent_ns, came)

    def _excuse(self, stood_ns: int) -> None:
        """Let time in which this computer stood still count for nothing."""
        if not stood_ns:
            return
        self._excused_until_ns = time.monotonic_ns()
        if self._watch is not None:
            self._watch.excuse(stood_ns)
        text = f"this computer stood still for {duration(stood_ns / 1e9)}"
        at = self._excused_until_ns - stood_ns
        self._happened("host_stalled", text, at, {"seconds": stood_ns / 1e9})

    def _pass_time(self, now_ns: int, *, idle: bool) -> None:
        """Close the seconds that end before `now_ns`; when idle, look after what is overdue."""
        due = self._due(now_ns)
        while now_ns >= self._boundary_ns:
            self._close_second(due and self._boundary_ns > self._excused_until_ns)
        if not idle:
            return
        if self._watch is not None and self._nothing_aligned_pending() and self._watch.silent_until(now_ns):
            self._link_lost(now_ns)
        if self._sending():
            self._missing.write_off(now_ns)

    def _nothing_aligned_pending(self) -> bool:
        """Whether what is undecided came long ago: it cannot be news of the link."""
        last = self._traffic.last_received_ns
        return (
            self._counter.received == self._counter.decided
            or last is None
            or (time.monotonic_ns() - last >= 3 * SECOND_NS)
        )

    def _close_second(self, due: bool) -> None:
        if self.decision is None:
            self._counter.mark()
            sent = self._traffic.sent_by(self._boundary_ns) - self._sent_before
            self._sent_before += sent
            self._book.close_second(
                ends_ns=self._boundary_ns, received_bits=self._counter.received, sent=sent, due=due
            )
            self._mark_bits.append(self._counter.received)
            self._look(whole_second=self._counter.decided >= self._counter.received)
            for event in self._each_second():
                self._chronicle.keep(event)
            self._flush_in_time()
        self._boundary_ns += SECOND_NS

    def _link_lost(self, now_ns: int) -> None:
        text = "the link was lost: for 3 s bits were due and none was aligned"
        self._happened("link_lost", text, now_ns, {})

    # -- segments

    def _absorb(self, segments: list[Segment]) -> None:
        for segment in segments:
            self._absorb_one(segment)

    def _absorb_one(self, segment: Segment) -> None:
        if self.decision is not None:
            self.after += segment.tally
            return
        while self._mark_bits and segment.start >= self._mark_bits[0]:
            self._mark_bits.popleft()
            self._look(whole_second=True)
            if self.decision is not None:
                self.after += segment.tally
                return
        for part in self._never_sent(self._stamp(segment)):
            self._absorb_part(part)

    def _never_sent(self, segment: Segment) -> list[Segment]:
        """At the stream's end: the segment, with what came after the last bit sent cut off as inserted."""
        sent_end = None if self._places is None else self._places.sent_end
        extra = bits_beyond(segment, sent_end, self._missing.surplus()) if self._ending else 0
        if not extra:
            return [segment]
        bit = segment.end - extra
        at = self._arrived(bit)
        data = {"bits": extra, "modulo": None}
        slip = self._chronicle.happened("slip", beyond_words(extra), at, data, bit)
        self._missing.explained(extra)
        return list(cut_off(segment, bit, slip))

    def _absorb_part(self, segment: Segment) -> None:
        if self.decision is not None:
            self.after += segment.tally
            return
        if segment.aligned and segment.tally.compared:
            self._follow(segment)
        plan = self._rules.plan
        if plan is not None and not self._held and not segment.positions_complete and segment.known_bits:
            known, segment = segment.split(segment.known_bits)
            self._absorb_stamped(known)
            if self.decision is not None:
                self.after += segment.tally
                return
        self._absorb_stamped(segment)

    def _absorb_stamped(self, segment: Segment) -> None:
        """Let the plan see a segment: bit by bit where positions are known, else at the second's end."""
        plan = self._rules.plan
        if plan is not None and (self._held or not segment.positions_complete):
            self._held.append(segment)
        elif plan is not None:
            compared = self._base_compared + self.tally.compared
            decision = plan.advance(segment)
            if decision is not None:
                self._decided(decision, segment, compared)
                return
        self._enter(segment)

    def _enter(self, segment: Segment) -> None:
        self.tally += segment.tally
        self._book.add(segment)
        if self._rules.errors is not None and self.tally.errors >= self._rules.errors:
            self._ask_stop("errors")

    def _look(self, *, whole_second: bool) -> None:
        """Let the plan look at a second whose error positions were cut, once, at its end."""
        if not whole_second or not self._held or self._rules.plan is None or self.decision is not None:
            return
        held, self._held = self._held, []
        total = Tally()
        for segment in held:
            total += segment.tally
        joined = replace(
            held[0],
            tally=replace(total, received=total.compared, unaligned=0),
            aligned=True,
            positions_complete=False,
        )
        decision = self._rules.plan.advance(joined)
        if decision is not None:
            if held[-1].aligned:
                self._say_what_was_never_sent(held[-1].end)
            self._close_book(decision, held[-1].end)

    def _decided(self, decision: Decision, segment: Segment, compared_before: int) -> None:
        head, tail = segment.split(decision.compared_bits - compared_before)
        self._enter(head)
        self.after += tail.tally
        self._say_what_was_never_sent(head.end)
        self._close_book(decision, head.end)

    def _close_book(self, decision: Decision, bit: int) -> None:
        self.decision = decision
        self._missing.decided()
        at = self._arrived(bit)
        self._missing.say_what_never_returned(self._counter.received, at, over=False)
        verb = "accepted" if decision.accepted else "rejected"
        text = (
            f"the plan decided: {verb} with {count(decision.errors, 'error')} in "
            f"{count(decision.compared_bits, 'compared bit')}"
        )
        self._happened("decided", text, at, {"bits": decision.compared_bits}, bit=bit)
        self._book.cut(bit=bit, ends_ns=at, sent=max(0, self._traffic.sent_bits - self._sent_before))
        self._flush()
        self._ask_stop("plan")

    def _say_what_was_never_sent(self, bit: int) -> None:
        """Say at the decision that more had come than was sent, where no slip shows it."""
        at = self._arrived(bit - 1)
        made_up = 0 if self._places is None else self._places.never_sent(bit, at)
        if made_up:
            text = (
                f"{count(made_up, 'bit')} came that were never sent: whole periods of the pattern came twice"
            )
            self._happened("never_sent", text, at, {"bits": made_up}, bit=bit)

    # -- events

    def _stamp(self, segment: Segment) -> Segment:
        """Give a segment's events their time, and slips their true size."""
        if not segment.events:
            return segment
        stamped = []
        for event in segment.events:
            bit = segment.start if event.bit is None else event.bit
            at = self._arrived(bit)
            if event.kind == "slip":
                event = self._resolve(event, bit)
            event = self._chronicle.stamped(event, at)
            stamped.append(event)
            self._chronicle.keep(event)
            if event.kind == "aligned" and self._places is not None and "place" in event.data:
                self._delay(bit, int(event.data["place"]), at)
        return replace(segment, events=tuple(stamped))

    def _resolve(self, event: Event, bit: int) -> Event:
        size, modulo = int(event.data["bits"]), event.data.get("modulo")
        if self._places is not None:
            # Bits before the slip may agree with both places: only one a little later is surely of the new one.
            sure = max(bit, min(bit + SURE_BITS, self._counter.received - 1))
            size, modulo = self._places.slipped(sure, size, modulo, self._arrived(sure))
        self._missing.explained(size)
        data = {**event.data, "bits": size, "modulo": modulo}
        text = slip_words(size) + (" over an outage" if "outage" in event.text else "")
        return replace(event, data=data, text=text)

    def _delay(self, bit: int, place: int, at: int) -> None:
        assert self._places is not None
        delay = self._places.aligned(bit, place, at, self._arrivals.came_with(bit))
        if delay is None:
            return
        seconds = "" if delay.seconds is None else f", {duration(delay.seconds)}"
        data = {"bits": delay.bits, "seconds": delay.seconds, "modulo": delay.modulo}
        text = f"loop delay {count(delay.bits, 'bit')}{seconds}"
        self._happened("delay", text, at, data, bit=bit)

    def _follow(self, segment: Segment) -> None:
        first, last = self._arrived(segment.start), self._arrived(segment.end - 1)
        self.last_aligned_ns = last
        if self._watch is None:
            return
        lost, back = self._watch.aligned(first, last)
        if lost:
            self._link_lost(first)
        if back:
            at = max(first, self._watch.lost_at_ns)
            self._happened("link_back", "the link is back", at, {}, bit=segment.start)
        if self._places is not None:
            self._places.follow(segment.end, last)

    def _arrived(self, bit: int) -> int:
        """Monotonic time at which a received bit came."""
        self._arrivals.forget_before(min(bit, self._counter.decided))
        return self._arrivals.when(bit)

    def _happened(
        self, kind: str, text: str, at_ns: int, data: Mapping[str, object], bit: int | None = None
    ) -> None:
        where = self._counter.received if bit is None else bit
        self._chronicle.happened(kind, text, at_ns, data, where)

    def _flush_in_time(self) -> None:
        """Hand over after each second; the seconds of a file go by faster, and one commit a second is enough."""
        now = time.monotonic_ns()
        if self._playback is None or now - self._flushed_ns >= SECOND_NS:
            self._flushed_ns = now
            self._flush()

    def _flush(self) -> None:
        self._missing.take_given_up()
        undecided = self._counter.received - self._counter.decided
        seconds = self._book.take_complete()
        self._commit(seconds, self._chronicle.take(self._book.entered_bit), undecided)
