"""The one path: frames in, a Result out. It cannot tell where the frames came from."""

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from sweep.choose import Place, StopEvidence, choose, depth_map
from sweep.figures import reading_of
from sweep.fit import AmplitudeData, EdgeData, LensFit, Problem, StopLight, View, fit_lens
from sweep.frames import Source
from sweep.lens import Bench
from sweep.light import Light, light_of
from sweep.measure.edge import EdgeProfile
from sweep.measure.linear import Floats
from sweep.measure.star_level import SQUARE_WAVE
from sweep.notices import notices
from sweep.outlook import Estimate, FittedLens, estimate, half_modulation
from sweep.readings import CLIPPED_SHARE, Progress, Sighting, Sweep, measure_sweep
from sweep.result import CameraNoise, CurvePoint, LensModel, Reading, Result, SourceFacts
from sweep.station import Station

SEED = 20230117
"""Of the generator behind the chances; fixed, so that the same source gives the same bytes."""
UNKNOWN_STOP_LN_U = 0.04
RATIO_U = 0.001
DEPTH_STEPS = 9


def analyse(source: Source, station: Station, progress: Progress | None = None) -> Result:
    """Analyse a sweep: measure, fit, choose.

    `progress` is told (frames done, frames in all). Raises the reader's and the station's errors.
    """
    sweep = measure_sweep(source, station, progress)
    light = light_of(sweep)
    readings = [reading_of(s, station) for s in sweep.sightings]
    fit = _fit(sweep, light, station)
    places = places_of(station, _directions(sweep))
    rng = np.random.default_rng(SEED)
    contrast, contrast_u = _contrasts(sweep, readings, places)
    found = estimate(places, contrast, contrast_u, fit, rng)
    evidence = _evidence(sweep, light, fit, station)
    camera = _camera(sweep)
    lens = FittedLens(fit, found.discrepancy.deviation) if fit is not None else None
    compressed = any(note.code == "compressed-source" for note in source.notes)
    noticed = notices(sweep, readings, light, fit, found.discrepancy, station, compressed)
    recommendation, stops, notes = choose(station, evidence, camera, found.outlook, lens)
    return Result(
        recommendation,
        stops,
        tuple(_with_model(sweep, readings, found, fit, station)),
        _public_camera(camera, sweep, station),
        lens_model(fit, lens, places, recommendation.stop, sweep.stops),
        (*source.notes, *noticed, *notes),
        SourceFacts(sweep.frames, source.sha256),
        model_curve(found),
        depth_map(station, stops, lens, places) if lens is not None else None,
    )


def _sharp(sweep: Sweep) -> list[Sighting]:
    """Sound sightings that carry a transfer or an amplitude."""
    return [s for s in sweep.sightings if s.ok and s.kind in SHARPNESS_KINDS]


def _fit(sweep: Sweep, light: Light, station: Station) -> LensFit | None:
    """The lens fit, or None where there is too little to fit."""
    edges: list[EdgeData] = []
    amplitudes: list[AmplitudeData] = []
    prints, common = _columns(sweep), _print_contrast(sweep)
    for sighting in _sharp(sweep):
        stop = sweep.stops.index(sighting.stop)
        if sighting.edge is not None and sighting.edge.profile is not None and sighting.edge.transfer is not None:
            edge = sighting.edge
            assert edge.curve is not None
            assert edge.profile is not None
            assert edge.transfer is not None
            d, width, value, u, gradient = rebinned(edge.profile, edge.spread_px)
            view = View(stop, sighting.site.target, edge.curve.direction_deg)
            edges.append(EdgeData(view, d, width, value, u, gradient, _ratio(sweep, sighting), RATIO_U, edge.transfer))
        elif sighting.star is not None and sighting.star_curve is not None:
            amplitudes.append(_star_data(sighting, stop, prints[sighting.site.target, sighting.site.patch], common))
        elif sighting.bars is not None:
            amplitudes.append(_bars_data(sighting, stop, prints[sighting.site.target, sighting.site.patch], common))
    if not edges and not amplitudes:
        return None
    known = np.isfinite(light.f_number)
    f_number = np.where(known, light.f_number, np.array(sweep.stops))
    ln_u = np.where(known, np.hypot(np.where(known, light.ln_u, 0.0), 1e-3), UNKNOWN_STOP_LN_U)
    depths = np.array([t.depth_mm for t in station.targets])
    return fit_lens(Problem.of(Bench.of(station), depths, StopLight(f_number, ln_u), edges, amplitudes))


