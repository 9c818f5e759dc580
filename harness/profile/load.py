"""From a TOML file to a profile: read, override, hand the drivers their keys, check, word what is wrong."""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Sequence
from pathlib import Path as FilePath
from typing import Any

from pydantic import BaseModel, ValidationError

from . import overrides as overriding
from .checks import check
from .keys import Keys
from .links import CounterSettings, DrivenSection, InstrumentSettings, LinkSettings, ReceiveSettings
from .problems import Path, ProfileError, describe, dotted, nearest_key, real_path
from .profile import Profile
from .ready import find_profile

MOST_BYTES = 4_000_000


class _Decimal(float):
    """A TOML float that remembers how it was written: firmware = 1.20 stays 1.20."""

    written: str

    def __new__(cls, written: str) -> _Decimal:
        self = super().__new__(cls, written)
        self.written = written
        return self

    def __str__(self) -> str:
        return self.written

    __repr__ = __str__


def load_profile(path: FilePath, overrides: Sequence[str] = ()) -> Profile:
    """Read a profile from a file.

    Parameters
    ----------
    path
        The file, or a ready profile's name (`loopback`, `profiles/loopback.toml`) where no such file exists.
    overrides
        ``section.key=value``, carried out in order.

    Raises
    ------
    ProfileError
    """
    found = find_profile(path)
    try:
        with found.open("rb") as file:
            data = file.read(MOST_BYTES + 1)
    except IsADirectoryError:
        raise ProfileError(f"{path} is a folder, not a profile", "name a TOML file in it") from None
    except OSError as error:
        reason = (error.strerror or str(error)).lower()
        raise ProfileError(
            f"cannot read the profile {path}: {reason}", "check the path and its rights"
        ) from None
    if len(data) > MOST_BYTES:
        raise ProfileError(f"{path} is too large for a profile", "name a TOML file")
    try:
        text = data.decode()
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise ProfileError(
            f"{path} is not a TOML file: line {line} is not UTF-8 text", "save it as UTF-8"
        ) from None
    return parse_profile(text, overrides, str(path))


def parse_profile(text: str, overrides: Sequence[str] = (), name: str = "the profile") -> Profile:
    """Read a profile from TOML text.

    Parameters
    ----------
    text
        The whole file.
    overrides
        ``section.key=value``, carried out in order.
    name
        What messages call it: the file's path.

    Raises
    ------
    ProfileError
        The first problem; further ones are counted.
    """
    raw = _plain(_toml(text, name))
    if overrides:
        given = overriding.copied(raw)
        for override in overrides:
            overriding.apply(raw, override, Keys(Profile, _section_of))
        overriding.keep_limits(given, raw)
    profile = _Reader(raw).profile()
    check(profile)
    profile._text, profile._overrides, profile._name = text, tuple(overrides), name
    return profile


def _toml(text: str, name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text.removeprefix("\ufeff"), parse_float=_Decimal)
    except tomllib.TOMLDecodeError as error:
        words = " ".join(str(error).split())
        at = re.search(r"\(at (?:line (\d+), column \d+|end of document)\)", words)
        lines = text.splitlines()
        number = int(at[1]) if at and at[1] else max(len(lines), 1)
        line = lines[number - 1] if number <= len(lines) else ""
        advice = "correct that line: text in quotes, one `key = value` a line"
        if re.search(r"=\s*0\d", line):
            advice = "a number with leading zeros is text in TOML: put it in quotes"
        reason = re.sub(r"\s*\(at .*\)", "", words)
        raise ProfileError(f"{name} is not TOML, line {number}: {reason}", advice) from None


def _plain(node: Any, in_device: bool = False, depth: int = 0) -> Any:
    """Turn what the TOML reader gave into plain values; [device] into text as it was written."""
    if isinstance(node, dict):
        return {k: _plain(v, in_device or (depth == 0 and k == "device"), depth + 1) for k, v in node.items()}
    if isinstance(node, list):
        return [_plain(v, in_device, depth + 1) for v in node]
    if in_device and depth == 2:
        return overriding.as_text(node)
    return float(node) if isinstance(node, _Decimal) else node


def driver_section(kind: type[DrivenSection], name: str) -> type[BaseModel]:
    """Find the class of a driver's own keys.

    Raises
    ------
    drivers.registry.UnknownDriver
    """
    from drivers import registry

    if issubclass(kind, InstrumentSettings):
        return registry.instrument_class(name).Section
    if issubclass(kind, CounterSettings):
        return registry.counter_class(name).Section
    return registry.link_class(name).Section


