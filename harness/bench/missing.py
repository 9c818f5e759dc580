"""What was sent and never came: given up while the point goes on, told apart from slips at its end."""

from __future__ import annotations

from collections import deque

from harness.assess.words import count
from harness.bench.chronicle import Chronicle
from harness.bench.traffic import Traffic


class Missing:
    """Knows how many bits went missing that no slip shows, and says so in the chronicle.

    Parameters
    ----------
    traffic
        What is on its way.
    chronicle
        Where it is said.
    drain_ns
        When nothing has come for so long, what is out is given up.
    """

    def __init__(self, traffic: Traffic, chronicle: Chronicle, drain_ns: int) -> None:
        self._traffic = traffic
        self._chronicle = chronicle
        self._drain_ns = drain_ns
        self._unexplained = 0  # bits given up in silence that no slip has explained so far
        self._given_up: deque[int] = deque()
        self._out_at_decision = 0

    @property
    def sends(self) -> bool:
        """Whether anything was sent at all."""
        return self._traffic.first_sent_ns is not None

    def gave_up(self, bits: int) -> None:
        """Take from another thread that bits on their way were given up: the link went away."""
        self._given_up.append(bits)

    def take_given_up(self) -> None:
        """Enter what other threads gave up."""
        while self._given_up:
            self._unexplained += self._given_up.popleft()

    def write_off(self, now_ns: int) -> None:
        """Give up what is out when nothing has come for the time that the profile allows."""
        out = self._traffic.in_flight()
        if not self.sends or out == 0:
            return
        # What was sent just now is not overdue, however long ago the last bits came: at a slow pace, or when a
        # link has come back.
        first = self._traffic.first_sent_ns or now_ns
        oldest = self._traffic.when_sent(self._traffic.sent_bits - out)
        quiet_since = max(self._traffic.last_received_ns or first, oldest or first)
        if now_ns - quiet_since >= self._drain_ns:
            self._unexplained += self._traffic.write_off()

    def explained(self, slip_bits: int) -> None:
        """Take a slip's size: it shows bits to be lost (negative) or never sent (positive)."""
        self.take_given_up()
        if slip_bits >= 0:
            self._traffic.invent(slip_bits)
            return
        explained = min(-slip_bits, self._unexplained)
        self._unexplained -= explained
        self._traffic.lose(-slip_bits - explained)

    def decided(self) -> None:
        """Remember what is on its way now that the plan has decided."""
        self._out_at_decision = self._traffic.in_flight()

    def surplus(self) -> int:
        """Bits that came beside all that were sent, and that no slip explains."""
        return self._traffic.surplus()

    # -- at the end, at a received bit and a monotonic time

    def say_what_was_missing(self, usually_out: int, bit: int, at_ns: int) -> None:
        """Say what had gone missing before the decision without a slip that shows it.

        A loss of whole periods leaves no trace in a periodic stream: only the count of bits tells. Of what was
        out at the decision and never came, so much is taken to be on its way as ever was at the least: a start
        that was held up by this computer must not hide a loss.
        """
        bits = min(self._traffic.in_flight(), self._out_at_decision) - usually_out
        if self.sends and bits > 0:
            text = f"{count(bits, 'bit')} sent before the decision never came back"
            self._chronicle.happened("never_returned", text, at_ns, {"bits": bits}, bit)

    def say_what_never_returned(self, bit: int, at_ns: int, *, over: bool) -> None:
        """Say what was sent and never came back, as far as no slip says it; `over`: what is out will not come."""
        left = self._traffic.in_flight() if over and self.sends else 0
        bits = left + min(self._unexplained, self._traffic.written_off_bits)
        if bits:
            text = f"{count(bits, 'bit')} were sent and never came back"
            self._chronicle.happened("never_returned", text, at_ns, {"bits": bits}, bit)

    def say_what_is_out(self, bit: int, at_ns: int) -> None:
        """Say what was still out when the point was broken off: that is not the device's loss."""
        bits = self._traffic.in_flight() if self.sends else 0
        if bits:
            text = f"{count(bits, 'bit')} were on their way when it was broken off and are in no figure"
            self._chronicle.happened("broken_off", text, at_ns, {"bits": bits}, bit)
