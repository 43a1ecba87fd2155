"""Sweeps of the simulated station, with the exact answers to them.

Images are formed by another route than the lens model's (see simulated_lens.py and simulated_print.py). The
invented scene is a lane that inspects vial caps. Nothing real was measured for it.
"""

import hashlib
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from sweep.cameras.simulated_print import Optics, Print, normal_deg
from sweep.cameras.simulated_scene import (
    SHARPEN_SIGMA_PX,
    Floats,
    Scene,
    SimulatedStation,
    bits,
    full_scale_dn,
    lamp_at,
    light_tone,
)
from sweep.frames import Pixels, Shot
from sweep.result import Note
from sweep.station import Station, Target

STAR_DIRECTIONS = 24
SECONDS_PER_STOP = 6.0


@dataclass(frozen=True, slots=True)
class TruePatch:
    """What one patch would read without noise: signed contrast at the feature, MTF50 (None beyond 1 cycle/px)."""

    target: str
    patch: int
    contrast_at_feature: float
    reversed: bool
    mtf50_cy_px: float | None


@dataclass(frozen=True, slots=True)
class TrueStop:
    """What holds at one stop; exposure and SNR at the needed level and 0 dB, the f-number scaled to the widest mark."""

    stop: float
    true_f_number: float
    f_number_by_light: float
    exposure_ms: float
    snr_db: float
    worst_contrast: float
    patches: tuple[TruePatch, ...]


def station_truth(station: Station, sim: SimulatedStation) -> tuple[TrueStop, ...]:
    """The exact answers to a sweep of this station, stop by stop."""
    widest = station.lens.stops[0] * sim.ring[0]
    return tuple(
        _true_stop(station, sim, stop, stop * ring, stop * ring / widest * station.lens.stops[0])
        for stop, ring in zip(station.lens.stops, sim.ring, strict=True)
    )


def transfer_along(
    station: Station, sim: SimulatedStation, f_number: float, depth_mm: float, cy_px: Floats, *directions_deg: float
) -> NDArray[np.complex128]:
    """Complex transfer, camera and sharpening included, along some directions (rows); cycles per pixel."""
    optics = Optics(sim.lens, station.camera.pixel_pitch_um, sim.blur_px, f_number, depth_mm)
    sharpened = 1 + sim.sharpening * (1 - np.exp(-2 * (math.pi * SHARPEN_SIGMA_PX * cy_px) ** 2))
    return np.asarray(optics.transfer(cy_px, *directions_deg) * sharpened, dtype=np.complex128)


def exposure_for(station: Station, sim: SimulatedStation, f_number: float, level: float) -> float:
    """Exposure, ms, that brings the light tone to `level` of full scale less black, at 0 dB."""
    span_dn = full_scale_dn(station) - station.camera.black_level_dn
    return level * span_dn * sim.electrons_per_dn * f_number * f_number / (sim.light_e_ms * light_tone(sim))


def _true_stop(station: Station, sim: SimulatedStation, stop: float, f_number: float, by_light: float) -> TrueStop:
    patches = tuple(
        _true_patch(station, sim, f_number, target, index, sim.prints[place][index])
        for place, target in enumerate(station.targets)
        for index, patch in enumerate(target.patches)
        if patch.kind != "flat"
    )
    level = station.need.level
    electrons = level * (full_scale_dn(station) - station.camera.black_level_dn) * sim.electrons_per_dn
    noise_e = math.sqrt(electrons + sim.read_noise_e**2 + sim.electrons_per_dn**2 / 12)
    return TrueStop(
        stop=stop,
        true_f_number=f_number,
        f_number_by_light=by_light,
        exposure_ms=exposure_for(station, sim, f_number, level),
        snr_db=20 * math.log10(electrons / noise_e),
        worst_contrast=min((0.0 if p.reversed else p.contrast_at_feature for p in patches), default=0.0),
        patches=patches,
    )


