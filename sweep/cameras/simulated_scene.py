"""The simulated station as the sensor sees it: prints through the lens, light through the camera to codes.

Light is counted as electrons: photon noise, read noise, pixel pattern, full wells, gain, black level, response,
rounding.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from sweep.cameras.simulated_lens import SimulatedLens
from sweep.cameras.simulated_print import MARGIN_PX, Optics, Picture, Print, see_patch
from sweep.frames import Pixels
from sweep.station import Patch, Station

Floats = NDArray[np.float64]
Plane = NDArray[np.float32]

BACKGROUND = 0.35  # reflectance of what lies around the cards
SOFT_RIM_PX = 4  # over which a card's own outline fades into the background
SHARPEN_SIGMA_PX = 1.0
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


def light_tone(sim: SimulatedStation) -> float:
    """Reflectance of the brightest print."""
    return max(print_.light for prints in sim.prints for print_ in prints)


def bits(station: Station) -> int:
    """Significant bits of the simulated pixels."""
    return station.camera.bit_depth or 8


def full_scale_dn(station: Station) -> int:
    """The top code of the simulated pixels."""
    return (1 << bits(station)) - 1


def lamp_at(sim: SimulatedStation, time_s: float, exposure_ms: float) -> float:
    """The lamp's light, averaged over one exposure: warm-up and ripple about 1."""
    warm = 1 + sim.lamp_drift * (1 - math.exp(-time_s / sim.warm_up_s))
    if sim.ripple == 0:
        return warm
    turn = 2 * math.pi * sim.ripple_hz
    length_s = exposure_ms / 1000
    mean = (math.cos(turn * time_s) - math.cos(turn * (time_s + length_s))) / (turn * length_s)
    return warm * (1 + sim.ripple * mean)


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
