"""Blurs of known transfer, and what they make of a step, in closed form or by quadrature.

A transfer here is real and the same in every direction; the pixel's box comes on top. Nothing is shared with the code
that measures.
"""

import math
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

Floats = NDArray[np.float64]
FAMILIES = ("Gaussian", "in focus", "out of focus", "halo")
FINEST_CY_PX = 8.0
REACH_PX = 140.0
PANEL_CY_PX = 0.01


@dataclass(frozen=True)
class Blur:
    """One blur: family, charge spread (rms px), cutoff (cycles/px), defocus (waves), a halo's part and reach."""

    family: str
    spread_px: float
    cutoff_cy_px: float = FINEST_CY_PX
    defocus_waves: float = 0.0
    halo: float = 0.0
    halo_px: float = 3.0

    def optics(self, v: Floats) -> Floats:
        """Transfer without the pixel's box, signed; v: any shape, cycles per pixel, not negative."""
        spread = np.exp(-2 * (np.pi * self.spread_px * v) ** 2)
        if self.family == "Gaussian":
            return spread
        lens = out_of_focus(v / self.cutoff_cy_px, self.defocus_waves)
        return spread * ((1 - self.halo) * lens + self.halo * np.exp(-2 * np.pi * self.halo_px * v))

    def along(self, v: Floats, direction_rad: float) -> Floats:
        """Transfer of lens and pixel along a direction."""
        return self.optics(v) * np.sinc(v * math.cos(direction_rad)) * np.sinc(v * math.sin(direction_rad))

    def all_round(self, v: Floats) -> Floats:
        """Mean over directions of the modulus, with the transfer's sign."""
        turns = np.arange(90) * np.pi / 90
        box = np.mean([np.sinc(v * np.cos(t)) * np.sinc(v * np.sin(t)) for t in turns], axis=0)
        return self.optics(v) * box

    @cached_property
    def _nodes(self) -> tuple[Floats, Floats]:
        nodes, weights = np.polynomial.legendre.leggauss(10)
        begin = np.arange(0, FINEST_CY_PX, PANEL_CY_PX)[:, None]
        v = (begin + PANEL_CY_PX * (nodes + 1) / 2).ravel()
        return v, np.tile(weights * PANEL_CY_PX / 2, begin.size)

    def step(self, direction_rad: float) -> tuple[Floats, Floats]:
        """Distances (px, rising) and the light there from 0 to 1, of a step seen by pixels, along a direction.

        1/2 + (1/pi) integral T(v) sin(2 pi v d) / v dv, by Gauss-Legendre quadrature.
        """
        v, weight = self._nodes
        value = weight * self.along(v, direction_rad) / v / np.pi
        seen = np.abs(value) > 1e-10
        v, value = v[seen], value[seen]
        d = np.concatenate([np.arange(0, 16, 0.02), np.arange(16, REACH_PX, 0.25)])
        half = np.concatenate([np.sin(2 * np.pi * np.outer(part, v)) @ value for part in np.array_split(d, 16)])
        return np.concatenate([-d[:0:-1], d]), np.concatenate([0.5 - half[:0:-1], 0.5 + half])


def out_of_focus(s: Floats, waves: float) -> Floats:
    """Transfer of a round pupil at a fraction s of the cutoff, `waves` of defocus at its rim.

    H. H. Hopkins, The frequency response of a defocused optical system, Proc. R. Soc. Lond. A 231, 91-103 (1955);
    without defocus 2/pi (acos s - s sqrt(1 - s^2)) (Goodman, Introduction to Fourier Optics, 6.4.2).
    """
    inside = np.clip(s, 0.0, 1.0)
    rim = np.arccos(inside)
    if waves == 0:
        return 2 / np.pi * (rim - inside * np.sqrt(1 - inside**2))
    nodes, weights = np.polynomial.legendre.leggauss(64)
    t = rim[..., None] * (nodes + 1) / 2
    phase = 8 * np.pi * waves * inside[..., None] * (np.cos(t) - inside[..., None])
    return 4 / np.pi * np.sum(weights * np.sin(t) ** 2 * np.cos(phase), axis=-1) * rim / 2


def draw_blur(rng: np.random.Generator, half_cy_px: float) -> Blur:
    """A random blur whose transfer, pixel included, falls to one half near `half_cy_px` along an axis."""
    family = str(rng.choice(FAMILIES, p=[0.2, 0.35, 0.3, 0.15]))
    blur = Blur(
        family,
        rng.uniform(0.1, 0.25),
        defocus_waves=rng.uniform(0.2, 1.6) if family == "out of focus" else 0.0,
        halo=rng.uniform(0.01, 0.04) if family == "halo" else 0.0,
        halo_px=rng.uniform(1.5, 5.0),
    )
    at = np.array([half_cy_px])
    if family == "Gaussian":
        left = 0.5 / float(np.sinc(half_cy_px))
        return replace(blur, spread_px=math.sqrt(max(-math.log(left), 0.01) / 2) / (math.pi * half_cy_px))

    def off(cutoff: float) -> float:
        return float(replace(blur, cutoff_cy_px=cutoff).along(at, 0.0)[0]) - 0.5

    cutoff = FINEST_CY_PX if off(FINEST_CY_PX) < 0 else brentq(off, half_cy_px * 1.01, FINEST_CY_PX)
    return replace(blur, cutoff_cy_px=float(cutoff))


def first_half(v: Floats, transfer: Floats) -> float | None:
    """Where a curve over rising frequencies first falls to one half."""
    below = np.flatnonzero(transfer <= 0.5)
    if below.size == 0:
        return None
    i = int(below[0])
    return float(v[i - 1] + (transfer[i - 1] - 0.5) / (transfer[i - 1] - transfer[i]) * (v[i] - v[i - 1]))
