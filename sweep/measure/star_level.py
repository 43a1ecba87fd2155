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
from functools import lru_cache

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
# beside the spline: surround, rim's place (px), level beyond the borders, fall-off of the light at 50 px (natural and
# lamp fall-off over some 100 px of a frame); their sizes where the data say nothing, in parts of the mean level
_EXTRA = 4
_EXTRA_SIZES = (1e6, 0.3, 2.0, 0.003)
# third derivative of the curve (px^3 / cycle^3): a disc of defocus of 3 px radius has some 1300, a sharp lens 100
_FIRST_BEND, _LEAST_BEND, _FREE_IN_RINGS = 500.0, 75.0, 10
# a print's mottle spreads over some ten bins of the profile; 1.4 is what the noise of a robust scatter may do
_MOTTLE_BINS, _SCATTER_OF_NOISE, _PROFILE_FLOOR = 10.0, 1.4, 3e-4
# of the ratio: least u, share of the blur's reach that may be misjudged, u of a stated modulation
_RATIO_FLOOR, _REACH_SHARE, _STATED_MODULATION_U = 0.0015, 0.02, 0.01
_CURVE_FLOOR = 0.001
# half difference over mean where nothing tells it: a print's dark is between none and a half of its light
_LIKELY_RATIO, _LIKELY_RATIO_U, _RATIO_U_LIMIT = 0.7, 0.3, 0.12


