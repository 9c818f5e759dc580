"""The sections [level], [correction] and [lot]: what lies between instrument and device, and many units."""

from __future__ import annotations

import datetime
import itertools
import re
from typing import Annotated, Any

from pydantic import BeforeValidator, Field, field_validator

from .basics import Count, FromList, NotNegative, ProfileSection, problem


def _as_date(value: Any) -> Any:
    if isinstance(value, str):
        try:
            return datetime.date.fromisoformat(value)
        except ValueError:
            raise problem("must be a date such as 2026-05-01", "write year-month-day") from None
    return value


Date = Annotated[datetime.date, BeforeValidator(_as_date)]


class Level(ProfileSection):
    """[level]: the power at the device's port, and the limits that no setting and no override may pass."""

    instrument: str | None = None
    """The attenuator (or the generator) in [instruments] that sets the level."""
    source_dbm: float | None = None
    """The source's level, dBm; left out where the instrument sets a level in dBm itself."""
    source_uncertainty_db: NotNegative = 0.0
    """Its standard uncertainty, dB."""
    damage_dbm: float | None = None
    """The receiver's damage level at its port, dBm: no point may reach it."""
    permitted_dbm: float | None = None
    """The highest level that the transmitter is permitted, dBm."""


class Loss(ProfileSection):
    """A cable, pad or coupler on the way to the device."""

    name: str
    loss_db: NotNegative
    uncertainty_db: NotNegative = 0.0
    """Standard uncertainty, dB."""
    calibrated: Date | None = None
    due: Date | None = None
    """When its calibration runs out."""


class CalibrationPoint(ProfileSection):
    """One row of a calibration table."""

    value: float
    """As set."""
    actual: float
    """As measured."""
    uncertainty: NotNegative = 0.0
    """Standard uncertainty, in the instrument's unit."""


class CalibrationTable(ProfileSection):
    """[correction.tables.NAME]: the calibration of an instrument."""

    points: Annotated[tuple[CalibrationPoint, ...], FromList, Field(min_length=1)]
    certificate: str = ""
    calibrated: Date | None = None
    due: Date | None = None
    """When the calibration runs out; overdue is a warning on the screen and in the report."""

    @field_validator("points", mode="after")
    @classmethod
    def _rising(cls, points: tuple[CalibrationPoint, ...]) -> tuple[CalibrationPoint, ...]:
        values = [p.value for p in points]
        if any(b <= a for a, b in itertools.pairwise(values)):
            raise problem("must rise from row to row in `value`", "sort the rows and drop doubles")
        return points


class Correction(ProfileSection):
    """[correction]: losses on the way, and instruments' calibration tables."""

    losses: Annotated[tuple[Loss, ...], FromList] = ()
    tables: dict[str, CalibrationTable] = Field(default_factory=dict)


class Lot(ProfileSection):
    """[lot]: many units of one kind."""

    name: str = ""
    """The lot's name or order number."""
    serial_pattern: str | None = None
    """A regular expression that a whole serial number must match."""
    size: Count | None = None
    """How many units there are."""
    allow_repeats: bool = False
    """Accept a serial number that was measured in this lot already."""

    @field_validator("serial_pattern")
    @classmethod
    def _compiles(cls, pattern: str | None) -> str | None:
        try:
            re.compile(pattern or "")
        except re.error as error:
            raise problem(f"is no regular expression: {error}", r'for four digits write "\\d{4}"') from None
        return pattern
