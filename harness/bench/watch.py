"""The watch over a link: when bits were due and none was aligned, and when waiting longer makes no sense."""

from __future__ import annotations

from drivers.contract import DriverError

LOST_NS = 3_000_000_000
LEAST_PATIENCE_S = 10.0
HOPELESS_S = 60.0  # without a stop rule: nothing aligned for so long ends the point


class LinkWatch:
    """Notices a lost link: 3 s in which bits were due and none was aligned.

    Parameters
    ----------
    grace_ns
        Before the first bit has come, bits are due only so long after sending began (``link.drain_s``).
    """

    def __init__(self, grace_ns: int) -> None:
        self._grace_ns = grace_ns
        self._due_since: int | None = None
        self._ever = False
        self.lost = False
        self.lost_at_ns = 0

    def due(self, due: bool, now_ns: int, first_sent_ns: int | None, anything_came: bool) -> bool:
        """Say whether bits are being sent (or ought to be); returns whether they are due now."""
        if not due or (first_sent_ns is None and not anything_came):
            self._due_since = None
            return False
        if not self._ever and not anything_came and first_sent_ns is not None:
            if now_ns - first_sent_ns < self._grace_ns:
                return False
            if self._due_since is None:
                self._due_since = first_sent_ns + self._grace_ns
            return True
        if self._due_since is None:
            self._due_since = now_ns
        return True

    def excuse(self, stood_ns: int) -> None:
        """Take the news that this computer stood still for a while: nothing could be aligned then."""
        if self._due_since is not None:
            self._due_since += stood_ns

    def aligned(self, first_ns: int, last_ns: int) -> tuple[bool, bool]:
        """Take an aligned stretch by the arrival of its first and last bit.

        Returns
        -------
        (lost before it, back with it)
        """
        if self.lost and last_ns <= self.lost_at_ns:
            return False, False  # old news: it came before the link was lost, and was decided only now
        gap = self._due_since is not None and first_ns - self._due_since >= LOST_NS
        newly_lost = gap and not self.lost
        back = self.lost or newly_lost
        if newly_lost:
            self.lost_at_ns = first_ns
        self.lost = False
        self._ever = True
        self._due_since = max(last_ns, self._due_since or last_ns)  # it may have been excused beyond
        return newly_lost, back

    def silent_until(self, now_ns: int) -> bool:
        """Take the news that nothing aligned has come up to now; True when the link is lost just now."""
        if self.lost or self._due_since is None or now_ns - self._due_since < LOST_NS:
            return False
        self.lost = True
        self.lost_at_ns = now_ns
        return True


def hopeless(
    now_ns: int,
    *,
    waiting_since_ns: int | None,
    anything_came: bool,
    last_aligned_ns: int,
    drain_s: float,
    ends_by_time: bool,
) -> DriverError | None:
    """Say why waiting longer makes no sense, or None while it does."""
    if not anything_came:
        patience_s = max(3 * drain_s, LEAST_PATIENCE_S)
        if waiting_since_ns is None or now_ns - waiting_since_ns < patience_s * 1e9:
            return None
        return DriverError(
            f"nothing came back in {patience_s:.0f} s: not a single bit was received",
            "check power, cable and that the device is in its data mode; `bitassay check` helps",
        )
    if ends_by_time or now_ns - last_aligned_ns < HOPELESS_S * 1e9:
        return None
    return DriverError(
        f"nothing was aligned for {HOPELESS_S:.0f} s",
        "check the link and the pattern's name; set stop.seconds to wait longer",
    )