def _true_patch(
    station: Station, sim: SimulatedStation, f_number: float, target: Target, index: int, print_: Print
) -> TruePatch:
    patch = target.patches[index]
    cy_px = np.concatenate([[_feature_cy_px(station, sim, target)], np.arange(0, 1.0005, 0.001)])
    crossed = patch.kind in ("edge", "bars")
    directions = [normal_deg(patch, print_)] if crossed else [d * 180 / STAR_DIRECTIONS for d in range(STAR_DIRECTIONS)]
    curves = transfer_along(station, sim, f_number, target.depth_mm, cy_px, *directions)
    modulus, signed = np.abs(curves).mean(axis=0), float(curves[:, 0].real.mean())
    below = np.flatnonzero(modulus[1:] < 0.5)
    mtf50 = None
    if below.size:
        k = int(below[0])
        upper, lower = modulus[k], modulus[k + 1]
        mtf50 = float(cy_px[k] + 0.001 * (upper - 0.5) / (upper - lower))
    return TruePatch(target.name, index, float(modulus[0]), signed < 0, mtf50)


def _feature_cy_px(station: Station, sim: SimulatedStation, target: Target) -> float:
    return station.scene.object_um_per_px * sim.lens.scale(target.depth_mm) / (2 * station.need.feature_um)


@dataclass(frozen=True)
class RenderedSweep:
    """A sweep in memory: a source of frames like a folder of files."""

    shots: Sequence[Shot]
    frames: dict[str, Pixels]
    bit_depth: int
    notes: Sequence[Note] = field(default=())

    @cached_property
    def sha256(self) -> str:
        """One hash over all shots and frames."""
        digest = hashlib.sha256()
        for shot in sorted(self.shots, key=lambda s: s.file):
            digest.update(repr(shot).encode() + self.frames[shot.file].tobytes())
        return digest.hexdigest()

    def read(self, shot: Shot) -> Pixels:
        """The pixels of one shot."""
        return self.frames[shot.file]


def render_sweep(
    station: Station,
    sim: SimulatedStation,
    rng: np.random.Generator,
    frames: int = 2,
    darks: int = 0,
    level: float = 0.65,
) -> RenderedSweep:
    """A sweep of the simulated station, widest stop first, darks last; the light tone near `level` at every stop."""
    pixels: dict[str, Pixels] = {}
    shots: list[Shot] = []
    for shot, frame in _taken(station, sim, rng, frames, darks, level):
        shots.append(shot)
        pixels[shot.file] = frame
    return RenderedSweep(tuple(shots), pixels, bits(station))


def write_sweep(sweep: RenderedSweep, folder: Path) -> None:
    """Write a rendered sweep as a loose folder: images and shots.csv, no station file."""
    folder.mkdir(parents=True, exist_ok=True)
    rows = ["file,stop,exposure_ms,gain_db,role,time_s"]
    for shot in sweep.shots:
        cv2.imwrite(str(folder / shot.file), sweep.read(shot))
        stop = "" if shot.stop is None else f"{shot.stop:g}"
        rows.append(f"{shot.file},{stop},{shot.exposure_ms:g},{shot.gain_db:g},{shot.role},{shot.time_s}")
    (folder / "shots.csv").write_text("\n".join(rows) + "\n", encoding="utf-8")


def _taken(
    station: Station, sim: SimulatedStation, rng: np.random.Generator, frames: int, darks: int, level: float
) -> Iterator[tuple[Shot, Pixels]]:
    scene = Scene(station, sim, rng)
    order = 0
    for place, (stop, ring) in enumerate(zip(station.lens.stops, sim.ring, strict=True)):
        exposure_ms = round_exposure(exposure_for(station, sim, stop * ring, level), sim.exposure_step_ms)
        for number in range(frames):
            time_s = place * SECONDS_PER_STOP + number / sim.frame_rate_hz
            lamp = lamp_at(sim, time_s, exposure_ms)
            shift = tuple(float(v) for v in sim.vibration_px * rng.standard_normal(2))
            frame = scene.expose(stop * ring, exposure_ms, 0.0, rng, lamp, (shift[0], shift[1]))
            yield Shot(f"f{stop:g}_{number}.png", stop, exposure_ms, 0.0, "target", order, None, time_s), frame
            order += 1
    for number in range(darks):
        time_s = len(station.lens.stops) * SECONDS_PER_STOP + number / sim.frame_rate_hz
        frame = scene.expose(station.lens.stops[-1], exposure_ms, 0.0, rng, lamp=0.0)
        yield Shot(f"dark_{number}.png", None, exposure_ms, 0.0, "dark", order, None, time_s), frame
        order += 1


def round_exposure(exposure_ms: float, step_ms: float) -> float:
    """The nearest exposure that the simulated camera can be set to, at least one step."""
    return round(max(1, round(exposure_ms / step_ms)) * step_ms, 6)
