"""The fit of parallel bars: level with gradients, and the harmonics of a square wave that the sampling keeps apart."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.measure.linear import Bools, Floats

SQUARE_WAVE = 4 / np.pi
LEVEL_TERMS = 6
_HIGHEST_CY_PX = 1.1
_INFLATION = 8.0


@dataclass(frozen=True, slots=True)
class Samples:
    """Samples, (k,), and frames at one level, (n, k), as parts of their mean level `unit`."""

    x: Floats
    y: Floats
    values: Floats
    unit: float

    def part(self, use: Bools) -> "Samples":
        return Samples(self.x[use], self.y[use], self.values[:, use], self.unit)


def design_of(bars: Samples, f: Floats, orders: Sequence[int] = (2, 3, 5)) -> Floats:
    """Columns: level with its gradients, the fundamental, its change along x and y, and the harmonics."""
    dx, dy = bars.x - bars.x.mean(), bars.y - bars.y.mean()
    angle = 2 * np.pi * (dx * f[0] + dy * f[1])
    scale = max(float(np.ptp(dx)), float(np.ptp(dy)))
    u, w = dx / scale, dy / scale
    c, s = np.cos(angle), np.sin(angle)
    seen = [h for h in orders if h * np.hypot(*f) < _HIGHEST_CY_PX]
    harmonics = [part for h in seen for part in (np.cos(h * angle), np.sin(h * angle))]
    return np.stack([np.ones_like(u), u, w, u * u, u * w, w * w, c, s, u * c, u * s, w * c, w * s, *harmonics], axis=1)


@dataclass(frozen=True, slots=True)
class BarsFit:
    """Each frame's complex harmonics 1, 3, 5, their unscaled u, and the noise, as parts of the level.

    `folded`: what a harmonic that the sampling makes one with the fundamental may add to it.
    """

    f: Floats
    middle: Floats
    waves: NDArray[np.complex128]
    units: Floats
    level: float
    noise: float
    temporal: float | None
    folded: float
    unit: float

    @classmethod
    def of(cls, bars: Samples, f: Floats) -> "BarsFit | None":
        """The fit with wild samples left out, and with no more harmonics than the sampling keeps apart."""
        middle = np.array([bars.x.mean(), bars.y.mean()])
        left_out: tuple[int, ...] = ()
        for orders in ((2, 3, 5), (2, 3), (2,), ()):
            design = design_of(bars, f, orders)
            inverse = np.linalg.pinv(design.T @ design, rcond=1e-10, hermitian=True)
            apart = inverse[LEVEL_TERMS, LEVEL_TERMS] + inverse[
                LEVEL_TERMS + 1, LEVEL_TERMS + 1
            ] < 2 * _INFLATION / len(design)
            if (
                apart
                and np.linalg.matrix_rank(design.T @ design, tol=1e-8 * len(design), hermitian=True) == design.shape[1]
            ):
                break
            left_out = tuple(h for h in (3, 5) if h not in orders[:-1])
        for _ in range(2):
            coefficients = inverse @ (design.T @ bars.values.T)
            rest = bars.values - (design @ coefficients).T
            mean = rest.mean(axis=0)
            use = np.abs(mean) <= 6 * 1.4826 * float(np.median(np.abs(mean)))
            if use.all() or use.sum() < 2 * design.shape[1]:
                break
            bars, design = bars.part(use), design[use]
            inverse = np.linalg.pinv(design.T @ design, rcond=1e-10, hermitian=True)
        n, k = bars.values.shape
        freedom = max(k - design.shape[1], 1)
        noise = float(np.sqrt(np.sum(mean**2) / freedom))
        temporal = float(np.sqrt(np.sum((rest - mean) ** 2) / (freedom * (n - 1)))) if n > 1 else None
        if noise <= 0 or not np.isfinite(noise):
            return None
        seen = [h for h in orders if h * np.hypot(*f) < _HIGHEST_CY_PX]
        waves, units = np.zeros((3, n), complex), np.full(3, np.inf)
        for i, h in enumerate((1, 3, 5)):
            if h == 1 or h in seen:
                at = LEVEL_TERMS if h == 1 else LEVEL_TERMS + 6 + 2 * seen.index(h)
                waves[i] = coefficients[at] - 1j * coefficients[at + 1]
                units[i] = np.sqrt((inverse[at, at] + inverse[at + 1, at + 1]) / 2)
        # seen through a transfer that falls like exp(-a v), the third is the cube of the first
        transfer = min(1.0, abs(waves[0].mean()) / SQUARE_WAVE)
        folded = SQUARE_WAVE * sum(transfer**h / h for h in left_out) / np.sqrt(3)
        return cls(f, middle, waves, units, float(coefficients[0].mean()), noise, temporal, float(folded), bars.unit)

    @property
    def together(self) -> complex:
        """The fundamental of all frames."""
        return complex(self.waves[0].mean())

    def u(self, i: int) -> float:
        """Standard uncertainty of the i-th harmonic of the mean frame."""
        return self.noise * float(self.units[i])

    def something_else(self) -> bool:
        """Whether the fit leaves more than the frames' noise and a fifth of the bars: they are no bars."""
        if self.temporal is None:
            return False
        limit = 4 * self.temporal**2 / self.waves.shape[1] + (0.25 * abs(self.together)) ** 2
        return bool(self.noise**2 > limit)