def _section_of(kind: type[DrivenSection], raw: Any) -> type[BaseModel] | None:
    """Find it for a raw section, or None where its driver is missing or unknown."""
    from drivers.registry import UnknownDriver

    name = raw.get("driver") if isinstance(raw, dict) else None
    if not isinstance(name, str):
        return None
    try:
        return driver_section(kind, name)
    except UnknownDriver:
        return None


def _topology(raw: dict[str, Any]) -> str:
    """Give the topology of a link that does not state one."""
    from drivers.registry import UnknownDriver, link_class

    if "receive" in raw:
        return "two-port"
    try:
        traits = link_class(raw["driver"]).traits
    except UnknownDriver:
        return "far-end-loop"
    # A plug-in may only know when it is made; then it is taken to carry both ways.
    both = getattr(traits, "sends", True) and getattr(traits, "receives", True)
    return "far-end-loop" if both else "one-way"


class _Reader:
    """Reads one profile's raw content and gathers what is wrong with it."""

    def __init__(self, raw: dict[str, Any]) -> None:
        self._raw = raw
        self._keys = Keys(Profile, _section_of)
        self._problems: list[tuple[str, str]] = []

    def profile(self) -> Profile:
        """Build the profile; raises the first problem."""
        data = dict(self._raw)
        for name, kind in (("link", LinkSettings), ("counter", CounterSettings)):
            if name in data:
                data[name] = self._driven(kind, data[name], (name,))
        instruments = data.get("instruments")
        if isinstance(instruments, dict):
            data["instruments"] = {
                name: self._driven(InstrumentSettings, section, ("instruments", name))
                for name, section in instruments.items()
            }
        profile: Profile | None = None
        try:
            profile = Profile.model_validate(data)
        except ValidationError as error:
            # A driven section that failed by itself has been described already.
            self._describe(error, ())
        if self._problems or profile is None:
            # A misspelt key is the cause, and the right one's absence only its consequence.
            self._problems.sort(key=lambda problem: not problem[0].startswith("unknown key"))
            what, advice = self._problems[0]
            more = len(self._problems) - 1
            raise ProfileError(what + (f" (and {more} more)" if more else ""), advice)
        return profile

    def _driven(self, kind: type[DrivenSection], raw: Any, path: Path) -> Any:
        """Split a section into our keys and the driver's, and let the driver's own class read the latter."""
        from drivers.registry import UnknownDriver

        if not isinstance(raw, dict):
            return raw
        if not isinstance(raw.get("driver"), str):
            # Without its driver nobody can tell which other keys are right.
            if "driver" in raw:
                return {"driver": raw["driver"]}
            if near := difflib.get_close_matches("driver", [str(key) for key in raw], n=1):
                self._unknown((*path, near[0]))
            return {}
        own = set(kind.model_fields) - {"options"}
        ours = {k: v for k, v in raw.items() if k in own}
        if "receive" in ours:
            ours["receive"] = self._driven(ReceiveSettings, ours["receive"], (*path, "receive"))
        theirs = {k: v for k, v in raw.items() if k not in own}
        if kind is LinkSettings and "topology" not in ours:
            ours["topology"] = _topology(raw)
        try:
            ours["options"] = driver_section(kind, raw["driver"]).model_validate(theirs)
        except UnknownDriver as error:
            self._problems.append((f"{dotted((*path, 'driver'))}: {error.what}", error.advice))
        except ValidationError as error:
            self._describe(error, path)
        return ours

    def _unknown(self, path: Path) -> None:
        if path in (("framing",),):
            self._problems.append(
                ("[framing] is reserved and not carried out by this version", "leave it out")
            )
            return
        siblings = self._keys.in_section(path[:-1], self._raw)
        # A whole section at the top is never meant to be a key somewhere else.
        section = len(path) == 1 and isinstance(self._raw[str(path[0])], dict | list)
        known = [] if section else self._keys.everywhere(self._raw)
        near = nearest_key(path, siblings, known, self._raw)
        advice = f"the nearest known key is {near}" if near else "leave it out"
        self._problems.append((f"unknown key {dotted(path)}", advice))

    def _describe(self, error: ValidationError, prefix: Path) -> None:
        section: Any = self._raw
        for part in prefix:
            section = section[part]
        for item in error.errors(include_url=False):
            loc, kind = item["loc"], item["type"]
            if kind == "missing" and loc and loc[-1] == "options":
                if not self._problems:  # otherwise the driver's own keys were wrong, and that was said
                    path = (*prefix, *loc[:-1], "driver")
                    self._problems.append(
                        (f"{dotted(path)} is missing", f"add `driver = …` to [{dotted(path[:-1])}]")
                    )
                continue
            path = (*prefix, *real_path(loc, section, kind))
            if kind == "extra_forbidden":
                self._unknown(path)
            else:
                self._problems.append(describe({**item}, path))
