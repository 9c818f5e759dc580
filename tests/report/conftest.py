"""Records to report on: real seconds in a real store, assessed, ended and loaded again."""

from __future__ import annotations

import functools
import html.parser
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from harness.assess.run import assess
from harness.record import Event, Note, Second, Sitting, Tally
from harness.report.material import Material, material_of
from harness.store import digest_of, open_store, this_host

BITS = 48_000  # of a second
SECOND_NS = 10**9
START = 1_788_250_000 * SECOND_NS
PROFILE = 'title = "Wader-9 acceptance"\n[requirement]\nber = 1e-4\n'
DEVICE = {
    "model": "Wader-9",
    "serial_number": "0031",
    "operator": "M. Bell",
    "order": "WB-2210",
    "notes": "invented demo data",
}
# In a second: a number of errors, or "unaligned", "silent", "slip", "burst".
What = int | str


@dataclass
class Made:
    """A point to be recorded."""

    seconds: Sequence[What]
    values: Mapping[str, float] = field(default_factory=dict)
    facts: Mapping[str, Any] = field(default_factory=dict)
    events: Sequence[Event] = ()
    ended_by: str | None = "plan"
    after: Tally = field(default_factory=Tally)


def second_of(what: What, number: int, first_bit: int, point: int, sitting: int, rng: Any) -> Second:
    bits = 0 if what == "silent" else BITS
    aligned = what != "unaligned"
    errors = 0 if isinstance(what, str) else what
    if what == "burst":
        start = int(rng.integers(0, BITS - 100))
        places = start + np.sort(rng.choice(60, 30, replace=False)).astype(np.int64)
    else:
        places = np.sort(rng.choice(BITS, errors, replace=False)).astype(np.int64)
    lost = rng.random(len(places)) < 0.5
    compared = bits if aligned else 0
    ones = int(np.count_nonzero(lost))
    slipped = int(what == "slip")
    return Second(
        point=point,
        sitting=sitting,
        index=number,
        at=START + (number + 20 * sitting) * SECOND_NS,
        duration_ns=SECOND_NS,
        sent=BITS,
        tally=Tally(bits, compared, bits - compared, len(places), ones, len(places) - ones),
        slips=slipped,
        bits_lost=8 * slipped,
        first_bit=first_bit,
        positions=places + first_bit,
        ones_lost=lost,
        stretches=((bits, aligned),) if bits else (),
    )


