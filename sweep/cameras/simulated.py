"""The simulated station: a lens, a camera, printed targets and a lamp, with all that real ones do to a sweep.

Images are formed by another route than the lens model's (see simulated_lens.py and simulated_print.py), then
counted as electrons: photon noise, read noise, pixel pattern, full wells, gain, black level, response, rounding.
The invented scene is a lane that inspects vial caps. Nothing real was measured for it.
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
from scipy.ndimage import gaussian_filter

from sweep.cameras.simulated_lens import SimulatedLens
from sweep.cameras.simulated_print import MARGIN_PX, Optics, Picture, Print, normal_deg, see_patch
from sweep.frames import Pixels, Shot
from sweep.result import Note
from sweep.station import Patch, Station, Target

Floats = NDArray[np.float64]
Plane = NDArray[np.float32]

BACKGROUND = 0.35  # reflectance of what lies around the cards
SOFT_RIM_PX = 4  # over which a card's own outline fades into the background
SHARPEN_SIGMA_PX = 1.0
STAR_DIRECTIONS = 24
SECONDS_PER_STOP = 6.0
KEPT_PICTURES = 24


@dataclass(frozen=True, slots=True)
class SimulatedStation:
    """What the station file does not tell: the truth behind one station. Effects at 0 are off.

    size_px: (width, height); prints: one a patch, by target; ring: true f-number over the mark, by stop;
    light_e_ms: electrons a pixel gathers in 1 ms from a white print at f/1; ripple, vibration, drift and play are
    amplitudes of the lamp's flicker, the frame's shift (px, rms), the lamp's warm-up and the ring's aim (relative).
    """

    size_px: tuple[int, int]
    lens: SimulatedLens
    prints: tuple[tuple[Print, ...], ...]
    ring: tuple[float, ...]
    light_e_ms: float
    electrons_per_dn: float
    read_noise_e: float = 5.0
    blur_px: float = 0.3
    pattern: float = 0.005
    full_well_e: float | None = None
    colour_bgr: tuple[float, float, float] = (0.7, 1.0, 0.8)
    exposure_step_ms: float = 0.01
    frame_rate_hz: float = 20.0
    lamp_drift: float = 0.0
    warm_up_s: float = 60.0
    ripple: float = 0.0
    ripple_hz: float = 100.0
    vibration_px: float = 0.0
    ring_play: float = 0.0
    sharpening: float = 0.0


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


def light_tone(sim: SimulatedStation) -> float:
    """Reflectance of the brightest print."""
    return max(print_.light for prints in sim.prints for print_ in prints)


def exposure_for(station: Station, sim: SimulatedStation, f_number: float, level: float) -> float:
    """Exposure, ms, that brings the light tone to `level` of full scale less black, at 0 dB."""
    span_dn = full_scale_dn(station) - station.camera.black_level_dn
    return level * span_dn * sim.electrons_per_dn * f_number * f_number / (sim.light_e_ms * light_tone(sim))


def bits(station: Station) -> int:
    """Significant bits of the simulated pixels."""
    return station.camera.bit_depth or 8


def full_scale_dn(station: Station) -> int:
    """The top code of the simulated pixels."""
    return (1 << bits(station)) - 1


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


class Scene:
    """The station as the sensor sees it; pictures of a stop are kept, since frames differ by noise alone."""

    def __init__(self, station: Station, sim: SimulatedStation, rng: np.random.Generator) -> None:
        self.station = station
        self.sim = sim
        width, height = sim.size_px
        self._pattern = 1 + np.float32(sim.pattern) * rng.standard_normal((height, width), dtype=np.float32)
        self._cards = [
            (
                target.depth_mm,
                patch,
                see_patch(patch, print_, station.scene.object_um_per_px * sim.lens.scale(target.depth_mm)),
            )
            for target, prints in zip(station.targets, sim.prints, strict=True)
            for patch, print_ in zip(target.patches, prints, strict=True)
        ]
        self._seen: dict[float, list[tuple[Patch, Picture]]] = {}
        self._still: dict[float, Plane] = {}

    def picture(self, f_number: float, dx: float = 0.0, dy: float = 0.0) -> Plane:
        """Light on the sensor over that from a white print, (rows, columns); the frame shifted by (dx, dy) px."""
        if dx == dy == 0 and f_number in self._still:
            return self._still[f_number]
        width, height = self.sim.size_px
        frame = np.full((height, width), BACKGROUND, np.float32)
        for patch, draw in self._drawn(f_number):
            _lay(frame, patch, draw(dx, dy))
        if dx == dy == 0:
            self._still[f_number] = frame
        return frame

    def expose(
        self,
        f_number: float,
        exposure_ms: float,
        gain_db: float,
        rng: np.random.Generator,
        lamp: float = 1.0,
        shift_px: tuple[float, float] = (0.0, 0.0),
        drawn_at: float | None = None,
    ) -> Pixels:
        """One frame, as the camera would hand it over; `lamp` = 0 is a capped lens.

        drawn_at: the f-number whose sharpness is shown, where it is another than that of the light.
        """
        sim, camera = self.sim, self.station.camera
        light = self.picture(drawn_at or f_number, *shift_px) if lamp > 0 else np.zeros(self._pattern.shape, np.float32)
        per_share = self._pattern * np.float32(sim.light_e_ms * exposure_ms / f_number**2 * lamp)
        full_dn = full_scale_dn(self.station)

        def read_out(share: Plane | np.float32) -> Plane:
            # Photon counts of tens and more are normal for all that is measured here; drawing them so is quick.
            mean = light * share * per_share
            electrons = mean + np.sqrt(mean) * rng.standard_normal(mean.shape, dtype=np.float32)
            if sim.full_well_e is not None:
                electrons = np.minimum(electrons, np.float32(sim.full_well_e))
            electrons += np.float32(sim.read_noise_e) * rng.standard_normal(mean.shape, dtype=np.float32)
            if sim.sharpening:
                electrons += sim.sharpening * (electrons - gaussian_filter(electrons, SHARPEN_SIGMA_PX))
            linear = np.asarray(electrons * (10 ** (gain_db / 20) / sim.electrons_per_dn), dtype=np.float32)
            dn = _answer(linear, full_dn - camera.black_level_dn, camera.response) + np.float32(camera.black_level_dn)
            return np.asarray(np.clip(np.rint(dn), 0, full_dn), dtype=np.float32)

        if camera.layout == "bgr":
            frame = np.stack([read_out(np.float32(share)) for share in sim.colour_bgr], axis=2)
        elif camera.layout == "mono":
            frame = read_out(np.float32(1))
        else:
            frame = read_out(self._mosaic(camera.layout))
        return frame.astype(np.uint8) if full_dn < 256 else frame.astype(np.uint16)

    def _mosaic(self, layout: str) -> Plane:
        """The colour filter's share of the light at each pixel."""
        share = dict(zip("bgr", self.sim.colour_bgr, strict=True))
        filters = np.ones(self._pattern.shape, np.float32)
        for place, colour in enumerate(layout):
            filters[place // 2 :: 2, place % 2 :: 2] = share[colour]
        return filters

    def _drawn(self, f_number: float) -> list[tuple[Patch, Picture]]:
        if f_number not in self._seen:
            for old in list(self._seen)[: max(0, len(self._seen) - KEPT_PICTURES + 1)]:
                del self._seen[old]
                self._still.pop(old, None)
            pitch_um, sim = self.station.camera.pixel_pitch_um, self.sim
            self._seen[f_number] = [
                (patch, card(Optics(sim.lens, pitch_um, sim.blur_px, f_number, depth_mm)))
                for depth_mm, patch, card in self._cards
            ]
        return self._seen[f_number]


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


def lamp_at(sim: SimulatedStation, time_s: float, exposure_ms: float) -> float:
    """The lamp's light, averaged over one exposure: warm-up and ripple about 1."""
    warm = 1 + sim.lamp_drift * (1 - math.exp(-time_s / sim.warm_up_s))
    if sim.ripple == 0:
        return warm
    turn = 2 * math.pi * sim.ripple_hz
    length_s = exposure_ms / 1000
    mean = (math.cos(turn * time_s) - math.cos(turn * (time_s + length_s))) / (turn * length_s)
    return warm * (1 + sim.ripple * mean)


def round_exposure(exposure_ms: float, step_ms: float) -> float:
    """The nearest exposure that the simulated camera can be set to, at least one step."""
    return round(max(1, round(exposure_ms / step_ms)) * step_ms, 6)


def _answer(dn: Plane, span_dn: float, response: str | float) -> Plane:
    """The camera's response curve, from linear light to codes above black."""
    if response == "linear":
        return dn
    part = np.clip(dn / span_dn, 0, None)
    if response == "srgb":
        # IEC 61966-2-1:1999
        return np.asarray(
            span_dn * np.where(part <= 0.0031308, 12.92 * part, 1.055 * part ** (1 / 2.4) - 0.055), np.float32
        )
    return np.asarray(span_dn * part ** (1 / float(response)), dtype=np.float32)


def _lay(frame: Plane, patch: Patch, card: Floats) -> None:
    """Lay a card's picture into the frame, its outline fading into what is around."""
    height, width = card.shape
    ramp = [
        np.clip((np.minimum(np.arange(n), n - 1 - np.arange(n)) + 0.5) / SOFT_RIM_PX, 0, 1) for n in (height, width)
    ]
    cover = ramp[0][:, None] * ramp[1][None, :]
    left, top = patch.region[0] - MARGIN_PX, patch.region[1] - MARGIN_PX
    y0, x0 = max(top, 0), max(left, 0)
    y1, x1 = min(top + height, frame.shape[0]), min(left + width, frame.shape[1])
    inner = (slice(y0 - top, y1 - top), slice(x0 - left, x1 - left))
    frame[y0:y1, x0:x1] += cover[inner] * (card[inner] - frame[y0:y1, x0:x1])
