"""Before any frame: what to expect of each stop, from the station file and a usual lens, or one found by a sweep."""

from dataclasses import replace

import numpy as np

from sweep.analyse import SEED, lens_model, model_curve, places_of
from sweep.choose import StopEvidence, choose, depth_map
from sweep.choose.wording import number
from sweep.errors import StationError
from sweep.fit import LensFit, Problem, StopLight
from sweep.fit.problem import OWN_FOCUS_WAVES
from sweep.lens import Bench
from sweep.measure.linear import Floats
from sweep.outlook import FittedLens, estimate
from sweep.result import CameraNoise, LensModel, Note, Result, SourceFacts, Stop
from sweep.station import Station

TYPICAL_W040_WAVES = (1.2, 0.6)
"""Spherical aberration of a fast lens, wide open at f/2 or faster, and its deviation (common practice, no source)."""
TYPICAL_COLOUR_WAVES = (0.3, 0.2)
TYPICAL_BLUR2_PX2 = (0.09, 0.05)
TYPICAL_FOCUS_WAVES = 0.15
ALIKE = 0.02
"""Focal lengths, magnifications and pixels that differ by less are the same: as well as they are usually known."""
CARRIED_SHARE, CARRIED_FAR_SHARE = 0.05, 0.2
"""What a lens's errors may change by in another mounting, and at another distance (common practice, no source)."""


def forecast(station: Station, earlier: LensModel | None = None) -> Result:
    """The expected contrast of every stop and the best one, for a lens focused at depth 0.

    `earlier` is the lens as a sweep has found it, there or at another station; a usual lens without it. Exposures stay
    unknown until light has been measured: how they relate from stop to stop is said in the reasons. The result has no
    readings. Raises StationError where `earlier` is of another lens or holds no model.
    """
    known = _usual(station) if earlier is None else _found(earlier, station)
    fit = _assumed_lens(station, known)
    places = places_of(station, {})
    nothing = np.full((len(station.lens.stops), len(places)), np.nan)
    found = estimate(places, nothing, nothing, fit, np.random.default_rng(SEED))
    lens = FittedLens(fit)
    evidence = [StopEvidence(stop, None, None, None, True) for stop in station.lens.stops]
    camera = CameraNoise(None, None, station.camera.black_level_dn, station.full_scale_dn())
    recommendation, stops, notes = choose(station, evidence, camera, found.outlook, lens)
    assumed = _assumptions(fit, station) if earlier is None else _carried_over(earlier, station)
    stops = tuple(_by_contrast(s, station) for s in stops)
    best = next((s for s in stops if s.stop == recommendation.stop), None)
    meets = best is not None and best.meets_need
    recommendation = replace(
        recommendation,
        meets_need=meets,
        shortfalls=() if meets else recommendation.shortfalls,
        reasons=(*recommendation.reasons, *assumed, *_light_between(station)),
    )
    model = lens_model(fit, lens, places, recommendation.stop, station.lens.stops)
    kept: tuple[Note, ...] = tuple(n for n in notes if n.code not in ("no-reading", "optimum-outside"))
    return Result(
        recommendation,
        stops,
        (),
        camera,
        model,
        kept,
        SourceFacts(0, ""),
        model_curve(found),
        depth_map(station, stops, lens, places),
    )


def _by_contrast(stop: Stop, station: Station) -> Stop:
    """A stop judged by its contrast alone: that its exposure is not known yet speaks neither for nor against it."""
    if "unproven" in stop.why_not and (stop.chance_meets or 0.0) >= station.need.confidence:
        return replace(stop, meets_need=True, why_not=tuple(c for c in stop.why_not if c != "unproven"))
    return stop


Known = dict[str, tuple[float, float]]
"""Parameters of the fit by name: what is known of each before any frame, and its u."""


def _usual(station: Station) -> Known:
    """A usual lens, with wide uncertainties."""
    speed = min(1.0, (2.0 / min(station.lens.stops)) ** 2)
    return {
        "w040": (-TYPICAL_W040_WAVES[0] * speed, TYPICAL_W040_WAVES[1] * speed),
        "w060": (0.0, 0.1),
        "colour": (TYPICAL_COLOUR_WAVES[0] * speed, TYPICAL_COLOUR_WAVES[1] * speed),
        "blur2": TYPICAL_BLUR2_PX2,
    }