USUAL_PRINT = (0.85, 0.15)
"""Modulation of a printed black on white of which nothing is known, and its u (common practice, no source)."""
PRINT_LN_U = 0.02
"""Patches of one station are printed alike to this (common practice, no source)."""


def _print_contrast(sweep: Sweep) -> tuple[float, float]:
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


def _star_data(sighting: Sighting, stop: int, scale: int, common: tuple[float, float]) -> AmplitudeData:
    """A star's rings, as transfer by its own level at zero frequency; the error of that level is the scale's."""
    assert sighting.star is not None
    assert sighting.star.rings is not None
    assert sighting.star_curve is not None
    rings, curve = sighting.star.rings, sighting.star_curve
    ratio, ratio_u = (curve.ratio, curve.ratio_u) if curve.surround else common
    unit = SQUARE_WAVE * ratio * float(np.median(rings.level))
    order = np.argsort(rings.v_cy_px)
    view = View(stop, sighting.site.target, None)
    value, u = curve.turned * rings.signed[order] / unit, rings.u[order] / unit
    return AmplitudeData(view, rings.v_cy_px[order], value, u, scale, 0.0, max(ratio_u / ratio, 2e-3))


def _bars_data(sighting: Sighting, stop: int, scale: int, common: tuple[float, float]) -> AmplitudeData:
    """A set of bars, as transfer for the station's common print contrast, or for the print's own where it is stated."""
    bars, stated = sighting.bars, sighting.site.spec.modulation
    assert bars is not None
    ratio, ratio_u = common if stated == 1.0 else (stated, PRINT_LN_U * stated)
    value, u = (np.array([c / (SQUARE_WAVE * ratio)]) for c in bars.relative)
    sign = -1.0 if sighting.bars_reversed else 1.0
    view = View(stop, sighting.site.target, bars.direction_deg)
    u = np.hypot(u, BARS_FLOOR * value)
    ln_u = float(np.hypot(ratio_u / ratio, PRINT_LN_U))
    return AmplitudeData(view, np.array([bars.v_cy_px]), sign * value, u, scale, 0.0, ln_u)


BARS_FLOOR = 0.003


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


def places_of(station: Station, directions: Mapping[tuple[int, int], float]) -> list[Place]:
    """The places that the choice must serve: every sharpness patch, and the depths between where a range is stated.

    directions: of the frequencies that each patch (target, patch) speaks for, degrees; 0 where none is known.
    """
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


SHARPNESS_KINDS = ("edge", "star", "bars")


def _place(station: Station, name: str, depth_mm: float, target: int, direction: float | None) -> Place:
    return Place(
        name, depth_mm, station.feature_cy_px_at(depth_mm), station.object_um_per_px_at(depth_mm), target, direction
    )


def _directions(sweep: Sweep) -> dict[tuple[int, int], float]:
    """Direction of the frequencies that each edge or set of bars speaks for, from its sound sightings."""
    out: dict[tuple[int, int], float] = {}
    for s in sweep.sightings:
        if s.ok and s.edge is not None and s.edge.curve is not None:
            out[s.site.target, s.site.patch] = s.edge.curve.direction_deg
        elif s.ok and s.bars is not None:
            out[s.site.target, s.site.patch] = s.bars.direction_deg
    return out


def _contrasts(sweep: Sweep, readings: Sequence[Reading], places: Sequence[Place]) -> tuple[Floats, Floats]:
    """The readings' signed contrasts and their u, (stops, places), NaN where there is none."""
    shape = (len(sweep.stops), len(places))
    value, u = np.full(shape, np.nan), np.full(shape, np.nan)
    column = _columns(sweep)
    for sighting, reading in zip(sweep.sightings, readings, strict=True):
        key = (sighting.site.target, sighting.site.patch)
        if reading.contrast_at_feature is None or reading.contrast_at_feature_u is None or key not in column:
            continue
        k = sweep.stops.index(sighting.stop)
        value[k, column[key]] = reading.contrast_at_feature * (-1.0 if reading.reversed else 1.0)
        u[k, column[key]] = reading.contrast_at_feature_u
    return value, u


def _columns(sweep: Sweep) -> dict[tuple[int, int], int]:
    """Column of each sharpness patch among the places."""
    keys = sorted({(s.site.target, s.site.patch) for s in sweep.sightings if s.kind in SHARPNESS_KINDS})
    return {key: i for i, key in enumerate(keys)}


