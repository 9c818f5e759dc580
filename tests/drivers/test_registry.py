"""Drivers are found by name, plug-ins among them, and everything wrong with one is said in a line."""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

from drivers import registry
from drivers.contract import Link
from drivers.registry import BrokenPlugin, UnknownDriver, describe, link_class, names

PLUGIN = '''
"""A link that gives back what it was sent, upside down."""
from pydantic import Field
from drivers.contract import Link, Section


class MirrorSection(Section):
    depth: int = Field(3, ge=1, description="How many bytes it holds.")


class MirrorLink(Link):
    """Turns every bit over."""

    Section = MirrorSection

    def open(self):
        self._held = bytearray()

    def close(self):
        pass

    def interrupt(self):
        pass

    def send(self, data, timeout):
        self._held += bytes(255 - b for b in data[: self.section.depth])
        return min(len(data), self.section.depth)

    def receive(self, buffer, timeout):
        count = min(len(buffer), len(self._held))
        buffer[:count] = self._held[:count]
        del self._held[:count]
        return count


class NoLink:
    pass


class Unfinished(Link):
    Section = MirrorSection


class Keyless(MirrorLink):
    Section = dict
'''

POINTS = """[bitassay.links]
mirror = wader_mirror:MirrorLink
nolink = wader_mirror:NoLink
unfinished = wader_mirror:Unfinished
keyless = wader_mirror:Keyless
missing = wader_mirror:Nowhere
absent = wader_absent:AbsentLink
raising = wader_raising:RaisingLink
quitting = wader_quitting:QuittingLink
tcp = wader_mirror:MirrorLink
"""

AGAIN = "[bitassay.links]\nmirror = wader_mirror:MirrorLink\ndouble = wader_mirror:MirrorLink\n"


def build_wheel(folder: Path, name: str, files: dict[str, str], points: str) -> Path:
    """Write a wheel as the packaging standard describes one: a zip file with a dist-info folder."""
    info = f"{name}-1.4.dist-info"
    path = folder / f"{name}-1.4-py3-none-any.whl"
    parts = {
        **files,
        f"{info}/METADATA": f"Metadata-Version: 2.1\nName: {name}\nVersion: 1.4\n",
        f"{info}/WHEEL": "Wheel-Version: 1.0\nGenerator: by hand\nRoot-Is-Purelib: true\nTag: py3-none-any\n",
        f"{info}/entry_points.txt": points,
    }
    parts[f"{info}/RECORD"] = "".join(f"{part},,\n" for part in parts) + f"{info}/RECORD,,\n"
    with zipfile.ZipFile(path, "w") as wheel:
        for part, content in parts.items():
            wheel.writestr(part, content)
    return path


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Plug-ins installed by pip into a folder of their own, without a network."""
    folder = tmp_path_factory.mktemp("wheels")
    target = folder / "site"
    wheels = [
        build_wheel(
            folder,
            "wader_mirror",
            {
                "wader_mirror.py": PLUGIN,
                "wader_raising.py": "raise RuntimeError('no licence\\nfor this host')\n",
                "wader_quitting.py": "raise SystemExit(0)\n",
            },
            POINTS,
        ),
        build_wheel(folder, "wader_again", {"wader_again.py": ""}, AGAIN.replace("double", "only")),
    ]
    subprocess.run(
        [
            *(sys.executable, "-m", "pip", "install", "--quiet", "--no-index", "--no-deps"),
            *("--disable-pip-version-check", "--target", str(target), *map(str, wheels)),
        ],
        check=True,
        timeout=120,
    )
    return target


@pytest.fixture
def plugins(installed: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.syspath_prepend(str(installed))


def test_an_installed_plugin_measures_in_a_process_that_knows_only_its_name(installed: Path) -> None:
    code = """
