"""The keys of a driver are told as a technician needs them: type, limits, default, meaning."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, Field

from drivers.keys import Key, keys_of, written


class Plain(BaseModel):
    host: str = Field(description="Where.")
    port: int = Field(5310, ge=1, le=65535, description="Which.")
    wait_s: float | None = Field(None, gt=0, description="How long.")
    listen: bool = Field(False, description="Whether.")
    parity: Literal["none", "even"] = Field("none", description="What.")
    ratio: float = Field(1e-6, ge=0, lt=1, description="How often.")
    words: dict[str, str] = Field(default_factory=dict, description="More.")


class Pair(BaseModel):
    limits: tuple[float, float] = Field((0.0, 1e15), description="From and to.")
    many: tuple[int, ...] = Field((1, 2), description="Some.")
    most: float = Field(1.0, ge=1, le=1e12, description="So much.")


class Soft(BaseModel):
    model: Literal["soft"]
    seed: int = Field(7, description="Seed.")


class Hard(BaseModel):
    model: Literal["hard"]
    level: float = Field(description="Level.")


class Nested(BaseModel):
    stages: tuple[Annotated[Soft | Hard, Field(discriminator="model")], ...] = Field(
        (), description="Stages."
    )
    one: Hard | None = Field(None, description="One.")


def test_types_limits_and_defaults_are_told() -> None:
    assert keys_of(Plain) == (
        Key("host", "text", None, True, "Where."),
        Key("port", "whole number, 1 to 65535", "5310", False, "Which."),
        Key("wait_s", "number, over 0", None, False, "How long."),
        Key("listen", "true or false", "false", False, "Whether."),
        Key("parity", 'one of "none", "even"', '"none"', False, "What."),
        Key("ratio", "number, at least 0, under 1", "1e-6", False, "How often."),
        Key("words", "table", None, False, "More."),
    )


def test_lists_say_what_they_hold_and_how_many_and_powers_of_ten_are_short() -> None:
    assert keys_of(Pair) == (
        Key("limits", "list of 2 numbers", "[0.0, 1e15]", False, "From and to."),
        Key("many", "list of whole numbers", "[1, 2]", False, "Some."),
        Key("most", "number, 1 to 1e12", "1.0", False, "So much."),
    )


def test_values_are_written_for_people() -> None:
    assert [written(v) for v in (1e-6, 2.5, 1e15, (100, 200), True, "noise", -8)] == [
        "1e-6",
        "2.5",
        "1e15",
        "100, 200",
        "true",
        "noise",
        "-8",
    ]


def test_sections_inside_are_told_with_what_chooses_them() -> None:
    told = {(key.name, key.only_with): key for key in keys_of(Nested)}
    assert list(told) == [
        ("stages", ""),
        ("stages[].seed", "model = soft"),
        ("stages[].level", "model = hard"),
        ("one", ""),
        ("one.level", "model = hard"),
    ]
    assert told["stages[].level", "model = hard"].required
    assert told["stages", ""].type == "list of tables"
