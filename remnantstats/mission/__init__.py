"""How many targets a mission needs, how far they are and how big it must be."""

from .result import MissionSize, write_mission
from .settings import MissionSettings, load_mission, parse_mission
from .sizing import size_mission
from .targets import read_targets

__all__ = [
    "MissionSettings",
    "MissionSize",
    "load_mission",
    "parse_mission",
    "read_targets",
    "size_mission",
    "write_mission",
]
