"""An edge's spread function: levels, tails and a spline core, with slopes and transform in closed form."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline
from scipy.special import erf

from sweep.measure.linear import Floats

V_CY_PX = np.linspace(0.0, 1.0, 201)


@dataclass(frozen=True, slots=True)
class Spread:
    """A fitted spread function: knots of its core, coefficients of its columns, covariance, light gradient."""

    knots: tuple[float, ...]
    coefficients: Floats
    covariance: Floats
    gradient: float

    def value(self, d: Floats) -> Floats:
        """Light at distances d without the gradient."""
        return _looked_up(d, _tables(self.knots)[0] @ self.coefficients)

    def slope(self, d: Floats) -> Floats:
        """Change of light per pixel of distance."""
        return _looked_up(d, _tables(self.knots)[1] @ self.coefficients)

    @property
    def levels(self) -> tuple[float, float]:
        """Dark and light level far from the edge."""
        middle, step = float(self.coefficients[0]), float(self.coefficients[1])
        return middle - 0.5 * step, middle + 0.5 * step


def knots_for(spread_px: float, reach_px: float) -> tuple[float, ...]:
    """Knots (px) of a core for an edge of a 10 to 90 % width, ending at `reach_px`, both to some 3 %."""
    return _knots(_stepped(spread_px), _stepped(reach_px))


def columns_at(d: Floats, knots: tuple[float, ...]) -> Floats:
    """The columns of a spread function at distances d (m,), px: level, step, tail, core; (m, columns)."""
    return _looked_up(d, _tables(knots)[0])


@lru_cache(maxsize=256)
def transform(knots: tuple[float, ...]) -> NDArray[np.complex128]:
    """Fourier transform of the columns' derivatives at V_CY_PX, (n, columns).

    Step: exp(-(w sigma)^2 / 2); tail: -pi w exp(-w b), w = 2 pi v; splines by Gauss-Legendre quadrature, knot by knot.
    """
    w = 2.0 * np.pi * V_CY_PX
    sigma, b = _soft(knots)
    step = np.exp(-0.5 * (w * sigma) ** 2)
    tail = -np.pi * w * np.exp(-w * b)
    t = np.unique(np.asarray(knots))
    nodes, weights = np.polynomial.legendre.leggauss(8)
    d = (0.5 * (t[1:] + t[:-1])[:, None] + 0.5 * np.diff(t)[:, None] * nodes).ravel()
    dw = (0.5 * np.diff(t)[:, None] * weights).ravel()
    columns = _basis(knots)(d)
    core = (1j * w)[:, None] * (np.exp(-1j * np.outer(w, d)) @ (columns * dw[:, None]))
    return np.column_stack([np.zeros_like(w), step, tail, core])


def _stepped(px: float) -> float:
    """The value rounded to steps of some 6 %, so that knots and their transforms are made once."""
    return float(np.round(1.06 ** np.round(np.log(px) / np.log(1.06)), 6))


@lru_cache(maxsize=256)
def _knots(spread_px: float, reach_px: float) -> tuple[float, ...]:
    """Knots of the core: fine over the edge, wider apart outward, ending at `reach_px` (all pixels)."""
    fine = float(np.clip(spread_px / 6.0, 0.25, 1.2))
    points = [0.5 * fine]
    while points[-1] < reach_px:
        points.append(points[-1] + max(fine, 0.3 * (points[-1] - spread_px)))
    half = np.array(points) * (reach_px / points[-1])
    inner = np.concatenate([-half[::-1], half])
    return (*([float(inner[0])] * 3), *(float(v) for v in inner), *([float(inner[-1])] * 3))


def _soft(knots: tuple[float, ...]) -> tuple[float, float]:
    """Deviation of the step column's Gaussian and softening of the tail column (px): the knots can follow them."""
    fine = knots[len(knots) // 2] - knots[len(knots) // 2 - 1]
    return 2.4 * fine, 2.1 * fine


_TABLE_PER_PX = 32
_TABLE_REACH_PX = 160.0


@lru_cache(maxsize=64)
def _tables(knots: tuple[float, ...]) -> tuple[Floats, Floats]:
    """The spread function's columns, and their slopes, over a fine grid of distances.

    Level, step (a blurred one), 1/distance tail, and the core's cubic splines, which vanish with two derivatives at the
    core's ends.
    """
    d = np.arange(-_TABLE_REACH_PX, _TABLE_REACH_PX + 1e-9, 1.0 / _TABLE_PER_PX)
    sigma, b = _soft(knots)
    q = d * d + b * b
    value = [np.ones_like(d), 0.5 * erf(d / (sigma * np.sqrt(2.0))), -d / q]
    slope = [np.zeros_like(d), np.exp(-0.5 * (d / sigma) ** 2) / (sigma * np.sqrt(2.0 * np.pi)), (d * d - b * b) / q**2]
    inside = (d >= knots[3]) & (d <= knots[-4])
    core, core_slope = (np.zeros((len(d), len(knots) - 10)) for _ in range(2))
    core[inside] = _basis(knots)(d[inside])
    core_slope[inside] = _basis(knots).derivative()(d[inside])
    return np.column_stack([*value, core]), np.column_stack([*slope, core_slope])


def _looked_up(d: Floats, table: Floats) -> Floats:
    """A table over the grid of distances, linearly interpolated at d; of one column or many."""
    place = np.clip((d + _TABLE_REACH_PX) * _TABLE_PER_PX, 0.0, len(table) - 1.001)
    index = place.astype(np.intp)
    part = place - index
    if table.ndim == 2:
        part = part[:, None]
    return np.asarray(table[index] * (1.0 - part) + table[index + 1] * part)


@lru_cache(maxsize=256)
def _basis(knots: tuple[float, ...]) -> BSpline:
    size = len(knots) - 4
    return BSpline(np.asarray(knots), np.eye(size)[:, 3:-3], 3)