class Records:
    """Makes records in a store of its own."""

    def __init__(self, path: Path) -> None:
        self.path = path / "report.sqlite"

    def make(
        self,
        points: Sequence[Made | Sequence[What]],
        requirement: Mapping[str, Any] | None = None,
        *,
        command: str = "measure",
        settings: Mapping[str, Any] | None = None,
        device: Mapping[str, str] | None = None,
        title: str = "Wader-9 acceptance, 48 kbit/s",
        overrides: Sequence[str] = (),
        sittings: int = 1,
        notes: Sequence[Note] = (),
        ended: bool = True,
        status: str = "completed",
        profile: str = PROFILE,
    ) -> Material:
        rng = np.random.default_rng(7)
        whole: dict[str, Any] = {
            "pattern": {"name": "PRBS15", "bit_order": "lsb"},
            "link": {"driver": "loopback", "topology": "far-end-loop"},
            **(settings or {}),
        }
        if requirement is not None:
            whole["requirement"] = requirement
        with open_store(self.path) as store:
            key = store.begin_run(
                title=title,
                command=command,
                started=START,
                profile_text=profile,
                overrides=overrides,
                settings=whole,
                device=DEVICE if device is None else device,
            )
            versions = {"bitassay": "0.1.0", "numpy": "2.0"}
            host = {**this_host(), "user": "bell"}
            store.begin_sitting(key, Sitting(0, START, None, host, versions))
            number = 0
            last = points[-1]
            for index, given in enumerate(points):
                made = given if isinstance(given, Made) else Made(given)
                facts = {"rate_bps": float(BITS), "pattern": "PRBS15", "bit_order": "lsb", **made.facts}
                store.begin_point(key, index, made.values, START + number * SECOND_NS, facts)
                first = 0
                rows = []
                cut = len(made.seconds) // 2 if given is last and sittings > 1 else None
                events = [*made.events]
                for k, what in enumerate(made.seconds):
                    sitting = int(cut is not None and k >= cut)
                    if cut == k:
                        store.commit(key, rows, [(index, e) for e in events])
                        rows, events = [], []
                        store.end_sitting(key, 0, START + number * SECOND_NS, "cut")
                        begun = START + (number + 20) * SECOND_NS
                        store.begin_sitting(key, Sitting(1, begun, None, host, versions))
                        store.begin_point(key, index, made.values, begun, facts)
                    second = second_of(what, number, first, index, sitting, rng)
                    if what == "slip":
                        data = {"bits": -8, "modulo": 262_136}
                        events.append(Event("slip", first, "1 byte lost", second.at, data))
                    rows.append(second)
                    first += second.tally.received
                    number += 1
                store.commit(key, rows, [(index, e) for e in events])
                if made.ended_by is not None:
                    store.end_point(key, index, START + number * SECOND_NS, made.ended_by, made.after)
            if ended:
                end = START + (number + 20 * (sittings - 1)) * SECOND_NS
                ended_by = (last.ended_by if isinstance(last, Made) else "plan") or "fault"
                store.end_sitting(key, sittings - 1, end, status)
                record = store.load(key)
                from dataclasses import replace

                now = replace(record, status=status, ended=end, ended_by=ended_by)
                a = assess(now)
                store.end_run(key, end, status, ended_by, a.verdict, a.to_json())
            for note in notes:
                store.add_note(key, note)
            run, kept = store.load(key), store.digest(key)
        return material_of(
            run, kept, digest_of(run) if kept else None, written=START, program="bitassay 0.1.0"
        )


@pytest.fixture
def records(tmp_path: Path) -> Records:
    return Records(tmp_path)


@pytest.fixture
def point() -> type[Made]:
    return Made


FIXED = {"ber": 1e-4, "confidence": 0.95, "plan": "fixed", "accept_errors": 12}


class Kept(dict[str, Callable[[], Material]]):
    """Gives what was made already: a material never changes."""

    def __init__(self, makers: dict[str, Callable[[], Material]]) -> None:
        super().__init__({kind: functools.cache(make) for kind, make in makers.items()})


@pytest.fixture(scope="session")
def cases(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Callable[[], Material]]:
    """Runs of every kind, each made once."""
    records = Records(tmp_path_factory.mktemp("cases"))

    def sweep(**more: Any) -> Material:
        settings = {
            "sweep": {"instrument": "attenuator", "sensitivity_ber": 1e-3},
            "instruments": {"attenuator": {"driver": "simulated", "unit": "dB", "limits": [0.0, 95.0]}},
        }
        each = [
            Made(
                errors,
                {"attenuator": value},
                {
                    "units": {"attenuator": "dB"},
                    "instruments": {"attenuator": "Fictional Works AT-1, serial 7"},
                    "level": {"dbm": -30.0 - value, "uncertainty_db": 0.25},
                    "calibration": {
                        "due": {"attenuator": "2027-06-30"},
                        "certificates": {"attenuator": "TC-118"},
                    },
                },
                ended_by="bits",
            )
            for value, errors in (
                (56.0, [0, 0]),
                (58.0, [2, 3]),
                (60.0, [40, 55]),
                (62.0, [300, 290]),
                (64.0, ["unaligned", "unaligned"]),
            )
        ]
        return records.make(each, command="sweep", settings=settings, **more)

    def duplex() -> Material:
        ways = ("forward", "reverse")
        return records.make(
            [Made([1, 2, 0, way, 3], {}, {"direction": ways[way]}) for way in (0, 1)], FIXED, settings={}
        )

    makers: dict[str, Callable[[], Material]] = {
        "pass": lambda: records.make([[1, 0, 2, 0, 1]], FIXED),
        "fail": lambda: records.make([[9, 4, "slip", 7, 2]], {**FIXED, "plan": "curtailed"}),
        "undecided": lambda: records.make([[1, 2]], {"ber": 1e-5, "plan": "sequential", "margin": 2.0}),
        "sequential pass": lambda: records.make(
            [[0, 1, 0, 0, 1, 0, 0, 0, 0, 0]], {"ber": 1e-4, "plan": "sequential", "margin": 4.0}
        ),
        "outages": lambda: records.make([[1, "unaligned", "silent", "slip", "silent", 2]], FIXED),
        "bursts": lambda: records.make([["burst", 0, "burst", 0, 0, "burst", 1, 0] * 4], None),
        "measured only": lambda: records.make([[1, 2, 3]], None),
        "never aligned": lambda: records.make([["unaligned", "unaligned"]], FIXED),
        "nothing came": lambda: records.make(
            [Made(["silent"] * 4, ended_by="fault")], FIXED, status="failed"
        ),
        "sweep": sweep,
        "resumed sweep": lambda: sweep(sittings=2),
        "duplex": duplex,
        "running": lambda: records.make([Made([1, 0], ended_by=None)], FIXED, ended=False),
    }
    return Kept(makers)