def _evidence(sweep: Sweep, light: Light, fit: LensFit | None, station: Station) -> list[StopEvidence]:
    """What light and readings say of each stop."""
    tones = _tones(sweep, light, fit, station)
    out = []
    for k, stop in enumerate(sweep.stops):
        here = sweep.at(stop)
        known = bool(np.isfinite(light.f_number[k]))
        tone = tones[k]
        swept = max((s for s in here if s.ok), key=lambda s: float(s.exposures.max()), default=None)
        out.append(
            StopEvidence(
                stop=stop,
                f_number_by_light=float(light.f_number[k]) if known else None,
                f_number_by_light_u=float(light.u[k]) if known else None,
                tone_per_ms=tone / sweep.scale.span_dn if tone is not None else None,
                sound=_sound(here, fit, station),
                snr_swept_db=_snr_swept_db(here, tone),
                exposure_swept_ms=float(swept.exposures.max()) if swept is not None else None,
                frames=max((s.frames for s in here), default=0),
            )
        )
    return out


def _sound(here: Sequence[Sighting], fit: LensFit | None, station: Station) -> bool:
    """Whether a stop may be recommended: nothing clipped or too dark, and each target read, or told by the model.

    A target that is blurred beyond its region can't be read, however often it is taken again; there the model speaks.
    """
    sharp = [s for s in here if s.kind in SHARPNESS_KINDS]
    if any(code in s.why_not for s in sharp for code in ("frames-saturated", "low-signal")):
        return False
    told = {s.site.target for s in sharp if s.ok}
    return bool(told) and (fit is not None or told == set(range(len(station.targets))))


def _snr_swept_db(here: Sequence[Sighting], tone: float | None) -> float | None:
    """Signal to noise of one pixel at the light tone as swept: the brightest even area's, by root of light."""
    points = [
        (p, s)
        for s in here
        if s.saturated_fraction <= CLIPPED_SHARE
        for p in s.noise
        if p.variance_dn2 > 0 and p.mean_dn > 0
    ]
    if not points or tone is None:
        return None
    point, sighting = max(points, key=lambda pair: pair[0].mean_dn)
    light = tone * float(sighting.exposures.max())
    return float(20.0 * np.log10(point.mean_dn / np.sqrt(point.variance_dn2)) + 10.0 * np.log10(light / point.mean_dn))


def _tones(sweep: Sweep, light: Light, fit: LensFit | None, station: Station) -> list[float | None]:
    """The light tone per ms (linear DN) at each stop: its brightest unclipped patch's, else by the light's ratio."""
    direct: list[float | None] = []
    for stop in sweep.stops:
        here = [(s, _tone(sweep, s, fit)) for s in sweep.at(stop)]
        tones = [t for s, t in here if s.ok and t is not None]
        complete = all(s.ok or "frames-saturated" not in s.why_not for s, _ in here)
        direct.append(max(tones) if tones and complete else None)
    known = [(k, t) for k, t in enumerate(direct) if t is not None]
    out = list(direct)
    for k, tone in enumerate(direct):
        if tone is None and known:
            near, near_tone = min(known, key=lambda pair: abs(pair[0] - k))
            f, g = (float(light.f_number[i]) if np.isfinite(light.f_number[i]) else sweep.stops[i] for i in (near, k))
            out[k] = near_tone * (f / g) ** 2
    return out


def _tone(sweep: Sweep, sighting: Sighting, fit: LensFit | None) -> float | None:
    """A patch's light tone per ms: of an edge or flat as measured; of a star or bars their level and print contrast."""
    if sighting.tone_per_ms is not None:
        return sighting.tone_per_ms
    if sighting.star is not None and sighting.star.rings is not None and sighting.star_curve is not None:
        return float(np.median(sighting.star.rings.level)) * (1.0 + sighting.star_curve.ratio)
    if sighting.bars is not None and sighting.bars.ok:
        stated = sighting.site.spec.modulation
        contrast = _print_contrast(sweep)[0] if stated == 1.0 else stated
        if fit is not None:
            scale = f"scale {_columns(sweep)[sighting.site.target, sighting.site.patch]}"
            contrast *= float(np.exp(fit.value(scale)[0])) if scale in fit.names else 1.0
        return sighting.bars.level * (1.0 + min(contrast, 1.0))
    return None


def _camera(sweep: Sweep) -> CameraNoise:
    """The camera's figures for the choice, per linear DN whatever the response; dark noise as it comes."""
    transfer = sweep.photon_transfer
    full = int(sweep.scale.full_dn)
    if transfer is None:
        return CameraNoise(None, None, sweep.black.level_dn, full)
    gain = 1.0 / transfer.dn_per_electron
    gain_u = gain * transfer.dn_per_electron_u / transfer.dn_per_electron
    dark = float(np.sqrt(transfer.dark_variance_dn2))
    dark_u = transfer.dark_variance_dn2_u / (2.0 * dark) if dark > 0 else 0.0
    read_u = float(np.hypot(gain * dark_u, dark * gain_u))
    return CameraNoise(gain, gain * dark, sweep.black.level_dn, full, gain_u, read_u)


