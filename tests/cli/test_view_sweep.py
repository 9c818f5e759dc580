"""A sweep's page in the morning: all answers on the first screen, and what happened at night among them."""

from __future__ import annotations

import io
import re
import threading
import time
from dataclasses import replace

import pytest

import harness.cli.watch as watch
from harness.assess.assessment import Assessment
from harness.cli.page import page
from harness.cli.view.entries import sensitivity_words
from harness.cli.view.ink import LINES
from harness.cli.view.notebook import Notebook
from harness.cli.view.sheet import sheet_of_assessment
from harness.cli.watch import LineWatcher, PageWatcher, progress_line

FOUND = {"ber": 1e-3, "value": 33.2, "unit": "dB", "lower": 33.1, "upper": 33.3, "confidence": 0.95}
ERRORS = [0, 1, 3, 10, 30, 48, 100, 300, 900, 2000, 4000, 6000]  # at 28 to 39 dB, of 48 000 bits


@pytest.fixture(autouse=True)
def _in_utc(utc):
    return utc()


@pytest.fixture
def swept(making):
    """Twelve values visited in a shuffled order, a reference twice, and a night with events."""

    def make(events: dict[int, list] | None = None) -> Assessment:
        order = [(k * 5) % 12 for k in range(12)]
        visits = [(28 + k, ERRORS[k], False) for k in order]
        visits[:0], visits[8:8] = [(33, 48, True)], [(33, 50, True)]
        points = []
        for number, (value, errors, reference) in enumerate(visits):
            routine = [
                making.event("instrument", f"att set to {value} dB, reads {value} dB", number),
                making.event("aligned", "the pattern was found", number, 0),
                making.event("delay", "loop delay 0 bits, 2 ms", number, 0),
            ]
            acc = making.accumulator([errors], [*routine, *(events or {}).get(number, [])], None)
            facts = {"reference": True} if reference else {}
            points.append(
                making.point(
                    acc, None, {"att": float(value)}, status="completed", ended_by="bits", facts=facts
                )
            )
        whole = making.assessment([0])
        asked = "sensitivity at BER 1e-3 at least 33 dB"
        return replace(
            whole,
            points=points,
            sweep=True,
            sensitivity=FOUND,
            verdict="PASS",
            reasons=["the sensitivity is 33.20 dB, at least 33 dB as required"],
            required_sensitivity=asked,
            ended=whole.started + 36_000 * 10**9,
        )

    return make


def drawn(a: Assessment, width: int, height: int) -> list[str]:
    lines = Notebook(width, height - 1, LINES).draw(sheet_of_assessment(a, "results/runs.sqlite"), whole=True)
    return [line.plain for line in lines]


def night(making) -> dict[int, list]:
    return {
        3: [making.event("resumed", "the run goes on after it was cut; 800 bits were on their way then", 3)],
        6: [making.event("host_overrun", "this computer could not keep up", 6)],
        9: [making.event("sequence_loss", "a second over 0.20", 9, 7) for _ in range(30)],
        10: [making.event("guard", "3 points before them were never aligned", 10)],
    }


@pytest.mark.parametrize(("width", "height"), [(80, 24), (140, 40), (100, 30)])
def test_all_answers_are_on_the_first_screen_in_their_order(making, swept, width, height):
    lines = drawn(swept(night(making)), width, height)
    assert len(lines) < height  # and room for the prompt
    text = "\n".join(lines)
    answers = ["Wader-9 0031", "sensitivity at BER 1e-3 at least 33 dB", "PASS", "33.2 dB (33.1 to 33.3 dB"]
    answers += ["14 points in 10 h", "never aligned"]
    places = [text.index(words) for words in answers]
    assert places == sorted(places)


def test_where_room_is_short_the_points_nearest_to_the_target_stay_in_the_order_of_their_values(swept):
    lines = drawn(swept(), 80, 24)
    labels = [m[1] for line in lines if (m := re.match(r" *((?:ref )?\d\d) │", line))]
    values = [int(label.split()[-1]) for label in labels]
    assert values == sorted(values)
    assert {"32", "33", "34"} <= {label.split()[-1] for label in labels}
    assert "28" not in labels
    assert f"{len(labels)} of 14 points; `bitassay show RUN | cat` has all" in "\n".join(lines)
    tall = drawn(swept(), 140, 60)
    labels = [m[1] for line in tall if (m := re.match(r" *((?:ref )?\d\d) │", line))]
    assert labels == [*map(str, range(28, 33)), "ref 33", "33", "ref 33", *map(str, range(34, 40))]
    assert not any("has all" in line for line in tall)


def test_a_quiet_night_is_said_to_have_been_one(swept, making):
    quiet = "nothing out of the ordinary happened meanwhile"
    assert any(quiet in line for line in drawn(swept(), 80, 24))
    assert any(quiet in line for line in page(swept()))
    assert not any(quiet in line for line in page(swept(night(making))))