def _found(earlier: LensModel, station: Station) -> Known:
    """The lens that a sweep has found, at this station's widest stop, wavelength and distance.

    An aberration of order 2 n goes as the pupil's radius to the 2 n, its path difference being the same at each
    wavelength (Hopkins, Wave Theory of Aberrations, 1950, from memory). The sensor's blur goes with the sensor.
    """
    _see_that_it_is_the_lens(earlier, station)
    known, bench, widest = _usual(station), Bench.of(station), min(station.lens.stops)
    radius = (earlier.widest_f_number or widest) / widest
    waves = (earlier.wavelength_nm or bench.wavelength_nm) / bench.wavelength_nm
    near = _alike(earlier.magnification, bench.magnification)
    share = CARRIED_SHARE if near else CARRIED_FAR_SHARE

    def carried(value: float, u: float | None, factor: float) -> tuple[float, float]:
        # What lies beyond the widest stop that was swept is only as sure as the power law.
        beyond = share * abs(value * factor) * max(radius**4, 1.0)
        return value * factor, float(np.hypot((u or 0.0) * factor, beyond))

    if earlier.spherical_waves is not None:
        known["w040"] = carried(-earlier.spherical_waves, earlier.spherical_waves_u, waves * radius**4)
    if earlier.sixth_order_waves is not None:
        known["w060"] = carried(-earlier.sixth_order_waves, earlier.sixth_order_waves_u, waves * radius**6)
    if earlier.colour_um_per_nm is not None:
        per_nm = bench.rms_nm / bench.wave_um(widest)
        known["colour"] = carried(earlier.colour_um_per_nm, earlier.colour_um_per_nm_u, per_nm)
    if earlier.blur_px is not None and _alike(earlier.pixel_pitch_um, bench.pixel_pitch_um):
        known["blur2"] = (earlier.blur_px**2, max(2.0 * earlier.blur_px * (earlier.blur_px_u or 0.0), BLUR2_FLOOR_PX2))
    return known


BLUR2_FLOOR_PX2 = 1e-4


def _see_that_it_is_the_lens(earlier: LensModel, station: Station) -> None:
    if earlier.spherical_waves is None:
        raise StationError("lens.model names a result without a lens model: name one that has spherical_waves.")
    if not _alike(earlier.focal_length_mm, station.lens.focal_length_mm):
        raise StationError(
            f"lens.model names a lens of {earlier.focal_length_mm:g} mm, but lens.focal_length_mm is "
            f"{station.lens.focal_length_mm:g}: name a result of this lens."
        )


def _alike(earlier: float | None, here: float) -> bool:
    """Whether two figures are the same as far as one knows; an unknown one is taken to be."""
    return earlier is None or abs(earlier / here - 1.0) < ALIKE


def _assumed_lens(station: Station, known: Known) -> LensFit:
    """A lens as a fit with what is known of it."""
    stops = np.array(station.lens.stops)
    depths = np.array([t.depth_mm for t in station.targets])
    light = StopLight(stops, np.full(len(stops), 0.03))
    problem = Problem.of(Bench.of(station), depths, light, (), ())
    prior = dict(zip(problem.names, problem.prior, strict=True))
    wave_mm = prior["shift 0"][1] / OWN_FOCUS_WAVES
    prior |= {"focus": (0.0, TYPICAL_FOCUS_WAVES * wave_mm)} | known
    theta, deviation = (np.array(c) for c in zip(*(prior[name] for name in problem.names), strict=True))
    covariance: Floats = np.diag(deviation**2)
    return LensFit(problem.bench, depths, light, problem.names, theta, covariance, 1.0, np.zeros(0), ())


def _assumptions(fit: LensFit, station: Station) -> tuple[str, ...]:
    waves, blur = abs(fit.value("w040")[0]), float(np.sqrt(fit.value("blur2")[0]))
    return (
        f"Assumed: a usual lens with {waves:.1f} waves of spherical aberration at f/{min(station.lens.stops):g} that "
        f"goes as the fourth power of the aperture, {blur:.1f} px of sensor blur, focused at depth 0. A sweep "
        "measures yours.",
    )


def _carried_over(earlier: LensModel, station: Station) -> tuple[str, ...]:
    widest, bench = min(station.lens.stops), Bench.of(station)
    swept = earlier.widest_f_number or widest
    found = f"{earlier.spherical_waves or 0.0:.2f} waves of spherical aberration at f/{number(swept)}"
    told = [f"Assumed: the lens as an earlier sweep found it, {found}, focused anew at depth 0."]
    if _alike(earlier.magnification, bench.magnification):
        if earlier.best_focus_mm is not None:
            told.append(f"That sweep found its best focus at {earlier.best_focus_mm:+.3g} mm.")
    else:
        told.append("It was swept at another distance, where its errors may differ somewhat.")
    if widest < swept / (1.0 + ALIKE):
        told.append(f"Its errors at stops wider than f/{number(swept)} are extrapolated.")
    if not _alike(earlier.pixel_pitch_um, bench.pixel_pitch_um):
        told.append("Its camera had other pixels, so a usual sensor blur is taken.")
    return (" ".join((*told, "A sweep here measures all of it.")),)


def _light_between(station: Station) -> tuple[str, ...]:
    widest, smallest = min(station.lens.stops), max(station.lens.stops)
    return (
        f"Exposure isn't known before light is measured; it goes as the square of the f-number: f/{smallest:g} needs "
        f"{(smallest / widest) ** 2:.0f} times that of f/{widest:g}.",
    )
