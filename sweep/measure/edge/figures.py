"""From a fitted edge to its figures: transfer, profile, raggedness, and what shared noise takes from them."""

from dataclasses import replace

import numpy as np

from sweep.measure.edge.fitted import BINS_PER_PX, FittedEdge, binned
from sweep.measure.edge.records import EdgeMeasure, EdgeProfile
from sweep.measure.edge.spread import V_CY_PX, Spread, transform
from sweep.measure.linear import Floats
from sweep.measure.mtf import Transfer

_CORRELATION_MATTERS = 0.05
_MOST_CLUMPING = 8.0


def edge_figures(fit: FittedEdge, shift_px: Floats, shift_u_px: float, clumping: float) -> EdgeMeasure:
    """What a fitted edge says; clumping: by what factor noise that neighbours share raises variances."""
    spread = replace(fit.spread, covariance=fit.spread.covariance * clumping)
    samples, trust = fit.samples, fit.trust
    ragged = _ragged(fit)
    flat = samples.light / (1.0 + trust.along_gradient * samples.t)
    weight = trust.keep / np.hypot(trust.deviation, ragged * np.abs(spread.slope(samples.d))) ** 2
    columns = [flat, samples.d * spread.value(samples.d)]
    centre, (value, gradient_column), total = binned(samples.d, columns, weight)
    dark, bright = spread.levels
    reach = min(3.0 * fit.spread_px, fit.room_px)
    rise = (spread.value(np.linspace(-reach, reach, 401)) - dark) / (bright - dark)
    u = np.sqrt(clumping / total)
    return EdgeMeasure(
        ok=True,
        transfer=_transfer(spread, _cut_short(fit)),
        profile=EdgeProfile(centre, value - spread.gradient * gradient_column, u, gradient_column),
        dark=dark,
        light=bright,
        angle_deg=fit.curve.angle_deg,
        spread_px=fit.spread_px,
        shift_px=shift_px,
        shift_u_px=shift_u_px,
        ragged_px=ragged,
        bend_px=abs(fit.curve.coefficients[2]),
        overshoot=(float(-rise.min()), float(rise.max() - 1.0)),
        curve=fit.curve,
    )


def clumping_of(fit: FittedEdge, x: Floats, y: Floats) -> float:
    """By what factor neighbours that share their noise raise the variance of a mean: (1 + r) / (1 - r) along x and y.

    x, y: (k,) where the fit's samples lie, px; r: correlation of the fit's residuals between neighbours away from the
    edge, where it is more than chance.
    """
    noise = (fit.samples.light - fit.model) / fit.trust.deviation
    columns, rows = (np.rint(c).astype(np.intp) for c in (x, y))
    image = np.full((int(rows.max()) + 1, int(columns.max()) + 1), np.nan)
    use = fit.trust.keep & (np.abs(fit.samples.d) > fit.spread_px)
    image[rows[use], columns[use]] = noise[use]
    total = float(np.nanmean(image**2)) if use.any() else 0.0
    factor = 1.0
    for pair in (image[:, 1:] * image[:, :-1], image[1:] * image[:-1]):
        there = np.isfinite(pair)
        if there.sum() > 200 and total > 0:
            r = min(float(pair[there].mean()) / total, 0.6)
            factor *= (1.0 + r) / (1.0 - r) if r > _CORRELATION_MATTERS else 1.0
    return min(factor, _MOST_CLUMPING)


def _ragged(fit: FittedEdge) -> float:
    """How far the print's edge wanders about the curve, rms px: the variance of row positions beyond their noise."""
    slope, weight = fit.spread.slope(fit.samples.d), fit.trust.weight
    residual = fit.samples.light - fit.model
    row = np.floor((fit.samples.t + 1.0) * fit.curve.half_px * 0.5).astype(int)
    bottom = np.bincount(row, weights=weight * slope**2)
    top = np.bincount(row, weights=weight * slope * residual)
    strong = bottom > 0.3 * np.median(bottom)
    if strong.sum() < 8:
        return 0.0
    place = top[strong] / bottom[strong]
    excess = float(np.var(place)) * strong.sum() / (strong.sum() - 3) - float(np.mean(1.0 / bottom[strong]))
    return float(np.sqrt(max(excess, 0.0)))


def _cut_short(fit: FittedEdge) -> float:
    """Relative u of the step where the region ends before the spread function has levelled out."""
    return 0.06 * max(0.0, 2.4 - fit.room_px / fit.spread_px)


def _transfer(spread: Spread, step_u: float) -> Transfer:
    """Signed transfer at V_CY_PX: the transform's modulus, noise bias off, signed about the edge's own middle."""
    matrix = transform(spread.knots)
    step = float(spread.coefficients[1])
    matrix = matrix / np.sinc(V_CY_PX / BINS_PER_PX)[:, None]
    curve = matrix @ spread.coefficients / step
    low = (V_CY_PX > 0) & (V_CY_PX < 0.08) & (np.abs(curve) > 0.3)
    place = float(np.sum(np.angle(curve[low]) * V_CY_PX[low]) / np.sum(V_CY_PX[low] ** 2)) if low.any() else 0.0
    turned = curve * np.exp(-1j * place * V_CY_PX)
    tangent = matrix.copy()
    tangent[:, 1] -= curve
    tangent = tangent * np.exp(-1j * place * V_CY_PX)[:, None] / step
    covariance = spread.covariance[:-1, :-1]
    real_u2 = np.einsum("ij,jk,ik->i", tangent.real, covariance, tangent.real)
    imag_u2 = np.einsum("ij,jk,ik->i", tangent.imag, covariance, tangent.imag)
    modulus2 = np.maximum(np.abs(turned) ** 2 - imag_u2, 0.0)
    value = np.where(turned.real < 0, -1.0, 1.0) * np.sqrt(modulus2)
    return Transfer(
        V_CY_PX, value, np.sqrt(np.maximum(real_u2, 0.0) + (step_u * np.minimum(value, 1.0 - np.abs(value))) ** 2)
    )
