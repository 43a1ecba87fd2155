"""Before any frame: what to expect of each stop, from the station file and an assumed lens."""

from dataclasses import replace

import numpy as np

from sweep.analyse import SEED, lens_model, model_curve, places_of
from sweep.choose import StopEvidence, choose, depth_map
from sweep.fit import LensFit, Problem, StopLight
from sweep.lens import Bench
from sweep.measure.linear import Floats
from sweep.outlook import FittedLens, estimate
from sweep.result import CameraNoise, Note, Result, SourceFacts, Stop
from sweep.station import Station

TYPICAL_W040_WAVES = (1.2, 0.6)
"""Spherical aberration of a fast lens, wide open at f/2 or faster, and its deviation (common practice, no source)."""
TYPICAL_COLOUR_WAVES = (0.3, 0.2)
TYPICAL_BLUR2_PX2 = (0.09, 0.05)
TYPICAL_FOCUS_WAVES = 0.15


def forecast(station: Station) -> Result:
    """The expected contrast of every stop and the best one, for a usual lens focused at depth 0.

    Exposures stay unknown until light has been measured: how they relate from stop to stop is said in the reasons. The
    result has no readings.
    """
    fit = _assumed_lens(station)
    places = places_of(station, {})
    nothing = np.full((len(station.lens.stops), len(places)), np.nan)
    found = estimate(places, nothing, nothing, fit, np.random.default_rng(SEED))
    lens = FittedLens(fit)
    evidence = [StopEvidence(stop, None, None, None, True) for stop in station.lens.stops]
    camera = CameraNoise(None, None, station.camera.black_level_dn, station.full_scale_dn())
    recommendation, stops, notes = choose(station, evidence, camera, found.outlook, lens)
    assumed = _assumptions(fit, station)
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


def _assumed_lens(station: Station) -> LensFit:
    """A usual lens as a fit with wide uncertainties."""
    stops = np.array(station.lens.stops)
    depths = np.array([t.depth_mm for t in station.targets])
    light = StopLight(stops, np.full(len(stops), 0.03))
    problem = Problem.of(Bench.of(station), depths, light, (), ())
    known = dict(zip(problem.names, problem.prior, strict=True))
    speed = min(1.0, (2.0 / float(stops.min())) ** 2)
    wave_mm = known["shift 0"][1] / 0.3
    known["focus"] = (0.0, TYPICAL_FOCUS_WAVES * wave_mm)
    known["w040"] = (-TYPICAL_W040_WAVES[0] * speed, TYPICAL_W040_WAVES[1] * speed)
    known["w060"] = (0.0, 0.1)
    known["colour"] = (TYPICAL_COLOUR_WAVES[0] * speed, TYPICAL_COLOUR_WAVES[1] * speed)
    known["blur2"] = TYPICAL_BLUR2_PX2
    theta, deviation = (np.array(c) for c in zip(*(known[name] for name in problem.names), strict=True))
    covariance: Floats = np.diag(deviation**2)
    return LensFit(problem.bench, depths, light, problem.names, theta, covariance, 1.0, np.zeros(0), ())


def _assumptions(fit: LensFit, station: Station) -> tuple[str, ...]:
    waves, blur = abs(fit.value("w040")[0]), float(np.sqrt(fit.value("blur2")[0]))
    return (
        f"Assumed: a usual lens with {waves:.1f} waves of spherical aberration at f/{min(station.lens.stops):g} that "
        f"goes as the fourth power of the aperture, {blur:.1f} px of sensor blur, focused at depth 0. A sweep "
        "measures yours.",
    )


def _light_between(station: Station) -> tuple[str, ...]:
    widest, smallest = min(station.lens.stops), max(station.lens.stops)
    return (
        f"Exposure isn't known before light is measured; it goes as the square of the f-number: f/{smallest:g} needs "
        f"{(smallest / widest) ** 2:.0f} times that of f/{widest:g}.",
    )