@dataclass(frozen=True, slots=True)
class StarCurve:
    """The transfer of one star at one stop.

    `transfer`: mean over directions of the modulus, negative where reversed, over `CURVE_CY_PX`; `rim_cy_px`: below
    it the curve is continued to 1 at zero frequency; `limit_cy_px`: above it nothing was measured; `ratio`: light-dark
    half difference at zero frequency over the mean level, pooled over the stops, with `ratio_u`, whose error all
    stops share; `surround`: whether the star's surround was seen, without which nothing is said below the rim;
    `turned`: -1 where the rings' own sign is against that of the star seen with the most contrast.
    """

    transfer: Transfer
    rim_cy_px: float
    limit_cy_px: float
    ratio: float
    ratio_u: float
    surround: bool
    turned: float

    @property
    def known(self) -> bool:
        """Whether the level at zero frequency is known well enough to speak of a contrast."""
        return self.ratio_u <= _RATIO_U_LIMIT * self.ratio

    def mtf50(self) -> tuple[float, float] | None:
        """Half-modulation frequency (cycles/pixel) and its u; None below the rim's frequency or beyond the limit."""
        found = self.transfer.first_fall_to(0.5) if self.known else None
        if found is None or not self.rim_cy_px <= found[0] <= self.limit_cy_px:
            return None
        return found

    def contrast(self, v_cy_px: float) -> tuple[float, float] | None:
        """Transfer (negative where reversed) and its u at a frequency; None where the star doesn't say."""
        hidden = v_cy_px < self.rim_cy_px and not self.surround
        if not self.known or hidden or v_cy_px > self.limit_cy_px:
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
    ratio, ratio_u = _pooled_ratio([problem.solve(None, steps=4) for _, problem in problems], modulation)
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
    """The linear least squares of one star: rings and profile against spline, surround, rim, border and fall-off.

    All levels are parts of the star's mean level. What each step learns (the rim's place, how far the profile can be
    trusted, how bent the curve is) is kept for the next.
    """

    def __init__(self, star: StarMeasure, rings: StarRings, upright_rad: float) -> None:
        mid = float(np.median(rings.level))
        # outermost rings may be reversed against those of the star seen with the most contrast
        self.turned = 1.0 if np.cos(star.phase_rad - upright_rad) >= 0 else -1.0
        self.signed, self.u = rings.signed * self.turned / mid, rings.u / mid
        self.modulus_less_signed = (rings.amplitude - np.abs(rings.signed)) / mid
        v = self.v = rings.v_cy_px
        # what the curved wave fronts of a star add: the next term of the operator M(|grad|) on exp(i n theta)
        self.ring_rows = SQUARE_WAVE * (_basis(v) - v[:, None] ** 3 * _basis(v, 3) / (6 * star.cycles**2))
        self.ring_fall = self.signed * (rings.radius_px / 50) ** 2
        self.at_zero = _basis(np.zeros(1))[0]
        self.middles = (np.array(_KNOTS_CY_PX[1:]) + _KNOTS_CY_PX[:-1]) / 2
        self.bend = _basis(self.middles, 3)
        self.bend_size = _FIRST_BEND
        self.profile = _Profile.of(star.profile, mid) if star.profile is not None and star.rim_px is not None else None
        self.rim = star.rim_px or 0.0
        self.solution = np.zeros(len(self.at_zero) + _EXTRA)

    def solve(self, ratio: tuple[float, float] | None, steps: int) -> _Solution:
        """Iterated least squares; `ratio` (value, u) of half difference to mean level as a further datum."""
        j = len(self.at_zero)
        covariance = np.zeros((j + _EXTRA, j + _EXTRA))
        for _ in range(steps):
            parts = [self._ring_part(), self._prior_part(ratio)]
            block = None if self.profile is None else self.profile.rows(self.rim, self.solution[:j], self.at_zero)
            if block is not None and self.profile is not None:
                parts.append((block * self.profile.trust[:, None], self.profile.value * self.profile.trust))
            a, b = np.vstack([rows for rows, _ in parts]), np.concatenate([right for _, right in parts])
            covariance = np.asarray(np.linalg.pinv(a.T @ a, hermitian=True), np.float64)
            self.solution = covariance @ (a.T @ b)
            if block is not None and self.profile is not None:
                self.rim += float(np.clip(self.solution[j + 1], -1, 1))
                self.profile.weigh(block @ self.solution)
            bends = (self.bend @ self.solution[:j])[(self.middles > 0.06) & (self.middles < 0.3)]
            self.bend_size = max(1.5 * float(np.sqrt(np.mean(bends**2))), _LEAST_BEND)
        light = float(self.solution[j]) if self.profile is not None else 1 + float(self.at_zero @ self.solution[:j])
        return _Solution(self.solution[:j], light, covariance[: j + 1, : j + 1])

    def _ring_part(self) -> tuple[Floats, Floats]:
        extra = np.zeros((len(self.signed), _EXTRA))
        extra[:, 3] = self.ring_fall
        return np.hstack([self.ring_rows, extra]) / self.u[:, None], self.signed / self.u

    def _prior_part(self, ratio: tuple[float, float] | None) -> tuple[Floats, Floats]:
        """Rows and right-hand sides: smoothness, size of what is hardly known, and the ratio."""
        j = len(self.at_zero)
        free = np.where((self.middles < self.v[0]) | (ratio is None), 1, _FREE_IN_RINGS)
        smooth = np.hstack([self.bend, np.zeros((len(self.bend), _EXTRA))]) / (self.bend_size * free)[:, None]
        weak = np.zeros((_EXTRA, j + _EXTRA))
        weak[range(_EXTRA), range(j, j + _EXTRA)] = 1 / np.array(_EXTRA_SIZES)
        rows, right = [smooth, weak], np.zeros(len(smooth) + len(weak))
        if ratio is None and self.profile is None:
            ratio = (_LIKELY_RATIO, _LIKELY_RATIO_U)
        if ratio is not None:
            # half difference = ratio x (light - half difference); without a surround the rings' level is that mean
            seen = self.profile is not None
            datum = np.zeros((1, j + _EXTRA))
            datum[0, :j], datum[0, j] = self.at_zero * (1 + ratio[0] * seen), -ratio[0] * seen
            rows.append(datum / ratio[1])
            right = np.append(right, 0.0 if seen else ratio[0] / ratio[1])
        return np.vstack(rows), right

    def curve(self, ratio: float, ratio_u: float) -> StarCurve:
        """The transfer with the pooled ratio."""
        solution = self.solve((ratio, ratio_u), steps=2)
        m, u, step = solution.value(CURVE_CY_PX)
        beyond = np.convolve(np.pad(self.modulus_less_signed, 2, "edge"), np.ones(5) / 5, "valid")
        more = np.interp(CURVE_CY_PX, self.v, beyond / (SQUARE_WAVE * step[0]), left=0.0)
        value = np.where(m < 0, -1.0, 1.0) * (np.abs(m) + more)
        transfer = Transfer(CURVE_CY_PX, value, np.hypot(u, _CURVE_FLOOR * (CURVE_CY_PX > 0)))
        limit = min(float(self.v[-1]), NYQUIST_CY_PX)
        return StarCurve(transfer, float(self.v[0]), limit, ratio, ratio_u, self.profile is not None, self.turned)


