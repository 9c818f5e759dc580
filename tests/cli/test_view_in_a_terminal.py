"""The real command on real pseudo-terminals: nothing scrolled away, resized in mid-run, dumb, piped, stuck."""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import pty
import re
import select
import signal
import struct
import subprocess
import sys
import termios
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from harness.store import StoreError, open_store

ENTER, LEAVE, HOME = "\x1b[?1049h", "\x1b[?1049l", "\x1b[H"
PROFILE = """
title = "Wader-9 acceptance, 48 kbit/s (simulated)"
[device]
model = "Wader-9"
serial_number = "0031"
[link]
driver = "loopback"
rate_bps = 480_000
pace_bps = 480_000
[[link.channel]]
model = "independent"
ber = {ber}
seed = 7
[requirement]
ber = 1e-6
accept_errors = 3
[stop]
seconds = {seconds}
"""
COMMAND = [sys.executable, "-m", "harness.cli.main"]


def profile(folder: Path, ber: float = 0.0, seconds: float = 1.5) -> None:
    (folder / "wader.toml").write_text(PROFILE.format(ber=ber, seconds=seconds))


class Terminal:
    """A pseudo-terminal with the command on it."""

    def __init__(self, cwd: Path, arguments: list[str], size=(80, 24), env=None, **streams) -> None:
        self.master, slave = pty.openpty()
        self.resize(*size)
        environment = {
            k: v for k, v in os.environ.items() if k not in ("BITASSAY_STORE", "NO_COLOR", "COLUMNS")
        }
        environment |= {"TERM": "xterm-256color", "PYTHONUTF8": "1"} | (env or {})
        where = {"stdin": slave, "stdout": slave, "stderr": slave} | streams
        self.process = subprocess.Popen(
            [*COMMAND, *arguments], cwd=cwd, env=environment, start_new_session=True, **where
        )
        os.close(slave)
        self.raw = b""

    def resize(self, columns: int, rows: int) -> None:
        fcntl.ioctl(self.master, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))

    def read_for(self, seconds: float = 30.0, until: str | None = None) -> str:
        """Read until the command has gone, the time is over, or what has come since holds `until`."""
        begun = len(self.text)
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            ready, _, _ = select.select([self.master], [], [], 0.1)
            if ready:
                try:
                    data = os.read(self.master, 65_536)
                except OSError:  # the last one closed the other end
                    break
                if not data:
                    break
                self.raw += data
            elif self.process.poll() is not None:
                break
            if until is not None and until in self.text[begun:]:
                break
        return self.text[begun:]

    @property
    def text(self) -> str:
        return self.raw.decode("utf-8", "replace")

    def close(self) -> None:
        if self.process.poll() is None:
            self.process.kill()
        self.process.wait()
        with contextlib.suppress(OSError):
            os.close(self.master)


@pytest.fixture
def terminal(tmp_path: Path) -> Iterator[Callable[..., Terminal]]:
    opened: list[Terminal] = []

    def start(*arguments: str, cwd: Path = tmp_path, **more) -> Terminal:
        opened.append(Terminal(cwd, list(arguments), **more))
        return opened[-1]

    yield start
    for one in opened:
        one.close()


@pytest.fixture(scope="module")
def bad_run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the record of a bad unit's run."""
    folder = tmp_path_factory.mktemp("bad")
    profile(folder, ber=1e-3, seconds=1)
    done = subprocess.run([*COMMAND, "measure", "wader.toml", "--quiet"], cwd=folder, capture_output=True)
    assert done.returncode == 1
    assert done.stderr == b"", "--quiet shows nothing while the run goes on"
    return folder


def plain(text: str) -> str:
    return re.sub(r"\x1b\[[0-9;?]*[A-Za-z]", "", text).replace("\r", "").replace("\u202f", " ")


def frames(text: str) -> list[str]:
    """Pages as they were drawn on the second screen, each from its top left corner."""
    parts = text.split(ENTER)[1].split(LEAVE)[0].split(HOME)
    return [page for page in map(plain, parts) if page]


# -- while a run goes on


def test_the_page_goes_on_beside_the_history_and_the_last_one_is_left_standing(terminal, tmp_path):
    profile(tmp_path)
    run = terminal("measure", "wader.toml")
    text = run.read_for()
    assert run.process.wait() == 3
    before, after = text.split(ENTER)[0], text.split(LEAVE)[1]
    assert plain(before).strip() == ""
    pages = frames(text)
    assert len(pages) >= 3
    assert all("Wader-9 0031" in page and "verdict │" in page for page in pages)
    assert {len(line) for page in pages for line in page.split("\n")} == {80}
    assert "UNDECIDED" in plain(after)
    assert "record in" in plain(after)
    assert len(plain(after).splitlines()) <= 24
    assert "\x1b[?25l" in text, "the cursor is hidden while a page goes on"
    assert text.index("\x1b[?25h") > text.index("\x1b[?25l")
    assert not re.search(r"\x1b\[[0-9]*[JKLMST]", text), (
        "nothing is erased, so nothing flickers; nothing is moved"
    )


