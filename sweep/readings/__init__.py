"""Frames x patches -> what each patch says at each stop, in one streaming pass.

    walk       the frames, stop by stop
    slots      frames cut to one patch, on linear light
    patch      one patch at one stop
    shared     what a patch's stops share
    sightings  the records

Frames are read stop by stop; of each only the patches are kept, on linear light per millisecond, so
that frames of several exposures and gains are pooled. Nothing here knows a lens formula.
"""

from sweep.errors import SourceError
from sweep.frames import Shot, Source
from sweep.measure.linear import Scale, sharpness_sites
from sweep.measure.noise import fit_photon_transfer
from sweep.readings.shared import with_bars_contrasts, with_shared_noise, with_star_curves, without_full_wells
from sweep.readings.sightings import CLIPPED_SHARE, CLIPPED_SHARE_FOR_LIGHT, PatchSite, Sighting, Sweep
from sweep.readings.walk import Progress, Walk
from sweep.station import Station

__all__ = ["CLIPPED_SHARE", "CLIPPED_SHARE_FOR_LIGHT", "Progress", "Sighting", "Sweep", "measure_sweep"]


def measure_sweep(source: Source, station: Station, progress: Progress | None = None) -> Sweep:
    """Measure every patch at every stop of a source.

    Frames are taken in an order that does not depend on the rows of the table; `progress` is told (frames done, all).
    Raises SourceError where there is nothing to measure, FrameError from the reader.
    """
    shots = sorted(source.shots, key=_canonical)
    by_stop: dict[float, list[Shot]] = {}
    for shot in shots:
        if shot.role == "target" and shot.stop is not None:
            by_stop.setdefault(shot.stop, []).append(shot)
    if not by_stop:
        raise SourceError("No target frames: shots.csv lists none with the role 'target'. Add frames of the targets.")
    walk = Walk(source, station, progress)
    black = walk.black([s for s in shots if s.role == "dark"])
    scale = Scale(black.level_dn, float(2**source.bit_depth - 1), station.camera.response)
    sites = [
        PatchSite(i, j, patch, sharpness_sites(station.camera.layout, patch.region))
        for i, target in enumerate(station.targets)
        for j, patch in enumerate(target.patches)
    ]
    sightings = [s for stop, group in by_stop.items() for s in walk.stop(stop, group, sites, scale)]
    sightings = with_bars_contrasts(with_star_curves(walk.look_again(sightings, scale)))
    if not any(note.code == "compressed-source" for note in source.notes):  # compression takes noise as it likes
        sightings = without_full_wells(sightings)
    lit = [p for s in sightings for p in s.noise if s.saturated_fraction < CLIPPED_SHARE]
    return Sweep(
        tuple(by_stop),
        tuple(with_shared_noise(sightings, lit)),
        black,
        scale,
        fit_photon_transfer([*lit, *black.noise]),
        len(shots),
        walk.identical(),
        walk.shape,
        tuple(walk.row_light),
        walk.idle_bits(),
    )


def _canonical(shot: Shot) -> tuple[object, ...]:
    stop = -1.0 if shot.stop is None else shot.stop
    time = shot.time_s if shot.time_s is not None else 0.0
    return (stop, shot.target or "", shot.exposure_ms, shot.gain_db, time, shot.file)
