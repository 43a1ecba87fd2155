"""An edge's curve and spread function, fitted in turns to the samples where they lie."""

from dataclasses import dataclass

import numpy as np

from sweep.measure.edge.curve import EdgeCurve
from sweep.measure.edge.spread import Spread, columns_at, knots_for
from sweep.measure.linear import Bools, Floats

ROOM_IN_SPREADS = 1.5
BINS_PER_PX = 16
_TURNS = 6
_STRAIGHT_TURNS = 2


@dataclass(frozen=True, slots=True)
class Samples:
    """Samples (k,) of an edge: distance from it (px), place along it (-1 to 1), light, and whether there is any."""

    d: Floats
    t: Floats
    light: Floats
    there: Bools


@dataclass(frozen=True, slots=True)
class Trust:
    """Which samples (k,) count, the deviation of each, and the light gradient along the edge."""

    keep: Bools
    deviation: Floats
    along_gradient: float = 0.0

    @property
    def weight(self) -> Floats:
        """Of each sample in a least-squares fit."""
        return np.asarray(self.keep / self.deviation**2)


@dataclass(frozen=True, slots=True)
class FittedEdge:
    """An edge's curve and spread function with the samples they were fitted to.

    `spread_px`: 10 to 90 % width; `room_px`: how far the samples reach on the shorter side.
    """

    curve: EdgeCurve
    samples: Samples
    trust: Trust
    spread: Spread
    spread_px: float
    room_px: float

    @property
    def model(self) -> Floats:
        """Light at each sample, (k,), gradients included."""
        d, t = self.samples.d, self.samples.t
        return np.asarray(
            self.spread.value(d) * (1.0 + self.spread.gradient * d) * (1.0 + self.trust.along_gradient * t)
        )


def fit_edge(x: Floats, y: Floats, mean: Floats, line: EdgeCurve) -> FittedEdge | None:
    """Curve and spread function from samples (k,) at x, y (px) and a first line, in turns; None where no edge is.

    mean: (k,) light, NaN where there is none.
    """
    there = np.isfinite(mean)
    light = np.where(there, mean, 0.0)
    t = line.along(x, y)
    fit = refit(line, Samples(line.distance(x, y), t, light, there), Trust(there, np.ones_like(light)), None)
    for turn in range(1, _TURNS):
        if fit is None or fit.trust.keep.mean() <= 0.5:
            return None
        curve = _moved_curve(fit, bend=turn > _STRAIGHT_TURNS)
        fit = refit(curve, Samples(curve.distance(x, y), t, light, there), fit.trust, fit.spread)
    return fit if fit is not None and fit.trust.keep.mean() > 0.5 else None


def refit(curve: EdgeCurve, samples: Samples, trust: Trust, before: Spread | None) -> FittedEdge | None:
    """One turn: width, spread function, noise, outliers, gradient along the edge. None where there is no edge."""
    d, t = samples.d, samples.t
    room = min(-float(np.percentile(d, 2)), float(np.percentile(d, 98)))
    width = _spread_width(d[trust.keep], samples.light[trust.keep])
    if width is not None and before is not None:  # a light gradient passes for a part of the edge
        even = samples.light / ((1.0 + trust.along_gradient * t) * (1.0 + before.gradient * d))
        width = min(width, _spread_width(d[trust.keep], even[trust.keep]) or width)
    if room < 4.0 or width is None or width * ROOM_IN_SPREADS > room:
        return None
    flat = samples.light / (1.0 + trust.along_gradient * t)
    spread = _fit_spread(d, flat, trust, knots_for(width, min(max(5.0, 2.3 * width), 0.85 * room)), before)
    dark, bright = spread.levels
    if bright - dark <= 0:
        return None
    model = spread.value(d) * (1.0 + spread.gradient * d)
    residual = flat - model
    deviation = _noise_deviation(d, residual, model, spread, width, trust.keep)
    keep = samples.there & (np.abs(residual) < 5.0 * np.hypot(deviation, 0.15 * np.abs(spread.slope(d))))
    weight = keep / deviation**2
    more = float(np.sum(weight * residual * t * model) / np.sum(weight * (t * model) ** 2))
    return FittedEdge(curve, samples, Trust(keep, deviation, trust.along_gradient + more), spread, width, room)


