"""The level at zero frequency of a star, and from it the transfer curve at every stop.

A star's wedges end at its rim, and their frequencies with them. What lies below comes from the star's
plain surround: the wedges are as light as the surround, and dark and light are equally wide, so that the
step of the mean level across the rim, seen from far enough, is half of the difference between light and
dark. How the blur rounds that step is itself a matter of the transfer at low frequencies; so one smooth
curve is fitted to the rings and to the profile across the rim together. The profile is that of a blurred
disc (Hankel transform; J. W. Goodman, Introduction to Fourier Optics, section 2.1.5). The ratio of that
difference to the mean level is the print's and the same at every stop: it is pooled over the stops, with
more weight on those whose blur reaches less far. Without a surround it comes from the smooth curve alone,
and from the print's modulation where that is stated.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.interpolate import BSpline
from scipy.special import j0, j1

from sweep.measure.linear import Floats
from sweep.measure.mtf import Transfer
from sweep.measure.star import StarMeasure, StarRings
from sweep.measure.star_find import NYQUIST_CY_PX
from sweep.measure.star_rim import RING_BIN_PX, RadialProfile

SQUARE_WAVE = 4 / np.pi
CURVE_CY_PX = np.linspace(0.0, NYQUIST_CY_PX, 101)
_KNOTS_CY_PX = (0.0, 0.03, 0.06, 0.09, 0.12, 0.15, 0.18, 0.21, 0.24, 0.27, 0.3, 0.34, 0.38, 0.43, 0.5, 0.65, 0.82, 1.0)
_EXTRA = 4
_FALL_AT_50_PX = 0.003
_RATIO_FLOOR = 0.0015
_REACH_SHARE = 0.02
_MOTTLE_BINS = 10.0
_FREE_IN_RINGS = 10
_STATED_MODULATION_U = 0.01
_CURVE_FLOOR = 0.001


@dataclass(frozen=True, slots=True)
class StarCurve:
    """The transfer of one star at one stop.

    `transfer`: mean over directions of the modulus, negative where reversed, over `CURVE_CY_PX`; `rim_cy_px`: below
    it the curve is continued to 1 at zero frequency; `limit_cy_px`: above it nothing was measured; `ratio`: light-dark
    half difference at zero frequency over the mean level, pooled over the stops, with `ratio_u`, whose error all
    stops share; `surround`: whether the star's surround was seen, without which nothing is said below the rim.
    """

    transfer: Transfer
    rim_cy_px: float
    limit_cy_px: float
    ratio: float
    ratio_u: float
    surround: bool

    def mtf50(self) -> tuple[float, float] | None:
        """Half-modulation frequency (cycles/pixel) and its u; None below the rim's frequency or beyond the limit."""
        found = self.transfer.first_fall_to(0.5)
        if found is None or not self.rim_cy_px <= found[0] <= self.limit_cy_px:
            return None
        return found

    def contrast(self, v_cy_px: float) -> tuple[float, float] | None:
        """Transfer (negative where reversed) and its u at a frequency; None where the star doesn't say."""
        if v_cy_px > self.limit_cy_px or (v_cy_px < self.rim_cy_px and not self.surround):
            return None
        return self.transfer.at(v_cy_px)


def star_curves(stars: Sequence[StarMeasure | None], modulation: float = 1.0) -> list[StarCurve | None]:
    """The curves of one star over all stops of a sweep.

    stars: one measure a stop, None or not `ok` where there is none; modulation: the print's own, 1 where it is not
    stated. Returns a list of the same length.
    """
    sound = [(i, s, s.rings) for i, s in enumerate(stars) if s is not None and s.ok and s.rings is not None]
    curves: list[StarCurve | None] = [None] * len(stars)
    if not sound:
        return curves
    best = max(sound, key=lambda seen: float(seen[2].signed[0] / seen[2].level[0]))[1]
    problems = [(i, _Problem(s, rings, best.phase_rad)) for i, s, rings in sound]
    ratio, ratio_u = _pooled_ratio([problem.solve(None) for _, problem in problems], modulation)
    for i, problem in problems:
        curves[i] = problem.curve(ratio, ratio_u)
    return curves


@dataclass(frozen=True, slots=True)
class _Solution:
    """Spline coefficients of half difference times transfer, (j,), level of the surround, and their covariance."""

    coefficients: Floats
    light: float
    covariance: Floats

    def value(self, v: Floats) -> tuple[Floats, Floats, Floats]:
        """Transfer at frequencies, its u, and half difference with its u as (2,)."""
        at_zero = _basis(np.zeros(1))[0]
        step = float(at_zero @ self.coefficients)
        rows = _basis(v)
        m = rows @ self.coefficients / step
        slope = (rows - m[:, None] * at_zero) / step
        j = len(at_zero)
        c = self.covariance[:j, :j]
        u = np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", slope, c, slope), 0))
        return m, u, np.array([step, np.sqrt(max(float(at_zero @ c @ at_zero), 0.0))])


