"""Drivers by name: what is built in, what plug-ins bring, and the keys of each; imported only when asked for.

A plug-in is an installed package with an entry point in the group ``bitassay.links``,
``bitassay.instruments`` or ``bitassay.counters``: the name in the profile, and ``module:Class``.
Built-in names cannot be taken over by a plug-in.
"""

from __future__ import annotations

import inspect
from collections.abc import Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from importlib import import_module
from importlib.metadata import EntryPoint, entry_points
from types import MappingProxyType
from typing import Any, Literal

from pydantic import BaseModel

from drivers.contract import ErrorCounter, Instrument, Link
from drivers.keys import Key, keys_of

Kind = Literal["links", "instruments", "counters"]

BUILT_IN: Mapping[Kind, Mapping[str, tuple[str, str]]] = MappingProxyType(
    {
        "links": MappingProxyType(
            {
                "loopback": ("drivers.links.loopback", "LoopbackLink"),
                "serial": ("drivers.links.serial", "SerialLink"),
                "tcp": ("drivers.links.tcp", "TcpLink"),
                "udp": ("drivers.links.udp", "UdpLink"),
                "process": ("drivers.links.process", "ProcessLink"),
                "capture": ("drivers.links.capture", "CaptureLink"),
            }
        ),
        "instruments": MappingProxyType(
            {
                "scpi": ("drivers.instruments.scpi", "ScpiInstrument"),
                "manual": ("drivers.instruments.manual", "ManualInstrument"),
                "simulated": ("drivers.instruments.simulated", "SimulatedInstrument"),
            }
        ),
        "counters": MappingProxyType({}),
    }
)

CONTRACTS: Mapping[Kind, type[Any]] = MappingProxyType(
    {"links": Link, "instruments": Instrument, "counters": ErrorCounter}
)

WORDS: Mapping[Kind, str] = MappingProxyType(
    {"links": "link driver", "instruments": "instrument driver", "counters": "error counter driver"}
)


class UnknownDriver(Exception):
    """No driver can be had by that name: the profile or the installation is wrong, not the device."""

    def __init__(self, what: str, advice: str) -> None:
        super().__init__(what)
        self.what = what
        self.advice = advice


class BrokenPlugin(UnknownDriver):
    """An installed plug-in has that name, and cannot be used."""


@dataclass(frozen=True, slots=True)
class Card:
    """What there is to know of a driver before using it."""

    kind: Kind
    name: str
    summary: str  # first line of the class's docstring
    origin: str  # "built in", or the distribution that brings it, with its version
    keys: tuple[Key, ...]


def link_class(name: str) -> type[Link]:
    """Class of a link driver; raises `UnknownDriver`, `BrokenPlugin`."""
    return _class("links", name)


def instrument_class(name: str) -> type[Instrument]:
    """Class of an instrument driver; raises `UnknownDriver`, `BrokenPlugin`."""
    return _class("instruments", name)


def counter_class(name: str) -> type[ErrorCounter]:
    """Class of an error counter driver; raises `UnknownDriver`, `BrokenPlugin`."""
    return _class("counters", name)


def names(kind: Kind) -> tuple[str, ...]:
    """Names of a kind: the built-in ones in their order, then the plug-ins' by the alphabet."""
    built_in = BUILT_IN[kind]
    added = {point.name for point in _points(kind)} - set(built_in)
    return (*built_in, *sorted(added))


def describe(kind: Kind, name: str) -> Card:
    """Keys of a driver with types, defaults and meanings; raises `UnknownDriver`, `BrokenPlugin`."""
    found: type[Any] = _class(kind, name)
    origin = "built in" if name in BUILT_IN[kind] else _origin(_plugin(kind, name))
    summary = (inspect.getdoc(found) or "").split("\n", 1)[0]
    return Card(kind, name, summary, origin, keys_of(found.Section))


def _class(kind: Kind, name: str) -> type[Any]:
    if name in BUILT_IN[kind]:
        module, attribute = BUILT_IN[kind][name]
        found: type[Any] = getattr(import_module(module), attribute)
        return found
    return _load(kind, _plugin(kind, name))


def _points(kind: Kind) -> tuple[EntryPoint, ...]:
    return tuple(entry_points(group=f"bitassay.{kind}"))


def _plugin(kind: Kind, name: str) -> EntryPoint:
    # One distribution can be seen twice, through two folders of the search path; that is no conflict.
    found = {(point.value, _origin(point)): point for point in _points(kind) if point.name == name}
    if not found:
        raise _unknown(kind, name)
    if len(found) > 1:
        origins = " and ".join(sorted(_origin(point) for point in found.values()))
        raise BrokenPlugin(
            f"two plug-ins bring the {WORDS[kind]} {name!r}: {origins}", "uninstall one of the two"
        )
    return next(iter(found.values()))


def _unknown(kind: Kind, name: str) -> UnknownDriver:
    known = names(kind)
    what = f"there is no {WORDS[kind]} {name!r}"
    near = get_close_matches(name.casefold(), known, n=1)
    if near:
        return UnknownDriver(what, f"did you mean {near[0]!r}? Known are: {', '.join(known)}")
    if known:
        return UnknownDriver(what, f"known are: {', '.join(known)}")
    return UnknownDriver(what, f"install a plug-in with an entry point in bitassay.{kind}")


def _origin(point: EntryPoint) -> str:
    return f"{point.dist.name} {point.dist.version}" if point.dist is not None else "an unnamed package"


def _load(kind: Kind, point: EntryPoint) -> type[Any]:
    """Import a plug-in's class and hold it to the contract."""
    try:
        found = point.load()
    except (Exception, SystemExit) as error:
        reason = " ".join(f"{type(error).__name__}: {error}".split())
        raise _broken(kind, point, f"cannot be imported ({reason})") from error
    contract = CONTRACTS[kind]
    if not (isinstance(found, type) and issubclass(found, contract)):
        raise _broken(kind, point, f"is no subclass of drivers.contract.{contract.__name__} ({point.value})")
    if missing := sorted(getattr(found, "__abstractmethods__", ())):
        raise _broken(kind, point, f"does not implement {', '.join(missing)}")
    section = getattr(found, "Section", None)
    if not (isinstance(section, type) and issubclass(section, BaseModel)):
        raise _broken(kind, point, "has no pydantic model named Section for its keys")
    return found


def _broken(kind: Kind, point: EntryPoint, how: str) -> BrokenPlugin:
    owner = point.dist.name if point.dist is not None else "its package"
    return BrokenPlugin(
        f"the {WORDS[kind]} {point.name!r} of {_origin(point)} {how}",
        f"reinstall or mend the plug-in (pip install --force-reinstall {owner}), or choose another driver",
    )
