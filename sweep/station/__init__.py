"""The station file `station.toml` as records (docs/station-file.md).

One mistake never hides another: all of them are collected, each with its key, and told in one message of at most
four lines.
"""

from sweep.station.parse import build_station, check_regions, parse_station
from sweep.station.records import Camera, Layout, Lens, Need, Patch, Region, Scene, Station, StationName, Target

__all__ = [
    "Camera",
    "Layout",
    "Lens",
    "Need",
    "Patch",
    "Region",
    "Scene",
    "Station",
    "StationName",
    "Target",
    "build_station",
    "check_regions",
    "parse_station",
]
