"""The JSON schema holds every key that the reader knows, the drivers' own too, and nothing dangling."""

from __future__ import annotations

import json
from collections.abc import Iterator
from typing import Any

import pytest
from jsonschema import Draft202012Validator

from drivers import registry
from harness.profile import Profile, parse_profile, profile_schema


@pytest.fixture
def schema() -> dict[str, Any]:
    return profile_schema()


def parts(node: Any) -> Iterator[dict[str, Any]]:
    if isinstance(node, dict):
        yield node
        for value in node.values():
            yield from parts(value)
    elif isinstance(node, list):
        for value in node:
            yield from parts(value)


def test_it_is_json_and_every_reference_leads_somewhere(schema: dict[str, Any]) -> None:
    assert json.loads(json.dumps(schema, allow_nan=False)) == schema
    references = [part["$ref"] for part in parts(schema) if isinstance(part.get("$ref"), str)]
    assert references
    for reference in references:
        assert reference.removeprefix("#/$defs/") in schema["$defs"]


def test_every_section_of_the_profile_is_in_it(schema: dict[str, Any]) -> None:
    assert set(schema["properties"]) == set(Profile.model_fields)
    assert schema["additionalProperties"] is False


@pytest.mark.parametrize(
    ("kind", "section"), [("links", "LinkSettings"), ("instruments", "InstrumentSettings")]
)
def test_every_driver_is_an_alternative_with_its_keys(
    schema: dict[str, Any], kind: registry.Kind, section: str
) -> None:
    alternatives = {a["properties"]["driver"]["const"]: a for a in schema["$defs"][section]["oneOf"]}
    assert set(alternatives) == set(registry.names(kind))
    for name, alternative in alternatives.items():
        keys = {key.name.split(".")[0].removesuffix("[]") for key in registry.describe(kind, name).keys}
        assert keys <= set(alternative["properties"])
        assert "options" not in alternative["properties"]
        assert "driver" in alternative["required"]


@pytest.mark.parametrize(
    ("kind", "section"), [("links", "LinkSettings"), ("instruments", "InstrumentSettings")]
)
def test_no_drivers_key_is_hidden_by_one_of_ours(kind: registry.Kind, section: str) -> None:
    import harness.profile as profile

    ours = set(getattr(profile, section).model_fields)
    for name in registry.names(kind):
        theirs = {key.name.split(".")[0].removesuffix("[]") for key in registry.describe(kind, name).keys}
        assert not ours & theirs, name


def test_every_key_has_words(schema: dict[str, Any]) -> None:
    link = schema["$defs"]["LinkSettings"]["oneOf"][0]["properties"]
    for key in ("rate_bps", "pace_bps", "drain_s", "topology"):
        assert link[key]["description"]


def test_what_the_reader_resolves_is_in_the_schema(schema: dict[str, Any], sweep_text: str) -> None:
    resolved = parse_profile(sweep_text).resolved()
    assert set(resolved) <= set(schema["properties"])
    loopback = next(
        a
        for a in schema["$defs"]["LinkSettings"]["oneOf"]
        if a["properties"]["driver"]["const"] == "loopback"
    )
    assert set(resolved["link"]) <= set(loopback["properties"])


@pytest.mark.parametrize("channel", [[{"model": "slip", "bits": [8]}], {"model": "slip", "bits": 8}])
def test_what_may_stand_without_brackets_may_also_by_the_schema(
    schema: dict[str, Any], channel: dict[str, Any] | list[dict[str, Any]]
) -> None:
    validator = Draft202012Validator(schema)
    assert list(validator.iter_errors({"link": {"driver": "loopback", "channel": channel}})) == []
    wrong = {"link": {"driver": "loopback", "channel": {"model": "slip", "bits": "eight"}}}
    assert list(validator.iter_errors(wrong))
