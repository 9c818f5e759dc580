"""`bitassay check`: everything that can be proven before a run is left alone for the night."""

from __future__ import annotations

import datetime
import shutil
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from drivers.contract import DriverError, Instrument, Interrupted
from harness.assess.words import duration, rate
from harness.bench.check.beside import echo_on, listen_only, lost_at_most
from harness.bench.check.findings import Finding, Outcome, Report
from harness.bench.check.forecast import forecast, stop_problem
from harness.bench.check.path import Line, PathCheck
from harness.bench.check.points import of_the_points, of_the_requirement
from harness.bench.conditions import Conditions, caution
from harness.bench.session import Links, Way, ways_of
from harness.bench.visits import visits_of
from harness.profile import Profile

SIMULATED = ("loopback", "process", "capture")
WITHOUT_WIRES = ("tcp", "udp")  # no connector there can be shorted: an answer at once may be the far end's
LONG_S = 8.0  # a probe that takes longer says so beforehand
ROOM = 3  # so many times the forecast must be free on the disk


class Check:
    """Checks one profile against the bench as it stands.

    Parameters
    ----------
    store_folder
        Where the record will be kept.
    cancel
        Ends the check when set.
    tell
        Called with each finding as soon as it is there.
    """

    def __init__(
        self,
        profile: Profile,
        store_folder: Path,
        cancel: threading.Event,
        tell: Callable[[Finding], None] = lambda _finding: None,
    ) -> None:
        self._profile = profile
        self._tell = tell
        self._folder = store_folder
        self._cancel = cancel
        self._links = Links(profile.need_link(), cancel)
        self._delay_s: float | None = None

    def run(self) -> Report:
        """Check; a finding that makes the rest pointless ends it."""
        found: list[Finding] = []

        def take(findings: Iterator[Finding]) -> None:
            for finding in findings:
                self._tell(finding)
                found.append(finding)

        take(self._before())
        ahead = forecast(self._profile, self._links.rate_bps).to_json()
        if all(finding.outcome != "bad" for finding in found):
            take(self._at_the_bench())
        if not self._cancel.is_set():
            take(self._time_and_disk(self._with_delay(ahead)))
        return Report(tuple(found), self._delay_s, ahead)

    # -- without touching anything

    def _before(self) -> Iterator[Finding]:
        problem = stop_problem(self._profile, self._links.rate_bps)
        if problem is not None:
            advice = "raise it (or leave it out): the plan would often end UNDECIDED"
            if "nothing ends" in problem:
                advice = "add [stop] with bits, seconds or errors: an unattended run must end by itself"
            if "search" in problem:
                advice = "add search.max_seconds or search.max_bits: an unattended search must end in time"
            yield Finding("stop rules", "bad", problem, advice, usage=True)
        else:
            yield Finding("stop rules", "good", "the run ends by itself, and not before its plan")
        if words := caution(self._profile):
            yield Finding("caution", "note", words.removeprefix("caution: "))
        yield from of_the_points(self._profile)
        conditions = self._conditions()
        for name, instrument in conditions.instruments.items():
            if not instrument.unattended:
                swept = self._profile.sweep is not None or self._profile.search is not None
                yield Finding(
                    "instruments",
                    "bad" if swept else "note",
                    f"{name} is set by hand: what turns it cannot be left alone",
                    "use an instrument that the program can set; `bitassay sweep` works with somebody beside it",
                    usage=True,
                    cause="manual",
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
                        yield Finding("dialogue", "good", exchange.text.removeprefix("dialogue: "))
                    well = True
                    for way in ways_of(self._profile, self._links):
                        for finding in self._path(way):
                            well = well and finding.outcome != "bad"
                            yield finding
                    if well:
                        yield from self._isolation(conditions)
        except Interrupted:
            yield Finding("bench", "bad", "interrupted: the rest was not looked at", cause="interrupted")
        except DriverError as error:
            yield Finding("bench", "bad", error.what, error.advice, cause="fault")
        for event in self._links.take_events():
            yield Finding("dialogue", "note", event.text.removeprefix("dialogue: "))
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
        wired = link.driver not in WITHOUT_WIRES
        at_once: Outcome = "bad" if way.sending is way.receiving and wired else "note"
        return Line(
            sending=way.sending,
            receiving=way.receiving,
            pattern=way.pattern,
            bit_order=way.bit_order,
            rate_bps=way.receiving.rate_bps,
            pace_bps=link.pace_bps,
            max_in_flight_bits=link.max_in_flight_bits,
            drain_s=link.drain_s,
            at_once="good" if link.driver in SIMULATED else at_once,
            least_delay_s=link.least_delay_s,
            wired=wired,
        )

    def _path(self, way: Way) -> Iterator[Finding]:
        line = self._line(way)
        if line is None:
            if way.receiving is not None:
                yield from listen_only(way.receiving, way.pattern, way.bit_order, self._cancel)
            else:
                yield Finding("path", "note", "one-way: what is sent can only be counted at the far end")
            return
        if way.name:
            yield Finding("path", "note", f"the {way.name} direction, {way.pattern.name}:")
        if line.takes_s > LONG_S:
            rate_words = rate(line.speed_bps)
            yield Finding(
                "path", "note", f"probing takes {duration(line.takes_s)} or somewhat more at {rate_words}"
            )
        checking = PathCheck(line, self._cancel)
        for finding in checking.findings():
            yield finding
            yield from of_the_requirement(self._profile, finding)
        self._delay_s = checking.delay_s if self._delay_s is None else self._delay_s
        if way.name and way.sending is not None and way.sending.traits.receives:
            yield echo_on(way.sending, self._cancel)

    def _isolation(self, conditions: Conditions) -> Iterator[Finding]:
        highest = self._attenuators(conditions)
        ways = ways_of(self._profile, self._links)
        line = self._line(ways[0])
        if not highest or line is None:
            return
        conditions.apply({**conditions.fixed(), **self._first(), **highest})
        yield lost_at_most(line, self._cancel)

    # -- the forecast

    def _with_delay(self, ahead: dict[str, Any]) -> dict[str, Any]:
        """Add the loop delay, after which each point's last bit is back."""
        for key in ("longest_seconds", "expected_seconds"):
            if ahead[key] is not None and self._delay_s is not None:
                ahead[key] += ahead["points"] * self._delay_s
        return ahead

    def _time_and_disk(self, ahead: dict[str, Any]) -> Iterator[Finding]:
        longest, expected = ahead.get("longest_seconds"), ahead.get("expected_seconds")
        if longest is None and stop_problem(self._profile, self._links.rate_bps) is not None:
            return  # it has been said
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
        text = f"the run takes {words}: until {ends:%H:%M on %a %d %b} at the latest"
        if self._delay_s is not None and self._profile.sweep is None and self._profile.search is None:
            drain_s = self._profile.need_link().drain_s
            text += f"; should its last bits be lost, {duration(drain_s)} more are waited for them"
        yield Finding("forecast", "good", text)
        need = ahead.get("disk_bytes")
        if need is None:
            return
        folder = self._folder if self._folder.exists() else Path.cwd()
        free = shutil.disk_usage(folder).free
        most = "at most" if self._profile.sweep is not None or self._profile.search is not None else "about"
        size = f"{need / 1e3:.0f} kB" if need < 1e6 else f"{need / 1e6:.3g} MB"
        text = f"its record takes {most} {size}; {free / 1e9:.3g} GB are free"
        if free < ROOM * need:
            yield Finding("disk", "bad", text, "free some space, or choose another --store")
        else:
            yield Finding("disk", "good", text)
