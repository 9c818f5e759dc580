"""The page: answers in their order, in words, within the terminal's size, whatever the run's state."""

from __future__ import annotations

import io
from dataclasses import replace

import pytest
from rich.cells import cell_len
from rich.console import Console, Group

from harness.assess.requirement import Requirement
from harness.bench.terms import StopRules
from harness.cli.view.ink import LETTERS, LINES
from harness.cli.view.notebook import Notebook, wrap
from harness.cli.view.sheet import Sheet, sheet_before, sheet_of_assessment, sheet_of_progress

SIZES = [(80, 24), (140, 40), (100, 30), (60, 16), (40, 10), (20, 4)]
REQUIREMENT = Requirement(ber=1e-4, accept_errors=12)  # 194 422 bits: 4.05 s
LONG = Requirement(ber=1e-6, accept_errors=3)
STATES = [
    "before",
    "no bit yet",
    "no bit for long",
    "no error yet",
    "good",
    "bad",
    "unaligned",
    "alignment lost",
    "link lost",
    "closing",
    "nothing required",
    "many events",
    "PASS",
    "FAIL",
    "UNDECIDED",
    "FAIL by slips",
    "measured",
    "failed",
    "sweep",
]


@pytest.fixture(autouse=True)
def _in_utc(utc):
    return utc()


@pytest.fixture
def sheet(making):
    """Give the sheet of a state."""

    def live(*args, **more) -> Sheet:
        progress = making.progress(*args, **more)
        return sheet_of_progress(progress, making.start + int(progress.elapsed_s * 1e9))

    found = making.event("aligned", "the pattern was found", 0, 0)
    lost = making.event("link_lost", "the link was lost: for 3 s bits were due and none was aligned", 13)
    slip = making.event("slip", "1 byte lost", 2.5, 123_456)
    stop = StopRules(seconds=600)

    def closing() -> Sheet:
        progress = making.progress([0] * 5, [found], LONG, stop)
        return sheet_of_progress(progress, making.start, closing="interrupted: closing")

    def slips() -> Sheet:
        assessment = making.assessment([0, 0, "slip", 0, 0], [found, slip], REQUIREMENT)
        return sheet_of_assessment(assessment, "results/runs.sqlite")

    def sweep() -> Sheet:
        done = []
        for attenuation, errors in ((20.0, 0), (21.0, 4), (22.0, 200)):
            acc = making.accumulator([errors], [], None)
            done.append(making.point(acc, None, values={"attenuator": attenuation}))
        acc = making.accumulator([30], [], None)
        point = making.point(acc, None, values={"attenuator": 23.0})
        return live(
            [30],
            point=point,
            done=tuple(done),
            number=3,
            visits=21,
            units={"attenuator": "dB"},
            sensitivity_ber=1e-3,
            stop=stop,
            until=making.start / 1e9 + 300,
        )

    makers = {
        "before": lambda: sheet_before("Wader-9 acceptance", {"model": "Wader-9"}, making.start),
        "no bit yet": lambda: live([], requirement=LONG, stop=stop),
        "no bit for long": lambda: live(["silent"] * 8, requirement=LONG, stop=stop),
        "no error yet": lambda: live([0] * 42, [found], LONG, stop),
        "good": lambda: live([0, 0, 1, 0] * 10, [found], Requirement(ber=1e-4, accept_errors=400), stop),
        "bad": lambda: live([50] * 40, [found], LONG, stop),
        "unaligned": lambda: live(["unaligned"] * 12, requirement=LONG, stop=stop),
        "alignment lost": lambda: live(
            [0] * 5 + ["unaligned"] * 5,
            [found, making.event("alignment_lost", "the pattern is no longer found", 5, 240_000)],
            LONG,
        ),
        "link lost": lambda: live([0] * 10 + ["silent"] * 5, [found, lost], LONG, stop),
        "closing": closing,
        "nothing required": lambda: live([0] * 7, [found]),
        "many events": lambda: live([0] * 30, [found, *[slip] * 40, lost, *[slip] * 3], LONG, stop),
        "PASS": lambda: sheet_of_assessment(
            making.assessment([1] * 5, [found], REQUIREMENT), "results/runs.sqlite"
        ),
        "FAIL": lambda: sheet_of_assessment(
            making.assessment([9] * 5, [found], REQUIREMENT), "results/runs.sqlite"
        ),
        "UNDECIDED": lambda: sheet_of_assessment(
            making.assessment([0] * 3, [found], REQUIREMENT, ended_by="seconds"), "results/runs.sqlite"
        ),
        "FAIL by slips": slips,
        "measured": lambda: sheet_of_assessment(making.assessment([0] * 3, [found], None, ended_by="bits")),
        "failed": lambda: sheet_of_assessment(
            making.assessment(
                [0] * 3,
                [found, making.event("fault", "/dev/ttyUSB0 went away in the middle of the run", 3)],
                REQUIREMENT,
                status="failed",
                ended_by="fault",
            )
        ),
        "sweep": sweep,
    }
    return lambda state: makers[state]()