@lru_cache(maxsize=4)
def _j0_table(reach: int) -> Floats:
    return np.asarray(j0(np.arange(reach * 64) / 64))


def _j0(x: Floats) -> Floats:
    """Bessel function by table, to 3e-5: there are some 100,000 values a star."""
    table = _j0_table(64 * (int(x.max()) // 64 + 1) + 1)
    return np.asarray(np.interp(x.reshape(-1), np.arange(len(table)) / 64, table).reshape(x.shape))


class _Profile:
    """The level across the rim, and what the spline's parts make of it: integrals over frequency by midpoints."""

    def __init__(self, profile: RadialProfile, mid: float) -> None:
        self.value, self.u = profile.value / mid, np.hypot(profile.u / mid, _PROFILE_FLOOR)
        self.trust = 1 / self.u
        self.ring, self.border = profile.ring, profile.border
        self.fall = self.value * (profile.radius_px / 50) ** 2
        count = int(13 * float(profile.radius_px.max()))
        self.step = 1 / count
        self.v = (np.arange(count) + 0.5) / count
        self.basis = _basis(self.v)
        wave = _j0(2 * np.pi * profile.radius_px[:, None] * self.v)
        self.wave = wave * np.where(profile.ring[:, None], np.sinc(RING_BIN_PX * self.v), 1.0)
        d = np.arange(profile.border.shape[1]) + 0.5
        self.edge = np.sin(2 * np.pi * d[:, None] * self.v) / (np.pi * self.v) @ self.basis * self.step

    @classmethod
    def of(cls, profile: RadialProfile, mid: float) -> "_Profile | None":
        """None where the rim is without a surround worth the name."""
        return cls(profile, mid) if (~profile.ring).any() and profile.ring.any() else None

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
            extra[:, 2] = self.border @ np.clip(0.5 - self.edge @ (coefficients / half), -0.1, 0.6)
        extra[:, 3] = self.fall
        return np.hstack([-inside, extra])

    def weigh(self, fitted: Floats) -> None:
        """Weights of the bins from their own scatter about the fit (an uneven print), outliers held down."""
        rest, u = self.value - fitted, self.u
        for part in (self.ring, ~self.ring):
            excess = (1.4826 * float(np.median(np.abs(rest[part] / u[part])))) ** 2 - _SCATTER_OF_NOISE
            u = np.where(part, u * np.sqrt(1 + _MOTTLE_BINS * max(excess, 0.0)), u)
        self.trust = np.asarray(np.sqrt(np.minimum(1.0, 2.0 / np.maximum(np.abs(rest / u), 1e-9))) / u)


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
        return _LIKELY_RATIO, _LIKELY_RATIO_U
    r, w = np.array(ratios), 1 / np.array(variances)
    ratio = float(np.sum(w * r) / np.sum(w))
    chi2 = float(np.sum(w * (r - ratio) ** 2)) / max(len(r) - 1, 1)
    return ratio, float(np.sqrt(max(chi2, 1.0) / np.sum(w) + (_RATIO_FLOOR * ratio) ** 2))
