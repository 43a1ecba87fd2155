"""Small sweeps of the simulated station, and what goes wrong with them, for the tests of readings, notices and answers.

The station is invented, its frames are small, its lens is the one of tests/lenses.py unless a test says otherwise.
"""

from dataclasses import replace
from functools import lru_cache

import numpy as np
from lenses import TRUTH

from sweep.cameras.simulated import RenderedSweep, Scene, SimulatedStation, exposure_for, render_sweep
from sweep.cameras.simulated_print import Print
from sweep.frames import Shot
from sweep.station import Station

STOPS = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0)
DEPTHS = (10.0, 0.0, -8.0)
NAMES = ("tray floor", "cap rim", "cap top")
FULL_WELL_E = 10_000.0


def a_lane(stops=STOPS, depths=DEPTHS, *, patches=None, camera=None, scene=None, lens=None, **need) -> Station:
    """The vial cap lane: one edge and one flat a target, in a frame of 80 x 170 px a target; `need` overrides keys."""
    wanted = {"feature_um": 180.0, "contrast": 0.2, "level": 0.7, "max_exposure_ms": 20.0}

    def of_target(k):
        x = 12 + 80 * k
        edge = {"kind": "edge", "region": [x, 14, 56, 72]}
        flat = {"kind": "flat", "region": [x, 112, 48, 36]}
        return [edge, flat] if patches is None else patches(x)

    return Station.model_validate(
        {
            "station": {"name": "Vial cap lane"},
            "lens": {"focal_length_mm": 16.0, "stops": list(stops)} | (lens or {}),
            "camera": {"pixel_pitch_um": 3.45, "bit_depth": 12, "black_level_dn": 64} | (camera or {}),
            "scene": {"object_um_per_px": 58.0, "wavelength_nm": 530.0, "bandwidth_nm": 30.0} | (scene or {}),
            "targets": [
                {"name": NAMES[k] if k < 3 else f"step {k}", "depth_mm": depth, "patches": of_target(k)}
                for k, depth in enumerate(depths)
            ],
            "need": wanted | need,
        }
    )


def a_truth(station, *, lens=TRUTH, wide_open_ms=0.3, size_px=None, **effects) -> SimulatedStation:
    """A sound station: no ring error, no drift, steady; `effects` override fields of SimulatedStation."""
    full_dn = station.full_scale_dn() - station.camera.black_level_dn
    right = max(p.region[0] + p.region[2] for t in station.targets for p in t.patches)
    bottom = max(p.region[1] + p.region[3] for t in station.targets for p in t.patches)
    tilts = iter([5.0, -4.0, 6.0, -7.0] * 8)
    sim = SimulatedStation(
        size_px=size_px or (right + 14, bottom + 14),
        lens=lens,
        prints=tuple(
            tuple(Print(light=0.5) if p.kind == "flat" else Print(tilt_deg=next(tilts)) for p in t.patches)
            for t in station.targets
        ),
        ring=tuple(1.0 for _ in station.lens.stops),
        light_e_ms=1.0,
        electrons_per_dn=FULL_WELL_E / full_dn,
        exposure_step_ms=0.001,
    )
    sim = replace(sim, **effects)
    fills_ms = exposure_for(station, sim, station.lens.stops[0], 1.0)
    return replace(sim, light_e_ms=fills_ms / wide_open_ms)


def a_sweep(station=None, *, seed=1, frames=3, darks=2, level=0.65, **effects) -> RenderedSweep:
    """A sweep of the lane, rendered; `effects` as in `a_truth`."""
    return _rendered(station or a_lane(), seed, frames, darks, level, tuple(sorted(effects.items())))


@lru_cache(maxsize=12)
def _rendered(station, seed, frames, darks, level, effects) -> RenderedSweep:
    rng = np.random.default_rng(seed)
    return render_sweep(station, a_truth(station, **dict(effects)), rng, frames, darks, level)


def with_frames(sweep: RenderedSweep, change, shots=None) -> RenderedSweep:
    """The sweep with `change(shot, pixels)` in place of each frame's pixels, and other rows where `shots` are given."""
    return RenderedSweep(
        tuple(shots if shots is not None else sweep.shots),
        {shot.file: change(shot, sweep.frames[shot.file]) for shot in sweep.shots},
        sweep.bit_depth,
        sweep.notes,
    )


def with_shots(sweep: RenderedSweep, change) -> RenderedSweep:
    """The sweep with `change(shot)` in place of each row; a row that becomes None is left out."""
    shots = [changed for shot in sweep.shots if (changed := change(shot)) is not None]
    return RenderedSweep(tuple(shots), sweep.frames, sweep.bit_depth, sweep.notes)


def shuffled(sweep: RenderedSweep, seed=0, *, renumbered=True) -> RenderedSweep:
    """The rows in another order; `renumbered`: counted anew, as a reader of the table would."""
    shots = list(sweep.shots)
    np.random.default_rng(seed).shuffle(shots)
    if renumbered:
        shots = [replace(shot, order=i) for i, shot in enumerate(shots)]
    return RenderedSweep(tuple(shots), sweep.frames, sweep.bit_depth, sweep.notes)


def with_notes(sweep: RenderedSweep, *notes) -> RenderedSweep:
    """The sweep with what its reader noticed."""
    return RenderedSweep(sweep.shots, sweep.frames, sweep.bit_depth, notes)


def with_stops_of(sweep: RenderedSweep, other: RenderedSweep, chosen) -> RenderedSweep:
    """The sweep with the frames of another one at the stops for which `chosen(stop)` holds."""
    return with_frames(
        sweep, lambda shot, pixels: other.frames[shot.file] if shot.stop and chosen(shot.stop) else pixels
    )


def scaled(sweep: RenderedSweep, factor, black_dn=64.0) -> RenderedSweep:
    """Each 12-bit frame's light times `factor(shot)`: a number, or an array over the frame."""
    return with_frames(
        sweep,
        lambda shot, pixels: (
            np.clip(black_dn + (pixels - black_dn) * factor(shot), 0, 4095).round().astype(np.uint16)
            if shot.role == "target"
            else pixels
        ),
    )


def at_exposures(station, factors, *, level=0.6, stops=None, **effects) -> RenderedSweep:
    """A sweep whose k-th frame of every stop, or of `stops`, is exposed `factors[k]` times as long."""
    sim, rng = a_truth(station, **effects), np.random.default_rng(4)
    scene, shots, frames = Scene(station, sim, rng), [], {}
    for stop in station.lens.stops:
        base_ms = exposure_for(station, sim, stop, level)
        for k, factor in enumerate(factors):
            longer = factor if stops is None or stop in stops else 1.0
            shot = Shot(f"f{stop:g}_{k}.png", stop, longer * base_ms, 0.0, "target", len(shots))
            shots.append(shot)
            frames[shot.file] = scene.expose(stop, shot.exposure_ms, 0.0, rng)
    return RenderedSweep(tuple(shots), frames, station.camera.bit_depth)


def with_camera(station, **keys) -> Station:
    """The station with some of its camera's keys changed."""
    return station.model_copy(update={"camera": station.camera.model_copy(update=keys)})
