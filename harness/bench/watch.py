"""The watch over a link: when bits were due and none was aligned, and when what is out will not return."""

from __future__ import annotations

LOST_NS = 3_000_000_000


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

    def aligned(self, first_ns: int, last_ns: int) -> tuple[bool, bool]:
        """Take an aligned stretch by the arrival of its first and last bit.

        Returns
        -------
        (lost before it, back with it)
        """
        gap = self._due_since is not None and first_ns - self._due_since >= LOST_NS
        newly_lost = gap and not self.lost
        back = self.lost or newly_lost
        self.lost = False
        self._ever = True
        self._due_since = last_ns
        return newly_lost, back

    def silent_until(self, now_ns: int) -> bool:
        """Take the news that nothing aligned has come up to now; True when the link is lost just now."""
        if self.lost or self._due_since is None or now_ns - self._due_since < LOST_NS:
            return False
        self.lost = True
        return True
