"""From the sweep's sightings to the fitted lens: what each gives the fit, print contrasts, bins."""

import numpy as np

from sweep.analyse.places import SHARPNESS_KINDS, columns_of
from sweep.fit import AmplitudeData, EdgeData, LensFit, Problem, StopLight, View, fit_lens
from sweep.lens import Bench
from sweep.light import Light
from sweep.measure.edge import EdgeProfile
from sweep.measure.linear import Floats
from sweep.measure.star_level import SQUARE_WAVE
from sweep.readings import Sighting, Sweep
from sweep.station import Station

UNKNOWN_STOP_LN_U = 0.04
RATIO_U = 0.001
BARS_FLOOR = 0.003
USUAL_PRINT = (0.85, 0.15)
"""Modulation of a printed black on white of which nothing is known, and its u (common practice, no source)."""
PRINT_LN_U = 0.02
"""Patches of one station are printed alike to this (common practice, no source)."""


def fit_of(sweep: Sweep, light: Light, station: Station) -> LensFit | None:
    """The lens fit, or None where there is too little to fit."""
    edges: list[EdgeData] = []
    amplitudes: list[AmplitudeData] = []
    prints, common = columns_of(sweep), print_contrast(sweep)
    for sighting in sweep.sightings:
        if not sighting.ok or sighting.kind not in SHARPNESS_KINDS:
            continue
        stop = sweep.stops.index(sighting.stop)
        scale = prints[sighting.site.target, sighting.site.patch]
        edge = _edge_data(sweep, sighting, stop)
        amplitude = _star_data(sighting, stop, scale, common) or _bars_data(sighting, stop, scale, common)
        if edge is not None:
            edges.append(edge)
        elif amplitude is not None:
            amplitudes.append(amplitude)
    if not edges and not amplitudes:
        return None
    known = np.isfinite(light.f_number)
    f_number = np.where(known, light.f_number, np.array(sweep.stops))
    ln_u = np.where(known, np.hypot(np.where(known, light.ln_u, 0.0), 1e-3), UNKNOWN_STOP_LN_U)
    depths = np.array([t.depth_mm for t in station.targets])
    return fit_lens(Problem.of(Bench.of(station), depths, StopLight(f_number, ln_u), edges, amplitudes))


def print_contrast(sweep: Sweep) -> tuple[float, float]:
    """Light-dark half difference over mean level of the station's prints, and u: by all stars and bars that tell it."""
    told = {}
    for s in sweep.sightings:
        if s.star_curve is not None and s.star_curve.surround:
            told[id(s.site)] = (s.star_curve.ratio, s.star_curve.ratio_u)
        elif s.bars_contrast is not None:
            told[id(s.site)] = (s.bars_contrast.ratio, s.bars_contrast.ratio_u)
    values = [USUAL_PRINT, *((ratio, float(np.hypot(u, PRINT_LN_U * ratio))) for ratio, u in told.values())]
    weights = np.array([1.0 / u**2 for _, u in values])
    return float(np.average([v for v, _ in values], weights=weights)), float(1.0 / np.sqrt(weights.sum()))


def _edge_data(sweep: Sweep, sighting: Sighting, stop: int) -> EdgeData | None:
    """An edge's spread function, in wider bins where it is even."""
    edge = sighting.edge
    if edge is None or edge.profile is None or edge.transfer is None or edge.curve is None:
        return None
    d, width, value, u, gradient = rebinned(edge.profile, edge.spread_px)
    view = View(stop, sighting.site.target, edge.curve.direction_deg)
    return EdgeData(view, d, width, value, u, gradient, _ratio(sweep, sighting), RATIO_U, edge.transfer)


def _star_data(sighting: Sighting, stop: int, scale: int, common: tuple[float, float]) -> AmplitudeData | None:
    """A star's rings, as transfer by its own level at zero frequency; the error of that level is the scale's."""
    star, curve = sighting.star, sighting.star_curve
    if star is None or star.rings is None or curve is None:
        return None
    rings = star.rings
    ratio, ratio_u = (curve.ratio, curve.ratio_u) if curve.surround else common
    unit = SQUARE_WAVE * ratio * float(np.median(rings.level))
    order = np.argsort(rings.v_cy_px)
    view = View(stop, sighting.site.target, None)
    value, u = curve.turned * rings.signed[order] / unit, rings.u[order] / unit
    return AmplitudeData(view, rings.v_cy_px[order], value, u, scale, 0.0, max(ratio_u / ratio, 2e-3))


def _bars_data(sighting: Sighting, stop: int, scale: int, common: tuple[float, float]) -> AmplitudeData | None:
    """A set of bars, as transfer for the station's common print contrast, or for the print's own where it is stated."""
    bars, stated = sighting.bars, sighting.site.spec.modulation
    if bars is None:
        return None
    ratio, ratio_u = common if stated == 1.0 else (stated, PRINT_LN_U * stated)
    value, u = (np.array([c / (SQUARE_WAVE * ratio)]) for c in bars.relative)
    sign = -1.0 if sighting.bars_reversed else 1.0
    view = View(stop, sighting.site.target, bars.direction_deg)
    u = np.hypot(u, BARS_FLOOR * value)
    ln_u = float(np.hypot(ratio_u / ratio, PRINT_LN_U))
    return AmplitudeData(view, np.array([bars.v_cy_px]), sign * value, u, scale, 0.0, ln_u)


def _ratio(sweep: Sweep, sighting: Sighting) -> float:
    """Dark over light level of a patch's print, from all its stops, the sharp ones first."""
    same = [s.edge for s in sweep.sightings if s.site is sighting.site and s.ok and s.edge is not None]
    weights = np.array([1.0 / e.spread_px for e in same])
    return float(np.average([e.dark / e.light for e in same], weights=weights))


def rebinned(profile: EdgeProfile, spread_px: float) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """A spread function in wider bins away from the edge: distance, bin width, value, u, gradient column."""
    d = profile.distance_px
    near, far = max(2.0 * spread_px, 4.0), max(4.0 * spread_px, 8.0)
    zone = np.where(np.abs(d) < near, 0, np.where(np.abs(d) < far, 1, 2))
    width = np.array([0.125, 0.5, 1.0])[zone]
    key = np.floor(d / width) * width + np.sign(d) * zone * 1e4
    _, index = np.unique(key, return_inverse=True)
    weight = 1.0 / profile.u**2
    total = np.bincount(index, weight)
    columns = [np.bincount(index, weight * c) / total for c in (d, width, profile.value, profile.gradient)]
    order = np.argsort(columns[0])
    d, width, value, gradient = (c[order] for c in columns)
    return d, width, value, 1.0 / np.sqrt(total[order]), gradient
