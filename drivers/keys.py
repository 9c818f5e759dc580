"""The keys of a driver's section in words: names, types, limits, defaults, meanings, from its JSON schema."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from pydantic import BaseModel

Schema = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Key:
    """One key of a section."""

    name: str  # dotted; a key of a list's entries as "channel[].ber"
    type: str
    default: str | None  # as TOML would write it; None where the key must be given or has no default
    required: bool
    description: str
    only_with: str = ""  # "model = independent": belongs to one of several alternatives


def keys_of(section: type[BaseModel]) -> tuple[Key, ...]:
    """Keys of a section in their order, each followed by those of the sections inside it."""
    schema = section.model_json_schema(by_alias=True)
    return tuple(_walk(schema, schema.get("$defs", {}), "", ""))


def _walk(schema: Schema, defs: Schema, prefix: str, only_with: str) -> Iterator[Key]:
    required = set(schema.get("required", ()))
    for name, field in schema.get("properties", {}).items():
        if only_with and "const" in field:
            continue  # the key that chooses the alternative stands in `only_with` already
        yield Key(
            prefix + name,
            _type(field, defs),
            None if field.get("default") is None else _toml(field["default"]),
            name in required,
            field.get("description", ""),
            only_with,
        )
        many = _is_list(field, defs)
        for inner, condition in _inner(field, defs):
            yield from _walk(inner, defs, f"{prefix}{name}{'[]' if many else ''}.", condition)


def _resolve(field: Schema, defs: Schema) -> Schema:
    reference = field.get("$ref")
    if reference is None:
        return field
    found: Schema = defs[str(reference).rsplit("/", 1)[1]]
    return found


def _choices(field: Schema, defs: Schema) -> Iterator[Schema]:
    """Schemas that a field may hold, lists left as lists, without null."""
    field = _resolve(field, defs)
    alternatives = [*field.get("anyOf", ()), *field.get("oneOf", ())]
    if not alternatives:
        if field.get("type") != "null":
            yield field
        return
    for alternative in alternatives:
        yield from _choices(alternative, defs)


def _is_list(field: Schema, defs: Schema) -> bool:
    return any(choice.get("type") == "array" for choice in _choices(field, defs))


def _inner(field: Schema, defs: Schema) -> Iterator[tuple[Schema, str]]:
    """Sections inside a field, each once, with what chooses it."""
    seen: list[Schema] = []
    for choice in _choices(field, defs):
        items = choice.get("items") if choice.get("type") == "array" else choice
        for inner in _choices(items or {}, defs):
            if "properties" in inner and inner not in seen:
                seen.append(inner)
    for inner in seen:
        chosen_by = [f"{k} = {v['const']}" for k, v in inner["properties"].items() if "const" in v]
        yield inner, ", ".join(chosen_by)


def _type(field: Schema, defs: Schema) -> str:
    words: list[str] = []
    for choice in _choices(field, defs):
        word = _one_type(choice, defs)
        if word not in words:
            words.append(word)
    if len(words) == 2 and words[0] == f"list of {_plural(words[1])}":
        return f"{words[1]} or a list of such"
    return " or ".join(words) or "anything"


def _one_type(schema: Schema, defs: Schema) -> str:
    if "const" in schema:
        return json.dumps(schema["const"])
    if "enum" in schema:
        return "one of " + ", ".join(json.dumps(value) for value in schema["enum"])
    kind = schema.get("type")
    if kind == "array":
        return _list_type(schema, defs)
    word = {
        "string": "path" if schema.get("format") == "path" else "text",
        "integer": "whole number",
        "number": "number",
        "boolean": "true or false",
        "object": "table",
    }.get(str(kind), "anything")
    return word + _limits(schema)


def _list_type(schema: Schema, defs: Schema) -> str:
    """Say what a list holds; one of a fixed length says how many."""
    fixed = schema.get("prefixItems")
    if fixed:
        kinds = list(dict.fromkeys(_type(item, defs) for item in fixed))
        return (
            f"list of {len(fixed)} {_plural(kinds[0])}" if len(kinds) == 1 else f"list of {', '.join(kinds)}"
        )
    return f"list of {_plural(_type(schema.get('items', {}), defs))}"


def _plural(kind: str) -> str:
    """Write a type's name for many: ``numbers, 0 to 1``."""
    if kind.startswith("one of ") or " or " in kind or kind == "anything":
        return kind
    name, comma, limits = kind.partition(",")
    return f"{name}s{comma}{limits}"


def written(value: Any) -> str:
    """Write a setting's value in one line: ``1e-6`` and not ``1e-06``, a list without brackets."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return re.sub(r"e([+-])0*(?=[0-9])", lambda found: f"e{found[1].strip('+')}", f"{value:.12g}")
    if isinstance(value, (list, tuple)):
        return ", ".join(written(v) for v in value)
    return str(value)


def _limits(schema: Schema) -> str:
    low, over = schema.get("minimum"), schema.get("exclusiveMinimum")
    high, under = schema.get("maximum"), schema.get("exclusiveMaximum")
    if low is not None and high is not None:
        return f", {written(float(low))} to {written(float(high))}"
    parts = [
        f"{word} {written(float(value))}"
        for word, value in (("at least", low), ("over", over), ("at most", high), ("under", under))
        if value is not None
    ]
    return ", " + ", ".join(parts) if parts else ""


def _toml(value: Any) -> str:
    """Write a default as TOML does, near enough for reading."""
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{k} = {_toml(v)}" for k, v in value.items()) + " }" if value else "{}"
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_toml(v) for v in value) + "]"
    if isinstance(value, float):
        whole = value.is_integer() and abs(value) < 1e12
        return f"{value:.1f}" if whole else written(value)
    return json.dumps(value, ensure_ascii=False)
