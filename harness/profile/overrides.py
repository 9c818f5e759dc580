"""Overrides, ``section.key=value``: read by the field's type, and never loosening a limit."""

from __future__ import annotations

import copy
import datetime
import tomllib
from typing import Any

from .keys import Keys, is_text, leaves
from .problems import ProfileError, dotted

EXAMPLE = "write section.key=value, for example --set stop.seconds=60"


def _path_of(key: str, override: str) -> tuple[str, ...]:
    try:
        tree: Any = tomllib.loads(f"{key} = 0")
    except tomllib.TOMLDecodeError:
        raise ProfileError(f'cannot read the key of the override "{override}"', EXAMPLE) from None
    path = []
    while isinstance(tree, dict):
        ((part, tree),) = tree.items() if len(tree) == 1 else (("", None),)
        path.append(part)
    if "" in path:
        raise ProfileError(f'cannot read the key of the override "{override}"', EXAMPLE)
    return tuple(path)


def as_text(value: Any) -> str:
    """Write a TOML value as text, the way that it was written there."""
    if isinstance(value, str):
        return value
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, datetime.datetime | datetime.date | datetime.time):
        return value.isoformat()
    return str(value)


def read_value(text: str, annotation: Any) -> Any:
    """Read an override's value by the type of its field.

    Where only text fits it is taken as it stands (``0031`` stays ``0031``), quotes around it removed;
    elsewhere it is a TOML value, failing that a number, failing that text.
    """
    try:
        value = tomllib.loads(f"value = {text}")
        parsed = value["value"] if len(value) == 1 else text
    except tomllib.TOMLDecodeError:
        parsed = text
    if annotation is not None and is_text(annotation):
        return parsed if isinstance(parsed, str) else text
    if isinstance(parsed, str) and parsed == text:
        try:
            return float(text)
        except ValueError:
            return text
    return parsed


def _item(node: list[Any], part: str, override: str) -> tuple[int, bool]:
    """Find the list item that `part` names by its number from 0, or the only one; and whether it did."""
    if part.isdecimal() and int(part) < len(node):
        return int(part), True
    if len(node) == 1 and not part.isdecimal():
        return 0, False
    raise ProfileError(
        f'the override "{override}" names no item of a list of {len(node)}',
        f"say which one: its number from 0 to {len(node) - 1}",
    )


def _whole_sections(annotation: Any) -> bool:
    return any(isinstance(leaf, type) and hasattr(leaf, "model_fields") for leaf in leaves(annotation))


def apply(raw: dict[str, Any], override: str, keys: Keys) -> None:
    """Carry one override out on the profile's raw content, in place.

    Raises
    ------
    ProfileError
        If it cannot be read, or replaces a whole instrument, whose limits would go with it.
    """
    try:
        override.encode()
    except UnicodeEncodeError:
        raise ProfileError(f"the override {override!r} is not UTF-8 text", EXAMPLE) from None
    key, equals, text = override.partition("=")
    if not equals or not key.strip():
        raise ProfileError(f'the override "{override}" is not of the form section.key=value', EXAMPLE)
    path = _path_of(key, override)
    if path[0] == "instruments" and len(path) < 3:
        raise ProfileError(
            f'the override "{override}" would replace a whole instrument and its limits',
            "override one key of it: instruments.NAME.key=value",
        )
    node: Any = raw
    real: list[str | int] = []
    for k, part in enumerate(path[:-1]):
        if isinstance(node, list):
            item, named = _item(node, part, override)
            real.append(item)
            node = node[item]
            if named:
                continue
        if not isinstance(node, dict):
            raise ProfileError(f"{dotted(path[:k])} is a value, not a section", EXAMPLE)
        node = node.setdefault(part, {})
        real.append(part)
    last: str | int = path[-1]
    if isinstance(node, list):
        item, named = _item(node, path[-1], override)
        real.append(item)
        if named:
            raise ProfileError(f'the override "{override}" would replace a whole section', EXAMPLE)
        node = node[item]
    if not isinstance(node, dict):
        raise ProfileError(f"{dotted(path[:-1])} is a value, not a section", EXAMPLE)
    annotation = keys.at((*real, last), raw)
    node[str(last)] = read_value(text if path[0] == "device" else text.strip(), annotation)


def _span(section: Any) -> tuple[float, float] | None:
    limits = section.get("limits") if isinstance(section, dict) else None
    if not isinstance(limits, list | tuple) or len(limits) != 2:
        return None
    try:
        low, high = (float(v) for v in limits)
    except (TypeError, ValueError):
        return None
    return low, high


def keep_limits(before: dict[str, Any], after: dict[str, Any]) -> None:
    """See to it that overrides narrowed limits or left them, and never widened one.

    Raises
    ------
    ProfileError
        Naming the limit.
    """
    instruments = after.get("instruments", {})
    for name, section in (before.get("instruments") or {}).items():
        old, new = _span(section), _span(instruments.get(name))
        if old is not None and (new is None or not (old[0] <= new[0] and new[1] <= old[1])):
            raise ProfileError(
                f"an override may narrow the limits of instruments.{name}, never widen them: "
                f"the profile has {old[0]:g} to {old[1]:g}",
                "stay within the profile's limits, or have the profile changed by whoever answers for it",
            )
    _keep_meaning(before, after)
    _keep_levels(before, after)


def _keep_meaning(before: dict[str, Any], after: dict[str, Any]) -> None:
    """See to it that a limit still limits what it did: 10 dBm are not 10 W."""
    instruments = after.get("instruments", {})
    for name, section in (before.get("instruments") or {}).items():
        if _span(section) is None:
            continue
        for key in ("quantity", "unit", "set", "knob"):
            if section.get(key) != (instruments.get(name) or {}).get(key):
                raise ProfileError(
                    f"instruments.{name}.{key} says what the limits of {name} mean, and is not to be "
                    "overridden",
                    "change the profile when the instrument has changed",
                )


def _keep_levels(before: dict[str, Any], after: dict[str, Any]) -> None:
    """See to it that no power limit is raised, lost, or got round by other figures on the way to the port."""
    old = before.get("level")
    if not isinstance(old, dict):
        return
    new = after.get("level")
    new = new if isinstance(new, dict) else {}
    for key in ("damage_dbm", "permitted_dbm"):
        if key in old and not _at_most(new.get(key), old[key]):
            raise ProfileError(
                f"an override may lower level.{key}, never raise it: the profile has {old[key]} dBm",
                "stay under the profile's level, or have the profile changed by whoever answers for it",
            )
    limited = "damage_dbm" in old or "permitted_dbm" in old
    for key in ("instrument", "source_dbm", "source_uncertainty_db"):
        if old.get(key) != new.get(key) and (key in old or limited):
            raise ProfileError(
                f"level.{key} says what power reaches the device, and is not to be overridden",
                "change the profile when the set-up has changed",
            )
    if limited and before.get("correction") != after.get("correction"):
        raise ProfileError(
            "[correction] says what power reaches the device, and is not to be overridden",
            "change the profile when the set-up has changed",
        )


def _at_most(new: Any, old: Any) -> bool:
    try:
        return float(new) <= float(old)
    except (TypeError, ValueError):
        return False


def copied(raw: dict[str, Any]) -> dict[str, Any]:
    """Give a copy that overrides may change."""
    return copy.deepcopy(raw)