def _public_camera(camera: CameraNoise, sweep: Sweep, station: Station) -> CameraNoise:
    """The same for the result: no electrons where the response is not linear, no dark noise that rounding hides."""
    if station.camera.response != "linear" or sweep.photon_transfer is None:
        return replace(camera, electrons_per_dn=None, read_noise_e=None, electrons_per_dn_u=None, read_noise_e_u=None)
    if sweep.photon_transfer.dark_noise_dn is None:
        return replace(camera, read_noise_e=None, read_noise_e_u=None)
    return camera


def _with_model(
    sweep: Sweep, readings: Sequence[Reading], found: Estimate, fit: LensFit | None, station: Station
) -> list[Reading]:
    """The readings with the model's figures beside them."""
    if fit is None or found.model is None or found.model_u is None:
        return list(readings)
    column = _columns(sweep)
    keyed = [
        (i, sweep.stops.index(s.stop), column[(s.site.target, s.site.patch)])
        for i, s in enumerate(sweep.sightings)
        if (s.site.target, s.site.patch) in column
    ]
    places = [found.outlook.places[c] for _, _, c in keyed]
    views = [View(k, p.target, p.direction_deg) for (_, k, _), p in zip(keyed, places, strict=True)]
    depths = np.array([p.depth_mm for p in places])
    halves = half_modulation(fit, views, depths)
    out = list(readings)
    for (i, k, c), half in zip(keyed, halves, strict=True):
        best, u = found.outlook.contrast[k, c], found.outlook.draws[:, k, c].std()
        out[i] = replace(
            out[i],
            model_contrast=float(abs(best)),
            model_contrast_u=float(u),
            model_mtf50_cy_px=half[0] if half else None,
            model_mtf50_cy_px_u=half[1] if half else None,
        )
    return out


def lens_model(
    fit: LensFit | None, lens: FittedLens | None, places: Sequence[Place], stop: float | None, stops: Sequence[float]
) -> LensModel:
    """The fitted lens in the terms of the trade.

    Spherical aberration is positive where marginal rays focus short. Best focus is the depth that is sharpest at the
    recommended stop, at the mean frequency of the feature.
    """
    if fit is None or lens is None:
        return LensModel(None, None, None, None)
    bench, widest = fit.bench, float(fit.light.f_number.min())
    w040, w040_u = fit.value("w040")
    w060, w060_u = fit.value("w060")
    blur2, blur2_u = fit.value("blur2")
    blur = float(np.sqrt(max(blur2, 0.0)))
    focus = lens.best_depth_mm(stops.index(stop), places) if stop is not None else fit.value("focus")[0]
    colour, colour_u = (c * bench.wave_um(widest) / bench.rms_nm for c in fit.value("colour"))
    return LensModel(
        best_focus_mm=focus,
        spherical_waves=-w040,
        blur_px=blur,
        reduced_chi2=fit.reduced_chi2,
        best_focus_mm_u=fit.value("focus")[1],
        spherical_waves_u=w040_u,
        blur_px_u=blur2_u / (2.0 * blur) if blur > 0 else None,
        sixth_order_waves=-w060,
        sixth_order_waves_u=w060_u,
        colour_um_per_nm=colour,
        colour_um_per_nm_u=colour_u,
        widest_f_number=widest,
        wavelength_nm=bench.wavelength_nm,
        focal_length_mm=bench.focal_length_mm,
        magnification=bench.magnification,
        pixel_pitch_um=bench.pixel_pitch_um,
    )


def model_curve(found: Estimate) -> tuple[CurvePoint, ...]:
    """The worst patch of each target along the model's curve, for the plot."""
    outlook, places = found.outlook, found.outlook.places
    if outlook.curve is None or outlook.curve_f_numbers is None or outlook.curve_draws is None:
        return ()
    points = []
    for name in dict.fromkeys(p.name for p in places):
        mine = [i for i, p in enumerate(places) if p.name == name]
        worst = np.array(mine)[np.argmin(outlook.curve[:, mine], axis=1)]
        for g, (f, c) in enumerate(zip(outlook.curve_f_numbers, worst, strict=True)):
            u = float(outlook.curve_draws[:, g, c].std())
            points.append(CurvePoint(name, float(f), float(max(outlook.curve[g, c], 0.0)), u))
    return tuple(points)