def _basis(v_cy_px: Floats, derivative: int = 0) -> Floats:
    """Cubic splines over frequency, (n, j), or their derivative; the curve ends at nothing at the last knot."""
    knots = np.concatenate([[0.0] * 3, _KNOTS_CY_PX, [_KNOTS_CY_PX[-1]] * 3])
    count = len(knots) - 4
    spline = BSpline(knots, np.eye(count), 3, extrapolate=False)
    values = spline(v_cy_px) if derivative == 0 else spline.derivative(derivative)(v_cy_px)
    return np.nan_to_num(np.asarray(values))[:, : count - 1]


class _Problem:
    """The linear least squares of one star: rings and profile against spline, surround, rim, border and fall-off."""

    def __init__(self, star: StarMeasure, rings: StarRings, upright_rad: float) -> None:
        self.rings = rings
        # outermost rings that are reversed against those of the star seen with the most contrast
        self.signed = rings.signed * (1.0 if np.cos(star.phase_rad - upright_rad) >= 0 else -1.0)
        self.mid = float(np.median(rings.level))
        self.profile = star.profile if star.rim_px is not None else None
        self.rim = star.rim_px or 0.0
        v = rings.v_cy_px
        # what the curved wave fronts of a star add: the next term of the operator M(|grad|) on exp(i n theta)
        self.ring_rows = SQUARE_WAVE * (_basis(v) - v[:, None] ** 3 * _basis(v, 3) / (6 * star.cycles**2))
        self.at_zero = _basis(np.zeros(1))[0]
        self.middles = (np.array(_KNOTS_CY_PX[1:]) + _KNOTS_CY_PX[:-1]) / 2
        self.bend = _basis(self.middles, 3)

    def solve(self, ratio: tuple[float, float] | None) -> _Solution:
        """Iterated least squares; `ratio` (value, u) of half difference to mean level as a further datum."""
        kernel = None if self.profile is None else _Kernel(self.profile)
        rim, typical = self.rim, np.full(len(self.middles), 1000.0 * self.mid / 2)
        solution = np.zeros(len(self.at_zero) + _EXTRA)
        trust = np.zeros(0) if self.profile is None else 1 / np.hypot(self.profile.u, 3e-4 * self.mid)
        for _ in range(5):
            rows, right = self._ring_part()
            block = np.zeros((0, len(solution)))
            if kernel is not None and self.profile is not None:
                block = kernel.rows(rim, solution[: len(self.at_zero)], self.at_zero)
                rows.append(block * trust[:, None])
                right.append(self.profile.value * trust)
            prior_rows, prior_right = self._prior_part(ratio, typical)
            rows, right = rows + prior_rows, right + prior_right
            a, b = np.vstack(rows), np.concatenate(right)
            covariance = np.asarray(np.linalg.pinv(a.T @ a, hermitian=True), np.float64)
            solution = covariance @ (a.T @ b)
            rim += float(np.clip(solution[-3], -1, 1))
            if self.profile is not None:
                trust = _trust(self.profile, block @ solution, self.mid)
            bends = (self.bend @ solution[: len(self.at_zero)])[(self.middles > 0.06) & (self.middles < 0.3)]
            size = max(1.5 * float(np.sqrt(np.mean(bends**2))), 75 * self.mid)
            typical = np.where(
                self.middles < self.rings.v_cy_px[0], size, size * (1 if ratio is None else _FREE_IN_RINGS)
            )
        j = len(self.at_zero)
        light = float(solution[j]) if self.profile is not None else self.mid + float(self.at_zero @ solution[:j])
        return _Solution(solution[:j], light, covariance[: j + 1, : j + 1])

    def _ring_part(self) -> tuple[list[Floats], list[Floats]]:
        extra = np.zeros((len(self.signed), _EXTRA))
        extra[:, 3] = self.signed * (self.rings.radius_px / 50) ** 2
        return [np.hstack([self.ring_rows, extra]) / self.rings.u[:, None]], [self.signed / self.rings.u]

    def _prior_part(self, ratio: tuple[float, float] | None, typical: Floats) -> tuple[list[Floats], list[Floats]]:
        """Rows and right-hand sides: smoothness, size of what is hardly known, and the ratio."""
        j = len(self.at_zero)
        smooth = np.hstack([self.bend, np.zeros((len(self.bend), _EXTRA))]) / typical[:, None]
        weak = np.zeros((_EXTRA, j + _EXTRA))
        sizes = (1e6 * self.mid, 0.3, 2 * self.mid, _FALL_AT_50_PX)
        weak[range(_EXTRA), range(j, j + _EXTRA)] = 1 / np.array(sizes)
        rows, right = [smooth, weak], [np.zeros(len(smooth) + len(weak))]
        if ratio is not None:
            # half difference = ratio x (light - half difference); without a surround the rings' level is that mean
            seen = self.profile is not None
            datum = np.zeros((1, j + _EXTRA))
            datum[0, :j], datum[0, j] = self.at_zero * (1 + ratio[0] * seen), -ratio[0] * seen
            rows.append(datum / (ratio[1] * self.mid))
            right.append(np.full(1, 0.0 if seen else ratio[0] / ratio[1]))
        return rows, right

    def curve(self, ratio: float, ratio_u: float) -> StarCurve:
        """The transfer with the pooled ratio."""
        solution = self.solve((ratio, ratio_u))
        m, u, _ = solution.value(CURVE_CY_PX)
        v = self.rings.v_cy_px
        beyond = (self.rings.amplitude - np.abs(self.rings.signed)) / (
            SQUARE_WAVE * float(self.at_zero @ solution.coefficients)
        )
        kernel = np.ones(5) / 5
        smooth = np.convolve(np.pad(beyond, 2, "edge"), kernel, "valid")
        value = np.where(m < 0, -1.0, 1.0) * (np.abs(m) + np.interp(CURVE_CY_PX, v, smooth, left=0.0))
        return StarCurve(
            Transfer(CURVE_CY_PX, value, np.hypot(u, _CURVE_FLOOR * (CURVE_CY_PX > 0))),
            float(v[0]),
            float(v[-1]),
            ratio,
            ratio_u,
            self.profile is not None,
        )