@pytest.fixture(scope="session")
def hostile_record(tmp_path_factory: pytest.TempPathFactory) -> Callable[..., Material]:
    """A sweep whose every free text is one of those given."""

    def make(script: str, formula: str, typeset: str, instrument: str, controls: str) -> Material:
        link = {"topology": "far-end-loop", "driver": "tcp", script: typeset, "peer": controls}
        facts = {
            "units": {instrument: script},
            "instruments": {instrument: f"{script}{controls}"},
            "link": link,
        }
        heard = Event("dialogue", None, f'heard "{script}{typeset}{controls}"', START)
        seconds: list[What] = [1, "slip", "unaligned", 30]
        points = [Made(seconds, {instrument: v}, facts, [heard], "bits") for v in (-1.0, 2.0)]
        return Records(tmp_path_factory.mktemp("hostile")).make(
            points,
            {**FIXED, "at": {instrument: -1.0}},
            command="sweep",
            settings={
                "sweep": {"instrument": instrument},
                "instruments": {instrument: {"driver": formula, "unit": script, "limits": [0, 9]}},
            },
            device={
                "model": script,
                "serial_number": formula,
                "notes": typeset,
                script: controls,
                "@key": "-2+3",
            },
            title=f"{script} {typeset} ]]>",
            overrides=[f"device.model={script}", "=cmd"],
            notes=[Note(START, script, f"{formula} {controls}", True)],
            profile=f'title = "{script}"\n# {typeset} \x1b[31m\n',
        )

    return make


class _Words(html.parser.HTMLParser):
    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.parts: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self._hidden = 0

    def handle_starttag(self, tag: str, attributes: Any) -> None:
        self.tags.append((tag, dict(attributes)))
        self._hidden += tag in ("style", "title")

    def handle_startendtag(self, tag: str, attributes: Any) -> None:
        self.tags.append((tag, dict(attributes)))

    def handle_endtag(self, tag: str) -> None:
        self._hidden -= tag in ("style", "title")

    def handle_data(self, data: str) -> None:
        if not self._hidden:
            self.parts.append(data)


@pytest.fixture
def parsed() -> Callable[[str], _Words]:
    """Read a page as a browser would: its text, and every tag with its attributes."""

    def parse(page: str) -> _Words:
        words = _Words()
        words.feed(page)
        words.close()
        return words

    return parse


@pytest.fixture
def numbers_in() -> Callable[[str], list[float]]:
    """Find every number in a text, digits in threes joined."""

    def find(text: str) -> list[float]:
        joined = re.sub(r"(?<=\d)[\u202f\u2009 ](?=\d{3}(?!\d))", "", text)
        return [float(t) for t in re.findall(r"\d+(?:\.\d+)?(?:e-?\d+)?", joined)]

    return find
