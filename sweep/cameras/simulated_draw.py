"""Random simulated stations, for trials over many lenses, cameras and depths.

The ranges are those of common machine-vision lenses and sensors (common practice, no source).
"""

import math
from dataclasses import replace
from typing import Literal

import numpy as np

from sweep.cameras.simulated import exposure_for
from sweep.cameras.simulated_lens import SimulatedLens
from sweep.cameras.simulated_print import Print
from sweep.cameras.simulated_scene import SimulatedStation
from sweep.station import Camera, Layout, Lens, Need, Patch, Scene, Station, StationName, Target

Kind = Literal["edge", "star", "bars"]

MARKS = (1.4, 1.8, 2.0, 2.8, 4.0, 5.6, 8.0, 11.0, 16.0, 22.0)
SIZE_PX = (480, 330)
NAMES = ("tray floor", "cap rim", "cap top")


def draw(
    rng: np.random.Generator, kind: Kind = "edge", layout: Layout = "mono", bit_depth: int = 12
) -> tuple[Station, SimulatedStation]:
    """One random station and the truth behind it: three targets at three depths, each with two patches and a flat."""
    stops = _stops(rng)
    focal_mm = float(rng.choice([12.0, 16.0, 25.0, 35.0, 50.0]))
    pitch_um = float(rng.choice([2.74, 3.45, 5.86]))
    magnification = math.exp(rng.uniform(math.log(0.02), math.log(0.2)))
    wavelength_nm = float(rng.choice([450.0, 530.0, 590.0, 630.0, 850.0]))
    lens = SimulatedLens(
        focal_length_mm=focal_mm,
        magnification=magnification,
        widest_stop=stops[0],
        wavelength_nm=wavelength_nm,
        bandwidth_nm=float(rng.choice([0.0, 30.0])),
        pupil_magnification=float(rng.choice([0.85, 1.0, 1.0, 1.2])),
        w040_waves=rng.uniform(0, 1.8),
        w060_waves=rng.normal(0, 0.12),
    )
    depths_mm, offset_mm = _depths(rng, lens)
    lens = replace(lens, focus_offset_mm=offset_mm)
    blur_px = rng.uniform(0.15, 0.42)
    full_e = math.exp(rng.uniform(math.log(6000), math.log(20000)))
    black_dn = float(rng.integers(0, 80)) if bit_depth > 8 else float(rng.integers(0, 4))
    electrons_per_dn = full_e / (2**bit_depth - 1 - black_dn)
    exposure_ms = math.exp(rng.uniform(math.log(0.15), math.log(1.2)))
    sim = SimulatedStation(
        size_px=SIZE_PX,
        lens=lens,
        prints=tuple(_prints(rng) for _ in NAMES),
        ring=tuple(float(v) for v in np.exp(rng.normal(0, 0.02, len(stops)))),
        light_e_ms=full_e * stops[0] ** 2 / exposure_ms,
        electrons_per_dn=electrons_per_dn,
        read_noise_e=rng.uniform(3, 8),
        blur_px=blur_px,
        lamp_drift=rng.uniform(-0.02, 0.02),
    )
    station = Station(
        station=StationName(name="Vial cap station, a random draw"),
        lens=Lens(focal_length_mm=focal_mm, stops=stops, pupil_magnification=lens.pupil_magnification),
        camera=Camera(pixel_pitch_um=pitch_um, bit_depth=bit_depth, layout=layout, black_level_dn=black_dn),
        scene=Scene(
            object_um_per_px=pitch_um / magnification, wavelength_nm=wavelength_nm, bandwidth_nm=lens.bandwidth_nm
        ),
        targets=_targets(rng, kind, depths_mm, pitch_um / magnification),
        need=Need(feature_um=1, contrast=0.2, level=0.7),
    )
    return station.model_copy(update={"need": _need(rng, station, sim)}), sim


def _stops(rng: np.random.Generator) -> tuple[float, ...]:
    widest = float(rng.choice([1.4, 1.8, 2.0, 2.8]))
    following = [mark for mark in MARKS if mark > widest * 1.3]
    return (widest, *following[: int(rng.integers(5, 8))])


def _depths(rng: np.random.Generator, lens: SimulatedLens) -> tuple[tuple[float, ...], float]:
    """Depths of three targets that put the outer ones 1.5 to 9 waves out of focus at the widest stop, and the focus."""
    waves = math.exp(rng.uniform(math.log(1.5), math.log(9)))
    per_mm_um = abs(lens.wavefront(lens.widest_stop, 0.5, lens.wavelength_nm).defocus_um) * 2
    span_mm = waves * lens.wavelength_nm / 1000 / per_mm_um
    depths = (-span_mm * rng.uniform(0.4, 1), span_mm * rng.uniform(-0.2, 0.2), span_mm * rng.uniform(0.4, 1))
    return tuple(round(float(depth), 2) for depth in depths), round(span_mm * rng.uniform(-0.25, 0.25), 3)


def _prints(rng: np.random.Generator) -> tuple[Print, ...]:
    dark, light = rng.uniform(0.04, 0.12), rng.uniform(0.8, 0.95)
    patches = [
        Print(float(rng.choice([-1, 1]) * rng.uniform(3, 9)), dark, light, bool(rng.integers(2))) for _ in range(2)
    ]
    return (*patches, Print(light=rng.uniform(0.3, 0.6)))


def _targets(
    rng: np.random.Generator, kind: Kind, depths_mm: tuple[float, ...], object_um_per_px: float
) -> tuple[Target, ...]:
    targets = []
    for place, (name, depth_mm) in enumerate(zip(NAMES, depths_mm, strict=True)):
        left = 24 + 154 * place
        upper, lower = (left, 20, 64, 88), (left, 136, 88, 64)
        patches: tuple[Patch, ...]
        match kind:
            case "edge":
                patches = (Patch(kind="edge", region=upper), Patch(kind="edge", region=lower))
            case "star":
                patches = tuple(
                    Patch(kind="star", region=(left, y, 104, 104), cycles=int(rng.choice([24, 36, 48])))
                    for y in (20, 148)
                )
            case "bars":
                patches = tuple(
                    Patch(kind="bars", region=region, period_um=round(object_um_per_px * rng.uniform(4, 12), 1))
                    for region in (upper, lower)
                )
        flat = Patch(kind="flat", region=(left, 232 if kind != "star" else 280, 48, 48 if kind != "star" else 36))
        targets.append(Target(name=name, depth_mm=depth_mm, patches=(*patches, flat)))
    return tuple(targets)


def _need(rng: np.random.Generator, station: Station, sim: SimulatedStation) -> Need:
    level = round(rng.uniform(0.55, 0.85), 2)
    middle = station.lens.stops[len(station.lens.stops) // 2]
    return Need(
        feature_um=round(station.scene.object_um_per_px / (2 * rng.uniform(0.08, 0.3)), 1),
        contrast=round(rng.uniform(0.15, 0.35), 2),
        level=level,
        max_exposure_ms=round(exposure_for(station, sim, middle, level) * math.exp(rng.uniform(-0.3, 2)), 3),
        max_gain_db=float(rng.choice([0.0, 6.0, 12.0])),
    )
