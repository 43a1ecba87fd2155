"""Slanted edges as a camera sees them, for the tests of the measurements.

The light across a straight edge is the integral of the transfer along its normal, so that an edge of any transfer
function known in closed form is exact at every pixel centre. It shares no code with the package.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

Floats = NDArray[np.float64]
Transfer = Callable[[Floats], Floats]
REACH_PX = 100.0
HIGHEST_CY_PX = 3.0


def gauss(sigma_px: float) -> Transfer:
    """A Gaussian spread: exp(-2 pi^2 sigma^2 v^2), its Fourier transform."""
    return lambda v: np.exp(-2.0 * (np.pi * sigma_px * v) ** 2)


def diffraction(cutoff_cy_px: float) -> Transfer:
    """A perfect circular pupil (Goodman, Introduction to Fourier Optics, 6.4.2)."""

    def transfer(v: Floats) -> Floats:
        s = np.clip(v / cutoff_cy_px, 0.0, 1.0)
        return np.asarray(2.0 / np.pi * (np.arccos(s) - s * np.sqrt(1.0 - s * s)))

    return transfer


@dataclass(frozen=True)
class Edge:
    """A dark/light edge through the middle of an image, tilted from the vertical (or, `lying`, the horizontal).

    `polarity` +1: light at the larger coordinate; `bend_px`: how far its ends bow off its middle; `across`, `along`:
    relative change of the light per pixel.
    """

    optics: Transfer
    angle_deg: float = 5.0
    lying: bool = False
    polarity: int = 1
    dark: float = 200.0
    light: float = 2000.0
    place_px: float = 0.0
    bend_px: float = 0.0
    across: float = 0.0
    along: float = 0.0

    def transfer(self, v: Floats) -> Floats:
        """Transfer along the normal, the square pixel's box included."""
        t = np.radians(self.angle_deg)
        return np.asarray(self.optics(v) * np.sinc(v * np.cos(t)) * np.sinc(v * np.sin(t)))

    @cached_property
    def mtf50(self) -> float:
        """Where the transfer falls to one half, cycles per pixel."""
        return float(brentq(lambda v: self.transfer(np.array([v]))[0] - 0.5, 1e-4, 0.9))

    @cached_property
    def spread(self) -> CubicSpline:
        """Share of the light step at signed distances: 1/2 + the integral of M sin(2 pi v d) / (pi v)."""
        x, w = np.polynomial.legendre.leggauss(800)
        v = 0.5 * HIGHEST_CY_PX * (x + 1.0)
        distance = np.linspace(-REACH_PX, REACH_PX, 16 * int(REACH_PX) + 1)
        share = np.sin(2.0 * np.pi * np.outer(distance, v)) @ (0.5 * HIGHEST_CY_PX * w * self.transfer(v) / (np.pi * v))
        return CubicSpline(distance, 0.5 + share)

    def image(self, width: int, height: int, shift_px: float = 0.0) -> Floats:
        """The picture, (height, width), the edge moved by `shift_px` along its normal."""
        rows, columns = np.mgrid[0:height, 0:width].astype(float)
        rows -= 0.5 * (height - 1)
        columns -= 0.5 * (width - 1)
        u, t = (rows, columns) if self.lying else (columns, rows)
        half = 0.5 * max((width if self.lying else height) - 1, 1)
        lean = np.radians(self.angle_deg)
        d = (u - self.place_px) * np.cos(lean) + t * np.sin(lean) - shift_px - self.bend_px * (t / half) ** 2
        lit = 1.0 + self.across * u + self.along * t
        return np.asarray((self.dark + (self.light - self.dark) * self.spread(self.polarity * d)) * lit)