def text_of(sheet: Sheet, width: int = 80, height: int = 24, signs=LINES, whole: bool = False) -> str:
    return "\n".join(line.plain for line in Notebook(width, height, signs).draw(sheet, whole=whole)).replace(
        "\u202f", " "
    )


def ansi_of(sheet: Sheet, **options) -> str:
    console = Console(file=io.StringIO(), width=80, force_terminal=True, legacy_windows=False, **options)
    console.print(Group(*Notebook(80, 24, LINES).draw(sheet)), no_wrap=True, overflow="ignore", crop=False)
    return console.file.getvalue()


@pytest.mark.parametrize("state", STATES)
@pytest.mark.parametrize(("width", "height"), SIZES)
def test_every_state_fits_every_size(sheet, state, width, height):
    lines = Notebook(width, height, LINES).draw(sheet(state))
    assert len(lines) <= height
    assert all(cell_len(line.plain.rstrip()) <= width for line in lines)


@pytest.mark.parametrize("state", STATES)
def test_the_answers_stand_in_the_order_of_the_questions(sheet, state):
    text = text_of(sheet(state))
    labels = ["Wader-9", "required │", "verdict │", "BER │", "bits │", "to do │"]
    if state == "before":
        labels = ["Wader-9", "verdict │", "BER │"]
    if state in ("PASS", "FAIL", "UNDECIDED", "FAIL by slips", "measured", "failed"):
        labels[-1] = "took │"
    places = [text.index(label) for label in labels]
    assert places == sorted(places)


@pytest.mark.parametrize("state", STATES)
@pytest.mark.parametrize(("width", "height"), SIZES)
def test_the_verdict_is_on_every_page_however_small(sheet, state, width, height):
    text = text_of(sheet(state), width, max(height, 6))
    assert "verdict │" in text
    if state in ("PASS", "UNDECIDED"):
        assert f" {state} " in text
    if state.startswith("FAIL"):
        assert " FAIL " in text


