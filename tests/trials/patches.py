"""Patches as pixels see them: the exact share of light over each pixel, then light's noise and the pixels' own.

An edge's light depends on the distance to it alone. Stars and bars are drawn on cells of 1/8 pixel by the area that
each boundary covers, blurred through their spectrum, and gathered over the pixels.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.fft import fftfreq, irfft2, next_fast_len, rfft2, rfftfreq

from tests.trials.blur import Blur, Floats

FINER = 8
GUARD_PX = 36
FULL_DN = 4095
BLACK_DN = 64.0


@dataclass(frozen=True)
class Look:
    """How a patch is lit and taken: tones in DN above black, slopes of the light over the patch, noise, frames."""

    dark_dn: float
    light_dn: float
    slope_xy: tuple[float, float]
    snr_db: float
    photon_part: float
    pattern: float
    frames: int


def draw_look(rng: np.random.Generator) -> Look:
    """Random light, contrast from 2:1 to 20:1, SNR of one frame's light tone from 20 to 45 dB, pixel pattern 1 %."""
    light = rng.uniform(0.45, 0.8) * (FULL_DN - BLACK_DN)
    return Look(
        dark_dn=light / math.exp(rng.uniform(math.log(2), math.log(20))),
        light_dn=light,
        slope_xy=(rng.uniform(-0.08, 0.08), rng.uniform(-0.08, 0.08)),
        snr_db=rng.uniform(20, 45),
        photon_part=rng.uniform(0.6, 0.98),
        pattern=0.01,
        frames=int(rng.integers(2, 9)),
    )


def edge(size: tuple[int, int], blur: Blur, normal_rad: float, bend_px: float, place: tuple[float, float]) -> Floats:
    """Light from 0 to 1 (rows, columns) on an edge through `place`, light ahead of the normal; `bend_px`: its bow."""
    width, height = size
    x = np.arange(width)[None, :] - place[0]
    y = np.arange(height)[:, None] - place[1]
    ahead = x * math.cos(normal_rad) + y * math.sin(normal_rad)
    along = -x * math.sin(normal_rad) + y * math.cos(normal_rad)
    half = (height if abs(math.cos(normal_rad)) > 0.7 else width) / 2
    d, light = blur.step(normal_rad)
    return np.interp(ahead - bend_px * ((along / half) ** 2 - 1 / 3), d, light)


def star(
    size_px: int, cycles: int, rim_px: float, phase_rad: float, centre: tuple[float, float]
) -> Callable[[Blur], Floats]:
    """A sector star on a light ground; a function from blur to its light from 0 to 1, (rows, columns)."""

    def drawn(x: Floats, y: Floats) -> Floats:
        dx, dy = x - centre[0], y - centre[1]
        r = np.hypot(dx, dy)
        turn = (np.arctan2(dy, dx) - phase_rad) * cycles / np.pi
        nearest = np.round(turn)
        line = nearest * np.pi / cycles + phase_rad
        ahead = r * np.sin((turn - nearest) * np.pi / cycles) * np.where(nearest % 2 == 0, 1, -1)
        lit = _covered(ahead, np.sin(line), np.cos(line))
        away = np.maximum(r, 1e-9)
        outside = _covered(r - rim_px, dx / away, dy / away)
        return np.asarray(lit + (1 - lit) * outside)

    return _seen((size_px, size_px), drawn)


def bars(size: tuple[int, int], v_xy: tuple[float, float], dark_bars: int | None) -> Callable[[Blur], Floats]:
    """Bars of frequency vector `v_xy` (cycles/px), a dark one in the middle: right across, or a set of an odd number.

    The bars of a set are as long as it is wide; around it is the light of the gaps.
    """
    v = math.hypot(*v_xy)
    width, height = size
    across = (v_xy[0] / v, v_xy[1] / v)
    reach_px = None if dark_bars is None else (2 * dark_bars - 1) / (4 * v)

    def drawn(x: Floats, y: Floats) -> Floats:
        dx, dy = x - (width - 1) / 2, y - (height - 1) / 2
        place = dx * across[0] + dy * across[1]
        # Boundaries at every odd quarter of the period; the middle bar is dark.
        nearest = np.round(2 * v * place + 0.5) - 0.5
        ahead = (place - nearest / (2 * v)) * np.where(np.round(nearest + 0.5) % 2 == 0, -1, 1)
        lit = _covered(ahead, *across)
        if reach_px is None:
            return np.asarray(lit)
        length = dy * across[0] - dx * across[1]
        inside = _covered(reach_px - np.abs(place), *across) * _covered(reach_px - np.abs(length), across[1], across[0])
        return np.asarray(1 - inside * (1 - lit))

    return _seen(size, drawn)


def _covered(distance_px: Floats, normal_x: Floats | float, normal_y: Floats | float) -> Floats:
    """Share of a square cell ahead of a line at a distance: straight, but where the line cuts a corner."""
    one, other = np.abs(normal_x), np.abs(normal_y)
    longer, shorter = np.maximum(one, other), np.minimum(one, other)
    d = np.clip(distance_px * FINER, -(longer + shorter) / 2, (longer + shorter) / 2)
    corner = np.maximum(np.abs(d) - (longer - shorter) / 2, 0)
    return np.asarray(0.5 + np.sign(d) * (np.abs(d) / longer - corner**2 / (2 * longer * np.maximum(shorter, 1e-12))))


def _seen(size: tuple[int, int], drawn: Callable[[Floats, Floats], Floats]) -> Callable[[Blur], Floats]:
    width, height = size
    rows, columns = (next_fast_len((n + 2 * GUARD_PX) * FINER, real=True) for n in (height, width))
    guard = GUARD_PX * FINER
    x = (np.arange(columns) - guard - (FINER - 1) / 2) / FINER
    y = (np.arange(rows) - guard - (FINER - 1) / 2) / FINER
    spectrum = rfft2(drawn(x[None, :], y[:, None]))
    radius = np.hypot(fftfreq(rows, 1 / FINER)[:, None], rfftfreq(columns, 1 / FINER)[None, :])
    fine = np.linspace(0, float(radius.max()), 8192)

    def seen(blur: Blur) -> Floats:
        cells = irfft2(spectrum * np.interp(radius, fine, blur.optics(fine)), (rows, columns))
        part = cells[guard : guard + height * FINER, guard : guard + width * FINER]
        return np.asarray(part.reshape(height, FINER, width, FINER).mean(axis=(1, 3)))

    return seen


def take(light: Floats, look: Look, pattern: Floats, rng: np.random.Generator) -> list[np.ndarray]:
    """Frames of a patch whose light runs from 0 to 1; `pattern`: the pixels' own, standard normal, kept over stops."""
    height, width = light.shape
    across = np.linspace(-1, 1, width)[None, :]
    down = np.linspace(-1, 1, height)[:, None]
    lit = 1 + look.slope_xy[0] * across + look.slope_xy[1] * down
    dn = (look.dark_dn + (look.light_dn - look.dark_dn) * light) * lit * (1 + look.pattern * pattern)
    noise_dn = look.light_dn * 10 ** (-look.snr_db / 20)
    deviation = noise_dn * np.sqrt(look.photon_part * np.maximum(dn, 0) / look.light_dn + 1 - look.photon_part)
    frames = (dn + deviation * rng.standard_normal(light.shape) + BLACK_DN for _ in range(look.frames))
    return [np.clip(np.round(frame), 0, FULL_DN).astype(np.uint16) for frame in frames]
