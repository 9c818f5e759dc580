"""What must hold between a profile's sections, beyond each key's own type and range."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from drivers.instruments.condition import QUANTITIES
from harness.statistics.conditions import rises_with

from .links import InstrumentSettings, LinkSettings
from .problems import ProfileError, nearest
from .profile import Profile
from .requirement import PatternChoice


def check(profile: Profile) -> None:
    """Check the profile as a whole.

    Raises
    ------
    ProfileError
        The first thing that does not fit.
    """
    _one_source(profile)
    _device(profile)
    patterns = [_pattern(profile.pattern, "pattern")]
    if profile.pattern.reverse is not None:
        patterns.append(_pattern(profile.pattern.reverse, "pattern.reverse"))
    if profile.link is not None:
        _ports(profile.link, profile)
        for section, name in ((profile.link, "link"), (profile.link.receive, "link.receive")):
            flow = getattr(getattr(section, "options", None), "flow", None)
            if str(flow).lower().replace("/", "") == "xonxoff":
                _no_transparent(patterns, name)
    for name, instrument in profile.instruments.items():
        _instrument(name, instrument)
    _conditions(profile)


def _device(profile: Profile) -> None:
    """Refuse what looks like a misspelt serial number: a run would be filed under the wrong unit."""
    slips = ("serial", "serialnumber", "serialno", "serialnr", "sn", "serialnum")
    for key in profile.device:
        plain = key.lower().replace("-", "").replace("_", "")
        if key != "serial_number" and plain in slips:
            raise ProfileError(
                f"device.{key} is not where a serial number is looked for", "write device.serial_number"
            )


def _one_source(profile: Profile) -> None:
    if profile.link is None and profile.counter is None:
        raise ProfileError(
            "the profile has no [link]", 'add one, for example driver = "loopback" with [link.channel]'
        )
    if profile.link is not None and profile.counter is not None:
        raise ProfileError(
            "the profile has a [link] and a [counter]", "keep the one that carries or counts the bits"
        )


def _pattern(choice: PatternChoice, path: str) -> Any:
    from harness.signal.patterns import PatternError, parse_pattern

    try:
        return parse_pattern(choice.name, read=lambda file: Path(file).read_bytes())
    except PatternError as error:
        raise ProfileError(f"{path}.name: {error.what}", error.advice) from None
    except OSError as error:
        why = (error.strerror or str(error)).lower()
        raise ProfileError(f"{path}.name: {choice.name} cannot be read: {why}", "check the path") from None


def _no_transparent(patterns: list[Any], section: str) -> None:
    for pattern in patterns:
        if pattern.transparent:
            raise ProfileError(
                f"{pattern.name} sends every byte value, and XON/XOFF flow control on [{section}] eats two",
                "use flow control rtscts or none, or a word pattern without 0x11 and 0x13",
            )


def _ports(link: LinkSettings, profile: Profile) -> None:
    if link.topology == "two-port" and link.receive is None:
        raise ProfileError(
            "a two-port topology needs its second port", "add [link.receive] with a driver of its own"
        )
    if link.topology != "two-port" and link.receive is not None:
        raise ProfileError(
            f"[link.receive] is a second port, and the topology is {link.topology}",
            'set topology = "two-port", or leave [link.receive] out',
        )
    if link.duplex and link.topology != "two-port":
        raise ProfileError(
            "duplex needs two ports", 'set topology = "two-port" and add [link.receive], or duplex = false'
        )
    other = profile.pattern.reverse
    if link.duplex and (other is None or other.name.lower() == profile.pattern.name.lower()):
        raise ProfileError(
            "duplex needs another pattern for the other direction, or an echo would pass for the far end",
            'add [pattern.reverse] with another name, for example "PRBS15-reversed"',
        )
    if other is not None and not link.duplex:
        raise ProfileError(
            "pattern.reverse is for both directions at once", "set link.duplex = true, or leave it out"
        )


def _instrument(name: str, instrument: InstrumentSettings) -> None:
    # The built-in drivers check this themselves; a plug-in may not.
    options, path = instrument.options, f"instruments.{name}"
    quantity, unit = getattr(options, "quantity", None), getattr(options, "unit", None)
    if quantity and not unit:
        raise ProfileError(f"{path} has a quantity and no unit", f'add unit = "…" to [{path}]')
    allowed = QUANTITIES.get(str(quantity).casefold(), ())
    if allowed and unit not in allowed:
        raise ProfileError(
            f'{path}: {quantity} cannot be in "{unit}"',
            f"use {', '.join(allowed)}: dB is a ratio, dBm a power",
        )
    limits, safe = getattr(options, "limits", None), getattr(options, "safe", None)
    if limits is None:
        return
    low, high = (float(v) for v in limits)
    if math.isnan(low) or math.isnan(high) or low > high:
        raise ProfileError(
            f"{path}.limits must rise, not {low:g} to {high:g}", "write limits = [lowest, highest]"
        )
    for key, value in (("safe", safe), ("value", instrument.value)):
        if value is not None and not low <= float(value) <= high:
            raise ProfileError(
                f"{path}.{key} is {float(value):g} and lies outside the limits {low:g} to {high:g}",
                "choose a value within the limits",
            )


def _known_instrument(profile: Profile, name: str, path: str) -> InstrumentSettings:
    if name in profile.instruments:
        return profile.instruments[name]
    near = nearest(name, profile.instruments)
    advice = f"add [instruments.{name}]" + (f", or use {near}" if near else "")
    raise ProfileError(f'{path} names the instrument "{name}", which the profile does not have', advice)


def _within(profile: Profile, name: str, values: tuple[float, ...], path: str) -> None:
    options = _known_instrument(profile, name, path).options
    limits = getattr(options, "limits", None)
    if limits is None:
        return
    low, high = (float(v) for v in limits)
    for value in values:
        if not low <= value <= high:
            raise ProfileError(
                f"{path} goes to {value:g}, outside the limits {low:g} to {high:g} of instruments.{name}",
                "stay within the instrument's limits",
            )


def _searched(profile: Profile, name: str) -> None:
    options = profile.instruments[name].options
    quantity, unit = getattr(options, "quantity", ""), getattr(options, "unit", "")
    if rises_with(quantity) is None or unit not in ("dB", "dBm", "dBW"):
        raise ProfileError(
            f"a search goes along decibels, and {name} sets {quantity or 'something'} in {unit or 'no unit'}",
            "search over an attenuation, a level, a gain or a signal-to-noise ratio; sweep over the rest",
        )
    if profile.link is not None and profile.link.duplex:
        raise ProfileError(
            "a search looks at one direction, and link.duplex measures both",
            "set link.duplex = false, and search once for each direction",
        )


def _level(profile: Profile, name: str, source_dbm: float | None) -> None:
    """Only what is known to take away from a level, or to set one in dBm, can be reckoned with."""
    options = _known_instrument(profile, name, "level.instrument").options
    quantity, unit = getattr(options, "quantity", ""), getattr(options, "unit", "")
    if quantity in ("level", "power") and unit == "dBm":
        if source_dbm is not None:
            raise ProfileError(
                f"level.source_dbm is stated, and {name} sets the level in dBm itself",
                "leave one of them out: either a source and an attenuator, or a generator",
            )
        return
    if quantity not in ("attenuation", "loss"):
        raise ProfileError(
            f"level.instrument names {name}, which sets {quantity or 'something'} in {unit or 'no unit'}",
            "name an attenuator (dB), or a generator whose level is in dBm",
        )


def _conditions(profile: Profile) -> None:
    sweep, search, requirement = profile.sweep, profile.search, profile.requirement
    if sweep is not None and search is not None:
        raise ProfileError("the profile has a [sweep] and a [search]", "keep one of them")
    if sweep is not None:
        for axis in sweep.all_axes():
            _within(profile, axis.instrument, axis.listed(), "sweep.values")
        if sweep.reference is not None:
            _within(profile, sweep.all_axes()[0].instrument, (sweep.reference,), "sweep.reference")
    if search is not None:
        _within(profile, search.instrument, (search.low, search.high), "search")
        _searched(profile, search.instrument)
    if profile.level is not None and profile.level.instrument is not None:
        _level(profile, profile.level.instrument, profile.level.source_dbm)
    if profile.correction is not None:
        for name in profile.correction.tables:
            _known_instrument(profile, name, "correction.tables")
    if requirement is None:
        return
    for name, value in requirement.at.items():
        _within(profile, name, (value,), "requirement.at")
    if requirement.at and sweep is not None:
        visited = [{**point} for point in sweep.visits()]
        if not any(all(point.get(n) == v for n, v in requirement.at.items()) for point in visited):
            names = ", ".join(f"{n} = {v:g}" for n, v in requirement.at.items())
            raise ProfileError(
                f"requirement.at names {names}, which the sweep never visits",
                "add the value to the sweep, or correct requirement.at",
            )
    if requirement.at and sweep is None:
        raise ProfileError(
            "requirement.at picks a point of a sweep, and there is no [sweep]",
            "leave it out: a plain run's requirement applies to the run",
        )
    if requirement.sensitivity_at_least is not None and sweep is None and search is None:
        raise ProfileError(
            "requirement.sensitivity_at_least needs a [sweep] or a [search]", "add one, or leave it out"
        )
    if requirement.sensitivity_at_least is not None and sweep is not None and sweep.sensitivity_ber is None:
        raise ProfileError(
            "requirement.sensitivity_at_least needs to know at which BER", "add sensitivity_ber to [sweep]"
        )
    if requirement.sensitivity_at_least is not None:
        _within_reach(requirement.sensitivity_at_least, profile)


def _within_reach(least: float, profile: Profile) -> None:
    """A sensitivity beyond what is measured can never be demonstrated."""
    search, sweep = profile.search, profile.sweep
    values: tuple[float, ...] = () if search is None else (search.low, search.high)
    for axis in sweep.all_axes() if sweep is not None else ():
        values = axis.listed() if axis.instrument == profile.curve_axis else values
    low, high = min(values), max(values)
    if not low <= least <= high:
        raise ProfileError(
            f"requirement.sensitivity_at_least is {least:g}, and only {low:g} to {high:g} is measured",
            f"let [{'sweep' if search is None else 'search'}] reach beyond {least:g}, or correct the requirement",
        )
