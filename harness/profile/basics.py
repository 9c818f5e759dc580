"""What every section of a profile is built from: the base class and the number types, strict about types."""

from __future__ import annotations

import datetime
import re
from typing import Annotated, Any

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field
from pydantic_core import PydanticCustomError


class ProfileSection(BaseModel):
    """Base of the profile's own sections: unknown keys refused, types as TOML has them, no NaN, frozen."""

    model_config = ConfigDict(
        extra="forbid", frozen=True, strict=True, allow_inf_nan=False, use_attribute_docstrings=True
    )


def problem(what: str, advice: str = "") -> PydanticCustomError:
    """Make an error for a validator to raise: one line what is wrong, one line what to do.

    `what` reads on after the key's path: "must …", "is …".
    """
    # Braces are doubled since pydantic formats the text.
    return PydanticCustomError("problem", what.replace("{", "{{").replace("}", "}}"), {"advice": advice})


def _whole(value: Any) -> Any:
    if isinstance(value, float) and value.is_integer():
        return int(value)  # 1e8 is a float in TOML, and a count to whoever wrote it
    return value


def _as_tuple(value: Any) -> Any:
    return tuple(value) if isinstance(value, list) else value


_CLOCK = r"^([01]\d|2[0-3]):[0-5]\d$"


def _as_clock(value: Any) -> Any:
    if isinstance(value, datetime.time):
        return value.strftime("%H:%M")
    if isinstance(value, str) and re.match(_CLOCK, value) is None:
        raise problem(f'cannot be "{value}"', 'write hours and minutes of the local time of day, as "07:00"')
    return value


def _readable(value: str) -> str:
    if any((ord(c) < 32 and c not in "\t\n\r") or 127 <= ord(c) < 160 for c in value):
        raise problem("cannot hold control characters", "write it in plain text")
    return value


FromList = BeforeValidator(_as_tuple)
WholeNumber = Annotated[int, BeforeValidator(_whole)]
Count = Annotated[WholeNumber, Field(gt=0, le=10**18)]
CountOrZero = Annotated[WholeNumber, Field(ge=0, le=10**18)]
Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
Share = Annotated[float, Field(gt=0, lt=1)]
ShareOrZero = Annotated[float, Field(ge=0, le=1)]
Clock = Annotated[str, BeforeValidator(_as_clock), Field(pattern=_CLOCK)]
PlainText = Annotated[str, AfterValidator(_readable)]
