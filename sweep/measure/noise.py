"""Temporal noise of even areas, and the camera's photon transfer from it.

Quantities and method are those of EMVA Standard 1288 (Release 4.0 Linear, 2021): the variance over
frames of one exposure against the mean, a straight line whose slope is the system gain. Frames are
brought to one level first, so that a drifting lamp does not pass for noise.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sweep.measure.linear import Floats

QUANTISATION_VARIANCE = 1.0 / 12.0
LEAST_DARK_NOISE_DN = 0.45
"""Below this the rounding to whole codes hides the dark noise (common practice, no source)."""
LEAST_NOISE_IN_STEPS = 0.5
"""Least temporal deviation, in code steps, at which rounding adds 1/12 step^2 (Sheppard's correction)."""


@dataclass(frozen=True, slots=True)
class NoisePoint:
    """Noise of one even area at one setting.

    `mean_dn`: light in linear DN above black; `variance_dn2`: temporal, of one pixel, linear DN^2; `dof`: degrees of
    freedom of the variance; `rounding_dn2`: the part that rounding to codes adds; `correlation`: of the temporal noise
    between neighbours along x and y; `pattern_dn2`: variance of the pixels' means that noise does not explain.
    """

    mean_dn: float
    variance_dn2: float
    dof: float
    gain_db: float
    rounding_dn2: float
    correlation: tuple[float, float]
    pattern_dn2: float = 0.0


@dataclass(frozen=True, slots=True)
class PhotonTransfer:
    """variance = g K mean + g^2 r^2 + rounding, with g = 10^(gain_db / 20).

    `dn_per_electron` (K) at 0 dB with its u; `dark_noise_dn` (r) at 0 dB, None where rounding hides it; `scatter`:
    rms of the points about the line in units of their expected scatter; `bend`: what a square term would change at the
    brightest point, relative, with its u.
    """

    dn_per_electron: float
    dn_per_electron_u: float
    dark_variance_dn2: float
    dark_variance_dn2_u: float
    scatter: float
    points: int
    bend: tuple[float, float] | None = None

    @property
    def dark_noise_dn(self) -> float | None:
        """Temporal noise without light, rounding taken out, at 0 dB; None where it is too small to tell."""
        if self.dark_variance_dn2 <= 0:
            return None
        noise = float(np.sqrt(self.dark_variance_dn2))
        return noise if noise >= LEAST_DARK_NOISE_DN else None

    def variance(self, mean_dn: float, gain_db: float, rounding_dn2: float) -> float:
        """Temporal variance of one pixel (linear DN^2) at a mean level and gain."""
        g = 10.0 ** (gain_db / 20.0)
        photons = g * self.dn_per_electron * mean_dn
        return max(float(photons + g * g * max(self.dark_variance_dn2, 0.0)), 0.0) + rounding_dn2


def area_noise(
    frames: Floats, gain_db: float, rounding_dn2: float, grid: tuple[Floats, Floats] | None = None
) -> NoisePoint | None:
    """Noise of one even area from n frames (n, k) of linear light in DN; None with fewer than two frames or 30 pixels.

    grid: x and y of the samples, for the correlation between neighbours. A pixel that jumps (more than 6 deviations)
    does not count.
    """
    n, k = frames.shape
    if n < 2 or k < 30:
        return None
    levels = frames.mean(axis=1)
    mean = float(levels.mean())
    scaled = (
        frames * (mean / levels)[:, None]
        if mean > 0 and (levels > 0.2 * mean).all()
        else frames - (levels - mean)[:, None]
    )
    centre = scaled.mean(axis=0)
    rest = scaled - centre
    per_pixel = (rest**2).sum(axis=0) / (n - 1)
    typical = float(np.median(per_pixel)) + 1e-30
    steady = per_pixel < 36.0 * typical * (1.0 + 1.0 / (n - 1)) + 1.0e-12
    variance = float(per_pixel[steady].mean()) * (1.0 + 1.0 / k)
    spatial = centre[steady] - np.median(centre[steady])
    pattern = float((1.4826 * np.median(np.abs(spatial))) ** 2) - variance / n
    correlation = _neighbour_correlation(rest, grid) if grid is not None else (0.0, 0.0)
    return NoisePoint(mean, variance, float((n - 1) * steady.sum()), gain_db, rounding_dn2, correlation, pattern)


def _neighbour_correlation(rest: Floats, grid: tuple[Floats, Floats]) -> tuple[float, float]:
    """Correlation of the temporal noise with the next sample along x, and along y (the next there is: 1 or 2 px).

    Each row's mean over x is taken off first, so that bands of a rippling lamp are not taken for shared noise; that
    leaves white noise a correlation of -1 / (n - 1) along x, which is put right.
    """
    x, y = (g.astype(int) for g in grid)
    x, y = x - x.min(), y - y.min()
    image = np.full((len(rest), int(y.max()) + 1, int(x.max()) + 1), np.nan)
    image[:, y, x] = rest
    step = 1 if len(x) > 0.75 * image[0].size else 2
    count = np.bincount(y, minlength=image.shape[1])
    image[:, count < 3] = np.nan
    sums = np.nansum(image, axis=2, keepdims=True)
    image = image - sums / np.maximum(count, 1)[None, :, None]
    total = np.nanmean(image**2) if np.isfinite(image).any() else 0.0
    if not total > 0:
        return 0.0, 0.0
    along_x = _lagged(image[:, :, step:] * image[:, :, :-step]) / total
    along_y = _lagged(image[:, step:, :] * image[:, :-step, :]) / total
    lost = float(np.mean(1.0 / count[count >= 3]))
    return along_x * (1.0 - lost) + lost, along_y


def _lagged(products: Floats) -> float:
    """Mean of the products of neighbours; 0 where there are too few rows or columns of them."""
    return float(np.nanmean(products)) if min(products.shape[1:]) > 2 and np.isfinite(products).any() else 0.0


def fit_photon_transfer(points: Sequence[NoisePoint]) -> PhotonTransfer | None:
    """Slope and dark variance by weighted least squares over areas of many levels and gains.

    Each variance has a relative standard deviation of sqrt(2 / dof). Points that lie off the line by far more (an
    unsteady area) lose weight; areas whose noise is hidden by rounding are left out. None with fewer than three
    points or no range of levels.
    """
    points = _plain(points)
    fit = _line(points, with_dark=True)
    if fit is not None and fit.dark_variance_dn2 < 0:
        fit = _line(points, with_dark=False)
    return fit


def noise_growth(points: Sequence[NoisePoint]) -> tuple[float, float] | None:
    """The exponent n of variance ~ light^n over areas of many levels, and its u; None with too few or no range of them.

    Between 0 and 1 for any camera of linear response: dark noise is constant, photon noise goes as the light. Its u is
    widened by the scatter of the points.
    """
    points = [p for p in _plain(points) if p.mean_dn > 0 and p.variance_dn2 > p.rounding_dn2]
    if len(points) < 4:
        return None
    gain = np.array([p.gain_db for p in points]) * np.log(10.0) / 20.0
    light = np.log([p.mean_dn for p in points]) - gain
    variance = np.log([p.variance_dn2 - p.rounding_dn2 for p in points]) - 2.0 * gain
    if np.ptp(light) < np.log(2.0):
        return None
    weight = np.array([p.dof for p in points]) / 2.0
    off = light - np.average(light, weights=weight)
    strength = float(np.sum(weight * off**2))
    growth = float(np.sum(weight * off * variance)) / strength
    rest = variance - np.average(variance, weights=weight) - growth * off
    scatter = max(1.0, float(np.sum(weight * rest**2)) / (len(points) - 2))
    return growth, float(np.sqrt(scatter / strength))


def _plain(points: Sequence[NoisePoint]) -> list[NoisePoint]:
    """The areas whose noise rounding to codes does not hide."""
    return [p for p in points if p.variance_dn2 > 12.0 * p.rounding_dn2 * LEAST_NOISE_IN_STEPS**2]


def _line(points: Sequence[NoisePoint], with_dark: bool) -> PhotonTransfer | None:
    """The fit itself, with the dark variance free or zero."""
    if len(points) < 3:
        return None
    gain = 10.0 ** (np.array([p.gain_db for p in points]) / 20.0)
    mean = np.array([p.mean_dn for p in points])
    target = np.array([p.variance_dn2 - p.rounding_dn2 for p in points])
    dof = np.array([p.dof for p in points])
    if np.ptp(mean) < 0.1 * mean.max():
        return None
    design = np.column_stack([gain * mean, gain**2])[:, : 2 if with_dark else 1]
    expected = np.maximum(np.array([p.variance_dn2 for p in points]), 1e-12)
    trust = np.ones(len(points))
    solved, covariance, off = np.zeros(0), np.zeros((0, 0)), np.zeros(len(points))
    for _ in range(12):
        weight = trust * dof / (2.0 * expected**2)
        normal = design.T @ (design * weight[:, None])
        if np.linalg.cond(normal / np.outer(*[np.sqrt(np.diag(normal)) + 1e-300] * 2)) > 1e13:
            return None
        covariance = np.linalg.inv(normal)
        solved = covariance @ (design.T @ (weight * target))
        rounding = np.array([p.rounding_dn2 for p in points])
        expected = np.maximum(design @ solved + rounding, np.maximum(0.2 * rounding, 1e-9))
        off = (target - design @ solved) / (expected * np.sqrt(2.0 / dof))
        unit = max(1.0, 1.4826 * float(np.median(np.abs(off))))
        trust = np.where(np.abs(off) < 3.0 * unit, 1.0, (3.0 * unit / np.maximum(np.abs(off), 1e-12)) ** 2)
    scatter = float(np.sqrt(np.sum(trust * off**2) / max(len(points) - 2, 1)))
    if solved[0] <= 0:
        return None
    inflate = max(1.0, scatter) ** 2
    return PhotonTransfer(
        float(solved[0]),
        float(np.sqrt(covariance[0, 0] * inflate)),
        float(solved[1]) if with_dark else 0.0,
        float(np.sqrt(covariance[1, 1] * inflate)) if with_dark else 0.0,
        scatter,
        len(points),
        _bend(gain, mean, target, trust * dof / (2.0 * expected**2) / inflate, float(solved[0])),
    )


def _bend(gain: Floats, mean: Floats, target: Floats, weight: Floats, slope: float) -> tuple[float, float] | None:
    """Relative change at the brightest level that a square term makes, and its u; None where four points can't tell."""
    top = float(mean.max())
    design = np.column_stack([gain * mean / top, gain**2, gain * (mean / top) ** 2])
    normal = design.T @ (design * weight[:, None])
    scale = np.sqrt(np.diag(normal)) + 1e-300
    if len(mean) < 6 or np.linalg.cond(normal / np.outer(scale, scale)) > 1e8:
        return None
    covariance = np.linalg.inv(normal)
    solved = covariance @ (design.T @ (weight * target))
    return float(solved[2] / (slope * top)), float(np.sqrt(covariance[2, 2]) / (slope * top))
