"""Draws a sheet as a page of a lab notebook: questions and times in the margin, the answers beside them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from rich.cells import cell_len, set_cell_size
from rich.text import Text

from harness.assess.words import local_time
from harness.cli.view.happenings import Told, bit_words, chosen, joined, wanted
from harness.cli.view.ink import BOXED, PLAIN, RED, STRONG, Line, Signs, clean
from harness.cli.view.ruler import Bar, ruler
from harness.cli.view.sheet import Sheet
from harness.cli.view.strip import strip, strip_width, strip_words

_ALL = 1_000
MARGIN = 8  # columns: a time of day
CUT_SHORT = "(cut short; `bitassay show RUN | cat` has every word)"
ALL_EVENTS = "`bitassay show RUN --json` has all"
FEWEST_EVENTS = 2
MOST_WANTED = 8  # events for which a page that stays does with less of all the rest
FEW_POINTS = 4  # written out in words also where room is short
ALARMS = frozenset(
    (
        "alignment_lost",
        "slip",
        "link_lost",
        "fault",
        "host_overrun",
        "host_stalled",
        "never_returned",
        "inversion",
    )
)
_ASCII = str.maketrans({"\u202f": " ", "—": "-", "–": "-", "·": ";", "…": ".", "→": ">", "−": "-"})


@dataclass(frozen=True, slots=True)
class Layout:
    """How much room the parts of a page take that can do with less."""

    details: bool
    gaps: bool
    strip_rows: int
    reason_lines: int  # of each reason, at most
    remark_lines: int
    remarks: int
    points: int  # of a sweep, done before; of a page that stays, beside the one that tells most


LAYOUTS = (
    Layout(True, True, 3, 4, _ALL, 4, 12),
    Layout(True, True, 2, 3, _ALL, 3, 8),
    Layout(False, True, 2, 3, 4, 2, 5),
    Layout(False, True, 1, 2, 2, 1, 3),
    Layout(False, False, 2, 2, 2, 1, 3),
    Layout(False, False, 1, 2, 2, 1, 2),
    Layout(False, False, 1, 1, 1, 1, 1),
    Layout(False, False, 0, 1, 1, 0, 0),
)


class Notebook:
    """Draws sheets for a terminal of a given size."""

    def __init__(self, width: int, height: int, signs: Signs) -> None:
        self.width = max(width, 20)
        self.height = max(height, 3)
        self.signs = signs
        self._room = self.width - MARGIN - 4

    def draw(self, sheet: Sheet, *, whole: bool = False) -> list[Text]:
        """Draw a page of at most `height` lines; `whole`: a page that stays, as long as it needs to be."""
        happened = list(joined(sheet.events))
        needed = max(wanted(happened), min(FEWEST_EVENTS, len(happened))) if whole else 0
        least = min(needed, MOST_WANTED) if whole else min(FEWEST_EVENTS, len(happened))
        for layout in (replace(LAYOUTS[0], points=_ALL), *LAYOUTS) if whole else LAYOUTS:
            if whole and sheet.weights and layout.points < _ALL:  # rather a point than an empty line
                layout = replace(layout, gaps=False, details=False)
            if whole:  # of a page that stays no reason is cut, and no remark is left out
                layout = replace(layout, reason_lines=_ALL, remarks=_ALL)
            head, tail = self._head(sheet, layout), self._tail(sheet, layout, whole=whole)
            room = self.height - len(head) - len(tail)
            if room >= least:
                break
        if whole and sheet.weights and (spare := room - 1 - len(happened)) > 0:
            head = self._head(sheet, replace(layout, points=layout.points + spare))
            room -= spare
        events = self._events(happened, max(room, needed))
        lines = [*head, *events, *tail]
        if whole or len(lines) <= self.height:
            return lines
        return lines[: self.height]

    # -- parts

    def _head(self, sheet: Sheet, layout: Layout) -> list[Text]:
        gap = [self._entry("", ())] if layout.gaps else []
        lines = [self._heading(sheet), self._rule()]
        lines += self._words("required", sheet.required, layout.reason_lines)
        if layout.details and sheet.risks:
            lines += self._words("", [sheet.risks], 2)
        lines += self._verdict(sheet, layout)
        lines += gap
        lines += self._words("point", [sheet.point] if sheet.point else [], 1)
        lines += self._words("BER", [*([sheet.ber] if sheet.ber else []), *sheet.sensitivities], 2)
        bars = _kept(sheet, layout.points)
        lines += [self._entry(label[:MARGIN], line) for label, line in ruler(bars, self._room, self.signs)]
        if sheet.weights and len(bars) < len(sheet.bars):
            words = f"{len(bars)} of {len(sheet.bars)} points; `bitassay show RUN | cat` has all"
            lines += self._words("", [words], 1)
        lines += gap
        if layout.details or len(sheet.points) <= FEW_POINTS:
            lines += self._words("points", sheet.points, 2)
        if layout.details and sheet.path:
            lines += self._words("link", [sheet.path], 1)
        lines += self._words("bits", [*sheet.bits, *(sheet.details if layout.details else ())], 2)
        lines += self._strip(sheet, layout)
        lines += gap
        lines += self._words(sheet.to_do_label, sheet.to_do, 2)
        return lines + self._remarks(sheet.remarks[: layout.remarks], layout) + gap

    def _remarks(self, remarks: Sequence[str], layout: Layout) -> list[Text]:
        lines = self._words("remark", remarks, layout.remark_lines)
        if any(line.plain.endswith("…") for line in lines):
            lines += self._words("", [CUT_SHORT], 1)
        return lines

    def _tail(self, sheet: Sheet, layout: Layout, *, whole: bool) -> list[Text]:
        gap = [self._entry("", ())] if layout.details else []
        left_out = _left_out(sheet, layout) if whole else ""
        return gap + self._words("", [left_out] if left_out else [], 2) + self._words("", sheet.foot, 2)

    def _heading(self, sheet: Sheet) -> Text:
        unit, title = self._fit_words(sheet.unit), self._fit_words(sheet.title)
        corner = self._fit_words(sheet.corner)
        room = self.width - cell_len(corner) - 2
        words = f"{unit} — {title}" if title else unit
        text = Text(" " + _shorten(self._letters(words), room - 1), style=STRONG, no_wrap=True)
        text.append(" " * max(0, self.width - 1 - text.cell_len - cell_len(corner)))
        text.append(self._letters(corner))
        return text

    def _rule(self) -> Text:
        s = self.signs
        return Text(s.rule * (MARGIN + 1) + s.crossing + s.rule * (self.width - MARGIN - 2), no_wrap=True)

    def _verdict(self, sheet: Sheet, layout: Layout) -> list[Text]:
        ink = BOXED if sheet.stamped else RED if sheet.against else STRONG
        word = f" {sheet.verdict} " if sheet.stamped else sheet.verdict
        lines = []
        if sheet.stamped:
            lines.append(self._entry("verdict", ((word, ink),)))
        else:
            wrapped = wrap(self._fit_words(word), self._room, 2)
            lines += [
                self._entry("verdict" if number == 0 else "", ((part, ink),))
                for number, part in enumerate(wrapped)
            ]
        return lines + self._words("", sheet.reasons, layout.reason_lines)

    def _strip(self, sheet: Sheet, layout: Layout) -> list[Text]:
        if not layout.strip_rows or not (sheet.recent or sheet.bits):
            return []
        rows = strip(sheet.recent, self._room, layout.strip_rows, self.signs, behind_s=sheet.behind_s)
        labels = ["errors/s"] if len(rows) == 1 else [*[""] * (len(rows) - 2), "errors", "a second"]
        lines = [self._entry(label, row) for label, row in zip(labels, rows, strict=True)]
        first, last = sheet.strip_ends
        between = strip_width(self._room) - len(first) - len(last)
        lines.append(self._entry("", ((first + " " * max(1, between) + last, PLAIN),)))
        return lines + self._words("", [strip_words(sheet.recent, self.signs, behind_s=sheet.behind_s)], 1)

    def _events(self, lines: Sequence[Told], rows: int) -> list[Text]:
        """Give what happened in as many rows as there are; what is left out is counted."""
        if rows <= 0 or not lines:
            return []
        choice = chosen(lines, rows)
        drawn = []
        if choice.left_out:
            words = f"… {choice.left_out} {'earlier' if choice.only_earlier else 'more'}; {ALL_EVENTS}"
            drawn.append(self._entry("", ((_shorten(words, self._room), PLAIN),)))
        for line in choice.told:
            event, times = line.event, line.times
            words = self._fit_words(event.text) + (f" ({times} times in a row)" if times > 1 else "")
            bit = "" if event.bit is None else bit_words(event.bit)
            if cell_len(words) + len(bit) + 2 <= self._room:
                pad = max(2, min(self._room, 76) - cell_len(words) - len(bit))
                words = words + " " * pad + bit if bit else words
            ink = RED if event.kind in ALARMS else PLAIN
            drawn.append(self._entry(local_time(event.at), ((_shorten(words, self._room), ink),)))
        return drawn

    # -- lines

    def _words(self, label: str, texts: Sequence[str], most_each: int) -> list[Text]:
        lines = []
        for number, text in enumerate(texts):
            for part_number, part in enumerate(wrap(self._fit_words(text), self._room, most_each)):
                first = number == 0 and part_number == 0
                lines.append(self._entry(label if first else "", ((part, PLAIN),)))
        return lines

    def _entry(self, label: str, spans: Line) -> Text:
        line = Text(f"{label:>{MARGIN}} {self.signs.margin} ", no_wrap=True)
        for text, ink in spans:
            line.append(self._letters(text), style=ink or None)
        return line

    def _fit_words(self, text: str) -> str:
        return clean(text)

    def _letters(self, text: str) -> str:
        """Keep to plain letters where the output has no others; one for one, so that widths stay."""
        if self.signs.margin != "|":
            return text
        return text.translate(_ASCII).encode("ascii", "replace").decode("ascii")


def _left_out(sheet: Sheet, layout: Layout) -> str:
    """Say what a page that stays has no room for; empty where it has all."""
    if layout.details:
        return ""
    parts = (("risks", sheet.risks), ("link", sheet.path), ("bits sent and received", sheet.details))
    names = ", ".join(name for name, there in parts if there)
    return f"not shown: {names}; `bitassay show RUN | cat` has all" if names else ""


def _kept(sheet: Sheet, points: int) -> Sequence[tuple[str, Bar]]:
    """Leave out the bars that tell least: the first ones, or those that weigh least."""
    if not sheet.weights:
        return sheet.bars[max(0, sheet.ahead - points) :]
    by_weight = sorted(range(len(sheet.bars)), key=lambda number: -sheet.weights[number])
    return [sheet.bars[number] for number in sorted(by_weight[: points + 1])]


def wrap(text: str, width: int, most: int) -> list[str]:
    """Break text at spaces into at most `most` lines of `width` columns; narrow spaces in numbers hold."""
    lines: list[str] = []
    line = ""
    for word in text.split(" "):
        longer = f"{line} {word}" if line else word
        if cell_len(longer) <= width:
            line = longer
            continue
        if line:
            lines.append(line)
        while cell_len(word) > width:
            head = set_cell_size(word, width).rstrip()
            lines.append(head)
            word = word[len(head) :]
        line = word
    lines.append(line)
    if len(lines) <= most:
        return lines
    return [*lines[: most - 1], _shorten(" ".join(lines[most - 1 :]), width)]


def _shorten(text: str, width: int) -> str:
    if cell_len(text) <= width:
        return text
    return set_cell_size(text, max(0, width - 1)).rstrip() + "…"