def test_a_resized_window_gets_a_page_of_its_new_size(terminal, tmp_path):
    profile(tmp_path, seconds=60)
    run = terminal("measure", "wader.toml", size=(140, 40))
    run.read_for(until="bits compared")
    for size in ((80, 24), (60, 16), (30, 5)):
        run.resize(*size)
        run.read_for(until="Wader-9")
        run.read_for(until="Wader-9")
    os.killpg(run.process.pid, signal.SIGINT)
    text = run.read_for()
    assert run.process.wait() == 130
    sizes = [
        (max(map(len, page.split("\n"))), page.rstrip("\n").count("\n") + 1) for page in frames(run.text)
    ]
    for size in ((140, 40), (80, 24), (60, 16), (30, 5)):
        assert size in sizes
    assert "the run was interrupted" in " ".join(plain(text.split(LEAVE)[1]).replace("│", "").split())


def test_json_shows_nothing_while_the_run_goes_on(terminal, tmp_path):
    profile(tmp_path)
    text = terminal("measure", "wader.toml", "--json").read_for()
    assert "\x1b" not in text
    assert json.loads(text)["verdict"] == "UNDECIDED"


def test_a_dumb_terminal_gets_plain_lines(terminal, tmp_path):
    profile(tmp_path)
    run = terminal("measure", "wader.toml", env={"TERM": "dumb"})
    text = run.read_for()
    assert run.process.wait() == 3
    assert "\x1b" not in text
    assert "verdict     UNDECIDED" in plain(text)
    assert "run 01" in text


def test_with_the_result_in_a_file_the_page_is_on_the_terminal_still(terminal, tmp_path):
    profile(tmp_path)
    with (tmp_path / "out.txt").open("wb") as file:
        run = terminal("measure", "wader.toml", stdout=file)
        text = run.read_for()
    assert run.process.wait() == 3
    assert ENTER in text
    assert "UNDECIDED" in plain(text.split(LEAVE)[1])
    written = (tmp_path / "out.txt").read_text()
    assert "\x1b" not in written
    assert "verdict     UNDECIDED" in written


def test_a_terminal_that_takes_nothing_does_not_hold_up_the_run(terminal, tmp_path):
    profile(tmp_path, seconds=3)
    run = terminal("measure", "wader.toml", "--store", "stuck.sqlite", size=(300, 120))
    # Nothing is read: a frame of this size is more than the terminal's buffer takes, as after Ctrl-S.
    deadline = time.monotonic() + 60
    status = ""
    while status != "completed" and time.monotonic() < deadline:
        time.sleep(0.5)
        with (
            contextlib.suppress(StoreError),
            open_store(str(tmp_path / "stuck.sqlite"), create=False) as store,
        ):
            lines = store.runs()
            status = lines[0].status if lines else ""
    assert status == "completed"
    assert run.process.poll() is None, "the last page still waits for the terminal, the record does not"
    run.read_for()
    assert run.process.wait() == 3


def test_a_reader_that_goes_away_does_not_change_the_exit_status(tmp_path):
    profile(tmp_path, seconds=1)
    reading, writing = os.pipe()
    process = subprocess.Popen(
        [*COMMAND, "measure", "wader.toml"], cwd=tmp_path, stdout=writing, stderr=writing
    )
    os.close(writing)
    os.close(reading)
    assert process.wait(60) == 3, "UNDECIDED, neither 0 nor the 1 of a FAIL"


# -- a finished run


def test_a_run_is_shown_as_a_page_on_a_terminal_and_in_lines_elsewhere(terminal, bad_run):
    text = terminal("show", "last", cwd=bad_run).read_for()
    assert ENTER not in text
    assert "verdict │  FAIL" in plain(text)
    piped = subprocess.run([*COMMAND, "show", "last"], cwd=bad_run, capture_output=True)
    assert piped.returncode == 0
    words = piped.stdout.decode()
    assert "\x1b" not in words
    assert "verdict     FAIL" in words
    assert "required: at most 1e-6" in words


def test_without_colour_the_same_words_and_no_colour(terminal, bad_run):
    coloured = terminal("show", "last", cwd=bad_run).read_for()
    plainly = terminal("show", "last", cwd=bad_run, env={"NO_COLOR": "1"}).read_for()
    red = re.compile(r"\x1b\[(?:[0-9]+;)*3[0-7][;m]")
    assert red.search(coloured)
    assert not red.search(plainly)
    assert plain(coloured) == plain(plainly)


@pytest.mark.parametrize("more", [{"env": {"TERM": "dumb"}}, {"env": {"TERM": ""}}, {"size": (30, 5)}])
def test_a_terminal_that_cannot_show_a_page_gets_lines(terminal, bad_run, more):
    text = terminal("show", "last", cwd=bad_run, **more).read_for()
    assert "\x1b" not in text
    assert "verdict     FAIL" in plain(text)


def test_an_output_without_the_signs_gets_letters(terminal, bad_run):
    ascii_only = {"PYTHONUTF8": "0", "PYTHONIOENCODING": "ascii", "LC_ALL": "C", "PYTHONCOERCECLOCALE": "0"}
    text = terminal("show", "last", cwd=bad_run, env=ascii_only).read_for()
    assert text.isascii()
    assert "verdict |" in plain(text)
    env = os.environ | ascii_only
    piped = subprocess.run([*COMMAND, "show", "last"], cwd=bad_run, capture_output=True, env=env)
    assert piped.returncode == 0
    assert piped.stdout.isascii()
