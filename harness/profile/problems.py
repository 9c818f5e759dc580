"""What can be wrong with a profile, in one line each: what it is and what to do."""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

Path = tuple[str | int, ...]


class ProfileError(Exception):
    """The profile cannot be used; one line `what` is wrong and one line of `advice`."""

    def __init__(self, what: str, advice: str = "") -> None:
        super().__init__(what)
        self.what = what
        self.advice = advice


def dotted(path: Iterable[str | int]) -> str:
    """Write a path as the person would: ``link.channel[1].ber``; list items count from 1."""
    out = ""
    for part in path:
        if isinstance(part, int):
            out += f"[{part + 1}]"
        else:
            out += f".{part}" if out else part
    return out


def shown(value: Any) -> str:
    """Show a value as TOML would write it, cut where it is long."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, str):
        text = '"' + value.replace("\n", "\\n") + '"'
    elif isinstance(value, dict):
        text = "a section"
    elif isinstance(value, list):
        text = "[" + ", ".join(shown(v) for v in value) + "]"
    else:
        text = re.sub(r"e([-+]?)0*(\d)", r"e\1\2", str(value)) if isinstance(value, float) else str(value)
    return text if len(text) <= 60 else text[:57] + "…" + text[-1]


def nearest(name: str, known: Iterable[str]) -> str | None:
    """Find the known name most like `name`, or None where there are none at all."""
    scored = [(difflib.SequenceMatcher(None, name.lower(), k.lower()).ratio(), k) for k in known]
    return max(scored, key=lambda pair: pair[0])[1] if scored else None


def nearest_key(
    path: Path, siblings: Sequence[str], known: Sequence[tuple[str, ...]], present: Iterable[str]
) -> str | None:
    """Find the known key nearest to an unknown one: first in its own section, then everywhere.

    Parameters
    ----------
    path
        The unknown key's path.
    siblings
        Known keys of the same section.
    known
        Paths of all known keys, without list indices.
    present
        The sections that the profile has; of equally likely keys theirs win.
    """
    name = str(path[-1])
    here = tuple(part for part in path[:-1] if isinstance(part, str))
    close = difflib.get_close_matches(name, siblings, n=1, cutoff=0.6)
    if close or not known:
        return ".".join((*here, close[0])) if close else nearest(name, siblings)
    there = set(present)

    def likeness(key: tuple[str, ...]) -> float:
        by_name = difflib.SequenceMatcher(None, name.lower(), key[-1].lower()).ratio()
        return by_name + (0.05 if key[0] in there else 0.0)

    best: tuple[str, ...] = max(known, key=likeness)
    return ".".join(best)


def real_path(loc: Sequence[str | int], raw: Any, kind: str) -> Path:
    """Turn pydantic's location into the path in the profile: names of union members are left out."""
    path: list[str | int] = []
    node = raw
    for k, part in enumerate(loc):
        if isinstance(part, int):
            if isinstance(node, list) and part < len(node):
                path.append(part)
                node = node[part]
            elif isinstance(node, list) and kind == "missing":
                path.append(part)
        elif isinstance(node, dict) and part in node:
            path.append(part)
            node = node[part]
        elif kind == "missing" and k == len(loc) - 1:
            path.append(part)
    return tuple(path)


_KINDS = {
    "string_type": "text in quotes",
    "bool_type": "true or false",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "int_parsing": "a whole number",
    "float_type": "a number",
    "float_parsing": "a number",
    "finite_number": "a finite number",
    "tuple_type": "a list",
    "list_type": "a list",
    "set_type": "a list",
    "dict_type": "a section",
    "model_type": "a section",
    "model_attributes_type": "a section",
    "date_type": "a date such as 2026-05-01",
    "path_type": "a path in quotes",
}


def describe(error: Mapping[str, Any], path: Path) -> tuple[str, str]:
    """Put one of pydantic's errors, other than an unknown key, into our words: what and advice."""
    kind, given, ctx = error["type"], error.get("input"), error.get("ctx", {})
    key = dotted(path) or "the profile"
    section = dotted(path[:-1])
    within = f" to [{section}]" if section else ""
    if kind == "missing" and isinstance(path[-1], int):
        return f"{section} has too few values", f"correct {section}"
    if kind == "missing":
        return f"{key} is missing", f"add `{path[-1]} = …`{within}"
    if kind in _KINDS:
        return f"{key} must be {_KINDS[kind]}, not {shown(given)}", f"correct {key}"
    if kind in ("literal_error", "enum"):
        return f"{key} cannot be {shown(given)}", f"use {ctx.get('expected', 'one of the known values')}"
    if kind in ("union_tag_invalid", "union_tag_not_found"):
        tag = str(ctx.get("discriminator", "kind")).strip("'")
        known = ctx.get("expected_tags")
        if known is None:
            return f"{key}.{tag} is missing", f"add `{tag} = …` to [{key}]"
        return f"{key}.{tag} cannot be {shown(ctx.get('tag'))}", f"use one of {known}"
    limits = {
        "greater_than": ("gt", "over"),
        "greater_than_equal": ("ge", "at least"),
        "less_than": ("lt", "under"),
        "less_than_equal": ("le", "at most"),
    }
    if kind in limits:
        name, words = limits[kind]
        return f"{key} must be {words} {ctx[name]:g}, not {shown(given)}", f"correct {key}"
    if kind == "problem":
        return f"{key} {error['msg']}", str(ctx.get("advice") or f"correct {key}")
    if kind == "string_pattern_mismatch":
        return f"{key} cannot be {shown(given)}", f"write {key} in the form {ctx['pattern']}"
    message = str(error["msg"]).removeprefix("Value error, ").removeprefix("Assertion failed, ")
    message = " ".join(message.split())
    return f"{key}: {message}", f"correct {key}"
