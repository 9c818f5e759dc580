"""Profiles: the TOML files that say what to do, read strictly and worded kindly where they are wrong."""

from .lab import Lot
from .links import CounterSettings, InstrumentSettings, LinkSettings, ReceiveSettings
from .load import load_profile, parse_profile
from .problems import ProfileError
from .profile import Profile
from .ready import find_profile, ready_names, ready_profiles
from .requirement import Objectives, PatternChoice, PatternSettings, Requirement, Stop
from .schema import profile_schema
from .sweeps import Axis, Range, Search, Sweep

__all__ = [
    "Axis",
    "CounterSettings",
    "InstrumentSettings",
    "LinkSettings",
    "Lot",
    "Objectives",
    "PatternChoice",
    "PatternSettings",
    "Profile",
    "ProfileError",
    "Range",
    "ReceiveSettings",
    "Requirement",
    "Search",
    "Stop",
    "Sweep",
    "find_profile",
    "load_profile",
    "parse_profile",
    "profile_schema",
    "ready_names",
    "ready_profiles",
]
