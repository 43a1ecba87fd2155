"""One patch at one stop: its frames to a sighting."""

from collections.abc import Sequence
from dataclasses import replace
from itertools import groupby

import numpy as np

from sweep.measure.bars import BarsMeasure, read_bars
from sweep.measure.edge import EdgeMeasure, read_edge
from sweep.measure.linear import COLOUR_SITES, Bools, Floats, Scale, channel_mask, sharpness_values
from sweep.measure.noise import NoisePoint, area_noise
from sweep.measure.star import StarMeasure, read_star
from sweep.measure.tribar import TribarMeasure, read_tribar
from sweep.readings.sightings import CLIPPED_SHARE, PatchSite, Sighting
from sweep.readings.slots import Slot
from sweep.station import Station

LEAST_SIGNAL_DN = 4.0


def measure_patch(
    stop: float, site: PatchSite, slots: Sequence[Slot], station: Station, scale: Scale, near: Sighting | None = None
) -> Sighting:
    """Measure one patch at one stop from its frames; clipped frames give way to unclipped ones.

    near: the same patch at a stop where it is sharper, which tells where a soft pattern is.
    """
    sound = [s for s in slots if s.clipped <= CLIPPED_SHARE]
    used = sound or list(slots)
    units, counts = np.array([s.light_unit for s in used]), np.array([s.count for s in used])
    light = np.stack([s.values for s in used]) / units[:, None]
    valid = np.stack([s.valid for s in used])
    weights = counts * units
    frame_light = light.mean(axis=1)
    why = [] if sound else ["frames-saturated"]
    edge, star, bars, tribar = None, None, None, None
    if float(np.max(units * np.percentile(light, 95, axis=1))) < LEAST_SIGNAL_DN:
        why.append("low-signal")
    elif site.spec.kind == "edge":
        edge = read_edge(site.sites.x, site.sites.y, light, valid if sound else None, weights)
        if edge.frame_level is not None:
            frame_light = edge.frame_level * float(np.average(frame_light, weights=weights))
    elif site.spec.kind == "star":
        star = _read_star(site, light, valid, near)
    elif site.spec.kind == "bars":
        bars = _read_bars(site, light, valid, station, near)
    elif site.spec.kind == "tribar":
        tribar = _read_tribar(site, light, valid, station, near)
    for measure in (edge, star, bars, tribar):
        why += [code for code in measure.why_not if code not in why] if measure is not None else []
    full = np.average(np.stack([s.full / s.light_unit for s in used]), axis=0, weights=weights)
    return Sighting(
        stop=stop,
        site=site,
        ok=not why,
        why_not=tuple(why),
        saturated_fraction=float(np.average([s.clipped for s in used], weights=counts)),
        frames=int(counts.sum()),
        frame_light=frame_light,
        frame_order=np.array([s.order for s in used]),
        tone_per_ms=_tone(full, site, edge, station),
        exposures=units,
        edge=edge,
        star=star,
        bars=bars,
        tribar=tribar,
        noise=_noise(site, edge, used, scale),
    )


def _read_star(site: PatchSite, light: Floats, valid: Bools, near: Sighting | None) -> StarMeasure | None:
    if site.spec.cycles is None:
        return None
    sharper = near.star if near is not None else None
    return read_star(site.sites.x, site.sites.y, light, valid, site.spec.cycles, site.spec.region[2:], sharper)


def _read_bars(
    site: PatchSite, light: Floats, valid: Bools, station: Station, near: Sighting | None
) -> BarsMeasure | None:
    if site.spec.period_um is None:
        return None
    period_px = site.spec.period_um / station.object_um_per_px_at(station.targets[site.target].depth_mm)
    return read_bars(site.sites.x, site.sites.y, light, valid, period_px, near.bars if near is not None else None)


def _read_tribar(
    site: PatchSite, light: Floats, valid: Bools, station: Station, near: Sighting | None
) -> TribarMeasure | None:
    if site.spec.group is None:
        return None
    um_per_px = station.object_um_per_px_at(station.targets[site.target].depth_mm)
    sharper = near.tribar if near is not None else None
    return read_tribar(site.sites.x, site.sites.y, light, valid, site.spec.group, um_per_px, sharper)


def _tone(full: Floats, site: PatchSite, edge: EdgeMeasure | None, station: Station) -> float | None:
    """The light tone in the brightest channel, per ms: a flat's mean, or the light side of an edge."""
    height, width = full.shape[:2]
    if site.spec.kind == "flat":
        light = np.ones((height, width), bool)
        scale = 1.0
    elif edge is not None and edge.ok and edge.curve is not None:
        rows, columns = np.mgrid[0:height, 0:width]
        light = edge.curve.distance(columns.astype(float), rows.astype(float)) > 2.0 * edge.spread_px
        own = sharpness_values(full, site.sites)
        own_light = light.reshape(-1)[site.sites.flat_index]
        if not own_light.any():
            return None
        scale = edge.light / float(own[own_light].mean())
    else:
        return None
    if full.ndim == 3:
        means = [float(full[..., c][light].mean()) for c in range(3)]
    elif station.camera.layout in COLOUR_SITES:
        masks = [channel_mask(station.camera.layout, site.spec.region, c) & light for c in "rgb"]
        means = [float(full[m].mean()) for m in masks if m.any()]
    else:
        means = [float(full[light].mean())]
    return max(means) * scale


def _noise(site: PatchSite, edge: EdgeMeasure | None, slots: Sequence[Slot], scale: Scale) -> tuple[NoisePoint, ...]:
    """Noise of the even areas: a flat, or the two sides of an edge beyond its spread; per setting."""
    if site.spec.kind == "flat":
        areas = [np.ones(len(site.sites.x), bool)]
    elif edge is not None and edge.ok and edge.curve is not None:
        d = edge.curve.distance(site.sites.x, site.sites.y)
        away = max(3.0, 2.0 * edge.spread_px)
        areas = [d < -away, d > away]
    else:
        return ()
    points: list[NoisePoint] = []
    for (_, gain), group in groupby(slots, key=lambda s: (s.exposure_ms, s.gain_db)):
        every = list(group)
        stack = [s for s in every if s.count == every[0].count]  # a last slot of fewer frames has more noise
        frames = np.stack([s.values for s in stack])
        for area in areas:
            part = frames[:, area]
            if part.shape[1] < 30:
                continue
            stored = scale.stored(float(part.mean()))
            rounding = float(scale.slope(np.array(stored))) ** 2 / 12.0
            point = area_noise(part, gain, rounding, (site.sites.x[area], site.sites.y[area]))
            if point is not None:
                points.append(replace(point, variance_dn2=point.variance_dn2 * stack[0].count))
    return tuple(points)
