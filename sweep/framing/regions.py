"""The places of the patches, in a station and in the text of its file."""

from collections.abc import Iterator, Sequence

import tomlkit
from tomlkit.exceptions import TOMLKitError

from sweep.errors import StationError
from sweep.station import Patch, Region, Station, Target, build_station, parse_station


def patches_of(station: Station) -> Iterator[tuple[str, Target, Patch]]:
    """Every patch in the order of the file, with its target, and a name that tells it from the others."""
    for target in station.targets:
        for number, patch in enumerate(target.patches, 1):
            yield target.name if len(target.patches) == 1 else f"{target.name} {number}", target, patch


def with_region(station: Station, number: int, region: Sequence[int]) -> Station:
    """The station with one patch, by its number over all targets from 0, at another place (x, y, width, height in px).

    Raises StationError where that is no region, IndexError where there is no such patch.
    """
    data = station.model_dump(mode="json", exclude_unset=True)
    places = [(i, j) for i, target in enumerate(station.targets) for j in range(len(target.patches))]
    i, j = places[number]
    data["targets"][i]["patches"][j]["region"] = list(region)
    return build_station(data, "the set-up")


def write_regions(text: str, regions: Sequence[Region]) -> str:
    """The text of a station file with the patches at other places: nothing else changes, comments stay.

    regions: of every patch in the order of the file. Raises StationError where the file is written in a way that
    does not let its patches be changed one by one.
    """
    before = parse_station(text)
    mark = "\ufeff" if text.startswith("\ufeff") else ""
    refusal = StationError("The places of the patches cannot be written into this file. Write them in by hand.")
    try:
        document = tomlkit.parse(text.removeprefix(mark))
        found = [patch for target in document["targets"] for patch in target["patches"]]
        for patch, region in zip(found, regions, strict=True):
            for place, value in enumerate(region):
                if patch["region"][place] != value:
                    patch["region"][place] = value
        after = mark + tomlkit.dumps(document)
    except (TOMLKitError, TypeError, KeyError, IndexError, ValueError):
        raise refusal from None
    expected = before
    for number, region in enumerate(regions):
        expected = with_region(expected, number, region)
    if parse_station(after) != expected:
        raise refusal
    return after
