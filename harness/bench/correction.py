"""From set values to the level at the device's port: losses, calibration tables, uncertainty, limits.

Uncertainties are standard uncertainties and add by their squares (GUM, JCGM 100:2008, 5.1.2). A calibration
table is interpolated between its rows and holds its last correction beyond them.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

from drivers.contract import OutOfLimits
from harness.profile import Profile

LEVEL_UNIT = "dBm"


@dataclass(frozen=True, slots=True)
class Corrected:
    """A value as it really was, with its standard uncertainty, in the instrument's unit."""

    value: float
    uncertainty: float


@dataclass(frozen=True, slots=True)
class AtPort:
    """The level at the device's port."""

    dbm: float
    uncertainty_db: float

    def to_json(self) -> dict[str, float]:
        """JSON as the record keeps it."""
        return {"dbm": self.dbm, "uncertainty_db": self.uncertainty_db}


@dataclass(frozen=True, slots=True)
class Table:
    """An instrument's calibration: value set -> value measured."""

    rows: tuple[tuple[float, float, float], ...]  # (set, actual, uncertainty), rising
    certificate: str = ""
    due: datetime.date | None = None

    def at(self, value: float) -> Corrected:
        """Correct a set value."""
        rows = self.rows
        if value <= rows[0][0]:
            return Corrected(value + rows[0][1] - rows[0][0], rows[0][2])
        for (x0, y0, u0), (x1, y1, u1) in pairwise(rows):
            if value <= x1:
                share = (value - x0) / (x1 - x0)
                error = (y0 - x0) * (1 - share) + (y1 - x1) * share
                return Corrected(value + error, max(u0, u1))
        return Corrected(value + rows[-1][1] - rows[-1][0], rows[-1][2])


@dataclass(frozen=True, slots=True)
class PortLevel:
    """Source, instrument, losses: what reaches the device's port, and what must not."""

    instrument: str | None
    unit: str
    source_dbm: float | None
    source_uncertainty_db: float
    losses_db: float
    losses_uncertainty_db: float
    tables: Mapping[str, Table]
    damage_dbm: float | None
    permitted_dbm: float | None
    due: tuple[tuple[str, datetime.date], ...]  # what is calibrated, and until when

    @classmethod
    def of(cls, profile: Profile) -> PortLevel:
        """Read ``[level]`` and ``[correction]``."""
        level, correction = profile.level, profile.correction
        name = level.instrument if level is not None else None
        unit = ""
        if name is not None:
            unit = str(getattr(profile.instruments[name].options, "unit", ""))
        losses = correction.losses if correction is not None else ()
        given = correction.tables if correction is not None else {}
        tables = {
            key: Table(
                tuple((p.value, p.actual, p.uncertainty) for p in table.points), table.certificate, table.due
            )
            for key, table in given.items()
        }
        due = [(f"{loss.name} (loss)", loss.due) for loss in losses if loss.due is not None]
        due += [(key, table.due) for key, table in tables.items() if table.due is not None]
        return cls(
            instrument=name,
            unit=unit,
            source_dbm=level.source_dbm if level is not None else None,
            source_uncertainty_db=level.source_uncertainty_db if level is not None else 0.0,
            losses_db=sum(loss.loss_db for loss in losses),
            losses_uncertainty_db=math.hypot(*(loss.uncertainty_db for loss in losses)),
            tables=tables,
            damage_dbm=level.damage_dbm if level is not None else None,
            permitted_dbm=level.permitted_dbm if level is not None else None,
            due=tuple(due),
        )

    def corrected(self, name: str, value: float) -> Corrected:
        """Correct an instrument's set value by its calibration table, if there is one."""
        table = self.tables.get(name)
        return table.at(value) if table is not None else Corrected(value, 0.0)

    def at(self, values: Mapping[str, float]) -> AtPort | None:
        """Compute the level at the port; None where the profile does not say enough."""
        if self.instrument is None:
            if self.source_dbm is None:
                return None
            return AtPort(
                self.source_dbm - self.losses_db,
                math.hypot(self.source_uncertainty_db, self.losses_uncertainty_db),
            )
        if self.instrument not in values:
            return None
        real = self.corrected(self.instrument, values[self.instrument])
        if self.unit == LEVEL_UNIT:
            level, own = real.value, 0.0
        elif self.source_dbm is not None:
            level, own = self.source_dbm - real.value, self.source_uncertainty_db
        else:
            return None
        return AtPort(level - self.losses_db, math.hypot(own, real.uncertainty, self.losses_uncertainty_db))

    def check(self, values: Mapping[str, float]) -> None:
        """Refuse values that would pass a power limit, before anything is set.

        Raises
        ------
        OutOfLimits
        """
        port = self.at(values)
        if self.damage_dbm is not None:
            if port is None:
                raise OutOfLimits(
                    "the level at the receiver's port cannot be worked out, and it has a damage level",
                    "state level.source_dbm and level.instrument, or measure without the receiver",
                )
            highest = port.dbm + 2 * port.uncertainty_db
            if not highest < self.damage_dbm:
                raise OutOfLimits(
                    f"{port.dbm:.1f} dBm (± {2 * port.uncertainty_db:.1f} dB) at the receiver's port would "
                    f"reach its damage level of {self.damage_dbm:g} dBm; nothing was set",
                    "more attenuation is needed: check source, losses and the sweep's values",
                )
        if self.permitted_dbm is not None:
            sent = self._transmitted(values)
            if sent is None:
                raise OutOfLimits(
                    "the transmitted level is not known, and there is a permitted one",
                    "state level.source_dbm, or let a generator in dBm be set by the profile",
                )
            if not sent.value + 2 * sent.uncertainty <= self.permitted_dbm:
                raise OutOfLimits(
                    f"{sent.value:.1f} dBm (± {2 * sent.uncertainty:.1f} dB) would be over the permitted "
                    f"{self.permitted_dbm:g} dBm; nothing was set",
                    "lower the transmitter's level; local rules and the licence decide what is permitted",
                )

    def _transmitted(self, values: Mapping[str, float]) -> Corrected | None:
        if self.unit == LEVEL_UNIT and self.instrument is not None:
            if self.instrument not in values:
                return None
            return self.corrected(self.instrument, values[self.instrument])
        if self.source_dbm is None:
            return None
        return Corrected(self.source_dbm, self.source_uncertainty_db)

    def overdue(self, today: datetime.date) -> list[str]:
        """Say what is overdue for calibration."""
        return [f"the calibration of {what} ran out on {due}" for what, due in self.due if due < today]

    def facts(self) -> dict[str, Any]:
        """What a report should say of it."""
        return {
            "certificates": {
                name: table.certificate for name, table in self.tables.items() if table.certificate
            },
            "due": {what: due.isoformat() for what, due in self.due},
        }