def test_the_plain_page_tells_the_night_before_the_points(swept, making):
    lines = list(page(swept(night(making))))
    told = [line for line in lines if re.search(r"\d\d:\d\d:\d\d  ", line)]
    assert [line.split("  ")[-1] for line in told] == [
        "att 38: the run goes on after it was cut; 800 bits were on their way then",
        "att 29: this computer could not keep up",
        "3 points before them were never aligned",
        "the stream lost its sequence 30 times, at att 39",
    ]
    assert lines.index(told[-1]) < next(k for k, line in enumerate(lines) if line.startswith("points"))


def test_a_sweep_of_one_point_shows_what_was_counted_there(swept):
    """Over all points no BER is given: that of the only one must not be lost for it."""
    many = swept()
    whole = replace(many.whole, tally=many.points[0].tally, ber=None, bounds=None)
    one = replace(many, points=many.points[:1], whole=whole, sensitivity=None, verdict=None, reasons=[])
    text = "\n".join(page(one))
    assert "att 33: 1e-3" in text
    assert "no bit was compared" not in text + "\n".join(drawn(one, 80, 24))


@pytest.mark.parametrize(
    ("lower", "upper", "words"),
    [
        (None, None, "where 1e-3 is reached these points do not tell"),
        (33.0, None, "where 1e-3 is reached these points do not tell: at least 33 dB at 95 %"),
        (None, 34.0, "where 1e-3 is reached these points do not tell: at most 34 dB at 95 %"),
        (33.0, 34.0, "where 1e-3 is reached these points do not tell: between 33 and 34 dB at 95 %"),
    ],
)
def test_without_a_sensitivity_what_is_sure_of_it_is_said(lower, upper, words):
    assert sensitivity_words({**FOUND, "value": None, "lower": lower, "upper": upper}) == words


def test_the_level_at_the_device_and_the_distance_from_the_textbook_are_said(swept):
    more = {"level_dbm": -33.03, "level_uncertainty_db": 0.283, "theory_distance_db": -0.026}
    told = "-33.03 dBm ± 0.57 dB (k = 2) at the device's port; 0.03 dB better than the textbook's curve"
    known = replace(swept(), sensitivity={**FOUND, **more})
    assert any(told in line for line in page(known))
    assert "-33.03 dBm" in "\n".join(drawn(known, 80, 24))
    assert not any("dBm" in line or "textbook" in line for line in page(swept()))


def test_a_line_says_where_the_sweep_is(making):
    progress = making.progress([0])
    p = replace(progress.point, values={"att": 34.5})
    line = progress_line(replace(progress, point=p, number=3, visits=11), making.start + 10**9)
    assert line.startswith("point 4 of 11 (att 34.5), after 1 s: ")


def test_a_new_point_waits_for_no_second_of_the_time_before_it(making, monkeypatch):
    """A warm-up, or the setting of the next point, is no second that is not decided yet."""
    clock = [100.0]
    monkeypatch.setattr(watch.time, "monotonic", lambda: clock[0])
    view = PageWatcher(None, "", {}, threading.Event())
    clock[0] += 9.0  # the instruments warm up
    view.tick(replace(making.progress([]), visits=5))
    assert view._fill(making.start).behind_s == 0
    clock[0] += 6.0
    view.tick(replace(making.progress([]), visits=5))
    assert view._fill(making.start).behind_s == 5


def test_a_warm_up_is_told_and_not_taken_for_a_link_that_does_not_open(making, monkeypatch):
    clock = [100.0]
    monkeypatch.setattr(watch.time, "monotonic", lambda: clock[0])
    view = PageWatcher(None, "", {}, threading.Event())
    view.pausing("instruments and device warm up until 18:30:00")
    assert view._fill(making.start).verdict == "none yet: opening the link"  # a short one is not told
    clock[0] += 2.0
    assert view._fill(making.start).verdict == "none yet: instruments and device warm up until 18:30:00"
    view.pausing("")
    view.tick(replace(making.progress([0, 0]), visits=5))
    view.pausing("being set: oven 60")
    clock[0] += 600.0
    assert view._fill(making.start).to_do == ["being set: oven 60"]
    view.pausing("")
    view.tick(replace(making.progress([0, 0]), visits=5))
    assert "oven" not in " ".join(view._fill(making.start).to_do)


def test_a_long_pause_is_told_in_a_line_once():
    stream = io.StringIO()
    view = LineWatcher(stream, every_s=0.05)
    view.start()
    view.pausing("being set: oven 60")
    deadline = time.monotonic() + 20
    while "oven" not in stream.getvalue() and time.monotonic() < deadline:
        time.sleep(0.02)
    time.sleep(0.3)
    view.stop()
    assert stream.getvalue().count("being set: oven 60") == 1
