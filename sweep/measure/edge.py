"""Slanted edges: where the edge runs, its spread function, and the transfer along its normal.

The edge-spread function is fitted in the space domain, at the pixels where they lie, by a cubic
spline with free levels, a light gradient, and tails that fall as 1/distance (the far diffraction
tail of any hard-edged pupil). Its Fourier transform is then known in closed form, so that there is
neither a bin nor a window to correct, and an edge that is cut short before its tails have died
away is not read too sharp. Uncertainties come from the residuals. The task and its terms (slanted
edge, region, angle, oversampling) are those of ISO 12233.
"""

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline
from scipy.special import erf

from sweep.measure.linear import Bools, Floats
from sweep.measure.mtf import Transfer

ANGLE_RANGE_DEG = (1.8, 12.5)
ROOM_IN_SPREADS = 1.5
V_CY_PX = np.linspace(0.0, 1.0, 201)
BINS_PER_PX = 16


@dataclass(frozen=True, slots=True)
class EdgeProfile:
    """The edge-spread function as binned samples, for a model to be fitted to.

    `distance_px`: (m,) mean signed distance along the normal, dark to light; `value`: (m,) light, in the unit of
    the samples, light gradient taken out; `u`: (m,) standard uncertainty of each, independent; `gradient`: (m,)
    the column by which a light gradient across the edge would change the values.
    """

    distance_px: Floats
    value: Floats
    u: Floats
    gradient: Floats


@dataclass(frozen=True, slots=True)
class EdgeCurve:
    """Where an edge runs: position across = c0 + c1 t + c2 t^2, with t from -1 to 1 along it.

    `across_x`: the normal is near the x axis (else near y); `polarity` +1: light at the larger coordinate.
    """

    across_x: bool
    polarity: int
    coefficients: tuple[float, float, float]
    middle_px: float
    half_px: float

    @property
    def tilt(self) -> float:
        """Cosine of the angle between the normal and the axis."""
        return float(1.0 / np.hypot(1.0, self.coefficients[1] / self.half_px))

    @property
    def direction_deg(self) -> float:
        """Direction of the normal from the x axis towards y, 0 to 180."""
        lean = float(np.degrees(np.arctan2(-self.coefficients[1] / self.half_px, 1.0)))
        return (lean if self.across_x else 90.0 - lean) % 180.0

    def along(self, x: Floats, y: Floats) -> Floats:
        """t of the points x, y (px)."""
        return ((y if self.across_x else x) - self.middle_px) / self.half_px

    def distance(self, x: Floats, y: Floats) -> Floats:
        """Signed distance from the edge along its normal, positive on the light side, px."""
        t = self.along(x, y)
        c0, c1, c2 = self.coefficients
        return np.asarray(self.polarity * self.tilt * ((x if self.across_x else y) - c0 - t * (c1 + t * c2)))

    def moved(self, c0: float, c1: float, c2: float) -> "EdgeCurve":
        """The curve with other coefficients."""
        return EdgeCurve(self.across_x, self.polarity, (c0, c1, c2), self.middle_px, self.half_px)


@dataclass(frozen=True, slots=True)
class EdgeMeasure:
    """What one edge says. Without `ok`, `why_not` holds codes and the figures are None.

    `dark`, `light`: levels far from the edge, unit of the samples; `angle_deg`: tilt from the nearest axis;
    `spread_px`: 10 to 90 % width; `shift_px`: (n,) of each frame along the normal, each with `shift_u_px`;
    `ragged_px`: rms wander of the print's edge beyond the curve; `bend_px`: how far the curve bows from end to end;
    `frame_level`: (n,) of each frame against the mean level of its samples; `overshoot`: by which the spread function
    leaves its levels near the edge, part of the step, dark and light.
    """

    ok: bool
    why_not: tuple[str, ...] = ()
    transfer: Transfer | None = None
    profile: EdgeProfile | None = None
    dark: float = 0.0
    light: float = 0.0
    angle_deg: float = 0.0
    spread_px: float = 0.0
    shift_px: Floats | None = None
    shift_u_px: float = 0.0
    ragged_px: float = 0.0
    bend_px: float = 0.0
    overshoot: tuple[float, float] = (0.0, 0.0)
    curve: EdgeCurve | None = None
    frame_level: Floats | None = None


