"""The one path: frames in, a Result out. It cannot tell where the frames came from.

places        the places that the choice must serve
lens_fit      from sightings to the fitted lens
evidence      what light and pixels say of each stop
lens_figures  the fitted lens in a result
"""

import numpy as np

from sweep.analyse.evidence import camera_noise, evidence_of, public_noise
from sweep.analyse.lens_figures import lens_model, model_curve, with_model
from sweep.analyse.lens_fit import fit_of
from sweep.analyse.places import contrasts_of, directions_of, places_of
from sweep.choose import choose, depth_map
from sweep.figures import reading_of
from sweep.frames import Source
from sweep.light import light_of
from sweep.notices import notices
from sweep.outlook import FittedLens, estimate
from sweep.readings import Progress, measure_sweep
from sweep.result import Result, SourceFacts
from sweep.station import Station

__all__ = ["SEED", "analyse", "lens_model", "model_curve", "places_of"]

SEED = 20230117
"""Of the generator behind the chances; fixed, so that the same source gives the same bytes."""


def analyse(source: Source, station: Station, progress: Progress | None = None) -> Result:
    """Analyse a sweep: measure, fit, choose.

    `progress` is told (frames done, frames in all). Raises the reader's and the station's errors.
    """
    places_of(station, {})  # a station that tells no contrast is refused before its frames are read
    sweep = measure_sweep(source, station, progress)
    light = light_of(sweep)
    readings = [reading_of(s, station) for s in sweep.sightings]
    fit = fit_of(sweep, light, station)
    places = places_of(station, directions_of(sweep))
    rng = np.random.default_rng(SEED)
    contrast, contrast_u = contrasts_of(sweep, readings, places)
    found = estimate(places, contrast, contrast_u, fit, rng)
    evidence = evidence_of(sweep, light, fit, station)
    camera = camera_noise(sweep)
    lens = FittedLens(fit, found.discrepancy.deviation) if fit is not None else None
    compressed = any(note.code == "compressed-source" for note in source.notes)
    noticed = notices(sweep, readings, light, fit, found.discrepancy, station, compressed)
    recommendation, stops, notes = choose(station, evidence, camera, found.outlook, lens)
    return Result(
        recommendation,
        stops,
        tuple(with_model(sweep, readings, found, fit, station)),
        public_noise(camera, sweep, station),
        lens_model(fit, lens, places, recommendation.stop, sweep.stops),
        (*source.notes, *noticed, *notes),
        SourceFacts(sweep.frames, source.sha256),
        model_curve(found),
        depth_map(station, stops, lens, places) if lens is not None else None,
    )
