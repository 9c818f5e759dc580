"""Plain lines while a run goes on: what they say, and that no reader can hold up or end a run."""

from __future__ import annotations

import contextlib
import io
import os
import threading
import time
from types import SimpleNamespace

import pytest

from harness.assess.requirement import Requirement
from harness.cli.watch import LineWatcher, PageWatcher, event_lines, progress_line

LONG = Requirement(ber=1e-6, accept_errors=3)


def said(making, progress, **more) -> str:
    return progress_line(progress, making.start + int(progress.elapsed_s * 1e9), **more).replace(
        "\u202f", " "
    )


def test_a_line_says_counts_ratio_and_what_is_still_to_do(making, utc):
    line = said(making, making.progress([0, 1, 0, 0, 0], requirement=LONG))
    assert line.startswith(
        "after 5 s: 1 error in 240 000 bits, BER 4.17e-6 · 7 513 655 bits to the decision, about"
    )


def test_a_line_says_that_there_can_be_no_pass_any_more(making):
    assert "cannot pass any more: 10 errors, where the plan accepts 3" in said(
        making, making.progress([5, 5], requirement=LONG)
    )


def test_a_line_says_what_was_not_aligned_and_slips(making):
    line = said(making, making.progress(["unaligned", "slip"]))
    assert "48 000 bits unaligned" in line
    assert "1 slip" in line


def test_an_event_has_a_line_of_its_own_with_its_time_and_is_said_once(making, utc):
    utc()
    progress = making.progress([0], [making.event("aligned", "the pattern was found", 3)])
    (line,) = event_lines(progress, 0)
    assert line == "08:06:43  the pattern was found"
    assert event_lines(progress, 1) == []
    assert "found" not in said(making, progress)


def test_of_many_events_the_latest_are_said_and_the_others_counted(making):
    events = [making.event("slip", f"slip {number}", number) for number in range(10)]
    lines = event_lines(making.progress([0], events), 1)
    assert lines[0].strip() == "… 5 further events"
    assert [line.split("  ")[1] for line in lines[1:]] == ["slip 6", "slip 7", "slip 8", "slip 9"]


def test_the_run_is_named_first_and_lines_follow(making):
    stream = io.TextIOWrapper(io.BytesIO(), "utf-8", write_through=True)
    said = stream.buffer
    watcher = LineWatcher(stream, every_s=0.1)
    watcher.start()
    watcher.started("01a2")
    deadline = time.monotonic() + 20
    while said.getvalue().count(b"\n") < 3 and time.monotonic() < deadline:
        watcher.tick(making.progress([0], requirement=LONG))
        time.sleep(0.05)
    watcher.stop()
    lines = said.getvalue().decode().splitlines()
    assert lines[0] == "run 01a2"
    assert all(line[8:].startswith("  after 1 s: 0 errors") for line in lines[1:])


@pytest.mark.parametrize("closed", [False, True])
def test_no_reader_holds_up_a_run_by_taking_nothing_or_by_going_away(making, closed):
    reading, writing = os.pipe()
    os.set_blocking(writing, True)
    if closed:
        os.close(reading)
    stream = os.fdopen(writing, "w")
    watcher = LineWatcher(stream, every_s=0.0)
    watcher.start()
    watcher.started("01a2" * 50_000)  # more than a pipe takes
    done = threading.Event()

    def bench() -> None:
        for _ in range(5):
            watcher.tick(making.progress([0], requirement=LONG))
        watcher.stop()
        done.set()

    threading.Thread(target=bench, daemon=True).start()
    assert done.wait(30)
    if not closed:
        os.close(reading)
    for thread in threading.enumerate():
        if thread.name == "lines":
            thread.join(30)
    with contextlib.suppress(OSError):
        stream.close()


def test_what_is_not_about_the_device_stands_at_the_pages_foot_and_below_it_afterwards(making, capsys):
    view = PageWatcher(io.StringIO(), "Wader-9", {}, threading.Event())
    view.notice("the store is away")
    assert "the store is away" in capsys.readouterr().err  # no page yet
    view.tick(making.progress([1, 0, 2]))
    view._live = SimpleNamespace(stop=lambda: None)
    view.notice("the store is away again")
    view.notice("the store is back")
    sheet = view._fill(making.start + 3 * 10**9)
    assert sheet.foot[0] == "the store is back"
    assert "away" not in " ".join(sheet.foot)
    assert capsys.readouterr().err == ""
    view.stop()
    assert capsys.readouterr().err.splitlines() == [
        "bitassay: the store is away again", "bitassay: the store is back",
    ]  # fmt: skip
    view.notice("handed over")
    assert "handed over" in capsys.readouterr().err


def test_a_page_stands_still_and_says_why_while_nothing_can_be_known(making):
    view = PageWatcher(io.StringIO(), "Wader-9", {}, threading.Event())
    view.tick(making.progress([1, 0, 2]))
    view.waiting("the store cannot be reached; waiting for it")
    sheet = view._fill(making.start + 90 * 10**9)
    assert list(sheet.to_do) == ["the store cannot be reached; waiting for it"]
    view.waiting("")
    assert list(view._fill(making.start + 90 * 10**9).to_do) != list(sheet.to_do)


def test_lines_say_once_that_they_wait_and_that_the_waiting_is_over():
    stream = io.StringIO()
    view = LineWatcher(stream, every_s=60)
    view.start()
    for why in ("the store is away", "the store is away", ""):
        view.waiting(why)
        time.sleep(0.3)
    view.stop()
    assert stream.getvalue().splitlines() == ["the store is away", "the store can be reached again"]
