"""Which of the things that happened a page with little room tells: the grave ones always, else the latest."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from harness.cli.view.meanwhile import routine_of_an_instrument
from harness.record import Event

SECOND_NS = 1_000_000_000
MOST_ALIKE = 8  # grave ones of one kind: after a bad night the first and the last of them tell enough
GRAVE = frozenset(
    (
        "link_lost",
        "never_returned",
        "given_up",
        "fault",
        "guard",
        "stopped",
        "resumed",
        "undecided",
        "host_overrun",
        "host_stalled",
        "events_cut",
    )
)


@dataclass(frozen=True, slots=True)
class Told:
    """One line of what happened: an event, and how often it came in a row within its second."""

    event: Event
    times: int


@dataclass(frozen=True, slots=True)
class Choice:
    """What a page tells, in its order, and how many events it leaves out."""

    told: tuple[Told, ...]
    left_out: int
    only_earlier: bool  # all that is left out came before what is told


def joined(events: Sequence[Event]) -> Iterator[Told]:
    """Join events in a row that say the same within one second; the first one's time and bit stand for them."""
    held: Event | None = None
    times = 0
    for event in events:
        if held is not None and _same(held, event):
            times += 1
            continue
        if held is not None:
            yield Told(held, times)
        held, times = event, 1
    if held is not None:
        yield Told(held, times)


def bit_words(bit: int) -> str:
    """Name a bit of the received stream, its digits in groups."""
    return f"bit {bit:,}".replace(",", "\u202f")


def _same(one: Event, other: Event) -> bool:
    if one.at is None or other.at is None:  # nobody knows how far apart they were
        return False
    return (one.kind, one.text) == (other.kind, other.text) and one.at // SECOND_NS == other.at // SECOND_NS


def grave(event: Event) -> bool:
    """Whether an event is never left out of a page that stays: a cut, a lost link, a fault of any part."""
    if event.kind == "instrument":
        return not routine_of_an_instrument(event)
    return event.kind in GRAVE


def wanted(lines: Sequence[Told]) -> int:
    """Say how many lines a page that stays needs at least, that of what is left out among them."""
    kept = len(_grave(lines))
    return kept if kept == len(lines) else kept + 1


def chosen(lines: Sequence[Told], rows: int) -> Choice:
    """Choose what is told in so many rows: the grave ones, of too many the latest; then the latest others."""
    if len(lines) <= rows:
        return Choice(tuple(lines), 0, False)
    room = max(0, rows - 1)  # one says what is left out
    first = _grave(lines)
    others = [number for number in range(len(lines)) if number not in first]
    kept = sorted(first)[-room:] if room else []
    spare = room - len(kept)
    numbers = sorted([*kept, *(others[-spare:] if spare else [])])
    out = [number for number in range(len(lines)) if number not in set(numbers)]
    earlier = not numbers or all(number < numbers[0] for number in out)
    return Choice(tuple(lines[n] for n in numbers), sum(lines[n].times for n in out), earlier)


def first_and_last(lines: Sequence[Told], most: int) -> Iterator[Told | int]:
    """Give the first lines, the last ones and the grave ones between; a number: so many events are left out there."""
    half = most // 2
    grave_ones = _grave(lines)
    out = 0
    for number, line in enumerate(lines):
        if len(lines) > most and half <= number < len(lines) - half and number not in grave_ones:
            out += line.times
            continue
        if out:
            yield out
        out = 0
        yield line


def _grave(lines: Sequence[Told]) -> set[int]:
    """Give the numbers of the grave lines; of many of one kind the first and the last."""
    by_kind: dict[str, list[int]] = {}
    for number, line in enumerate(lines):
        if grave(line.event):
            by_kind.setdefault(line.event.kind, []).append(number)
    half = MOST_ALIKE // 2
    return {
        number
        for numbers in by_kind.values()
        for number in (numbers if len(numbers) <= MOST_ALIKE else [*numbers[:half], *numbers[-half:]])
    }