def read_edge(
    x: Floats, y: Floats, values: Floats, valid: Bools | None = None, weights: Floats | None = None
) -> EdgeMeasure:
    """Read one slanted edge from n frames of one stop.

    x, y: (k,) sample positions in pixels; values: (n, k) linear light; valid: (n, k), False where a sample must
    not count; weights: (n,), in proportion to the light that each frame caught. Frames are brought to one level and
    one place before they are averaged.
    Returns levels in the unit of `values`, frequencies in cycles per pixel. Valid for one edge, tilted 2 to 12
    degrees, with room for 1.5 spread widths (10 to 90 %) on both sides.
    """
    good = np.isfinite(values) if valid is None else valid & np.isfinite(values)
    level = _frame_levels(values, good)
    counts = good.sum(axis=0)
    if level is None or np.mean(counts > 0) < 0.5:
        return EdgeMeasure(False, ("edge-not-found",))
    frames = values / level[:, None]
    share = good * (np.ones(len(values)) if weights is None else weights)[:, None]
    mean = np.where(good, frames * share, 0.0).sum(axis=0) / np.maximum(share.sum(axis=0), 1e-300)
    mean = np.where(counts > 0, mean, np.nan)
    line = _find_edge(x, y, mean)
    if line is None:
        return EdgeMeasure(False, ("edge-not-found",))
    found = _fit_edge(x, y, frames, good, mean, line)
    return found if found.frame_level is None else replace(found, frame_level=found.frame_level * level)


def _frame_levels(values: Floats, good: Bools) -> Floats | None:
    """Each frame's level relative to their mean, (n,); None where there is no light."""
    means = np.array([float(np.mean(v[g])) if g.any() else np.nan for v, g in zip(values, good, strict=True)])
    total = float(np.nanmean(means)) if np.isfinite(means).any() else 0.0
    if not np.isfinite(total) or total <= 0 or not np.isfinite(means).all() or (means <= 0.05 * total).any():
        return None
    return means / total


