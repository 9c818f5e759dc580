"""One point on open links: starts the threads, waits for what ends it, and closes it properly."""

from __future__ import annotations

import contextlib
import threading
import time
from collections.abc import Callable

from drivers.contract import DriverError, Link
from harness.bench.book import Book
from harness.bench.consumer import Consumer
from harness.bench.ending import TheRest
from harness.bench.line import LineCounts
from harness.bench.places import Places
from harness.bench.playback import Playback
from harness.bench.receiver import Receiver
from harness.bench.ring import Ring
from harness.bench.sender import Sender
from harness.bench.terms import Defect, Outcome, Rules, Setup
from harness.bench.traffic import Traffic
from harness.bench.watch import LinkWatch, hopeless
from harness.record import EndedBy, Event, Second, Tally
from harness.signal.counter import Counter

POLL_S = 0.05
RETRY_S = 0.5


class Measurement:
    """Measures one point.

    Parameters
    ----------
    sending, receiving
        Open links, the same one for a far-end loop; None where the computer does not send or receive.
    commit
        Called once a second, from the consumer's thread, with complete seconds, new events and the number of
        received bits that are not yet decided.
    interrupted
        Set from outside to end the point.
    broken
        Asked whether the store has failed, which ends the point.
    tick
        Called several times a second while the point goes on, from the calling thread.
    reopen
        Opens the links again after one went away, set-up dialogue included; raises while it cannot.
    """

    def __init__(
        self,
        sending: Link | None,
        receiving: Link | None,
        setup: Setup,
        *,
        commit: Callable[[list[Second], list[Event], int], None],
        interrupted: threading.Event,
        broken: Callable[[], bool] = bool,
        tick: Callable[[], None] = lambda: None,
        reopen: Callable[[], None] | None = None,
    ) -> None:
        self._sending = sending
        self._receiving = receiving
        self._setup = setup
        self._interrupted = interrupted
        self._broken = broken
        self._tick = tick
        self._reopen = reopen
        self._wake = threading.Event()
        self._asked: str | None = None
        self._lock = threading.Lock()
        self.traffic = Traffic()
        self._ring = Ring()
        self._started_ns = time.monotonic_ns()
        self._wall_ns = time.time_ns() - self._started_ns
        self._line = LineCounts([link for link in (sending, receiving) if link is not None], self._wall_ns)
        self._draining = False
        self._playback = self._make_playback()
        self._sender = self._make_sender()
        self._receiver = self._make_receiver()
        self._book = Book(
            point=setup.point,
            sitting=setup.sitting,
            first_index=setup.first_index,
            started_ns=self._started_ns,
            wall_ns=self._wall_ns,
            keep_positions=self._positions_a_second(),
            base_bit=setup.base_bit,
            step=setup.index_step,
        )
        self._consumer = self._make_consumer(commit)

    def _make_sender(self) -> Sender | None:
        if self._sending is None:
            return None
        setup = self._setup
        sent = self.traffic.sent_bits
        return Sender(
            self._sending,
            setup.pattern.reader(setup.first_place + sent, setup.bit_order),
            self.traffic,
            pace_bps=setup.pace_bps,
            most_in_flight=setup.max_in_flight_bits,
            limit_bits=None if setup.stop.bits is None else max(0, setup.stop.bits - sent),
            on_end=self._wake.set,
        )

    def _make_receiver(self) -> Receiver | None:
        if self._receiving is None:
            return None
        limits = [bits for bits, _ in self._receiving_limits()]
        return Receiver(
            self._receiving,
            self._ring,
            self.traffic,
            on_end=self._wake.set,
            playback=self._playback,
            limit_bits=min(limits, default=None),
        )

    def _make_playback(self) -> Playback | None:
        """Let the bytes of a file have come at their rate."""
        link = self._receiving
        if link is None or self._sending is not None or not link.traits.finite or not link.rate_bps:
            return None
        return Playback(self._started_ns, link.rate_bps)

    def _receiving_limits(self) -> list[tuple[int, EndedBy]]:
        """Bits after which receiving ends where nothing is sent, and what ends it then."""
        stop, limits = self._setup.stop, list[tuple[int, EndedBy]]()
        if self._sending is None and stop.bits is not None:
            limits.append((stop.bits, "bits"))
        if self._playback is not None and stop.seconds is not None:
            limits.append((self._playback.bits(stop.seconds), "seconds"))
        return limits

    def _make_consumer(self, commit: Callable[[list[Second], list[Event], int], None]) -> Consumer:
        setup = self._setup
        receiving = self._receiving
        unit = 8 if receiving is None or receiving.traits.whole_bytes else 1
        finite = receiving is not None and receiving.traits.finite
        drain_ns = int(setup.drain_s * 1e9)
        counter = Counter(
            setup.pattern,
            bit_order=setup.bit_order,
            slip_unit=unit,
            position_limit=self._positions_a_second(),
            cut_compared=self._cut_compared(),
        )
        places = None
        if self._sender is not None:
            places = Places(
                self.traffic,
                period=setup.pattern.period,
                unit=unit,
                most_in_flight=setup.max_in_flight_bits,
                first_place=setup.first_place,
            )
        return Consumer(
            ring=self._ring,
            counter=counter,
            traffic=self.traffic,
            book=self._book,
            places=places,
            watch=None if finite else LinkWatch(drain_ns),
            rules=Rules(
                plan=setup.plan,
                errors=setup.stop.errors,
                received_bits=setup.stop.bits if self._sender is None else None,
            ),
            started_ns=self._started_ns,
            wall_ns=self._wall_ns,
            drain_ns=drain_ns,
            sending=self._is_sending,
            commit=commit,
            stop=self._ask_stop,
            each_second=self._line.events,
            playback=self._playback,
            base_bit=setup.base_bit,
            base_compared=setup.base_compared,
        )

    def _positions_a_second(self) -> int:
        """Error positions kept a second: never fewer than the plan could need to decide at the very bit."""
        plan = self._setup.plan
        return max(self._setup.positions_per_second, plan.plan.positions_needed if plan is not None else 0)

    def _cut_compared(self) -> int | None:
        plan = self._setup.plan.plan if self._setup.plan else None
        if plan is None or plan.cut_compared is None:
            return None
        return max(0, plan.cut_compared - self._setup.base_compared)

    # -- what the consumer asks

    def _is_sending(self) -> bool:
        """Whether bits are being sent, or ought to arrive though we do not send."""
        if self._draining:
            return False
        return self._sender is None or (self._sender.is_alive() and not self._sender.done)

    def _ask_stop(self, why: str) -> None:
        with self._lock:
            self._asked = self._asked or why
        self._wake.set()

    # -- the point

    def run(self) -> Outcome:
        """Measure until something ends the point."""
        for thread in (self._consumer, self._receiver, self._sender):
            if thread is not None:
                thread.start()
        ended_by, fault = self._wait()
        self._draining = True
        self._consumer.waited_for_the_rest = ended_by not in ("interrupted", "fault")
        self._stop_sending(ended_by)
        if ended_by in ("bits", "seconds", "errors", "plan"):
            self._the_rest()
        if self._receiver is not None:
            self._receiver.halt()
            self._receiver.join()
            lost = self._receiver.fault
            if lost is not None and ended_by != "fault" and self.traffic.in_flight():
                self._tell("link", f"while the rest was waited for: {lost.what}", time.monotonic_ns())
        self._ring.close()
        self._consumer.join()
        for thread in (self._consumer, self._sender, self._receiver):
            if thread is not None and thread.defect is not None:
                raise Defect(str(thread.defect)) from thread.defect
        decision = self._consumer.decision
        if decision is not None and ended_by not in ("interrupted", "plan"):
            ended_by, fault = "plan", None
        return Outcome(
            ended_by=ended_by,
            decision=decision,
            tally=self._consumer.tally,
            after=self._consumer.after,
            sent_bits=self.traffic.sent_bits,
            received_bits=self.traffic.received_bits,
            next_index=self._book.next_index,
            next_place=self._setup.first_place + self.traffic.sent_bits,
            fault=fault,
        )

    def _wait(self) -> tuple[EndedBy, DriverError | None]:
        """Wait for what ends the point, and say what it was."""
        limit = self._setup.stop.seconds
        while True:
            self._wake.wait(POLL_S)
            self._wake.clear()
            self._tick()
            if self._asked == "defect":
                return "fault", None
            if self._asked == "plan":
                return "plan", None
            if self._interrupted.is_set():
                return "interrupted", None
            if self._broken():
                return "fault", None
            ended = self._link_ended()
            if ended is not None and not (ended[0] == "fault" and self._reconnect(ended[1])):
                return ended
            if self._receiver is not None and self._receiver.full:
                return min(self._receiving_limits())[1], None
            if self._asked is not None:
                return ("bits" if self._asked == "bits" else "errors"), None
            if self._sender is not None and self._sender.done:
                return "bits", None
            now = time.monotonic_ns()
            if limit is not None and self._playback is None and now - self._started_ns >= limit * 1e9:
                return "seconds", None
            hopeless = self._hopeless(now)
            if hopeless is not None and self._setup.silence_is_a_result:
                self._tell("given_up", f"{hopeless.what}: the point ends", time.monotonic_ns())
                return "seconds", None
            if hopeless is not None:
                return "fault", hopeless

    def _link_ended(self) -> tuple[EndedBy, DriverError | None] | None:
        for thread in (self._receiver, self._sender):
            if thread is not None and thread.fault is not None:
                return "fault", thread.fault
        if self._receiver is not None and self._receiver.ended:
            assert self._receiving is not None
            if self._sender is None:
                return "end_of_data", None
            if self._sender.done and self.traffic.in_flight() == 0:
                return "bits", None
            peer = (
                self._receiving.describe().get("peer") or self._receiving.describe().get("port") or "the link"
            )
            return "fault", DriverError(
                f"{peer} closed the connection in the middle of the run",
                "look why the device closed it (power, time-out, a second client); what was measured is kept",
            )
        return None

    def _reconnect(self, fault: DriverError | None) -> bool:
        """Wait for a link that went away to come back, if the profile says so; False where it did not."""
        patience_s = self._setup.reconnect_s
        if not patience_s or self._reopen is None or fault is None:
            return False
        gone_ns = time.monotonic_ns()
        self._tell("link_gone", f"{fault.what}; waiting up to {patience_s:g} s for it to come back", gone_ns)
        for thread in (self._sender, self._receiver):
            if thread is not None:
                thread.halt()
                thread.join()
        while time.monotonic_ns() - gone_ns < patience_s * 1e9 and not self._interrupted.is_set():
            self._tick()
            try:
                self._reopen()
            except DriverError:
                self._interrupted.wait(RETRY_S)
                continue
            back_ns = time.monotonic_ns()
            self._tell(
                "link_returned", f"the link came back after {(back_ns - gone_ns) / 1e9:.1f} s", back_ns
            )
            self._consumer.gave_up(self.traffic.write_off())
            self._line.forget()
            self._sender, self._receiver = self._make_sender(), self._make_receiver()
            for thread in (self._receiver, self._sender):
                if thread is not None:
                    thread.start()
            return True
        return False

    def _tell(self, kind: str, text: str, at_ns: int) -> None:
        self._consumer.post(Event(kind, None, text, at_ns + self._wall_ns))

    def _hopeless(self, now_ns: int) -> DriverError | None:
        if self._receiver is None:
            return None
        waiting_since = self.traffic.first_sent_ns if self._sender is not None else self._started_ns
        setup, aligned_ns = self._setup, self._consumer.last_aligned_ns
        # A point of a sweep where only noise comes back has its result: the night is for the others.
        noise = (
            setup.silence_is_a_result and setup.plan is None and not setup.base_compared and not aligned_ns
        )
        return hopeless(
            now_ns,
            waiting_since_ns=waiting_since,
            anything_came=self.traffic.last_received_ns is not None,
            last_aligned_ns=aligned_ns or self._started_ns,
            drain_s=self._setup.drain_s,
            ends_by_time=setup.stop.seconds is not None and not noise,
        )

    def _stop_sending(self, ended_by: EndedBy) -> None:
        if self._sender is None or self._sending is None:
            return
        self._sender.halt()
        self._sender.join()
        if self._sender.fault is None and ended_by != "fault":
            with contextlib.suppress(DriverError):
                self._sending.drain(self._setup.drain_s if ended_by != "interrupted" else 0.2)

    def _the_rest(self) -> None:
        if self._sending is None or self._sender is None or self._receiver is None:
            return
        TheRest(
            self._sending,
            self._setup,
            self.traffic,
            came=self._consumer.newest,
            listens=self._receiver.is_alive,
            interrupted=self._interrupted.is_set,
        ).wait()

    # -- for the screen

    @property
    def tally(self) -> Tally:
        """Counts so far."""
        return self._consumer.tally

    @property
    def started_ns(self) -> int:
        """Monotonic time of the start."""
        return self._started_ns
