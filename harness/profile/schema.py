"""The profile's JSON schema, with the built-in drivers' keys in their sections."""

from __future__ import annotations

from typing import Any

from .links import CounterSettings, DrivenSection, InstrumentSettings, LinkSettings, ReceiveSettings
from .load import driver_section
from .profile import Profile


def _driver_names() -> dict[type[DrivenSection], tuple[str, ...]]:
    from drivers import registry

    return {
        LinkSettings: registry.names("links"),
        ReceiveSettings: registry.names("links"),
        InstrumentSettings: registry.names("instruments"),
        CounterSettings: registry.names("counters"),
    }


def profile_schema() -> dict[str, Any]:
    """Give the JSON schema (draft 2020-12) of a profile.

    A section with a driver allows one alternative for each driver: our keys beside that driver's.
    """
    schema = Profile.model_json_schema()
    schema["$schema"] = "https://json-schema.org/draft/2020-12/schema"
    schema["title"] = "bitassay profile"
    shared = schema["$defs"]
    for kind, names in _driver_names().items():
        general = shared.get(kind.__name__)
        if general is None:
            continue
        general["properties"].pop("options", None)
        if names:
            shared[kind.__name__] = {
                "description": general.get("description", ""),
                "oneOf": [_alternative(general, kind, name, shared) for name in names],
            }
    return schema


def _alternative(
    general: dict[str, Any], kind: type[DrivenSection], name: str, shared: dict[str, Any]
) -> dict[str, Any]:
    # Two drivers may have models of the same name, hence the prefix.
    prefix = f"{kind.__name__}.{name}"
    own = driver_section(kind, name).model_json_schema(ref_template=f"#/$defs/{prefix}.{{model}}")
    for key, value in own.pop("$defs", {}).items():
        shared[f"{prefix}.{key}"] = value
    # A driver's own key of the same name would never reach it, hence ours last.
    properties = {**own.get("properties", {}), **general["properties"]}
    properties["driver"] = {**properties["driver"], "const": name}
    required = [*own.get("required", []), "driver"]
    return {
        "title": f"{kind.__name__}: {name}",
        "description": own.get("description", ""),
        "type": "object",
        "properties": properties,
        "required": sorted(set(required)),
        "additionalProperties": False,
    }