def _find_edge(x: Floats, y: Floats, mean: Floats) -> EdgeCurve | None:
    """A first, straight line through the edge, from the row by row crossing of the middle level."""
    grid = _cell_grid(x, y, mean)
    if grid is None:
        return None
    image, cell = grid
    if min(image.shape) < 8:
        return None
    smooth = _box3(image)
    gx, gy = np.abs(np.diff(smooth, axis=1)).mean(), np.abs(np.diff(smooth, axis=0)).mean()
    across_x = bool(gx >= gy)
    rows = image if across_x else image.T
    lo, hi = np.percentile(rows, [8, 92])
    if not hi > lo:
        return None
    profile = rows.mean(axis=0)
    third = max(2, rows.shape[1] // 4)
    polarity = 1 if profile[-third:].mean() > profile[:third].mean() else -1
    rows = rows if polarity > 0 else (hi + lo) - rows
    position = _row_crossings(rows, 0.5 * (lo + hi))
    t = (np.arange(rows.shape[0]) + 0.5) * cell - 0.5
    found = np.isfinite(position)
    if found.sum() < max(6, 0.7 * len(t)):
        return None
    where = (position * cell) + 0.5 * (cell - 1)
    keep = found.copy()
    fit = np.zeros(2)
    for _ in range(4):
        fit = np.polynomial.polynomial.polyfit(t[keep], where[keep], 1)
        off = np.abs(where - np.polynomial.polynomial.polyval(t, fit))
        limit = max(1.5 * cell, 3.0 * float(np.median(off[keep])))
        keep = found & (off < limit)
        if keep.sum() < max(6, 0.6 * len(t)):
            return None
    along = y if across_x else x
    middle, half = 0.5 * float(along.min() + along.max()), max(0.5 * float(np.ptp(along)), 1.0)
    return EdgeCurve(across_x, polarity, (float(fit[0] + fit[1] * middle), float(fit[1]) * half, 0.0), middle, half)


def _cell_grid(x: Floats, y: Floats, mean: Floats) -> tuple[Floats, int] | None:
    """The samples as an image: as they lie, or in cells of 2 x 2 pixels where every other one is missing."""
    width, height = int(x.max()) + 1, int(y.max()) + 1
    cell = 1 if len(x) > 0.75 * width * height else 2
    columns, rows = width // cell, height // cell
    if columns < 1 or rows < 1:
        return None
    cx, cy = (x // cell).astype(int), (y // cell).astype(int)
    inside = (cx < columns) & (cy < rows) & np.isfinite(mean)
    flat = cy[inside] * columns + cx[inside]
    count = np.bincount(flat, minlength=rows * columns)
    total = np.bincount(flat, weights=mean[inside], minlength=rows * columns)
    fill = float(np.median(mean[inside])) if inside.any() else 0.0
    return np.where(count > 0, total / np.maximum(count, 1), fill).reshape(rows, columns), cell


def _box3(image: Floats) -> Floats:
    padded = np.pad(image, 1, mode="edge")
    rows, columns = image.shape
    return np.asarray(sum(padded[i : i + rows, j : j + columns] for i in range(3) for j in range(3)) / 9.0)


def _row_crossings(rows: Floats, middle: float) -> Floats:
    """Where each row, smoothed over its neighbours, rises through `middle` once in effect; else NaN."""
    kernel = np.ones(3) / 3.0
    smooth = np.apply_along_axis(lambda r: np.convolve(np.pad(r, 1, mode="edge"), kernel, "valid"), 1, rows)
    step = np.cumsum(smooth - middle, axis=1)
    lowest = np.argmin(step, axis=1)
    out = np.full(len(rows), np.nan)
    for i, j in enumerate(lowest):
        if 0 <= j < rows.shape[1] - 1 and smooth[i, j + 1] > smooth[i, j]:
            out[i] = j + np.clip((middle - smooth[i, j]) / (smooth[i, j + 1] - smooth[i, j]), 0.0, 1.0)
    return out


@dataclass(frozen=True, slots=True)
class _Spread:
    """A fitted spread function: knots of its core, coefficients of `_tables`' columns, covariance, light gradient."""

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


@lru_cache(maxsize=256)
def _transform(knots: tuple[float, ...]) -> NDArray[np.complex128]:
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


@dataclass(slots=True)
class _State:
    """The fit as it goes on: the curve, the light gradient along it, the noise, which samples count."""

    curve: EdgeCurve
    keep: Bools
    deviation: Floats
    along_gradient: float = 0.0
    fitted: _Spread | None = None
    spread_px: float = 0.0
    room_px: float = 0.0

    def model(self, d: Floats, t: Floats) -> Floats:
        """Light at distance d and place t along the edge, gradients included."""
        assert self.fitted is not None
        return np.asarray(self.fitted.value(d) * (1.0 + self.fitted.gradient * d) * (1.0 + self.along_gradient * t))


_TURNS = 6


def _fit_edge(x: Floats, y: Floats, frames: Floats, good: Bools, mean: Floats, curve: EdgeCurve) -> EdgeMeasure:
    """From a first line to the finished measure: curve, spread function, shifts, transfer."""
    there = np.isfinite(mean)
    light = np.where(there, mean, 0.0)
    t = curve.along(x, y)
    state = _State(curve, there, np.ones_like(light))
    for turn in range(_TURNS):
        d = state.curve.distance(x, y)
        if not _refit(state, d, t, light, there):
            return EdgeMeasure(False, ("edge-not-found",))
        if turn < _TURNS - 1:
            _move_curve(state, d, t, light, bend=turn >= 2)
    angle = float(np.degrees(np.arccos(state.curve.tilt)))
    if not ANGLE_RANGE_DEG[0] <= angle <= ANGLE_RANGE_DEG[1]:
        return EdgeMeasure(False, ("edge-angle",), angle_deg=angle, curve=state.curve)
    clumping = _clumping(state, x, y, (light - state.model(d, t)) / state.deviation, np.abs(d) > state.spread_px)
    levels = _side_levels(state, d, t, frames, good)
    frames = frames / levels[:, None]
    shift, shift_u = _frame_shifts(state, d, t, frames, good)
    if np.abs(shift).max() > _SHIFT_MATTERS_PX:
        d, t, light, state = _align_frames(state, d, t, frames, good, shift)
        _refit(state, d, t, light, state.keep)
    return replace(_finish(state, d, t, light, (shift, shift_u), clumping), frame_level=levels)


_CORRELATION_MATTERS = 0.05
_MOST_CLUMPING = 8.0


def _clumping(state: _State, x: Floats, y: Floats, noise: Floats, away: Bools) -> float:
    """By what factor neighbours that share their noise raise the variance of a mean: (1 + r) / (1 - r) along x and y.

    r: correlation of the fit's residuals between neighbours away from the edge, where it is more than chance.
    """
    columns, rows = (np.rint(c).astype(np.intp) for c in (x, y))
    image = np.full((int(rows.max()) + 1, int(columns.max()) + 1), np.nan)
    use = state.keep & away
    image[rows[use], columns[use]] = noise[use]
    total = float(np.nanmean(image**2)) if use.any() else 0.0
    factor = 1.0
    for pair in (image[:, 1:] * image[:, :-1], image[1:] * image[:-1]):
        there = np.isfinite(pair)
        if there.sum() > 200 and total > 0:
            r = min(float(pair[there].mean()) / total, 0.6)
            factor *= (1.0 + r) / (1.0 - r) if r > _CORRELATION_MATTERS else 1.0
    return min(factor, _MOST_CLUMPING)


def _side_levels(state: _State, d: Floats, t: Floats, frames: Floats, good: Bools) -> Floats:
    """Each frame's level, (n,), from the even sides alone: there an edge that has moved changes nothing."""
    assert state.fitted is not None
    model = state.model(d, t)
    weight = (good & state.keep & (np.abs(d) > min(2.0 * state.spread_px, 0.6 * state.room_px))) * (
        model / state.deviation**2
    )
    return np.asarray(
        (weight * np.where(good, frames, 0.0)).sum(axis=1) / np.maximum((weight * model).sum(axis=1), 1e-300)
    )


def _refit(state: _State, d: Floats, t: Floats, light: Floats, there: Bools) -> bool:
    """One turn: width, spread function, noise, outliers, gradient along the edge. False where there is no edge."""
    room = min(-float(np.percentile(d, 2)), float(np.percentile(d, 98)))
    width = _spread_width(d[state.keep], light[state.keep])
    if room < 4.0 or width is None or width * ROOM_IN_SPREADS > room:
        return False
    state.spread_px, state.room_px = width, room
    knots = _knots(_stepped(width), _stepped(min(max(5.0, 2.3 * width), 0.85 * room)))
    flat = light / (1.0 + state.along_gradient * t)
    fitted = _fit_spread(d, flat, state.keep, state.deviation, knots, state.fitted)
    dark, bright = fitted.levels
    if bright - dark <= 0:
        return False
    model, slope = fitted.value(d) * (1.0 + fitted.gradient * d), fitted.slope(d)
    residual = flat - model
    state.fitted = fitted
    state.deviation = _noise_deviation(d, residual, model, fitted, width, state.keep)
    state.keep = there & (np.abs(residual) < 5.0 * np.hypot(state.deviation, 0.15 * np.abs(slope)))
    weight = state.keep / state.deviation**2
    state.along_gradient += float(np.sum(weight * residual * t * model) / np.sum(weight * (t * model) ** 2))
    return bool(state.keep.mean() > 0.5)


def _move_curve(state: _State, d: Floats, t: Floats, light: Floats, bend: bool) -> None:
    """Move the curve to where the residuals say; the middle goes to where the light is half way up."""
    assert state.fitted is not None
    slope = state.fitted.slope(d)
    residual = light - state.model(d, t)
    weight = state.keep / state.deviation**2
    columns = np.column_stack([slope, slope * t, slope * (t * t - 1.0 / 3.0)])[:, : 3 if bend else 2]
    scale = state.curve.polarity / state.curve.tilt
    move = np.zeros(3)
    move[: columns.shape[1]] = -scale * np.linalg.solve(
        columns.T @ (columns * weight[:, None]), columns.T @ (weight * residual)
    )
    fine = np.linspace(-0.5 * state.room_px, 0.5 * state.room_px, 801)
    dark, bright = state.fitted.levels
    half_way = float(np.interp(0.5 * (dark + bright), np.maximum.accumulate(state.fitted.value(fine)), fine))
    c0, c1, c2 = state.curve.coefficients
    state.curve = state.curve.moved(c0 + scale * half_way - move[2] / 3.0, c1 + move[1], c2 + move[2])


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


def _stepped(px: float) -> float:
    """The value rounded to steps of some 6 %, so that knots and their transforms are made once."""
    return float(np.round(1.06 ** np.round(np.log(px) / np.log(1.06)), 6))


def _binned(d: Floats, columns: list[Floats], weight: Floats) -> tuple[Floats, list[Floats], Floats]:
    """Weighted means of `d` and of each of `columns` over bins of distance; weights summed."""
    index = np.floor((d - d.min()) * BINS_PER_PX).astype(int)
    total = np.bincount(index, weights=weight)
    filled = total > 0
    means = [np.bincount(index, weights=weight * c)[filled] / total[filled] for c in [d, *columns]]
    return means[0], means[1:], np.asarray(total[filled], dtype=np.float64)


def _fit_spread(
    d: Floats, flat: Floats, keep: Bools, deviation: Floats, knots: tuple[float, ...], before: _Spread | None
) -> _Spread:
    """Weighted linear least squares for levels, tail, core and light gradient across the edge."""
    weight = keep / deviation**2
    centre, (value, gradient_column), total = _binned(d, [flat, d * (before.value(d) if before else flat)], weight)
    design = np.column_stack([_looked_up(centre, _tables(knots)[0]), gradient_column])
    root = np.sqrt(total)
    scale = np.linalg.norm(design * root[:, None], axis=0) + 1e-300
    normal = (design * root[:, None]) / scale
    gram = normal.T @ normal
    gram[np.diag_indices_from(gram)] += 1e-10
    inverse = np.linalg.inv(gram)
    solved = inverse @ (normal.T @ (root * value)) / scale
    covariance = inverse / np.outer(scale, scale)
    return _Spread(knots, solved[:-1], covariance, float(solved[-1]))


def _noise_deviation(d: Floats, residual: Floats, model: Floats, fitted: _Spread, width: float, keep: Bools) -> Floats:
    """Standard deviation of one sample, (k,): from the residuals of either side, variance linear in between."""
    side = max(1.0, 0.7 * width)
    dark, bright = fitted.levels
    spread = []
    for part in (d < -side, d > side):
        r = residual[part & keep]
        spread.append(1.4826 * float(np.median(np.abs(r))) if r.size > 20 else 0.0)
    floor = 1e-4 * (bright - dark)
    lo, hi = max(spread[0], floor) ** 2, max(spread[1], floor) ** 2
    share = np.clip((model - dark) / (bright - dark), 0.0, 1.0)
    return np.asarray(np.sqrt(lo + (hi - lo) * share))


_SHIFT_MATTERS_PX = 0.012


def _frame_shifts(state: _State, d: Floats, t: Floats, frames: Floats, good: Bools) -> tuple[Floats, float]:
    """How far each frame's edge lies from the mean, (n,) px along the normal, and the u of one of them."""
    assert state.fitted is not None
    slope = state.fitted.slope(d) * (1.0 + state.along_gradient * t)
    weight = state.keep / state.deviation**2
    usable = good & state.keep
    bottom = (usable * (weight * slope**2)).sum(axis=1)
    top = (usable * (weight * slope) * (np.where(good, frames, 0.0) - state.model(d, t))).sum(axis=1)
    shift = -top / np.maximum(bottom, 1e-300)
    return shift - shift.mean(), float(np.sqrt(len(frames)) / np.sqrt(np.mean(bottom)))


def _align_frames(
    state: _State, d: Floats, t: Floats, frames: Floats, good: Bools, shift: Floats
) -> tuple[Floats, Floats, Floats, _State]:
    """All frames' samples side by side, each at its distance from its own edge.

    The deviation of each is such that all frames together weigh what their mean weighed: pattern noise is common to
    them.
    """
    n = len(frames)
    moved = replace(state, keep=(good & state.keep).ravel(), deviation=np.tile(state.deviation, n) * np.sqrt(n))
    return (d[None, :] - shift[:, None]).ravel(), np.tile(t, n), np.where(good, frames, 0.0).ravel(), moved


def _finish(
    state: _State, d: Floats, t: Floats, light: Floats, shifts: tuple[Floats, float], clumping: float
) -> EdgeMeasure:
    """Transfer, profile and side figures from the final state."""
    assert state.fitted is not None
    fitted = replace(state.fitted, covariance=state.fitted.covariance * clumping)
    ragged = _ragged(state, d, t, light)
    flat = light / (1.0 + state.along_gradient * t)
    weight = state.keep / np.hypot(state.deviation, ragged * np.abs(fitted.slope(d))) ** 2
    centre, (value, gradient_column), total = _binned(d, [flat, d * fitted.value(d)], weight)
    dark, bright = fitted.levels
    reach = min(3.0 * state.spread_px, state.room_px)
    rise = (fitted.value(np.linspace(-reach, reach, 401)) - dark) / (bright - dark)
    return EdgeMeasure(
        ok=True,
        transfer=_transfer(fitted, _cut_short(state)),
        profile=EdgeProfile(
            centre, value - fitted.gradient * gradient_column, np.sqrt(clumping / total), gradient_column
        ),
        dark=dark,
        light=bright,
        angle_deg=float(np.degrees(np.arccos(state.curve.tilt))),
        spread_px=state.spread_px,
        shift_px=shifts[0],
        shift_u_px=shifts[1],
        ragged_px=ragged,
        bend_px=abs(state.curve.coefficients[2]),
        overshoot=(float(-rise.min()), float(rise.max() - 1.0)),
        curve=state.curve,
    )


def _ragged(state: _State, d: Floats, t: Floats, light: Floats) -> float:
    """How far the print's edge wanders about the curve, rms px: the variance of row positions beyond their noise."""
    assert state.fitted is not None
    slope = state.fitted.slope(d)
    residual = light - state.model(d, t)
    weight = state.keep / state.deviation**2
    row = np.floor((t + 1.0) * state.curve.half_px * 0.5).astype(int)
    bottom = np.bincount(row, weights=weight * slope**2)
    top = np.bincount(row, weights=weight * slope * residual)
    strong = bottom > 0.3 * np.median(bottom)
    if strong.sum() < 8:
        return 0.0
    place = top[strong] / bottom[strong]
    excess = float(np.var(place)) * strong.sum() / (strong.sum() - 3) - float(np.mean(1.0 / bottom[strong]))
    return float(np.sqrt(max(excess, 0.0)))


def _cut_short(state: _State) -> float:
    """Relative u of the step where the region ends before the spread function has levelled out."""
    return 0.06 * max(0.0, 2.4 - state.room_px / state.spread_px)


def _transfer(fitted: _Spread, step_u: float) -> Transfer:
    """Signed transfer at V_CY_PX: the transform's modulus, noise bias off, signed about the edge's own middle."""
    matrix = _transform(fitted.knots)
    step = float(fitted.coefficients[1])
    matrix = matrix / np.sinc(V_CY_PX / BINS_PER_PX)[:, None]
    curve = matrix @ fitted.coefficients / step
    low = (V_CY_PX > 0) & (V_CY_PX < 0.08) & (np.abs(curve) > 0.3)
    place = float(np.sum(np.angle(curve[low]) * V_CY_PX[low]) / np.sum(V_CY_PX[low] ** 2)) if low.any() else 0.0
    turned = curve * np.exp(-1j * place * V_CY_PX)
    tangent = matrix.copy()
    tangent[:, 1] -= curve
    tangent = tangent * np.exp(-1j * place * V_CY_PX)[:, None] / step
    covariance = fitted.covariance[:-1, :-1]
    real_u2 = np.einsum("ij,jk,ik->i", tangent.real, covariance, tangent.real)
    imag_u2 = np.einsum("ij,jk,ik->i", tangent.imag, covariance, tangent.imag)
    modulus2 = np.maximum(np.abs(turned) ** 2 - imag_u2, 0.0)
    value = np.where(turned.real < 0, -1.0, 1.0) * np.sqrt(modulus2)
    return Transfer(
        V_CY_PX, value, np.sqrt(np.maximum(real_u2, 0.0) + (step_u * np.minimum(value, 1.0 - np.abs(value))) ** 2)
    )