def _moved_curve(fit: FittedEdge, bend: bool) -> EdgeCurve:
    """The curve moved to where the residuals say; the middle goes to where the light is half way up."""
    t, slope, weight = fit.samples.t, fit.spread.slope(fit.samples.d), fit.trust.weight
    residual = fit.samples.light - fit.model
    columns = np.column_stack([slope, slope * t, slope * (t * t - 1.0 / 3.0)])[:, : 3 if bend else 2]
    scale = fit.curve.polarity / fit.curve.tilt
    move = np.zeros(3)
    move[: columns.shape[1]] = -scale * np.linalg.solve(
        columns.T @ (columns * weight[:, None]), columns.T @ (weight * residual)
    )
    fine = np.linspace(-0.5 * fit.room_px, 0.5 * fit.room_px, 801)
    dark, bright = fit.spread.levels
    half_way = float(np.interp(0.5 * (dark + bright), np.maximum.accumulate(fit.spread.value(fine)), fine))
    c0, c1, c2 = fit.curve.coefficients
    return fit.curve.moved(c0 + scale * half_way - move[2] / 3.0, c1 + move[1], c2 + move[2])


def _spread_width(d: Floats, light: Floats) -> float | None:
    """Distance over which the light rises from 10 to 90 % of the step, from 1/4 px bins, smoothed; px."""
    limit = float(np.abs(d).max())
    bins = np.arange(-limit, limit + 0.25, 0.25)
    which = np.digitize(d, bins)
    count = np.bincount(which, minlength=len(bins) + 1)[1:-1]
    total = np.bincount(which, weights=light, minlength=len(bins) + 1)[1:-1]
    centre = 0.5 * (bins[1:] + bins[:-1])
    filled = count > 0
    if filled.sum() < 16:
        return None
    profile = np.interp(centre, centre[filled], total[filled] / count[filled])
    smooth = np.convolve(np.pad(profile, 2, mode="edge"), np.ones(5) / 5.0, "valid")
    reach = max(4, len(smooth) // 6)
    lo, hi = float(np.median(smooth[:reach])), float(np.median(smooth[-reach:]))
    if hi <= lo:
        return None
    rise = np.maximum.accumulate((smooth - lo) / (hi - lo))
    if rise[-1] < 0.9 or rise[0] > 0.1:
        return None
    wide = float(np.interp(0.9, rise, centre) - np.interp(0.1, rise, centre))
    return float(np.sqrt(max(wide**2 - 1.0, 0.5)))


def _fit_spread(d: Floats, flat: Floats, trust: Trust, knots: tuple[float, ...], before: Spread | None) -> Spread:
    """Weighted linear least squares for levels, tail, core and light gradient across the edge."""
    columns = [flat, d * (before.value(d) if before else flat)]
    centre, (value, gradient_column), total = binned(d, columns, trust.weight)
    design = np.column_stack([columns_at(centre, knots), gradient_column])
    root = np.sqrt(total)
    norm = np.linalg.norm(design * root[:, None], axis=0)
    scale = np.where(norm > 0.0, norm, 1.0)
    normal = (design * root[:, None]) / scale
    gram = normal.T @ normal
    gram[np.diag_indices_from(gram)] += 1e-10
    inverse = np.linalg.inv(gram)
    solved = inverse @ (normal.T @ (root * value)) / scale
    covariance = inverse / np.outer(scale, scale)
    return Spread(knots, solved[:-1], covariance, float(solved[-1]))


def binned(d: Floats, columns: list[Floats], weight: Floats) -> tuple[Floats, list[Floats], Floats]:
    """Weighted means of `d` and of each of `columns` over bins of distance; weights summed."""
    index = np.floor((d - d.min()) * BINS_PER_PX).astype(int)
    total = np.bincount(index, weights=weight)
    filled = total > 0
    means = [np.bincount(index, weights=weight * c)[filled] / total[filled] for c in [d, *columns]]
    return means[0], means[1:], np.asarray(total[filled], dtype=np.float64)


def _noise_deviation(d: Floats, residual: Floats, model: Floats, spread: Spread, width: float, keep: Bools) -> Floats:
    """Standard deviation of one sample, (k,): from the residuals of either side, variance linear in between."""
    side = max(1.0, 0.7 * width)
    dark, bright = spread.levels
    rms = []
    for part in (d < -side, d > side):
        r = residual[part & keep]
        rms.append(1.4826 * float(np.median(np.abs(r))) if r.size > 20 else 0.0)
    floor = 1e-4 * (bright - dark)
    lo, hi = max(rms[0], floor) ** 2, max(rms[1], floor) ** 2
    share = np.clip((model - dark) / (bright - dark), 0.0, 1.0)
    return np.asarray(np.sqrt(lo + (hi - lo) * share))
