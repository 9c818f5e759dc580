"""`bitassay check`: everything that can be proven before a run is left alone for the night."""

from __future__ import annotations

import datetime
import shutil
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path

from drivers.contract import DriverError, Instrument
from harness.assess.words import duration
from harness.bench.check.findings import Finding, Report
from harness.bench.check.forecast import forecast, stop_problem
from harness.bench.check.path import Line, PathCheck, lost_at_most
from harness.bench.conditions import Conditions
from harness.bench.session import Links, Way, ways_of
from harness.bench.visits import visits_of
from harness.profile import Profile

SIMULATED = ("loopback", "process", "capture")
ROOM = 3  # so many times the forecast must be free on the disk


class Check:
    """Checks one profile against the bench as it stands."""

    def __init__(self, profile: Profile, store_folder: Path, cancel: threading.Event) -> None:
        self._profile = profile
        self._folder = store_folder
        self._cancel = cancel
        self._links = Links(profile.need_link(), cancel)
        self._delay_s: float | None = None

    def run(self) -> Report:
        """Check; a finding that makes the rest pointless ends it."""
        found: list[Finding] = []
        ahead = {}
        for finding in self._before():
            found.append(finding)
        rate = self._links.rate_bps
        outlook = forecast(self._profile, rate)
        ahead = outlook.to_json()
        if all(finding.outcome != "bad" for finding in found):
            found.extend(self._at_the_bench())
        found.extend(self._time_and_disk(ahead))
        return Report(tuple(found), self._delay_s, ahead)

    # -- without touching anything

    def _before(self) -> Iterator[Finding]:
        problem = stop_problem(self._profile, self._links.rate_bps)
        if problem is not None:
            advice = "raise it (or leave it out): the plan would often end UNDECIDED"
            if "nothing ends" in problem:
                advice = "add [stop] with bits, seconds or errors: an unattended run must end by itself"
            yield Finding("stop rules", "bad", problem, advice, usage=True)
        else:
            yield Finding("stop rules", "good", "the run ends by itself, and not before its plan")
        conditions = self._conditions()
        for name, instrument in conditions.instruments.items():
            if not instrument.unattended:
                outcome: str = "bad" if self._profile.sweep is not None else "note"
                yield Finding(
                    "instruments",
                    "bad" if outcome == "bad" else "note",
                    f"{name} is set by hand: a sweep with it cannot be left alone",
                    "use an instrument that can be set by the program, or stay beside it",
                )
        for line in conditions.level.overdue(datetime.date.today()):
            yield Finding("calibration", "note", line, "have it calibrated; the report will say it")

    def _conditions(self) -> Conditions:
        return Conditions(
            self._profile,
            self._links.main,
            Path(tempfile.gettempdir()) / f"bitassay-check-{threading.get_native_id()}-{time.time_ns()}.log",
            self._cancel,
        )

    # -- at the bench

    def _at_the_bench(self) -> Iterator[Finding]:
        conditions = self._conditions()
        try:
            with conditions.opened():
                yield from self._instruments(conditions)
                self._set_best(conditions)
                with self._links.opened():
                    for exchange in self._links.take_events():
                        yield Finding("dialogue", "good", exchange.text)
                    for way in ways_of(self._profile, self._links):
                        yield from self._path(way)
                    yield from self._isolation(conditions)
        except DriverError as error:
            yield Finding("bench", "bad", error.what, error.advice)
        for event in conditions.take_events():
            if "NOT" in event.text:
                yield Finding(
                    "instruments", "bad", event.text, "set it by hand before anyone touches the bench"
                )

    def _instruments(self, conditions: Conditions) -> Iterator[Finding]:
        """Step each within its limits: the sweep's values, else the limits' lower, middle and upper part."""
        for name, instrument in conditions.instruments.items():
            if not instrument.unattended or not instrument.settable:
                continue
            values = self._steps(name, instrument)
            for value in values:
                conditions.apply({**conditions.fixed(), **self._first(), name: value})
            unit = getattr(instrument.section, "unit", "")
            listed = ", ".join(f"{value:g}" for value in values)
            yield Finding("instruments", "good", f"{name} followed to {listed} {unit}".rstrip())

    def _first(self) -> dict[str, float]:
        return dict(visits_of(self._profile)[0].values)

    def _steps(self, name: str, instrument: Instrument) -> list[float]:
        visited = sorted({v.values[name] for v in visits_of(self._profile) if name in v.values})
        safe = getattr(instrument.section, "safe", None)
        ends = [visited[0], visited[-1]] if visited else []
        fixed = self._profile.instruments[name].value
        return [*([] if safe is None else [float(safe)]), *ends, *([] if fixed is None else [fixed])]

    def _attenuators(self, conditions: Conditions) -> dict[str, float]:
        """Attenuators that the sweep turns, with their highest value."""
        found = {}
        for name, instrument in conditions.instruments.items():
            quantity = str(getattr(instrument.section, "quantity", ""))
            high = instrument.limits[1]
            if quantity in ("attenuation", "loss") and high < float("inf"):
                found[name] = high
        return found

    def _set_best(self, conditions: Conditions) -> None:
        """Set the sweep's easiest point: the path is proven where it ought to work."""
        if not conditions.instruments:
            return
        values = {**conditions.fixed(), **self._first()}
        for name in self._attenuators(conditions):
            visited = [v.values[name] for v in visits_of(self._profile) if name in v.values]
            if visited:
                values[name] = min(visited)
        conditions.apply(values)

    def _line(self, way: Way) -> Line | None:
        if way.sending is None or way.receiving is None:
            return None
        link = self._profile.need_link()
        return Line(
            sending=way.sending,
            receiving=way.receiving,
            pattern=way.pattern,
            bit_order=way.bit_order,
            rate_bps=way.receiving.rate_bps,
            pace_bps=link.pace_bps,
            max_in_flight_bits=link.max_in_flight_bits,
            drain_s=link.drain_s,
            wired=link.driver not in SIMULATED and way.sending is way.receiving,
        )

    def _path(self, way: Way) -> Iterator[Finding]:
        line = self._line(way)
        if line is None:
            yield Finding("path", "note", "one-way: the path can only be proven by the run itself")
            return
        checking = PathCheck(line, self._cancel)
        corrects = self._profile.device.get("error_control", "none") in ("fec", "arq")
        for finding in checking.findings():
            if corrects and finding.step == "known errors" and "known errors were sent" in finding.text:
                finding = Finding(finding.step, "note", finding.text + ", as the profile says")
            yield finding
        self._delay_s = checking.delay_s if self._delay_s is None else self._delay_s

    def _isolation(self, conditions: Conditions) -> Iterator[Finding]:
        highest = self._attenuators(conditions)
        ways = ways_of(self._profile, self._links)
        line = self._line(ways[0])
        if not highest or line is None:
            return
        conditions.apply({**conditions.fixed(), **self._first(), **highest})
        yield lost_at_most(line, self._cancel)

    # -- the forecast

    def _time_and_disk(self, ahead: dict[str, float | None]) -> Iterator[Finding]:
        longest, expected = ahead.get("longest_seconds"), ahead.get("expected_seconds")
        if longest is None:
            yield Finding(
                "forecast",
                "note",
                "how long it takes cannot be said without a rate",
                "add link.rate_bps, the payload rate",
            )
            return
        words = f"at most {duration(longest)}"
        if expected is not None and expected < 0.9 * longest:
            words = f"about {duration(expected)}, {words}"
        ends = datetime.datetime.now().astimezone() + datetime.timedelta(seconds=longest)
        yield Finding(
            "forecast", "good", f"the run takes {words}: until {ends:%H:%M on %a %d %b} at the latest"
        )
        need = ahead.get("disk_bytes")
        if need is None:
            return
        folder = self._folder if self._folder.exists() else Path.cwd()
        free = shutil.disk_usage(folder).free
        text = f"its record takes about {need / 1e6:.1f} MB; {free / 1e9:.1f} GB are free"
        if free < ROOM * need:
            yield Finding("disk", "bad", text, "free some space, or choose another --store")
        else:
            yield Finding("disk", "good", text)
