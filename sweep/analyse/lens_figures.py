"""The fitted lens in a result: in the terms of the trade, beside the readings, and as a curve over f-number."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sweep.analyse.places import columns_of
from sweep.choose import Place
from sweep.fit import LensFit, View
from sweep.outlook import Estimate, FittedLens, half_modulation
from sweep.readings import Sweep
from sweep.result import CurvePoint, LensModel, Reading
from sweep.station import Station


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


def with_model(
    sweep: Sweep, readings: Sequence[Reading], found: Estimate, fit: LensFit | None, station: Station
) -> list[Reading]:
    """The readings with the model's figures beside them."""
    if fit is None or found.model is None or found.model_u is None:
        return list(readings)
    column = columns_of(sweep)
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
