"""The process link with real programs: how they end, what they say, and that none is left behind."""

from __future__ import annotations

import os
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from drivers.contract import EndOfStream, LinkLost, OpenFailed, SendRefused
from drivers.links.process import ProcessLink, ProcessSection


def process(*command: str, **keys: Any) -> ProcessLink:
    return ProcessLink(ProcessSection(command=command, **keys))


def python(code: str, **keys: Any) -> ProcessLink:
    return process(sys.executable, "-c", code, **keys)


def receive_all(link: ProcessLink) -> bytes:
    got, room = bytearray(), bytearray(4096)
    try:
        while count := link.receive(memoryview(room), 20.0):
            got += room[:count]
    except EndOfStream:
        return bytes(got)
    raise AssertionError("nothing more came, and no end either")


def send_until_refused(link: ProcessLink, piece: memoryview) -> None:
    while link.send(piece, 20.0):
        pass


def runs(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    try:
        return "\nState:\tZ" not in Path(f"/proc/{pid}/status").read_text()
    except OSError:
        return False


def test_half_closing_lets_a_filter_finish_its_work() -> None:
    with process("sort") as link:
        link.send(memoryview(b"b\na\n"), 1.0)
        assert link.drain(10.0)
        link.finish_sending()
        link.finish_sending()
        assert receive_all(link) == b"a\nb\n"
        with pytest.raises(SendRefused):
            link.send(memoryview(b"x"), 1.0)


def test_an_exit_in_order_is_an_end_and_any_other_a_lost_link_with_status_and_last_words() -> None:
    with python("print('done')") as link:
        assert receive_all(link) == b"done\n"
    with python("import sys; print('no carrier on antenna 2', file=sys.stderr); sys.exit(3)") as link:
        with pytest.raises(LinkLost) as caught:
            receive_all(link)
        assert "ended with exit status 3" in caught.value.what
        assert 'last words were "no carrier on antenna 2"' in caught.value.what
        assert "\n" not in caught.value.what
    with (
        python("import os; os.kill(os.getpid(), 9)") as link,
        pytest.raises(LinkLost, match="ended by SIGKILL"),
    ):
        receive_all(link)


def test_sending_to_a_program_that_has_gone_says_how_it_went() -> None:
    piece = memoryview(bytes(1 << 16))
    for code, error, words in (
        ("import sys; sys.exit(5)", LinkLost, "exit status 5"),
        ("pass", SendRefused, "exit status 0"),
        ("import os, time; os.close(0); time.sleep(60)", SendRefused, "closed its input"),
    ):
        with python(code) as link, pytest.raises(error, match=words):
            send_until_refused(link, piece)


def test_a_program_that_complains_without_end_does_not_stop_the_stream() -> None:
    code = "import os\nfor i in range(300): os.write(2, b'complaint ' * 400); os.write(1, b'x' * 100)"
    with python(code) as link:
        assert len(receive_all(link)) == 30_000


def test_closing_ends_the_program_even_one_that_complains_and_will_not_go() -> None:
    code = """
import os, signal, time
signal.signal(signal.SIGTERM, signal.SIG_IGN)
os.write(1, b"!")
while True:
    try:
        os.write(2, b"never ")
    except OSError:
        time.sleep(0.01)
"""
    link = python(code, stop_timeout_s=0.1)
    link.open()
    link.receive(memoryview(bytearray(1)), 20.0)
    pid = int(link.describe()["pid"])
    link.close()
    assert not runs(pid)


def test_closing_ends_what_the_program_started_too() -> None:
    code = """
import os, subprocess, sys
child = subprocess.Popen([sys.executable, "-c", "import time; time.sleep(600)"])
os.write(1, b"%d\\n" % child.pid)
"""
    link = python(code)  # it ends at once, its child does not
    link.open()
    room = bytearray(20)
    count = link.receive(memoryview(room), 20.0)
    child = int(room[:count])
    assert runs(child)
    link.close()
    deadline = time.monotonic() + 20
    while runs(child) and time.monotonic() < deadline:
        time.sleep(0.01)
    assert not runs(child)


def test_a_program_may_clean_up_when_asked_to_end(tmp_path: Path) -> None:
    mark = tmp_path / "cleaned"
    code = f"""
import os, pathlib, signal, sys, time
def end(*_):
    pathlib.Path({str(mark)!r}).touch()
    sys.exit()
signal.signal(signal.SIGTERM, end)
os.write(1, b"!")
time.sleep(600)
"""
    with python(code, stop_timeout_s=20) as link:
        link.receive(memoryview(bytearray(1)), 20.0)
    assert mark.exists()


def test_folder_and_environment_are_those_of_the_profile(tmp_path: Path) -> None:
    code = "import os; print(os.getcwd(), os.environ['GAUGE'], bool(os.environ.get('PATH')))"
    with python(code, cwd=tmp_path, environment={"GAUGE": "weir"}) as link:
        assert receive_all(link).decode().split() == [str(tmp_path), "weir", "True"]


def test_no_shell_reads_the_command(tmp_path: Path) -> None:
    with process("echo", "$HOME; true") as link:
        assert receive_all(link) == b"$HOME; true\n"
    with pytest.raises(ValidationError):
        ProcessSection(command="echo hello")
    with pytest.raises(ValidationError):
        ProcessSection(command=[])


def test_a_program_that_cannot_be_started_is_named_with_what_to_do(tmp_path: Path) -> None:
    plain = tmp_path / "notes.txt"
    plain.write_text("not a program")
    script = tmp_path / "script"
    script.write_text("echo no first line that names an interpreter")
    script.chmod(0o755)
    for link, words, advice in (
        (process("no-such-modem"), "the program no-such-modem was not found", "give its path"),
        (process(str(plain)), f"no permission to run {plain}", "chmod +x"),
        (process(str(script)), f"{script} is no program", "interpreter"),
        (
            process("cat", cwd=tmp_path / "nowhere"),
            f"the folder {tmp_path / 'nowhere'} does not exist",
            "cwd",
        ),
        (process("nul\0byte"), "could not be started", "command"),
    ):
        with pytest.raises(OpenFailed) as caught:
            link.open()
        assert words in caught.value.what
        assert advice in caught.value.advice
        assert "\n" not in caught.value.what + caught.value.advice
