"""The places that the choice must serve, and what the sweep read at each."""

from collections.abc import Mapping, Sequence

import numpy as np

from sweep.choose import Place
from sweep.errors import StationError
from sweep.measure.linear import Floats
from sweep.readings import Sweep
from sweep.result import Reading
from sweep.station import Station

SHARPNESS_KINDS = ("edge", "star", "bars")
DEPTH_STEPS = 9


def places_of(station: Station, directions: Mapping[tuple[int, int], float]) -> list[Place]:
    """The places that the choice must serve: every sharpness patch, and the depths between where a range is stated.

    directions: of the frequencies that each patch (target, patch) speaks for, degrees; 0 where none is known.
    Raises StationError where no patch tells a contrast.
    """
    if not any(patch.kind in SHARPNESS_KINDS for target in station.targets for patch in target.patches):
        raise StationError(
            "The station file has no edge, star or bars among its patches, so nothing tells the contrast at the "
            "feature. Add at least one."
        )
    places: list[Place] = []
    for i, target in enumerate(station.targets):
        for j, patch in enumerate(target.patches):
            if patch.kind in SHARPNESS_KINDS:
                direction = None if patch.kind == "star" else directions.get((i, j), 0.0)
                places.append(_place(station, target.name, target.depth_mm, i, direction))
    if station.need.depth_range_mm is not None:
        for depth in np.linspace(*station.need.depth_range_mm, DEPTH_STEPS):
            places.append(_place(station, f"{depth:+.3g} mm", float(depth), -1, 0.0))
    return places


def _place(station: Station, name: str, depth_mm: float, target: int, direction: float | None) -> Place:
    return Place(
        name, depth_mm, station.feature_cy_px_at(depth_mm), station.object_um_per_px_at(depth_mm), target, direction
    )


def directions_of(sweep: Sweep) -> dict[tuple[int, int], float]:
    """Direction of the frequencies that each edge or set of bars speaks for, from its sound sightings."""
    out: dict[tuple[int, int], float] = {}
    for s in sweep.sightings:
        if s.ok and s.edge is not None and s.edge.curve is not None:
            out[s.site.target, s.site.patch] = s.edge.curve.direction_deg
        elif s.ok and s.bars is not None:
            out[s.site.target, s.site.patch] = s.bars.direction_deg
    return out


def contrasts_of(sweep: Sweep, readings: Sequence[Reading], places: Sequence[Place]) -> tuple[Floats, Floats]:
    """The readings' signed contrasts and their u, (stops, places), NaN where there is none."""
    shape = (len(sweep.stops), len(places))
    value, u = np.full(shape, np.nan), np.full(shape, np.nan)
    column = columns_of(sweep)
    for sighting, reading in zip(sweep.sightings, readings, strict=True):
        key = (sighting.site.target, sighting.site.patch)
        if reading.contrast_at_feature is None or reading.contrast_at_feature_u is None or key not in column:
            continue
        k = sweep.stops.index(sighting.stop)
        value[k, column[key]] = reading.contrast_at_feature * (-1.0 if reading.reversed else 1.0)
        u[k, column[key]] = reading.contrast_at_feature_u
    return value, u


def columns_of(sweep: Sweep) -> dict[tuple[int, int], int]:
    """Column of each sharpness patch among the places."""
    keys = sorted({(s.site.target, s.site.patch) for s in sweep.sightings if s.kind in SHARPNESS_KINDS})
    return {key: i for i, key in enumerate(keys)}
