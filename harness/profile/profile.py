"""The profile as a whole: all sections, frozen, with the text that it came from."""

from __future__ import annotations

import hashlib
from typing import Any, Literal

from pydantic import Field, PrivateAttr

from harness.statistics.conditions import Condition, curve_along

from .basics import PlainText, ProfileSection
from .lab import Correction, Level, Lot
from .links import CounterSettings, DrivenSection, InstrumentSettings, LinkSettings
from .problems import ProfileError
from .requirement import PatternSettings, Requirement, Stop
from .sweeps import Search, Sweep


class Profile(ProfileSection):
    """What to do, as a TOML file says it."""

    format: Literal[1] = 1
    """The version of this format."""
    title: PlainText = ""
    """Stands at the head of the run and of its report."""
    device: dict[str, PlainText] = Field(default_factory=dict)
    """Free keys, kept with the run as text: model, serial_number, firmware, operator, order …"""
    link: LinkSettings | None = None
    """The path to the device and back."""
    counter: CounterSettings | None = None
    """An error counter in place of a link."""
    pattern: PatternSettings = PatternSettings()
    """What is sent and expected."""
    requirement: Requirement | None = None
    """What the device must keep; left out: measure only."""
    stop: Stop = Stop()
    """When to end."""
    instruments: dict[str, InstrumentSettings] = Field(default_factory=dict)
    """What sets or reads conditions, by name."""
    sweep: Sweep | None = None
    """Measure at several conditions."""
    search: Search | None = None
    """Find the condition at which the BER crosses a target."""
    level: Level | None = None
    """Power at the device's port, and its limits."""
    correction: Correction | None = None
    """Losses and calibration tables."""
    lot: Lot | None = None
    """Many units."""

    _text: str = PrivateAttr(default="")
    _overrides: tuple[str, ...] = PrivateAttr(default=())
    _name: str = PrivateAttr(default="")

    @property
    def text(self) -> str:
        """The TOML text as given."""
        return self._text

    @property
    def overrides(self) -> tuple[str, ...]:
        """The overrides ``section.key=value`` as given."""
        return self._overrides

    @property
    def name(self) -> str:
        """Where it came from: the file's path as given."""
        return self._name

    @property
    def digest(self) -> str:
        """SHA-256 of the text as given, in hexadecimal: what `sha256sum` prints for the file."""
        return hashlib.sha256(self._text.encode()).hexdigest()

    def need_link(self) -> LinkSettings:
        """Give the link.

        Raises
        ------
        ProfileError
            Where an error counter stands in its place.
        """
        if self.link is None:
            raise ProfileError(
                "this profile has an error counter and no link", "use a profile with [link] for this command"
            )
        return self.link

    @property
    def curve_axis(self) -> str:
        """The instrument along which a sweep's or a search's curves run; empty where there is neither."""
        if self.search is not None:
            return self.search.instrument
        axes = self.sweep.all_axes() if self.sweep is not None else ()
        return curve_along(
            [Condition(a.instrument, self._quantity(a.instrument), len(a.listed())) for a in axes]
        )

    def _quantity(self, name: str) -> str:
        options = self.instruments[name].options if name in self.instruments else None
        return str(getattr(options, "quantity", None) or "").casefold()

    def resolved(self) -> dict[str, Any]:
        """Give all keys as TOML would have them, defaults included; JSON values only, never NaN."""
        out = self.model_dump(mode="json", exclude={"link", "counter", "instruments"})
        for name in ("link", "counter"):
            section: DrivenSection | None = getattr(self, name)
            out[name] = None if section is None else section.flat()
        out["instruments"] = {name: section.flat() for name, section in self.instruments.items()}
        finite: dict[str, Any] = _finite(out)
        return finite


def _finite(value: Any) -> Any:
    """Replace infinities and NaN, which a driver's defaults may hold, by None: JSON has neither."""
    if isinstance(value, dict):
        return {str(k): _finite(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(v) for v in value]
    if isinstance(value, float) and (value != value or value in (float("inf"), float("-inf"))):
        return None
    return value
