"""What happened during a sweep, as a person wants to know it in the morning: all but the routine of each point."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace

from harness.assess.assessment import PointAssessment
from harness.assess.words import count
from harness.cli.view.entries import point_name
from harness.record import Event

# At points where the link hardly works these come again and again: they are counted, and not told one by one.
OFTEN = {"alignment_lost": "was no longer found", "sequence_loss": "lost its sequence", "slip": "slipped"}
ROUTINE = ("aligned", "delay", "decided", "closed", "search", "inversion", "skipped", *OFTEN)
OF_THE_RUN = ("guard", "fault", "stopped")  # whichever point they were entered with
NO_LINK = ("link_lost", "never_returned", "given_up")  # at a point that was never aligned its figures say so
_SET = (" set to ", " made safe at ")
_NAMED = 4  # points


def meanwhile(points: Sequence[PointAssessment]) -> list[Event]:
    """Give what was out of the ordinary, in its order, each with its point's name."""
    told = [_named(event, p) for p in points for event in _told(p)]
    return [*told, *_often(points)]


def _named(event: Event, p: PointAssessment) -> Event:
    name = "" if event.kind in OF_THE_RUN else f"{point_name(p)}: "
    return replace(event, text=f"{name}{event.text}", bit=None)


def _told(p: PointAssessment) -> Iterator[Event]:
    for event in p.events:
        if event.kind in ROUTINE or (event.kind in NO_LINK and not p.tally.compared):
            continue
        if routine_of_an_instrument(event):
            continue
        yield event


def routine_of_an_instrument(event: Event) -> bool:
    """Whether an event says no more than that an instrument was set, as it was meant to be."""
    return event.kind == "instrument" and any(words in event.text for words in _SET)


def _often(points: Sequence[PointAssessment]) -> Iterator[Event]:
    """Count in one event each what came often, with the points at which it came."""
    for kind, words in OFTEN.items():
        found = [(point_name(p), [e for e in p.events if e.kind == kind]) for p in points]
        found = [(name, events) for name, events in found if events]
        if not found:
            continue
        times = sum(len(events) for _name, events in found)
        names = list(dict.fromkeys(name for name, _events in found))
        where = ", ".join(names[:_NAMED]) + (
            f" and {len(names) - _NAMED} more" if len(names) > _NAMED else ""
        )
        yield Event(kind, None, f"the stream {words} {count(times, 'time')}, at {where}", found[-1][1][-1].at)