class _Kernel:
    """What the spline's parts make of a disc's profile: integrals over frequency by the midpoint rule."""

    def __init__(self, profile: RadialProfile) -> None:
        self.profile = profile
        count = int(6 * 2.2 * float(profile.radius_px.max()))
        self.step = 1 / count
        self.v = (np.arange(count) + 0.5) / count
        self.basis = _basis(self.v)
        wave = j0(2 * np.pi * profile.radius_px[:, None] * self.v)
        self.wave = wave * np.where(profile.ring[:, None], np.sinc(RING_BIN_PX * self.v), 1.0)
        d = np.arange(profile.border.shape[1]) + 0.5
        self.edge = np.sin(2 * np.pi * d[:, None] * self.v) / (np.pi * self.v) @ self.basis * self.step

    def rows(self, rim: float, coefficients: Floats, at_zero: Floats) -> Floats:
        """Columns: spline, surround, rim's place, what lies beyond the region's borders, fall-off of the light."""
        x = 2 * np.pi * rim * self.v
        disc = 2 * np.pi * rim * j1(x)
        # the second term is the end correction of the midpoint rule (Euler and Maclaurin)
        inside = self.wave @ (disc[:, None] * self.basis) * self.step - (np.pi * rim * self.step) ** 2 / 12 * at_zero
        extra = np.zeros((len(inside), _EXTRA))
        extra[:, 0] = 1.0
        half = float(at_zero @ coefficients)
        if half > 0:
            moved = (2 * np.pi) ** 2 * rim * self.v * j0(x) * (self.basis @ coefficients)
            extra[:, 1] = -(self.wave @ moved) * self.step
            tail = np.clip(0.5 - self.edge @ (coefficients / half), -0.1, 0.6)
            extra[:, 2] = self.profile.border @ tail
        extra[:, 3] = self.profile.value * (self.profile.radius_px / 50) ** 2
        return np.hstack([-inside, extra])


def _trust(profile: RadialProfile, fitted: Floats, mid: float) -> Floats:
    """Weights of the profile's bins from their own scatter about the fit (an uneven print), outliers held down."""
    rest = profile.value - fitted
    u = np.hypot(profile.u, 3e-4 * mid)
    for part in (profile.ring, ~profile.ring):
        if part.any():
            excess = max((1.4826 * float(np.median(np.abs(rest[part] / u[part])))) ** 2 - 1.4, 0.0)
            u = np.where(part, u * np.sqrt(1 + _MOTTLE_BINS * excess), u)
    return np.asarray(np.sqrt(np.minimum(1.0, 2.0 / np.maximum(np.abs(rest / u), 1e-9))) / u)


def _pooled_ratio(solutions: Sequence[_Solution], modulation: float) -> tuple[float, float]:
    """Half difference over mean level, weighted over the stops, and its u."""
    ratios, variances = [], []
    at_zero = _basis(np.zeros(1))[0]
    for s in solutions:
        m, _, step = s.value(np.array([0.05]))
        mean = s.light - step[0]
        if mean <= 0 or step[0] <= 0:
            continue
        gradient = np.append(at_zero * s.light, -step[0]) / mean**2
        ratios.append(step[0] / mean)
        own = float(gradient @ s.covariance @ gradient)
        variances.append(own + (_REACH_SHARE * abs(1 - float(m[0])) * step[0] / mean) ** 2)
    if modulation < 1:
        ratios.append(modulation)
        variances.append((_STATED_MODULATION_U * modulation) ** 2)
    if not ratios:
        return 1.0, 1.0
    r, w = np.array(ratios), 1 / np.array(variances)
    ratio = float(np.sum(w * r) / np.sum(w))
    chi2 = float(np.sum(w * (r - ratio) ** 2)) / max(len(r) - 1, 1)
    return ratio, float(np.sqrt(max(chi2, 1.0) / np.sum(w) + (_RATIO_FLOOR * ratio) ** 2))