from drivers.registry import describe, link_class, names
assert "only" in names("links"), names("links")
driver = link_class("only")
with driver(driver.Section(depth=2)) as link:
    assert link.send(memoryview(b"\\x0f\\xf0\\x00"), 1) == 2
    room = bytearray(9)
    print(link.receive(memoryview(room), 1), room[:2].hex(), describe("links", "only").origin)
"""
    root = Path(registry.__file__).parent.parent
    done = subprocess.run(
        [sys.executable, "-c", code],
        env={**os.environ, "PYTHONPATH": os.pathsep.join([str(installed), str(root)])},
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert done.stderr == ""
    assert done.stdout.strip() == "2 f00f wader_again 1.4"


def test_every_built_in_driver_is_what_its_table_says() -> None:
    assert names("links")[:6] == ("loopback", "serial", "tcp", "udp", "process", "capture")
    assert names("instruments")[:3] == ("scpi", "manual", "simulated")
    for name in names("links")[:6]:
        assert issubclass(link_class(name), Link)
        card = describe("links", name)
        assert card.origin == "built in"
        assert card.summary
        assert all(key.description for key in card.keys), name


def test_nothing_is_imported_before_it_is_asked_for() -> None:
    code = """
import sys
from drivers import registry
registry.names("links")
heavy = [name for name in sys.modules if name.split(".")[0] in ("serial", "pyvisa", "numpy")]
heavy += [name for name in sys.modules if name.startswith(("drivers.links.", "drivers.instruments."))]
print(heavy)
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60)
    assert done.stdout.strip() == "[]", done.stderr


@pytest.mark.parametrize(("wrong", "near"), [("tpc", "tcp"), ("Serial", "serial"), ("loop-back", "loopback")])
def test_an_unknown_name_is_answered_with_the_nearest(wrong: str, near: str) -> None:
    with pytest.raises(UnknownDriver) as caught:
        link_class(wrong)
    assert wrong in caught.value.what
    assert f"did you mean '{near}'" in caught.value.advice


def test_a_name_like_no_other_is_answered_with_all() -> None:
    with pytest.raises(UnknownDriver) as caught:
        link_class("zzzz")
    assert "loopback, serial, tcp" in caught.value.advice
    assert "did you mean" not in caught.value.advice
    with pytest.raises(UnknownDriver) as caught:
        registry.counter_class("zzzz")
    assert "bitassay.counters" in caught.value.advice


@pytest.mark.usefixtures("plugins")
@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("nolink", "is no subclass of drivers.contract.Link"),
        ("unfinished", "does not implement close, interrupt, open"),
        ("keyless", "has no pydantic model named Section"),
        ("missing", "cannot be imported (AttributeError"),
        ("absent", "cannot be imported (ModuleNotFoundError"),
        ("raising", "cannot be imported (RuntimeError: no licence for this host)"),
        ("quitting", "cannot be imported (SystemExit: 0)"),
        ("mirror", "two plug-ins bring the link driver 'mirror': wader_again 1.4 and wader_mirror 1.4"),
    ],
)
def test_a_broken_plugin_is_named_in_one_line(name: str, words: str) -> None:
    with pytest.raises(BrokenPlugin) as caught:
        link_class(name)
    assert words in caught.value.what
    assert "wader_mirror 1.4" in caught.value.what
    assert "\n" not in caught.value.what + caught.value.advice
    assert caught.value.advice


@pytest.mark.usefixtures("plugins")
def test_a_plugin_cannot_take_over_a_built_in_name_and_a_broken_one_harms_no_other() -> None:
    assert link_class("tcp").__module__ == "drivers.links.tcp"
    assert names("links").count("tcp") == 1
    assert link_class("only").__name__ == "MirrorLink"
    assert describe("links", "only").keys[0].default == "3"


@pytest.mark.usefixtures("plugins")
def test_a_plugin_that_is_found_twice_on_the_path_is_one(
    installed: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.syspath_prepend(str(installed) + "/.")
    assert link_class("only").__name__ == "MirrorLink"