@pytest.mark.parametrize("state", STATES)
def test_colour_carries_no_meaning_alone(sheet, state):
    coloured, plain = ansi_of(sheet(state), color_system="standard"), ansi_of(sheet(state), no_color=True)
    assert "\x1b[31m" not in plain
    assert "\x1b[1;31m" not in plain
    strip = Console(file=io.StringIO(), width=200, color_system=None)
    for text in (coloured, plain):
        from rich.text import Text

        strip.print(Text.from_ansi(text), soft_wrap=True)
    half = strip.file.getvalue()
    assert half[: len(half) // 2] == half[len(half) // 2 :]


@pytest.mark.parametrize("state", STATES)
def test_only_red_and_nothing_that_vanishes_on_white_or_black(sheet, state):
    codes = set()
    for part in ansi_of(sheet(state), color_system="standard").split("\x1b[")[1:]:
        codes |= set(part.split("m")[0].split(";"))
    assert codes <= {"0", "1", "7", "31", ""}, "bold, reverse and red only"


@pytest.mark.parametrize("state", STATES)
def test_letters_are_enough(sheet, state):
    text = text_of(sheet(state), signs=LETTERS)
    assert text.isascii()
    assert "verdict |" in text


@pytest.mark.parametrize(
    ("state", "words"),
    [
        ("before", ["none yet: opening the link", "every ratio is possible"]),
        ("no bit yet", ["none received", "no second is complete yet"]),
        (
            "no bit for long",
            ["none yet: no bit has come in 8 s", "- nothing came", "no forecast at a standstill"],
        ),
        (
            "no error yet",
            ["no error in 26 % of the bits; 3 are accepted", "no error measured; under 1.83e-6 at 95 %"],
        ),
        ("good", ["none yet: 10 errors in", "between"]),
        ("bad", ["cannot pass any more", "2 000 errors, where the plan accepts 3"]),
        ("unaligned", ["576 000 bits came, but PRBS15 is not found in them", "none compared in 12 seconds"]),
        ("alignment lost", ["PRBS15 is no longer found in what comes"]),
        ("link lost", ["cannot pass any more; the link is lost since", "the link was lost once"]),
        ("closing", ["none yet: the run is being closed", "interrupted: closing"]),
        ("nothing required", ["nothing: measured only", "end it with Ctrl-C"]),
        ("many events", ["1 byte lost (3 times in a row)"]),
        (
            "PASS",
            [
                "demonstrated: 5 errors",
                "with 95 % confidence",
                "its plan decided",
                "record in results/runs.sqlite",
            ],
        ),
        ("FAIL", ["not demonstrated: "]),
        (
            "UNDECIDED",
            ["the plan had not decided when the run ended", "the profile's limit of time was reached"],
        ),
        ("measured", ["none: nothing was required"]),
        ("failed", ["/dev/ttyUSB0 went away in the middle of the run"]),
        ("sweep", ["4 of 21: attenuator 23 dB", "looked for: 1e-3", "17 more points", "22 │"]),
    ],
)
def test_each_state_says_what_it_is(sheet, state, words):
    text = " ".join(text_of(sheet(state)).replace("\n         │", " ").split())
    for phrase in words:
        assert phrase in text


def test_beside_a_verdict_the_ruler_shows_the_bound_that_decides(making, sheet):
    passed = making.assessment([1] * 5, [], REQUIREMENT)
    assert passed.verdict == "PASS"
    ((_label, bar),) = sheet_of_assessment(passed).bars
    assert bar.upper == passed.whole.bounds.value <= REQUIREMENT.ber
    failed = making.assessment([9] * 5, [], REQUIREMENT)
    assert failed.verdict == "FAIL"
    ((_label, bar),) = sheet_of_assessment(failed).bars
    b = failed.whole.bounds
    assert (bar.upper if b.side == "upper" else bar.lower) == b.value
    assert bar.upper > REQUIREMENT.ber


def test_while_undecided_the_ruler_shows_both_bounds(making):
    progress = making.progress([1] * 3, requirement=LONG)
    ((_label, bar),) = sheet_of_progress(progress, making.start).bars
    assert (bar.lower, bar.upper) == (progress.point.bounds.lower, progress.point.bounds.upper)


def test_what_a_device_says_cannot_command_the_terminal(making):
    nasty = making.event("dialogue", "said \x1b[2J\x1b]0;owned\x07 \x9b31m \u202e OK", 1)
    progress = making.progress([0], [nasty], title="\x1b[31mred\nline")
    text = text_of(sheet_of_progress(progress, making.start), 140, 40)
    assert not any((ord(c) < 32 and c != "\n") or 0x7F <= ord(c) < 0xA0 or c == "\u202e" for c in text)
    assert "OK" in text


def test_events_carry_their_local_time_of_day_in_the_margin(making, monkeypatch):
    import time

    event = making.event("slip", "1 byte lost", 0, 123_456)
    for zone, hour in (("UTC", 0), ("XXX-5", 5)):
        monkeypatch.setenv("TZ", zone)
        time.tzset()
        text = text_of(sheet_of_progress(making.progress([0], [event]), making.start))
        line = next(line for line in text.splitlines() if "1 byte lost" in line)
        began = (making.start // 10**9 % 86_400 // 3600 + hour) % 24
        assert line.startswith(f"{began:02d}:")
        assert line.endswith("bit 123 456")


def test_the_latest_events_are_kept_where_room_is_short(making):
    events = [making.event("line", f"event number {n}", n) for n in range(50)]
    text = text_of(sheet_of_progress(making.progress([0] * 50, events, LONG), making.start + 50 * 10**9))
    assert "event number 49" in text
    assert "event number 1\n" not in text


def test_reasons_of_a_page_that_stays_are_never_cut_off_at_80_columns(making):
    assessment = making.assessment([9] * 5, [], REQUIREMENT)
    text = text_of(sheet_of_assessment(assessment), 80, 23, whole=True)
    joined = " ".join(text.replace("│", " ").split())
    for reason in assessment.reasons:
        assert " ".join(reason.replace("\u202f", " ").split()) in joined


def test_numbers_are_not_broken_at_their_narrow_spaces():
    text = "there are 2\u202f995\u202f732 bits"
    assert wrap(text, 12, 9) == ["there are", "2\u202f995\u202f732", "bits"]


def test_a_word_without_spaces_is_cut_and_wide_letters_count_twice():
    assert wrap("漢字" * 6, 8, 9) == ["漢字漢字"] * 3
    assert wrap("a bb ccc dddd", 6, 2) == ["a bb", "ccc d…"]


def test_long_remarks_never_push_the_verdict_off_the_screen(making):
    assessment = making.assessment([1] * 5, [], REQUIREMENT)
    remarks = [f"remark {n}: " + "many words of warning that nobody may overlook " * 8 for n in range(3)]
    sheet = replace(sheet_of_assessment(assessment, "results/runs.sqlite"), remarks=remarks)
    text = text_of(sheet, 80, 23, whole=True)
    assert text.count("\n") < 23
    assert all(f"remark {n}:" in text for n in range(3))
    assert "`bitassay show RUN | cat` has every word" in text


def test_a_ratio_behind_the_devices_own_repeats_is_called_residual(making):
    device = {"model": "Wader-9", "error_control": "arq"}
    assert "residual" in text_of(sheet_of_assessment(making.assessment([1] * 5, device=device)))
    assert "residual" in text_of(sheet_of_progress(making.progress([1], device=device), making.start))
    assert "residual" not in text_of(sheet_of_assessment(making.assessment([1] * 5)))


def test_a_far_end_loop_is_called_both_directions_in_series(making):
    acc = making.accumulator([0], [], None)
    link = {"driver": "serial", "port": "/dev/ttyUSB0", "topology": "far-end-loop"}
    point = making.point(acc, None, facts={"link": link})
    text = text_of(sheet_of_progress(making.progress([0], point=point), making.start), 140, 40)
    assert "serial /dev/ttyUSB0; far-end loop, both directions in series" in text


def test_a_void_sweep_is_void_on_the_page_whatever_its_verdict_was(making):
    judged = making.assessment([0] * 5, verdict="PASS", reasons=["at least 54 dB as required"])
    void = replace(judged, points=[judged.whole] * 2, sweep=True, more={"void": True})
    assert sheet_of_assessment(void).verdict == "VOID (it was PASS)"


def test_a_sensitivity_that_is_required_stands_under_required(making):
    measured = making.assessment([0] * 5)
    asked = "sensitivity at BER 1e-6 at least 54 dB"
    swept = replace(measured, points=[measured.whole] * 2, sweep=True, required_sensitivity=asked)
    assert sheet_of_assessment(swept).required == [asked]
    assert "nothing was required" not in sheet_of_assessment(swept).verdict


def test_the_seconds_of_a_file_that_was_read_name_no_end(making):
    read = making.assessment([0] * 20, ended=making.start + 10**8)
    assert "until" not in sheet_of_assessment(read).to_do[0]
    assert "until" in sheet_of_assessment(making.assessment([0] * 20)).to_do[0]
