"""The frames of one stop against each other: their levels, and how far the edge moved."""

from dataclasses import replace

import numpy as np

from sweep.measure.edge.fitted import FittedEdge, Samples, Trust
from sweep.measure.linear import Bools, Floats


def first_levels(values: Floats, good: Bools) -> Floats | None:
    """Each frame's level relative to their mean, (n,); None where there is no light."""
    means = np.array([float(np.mean(v[g])) if g.any() else np.nan for v, g in zip(values, good, strict=True)])
    total = float(np.nanmean(means)) if np.isfinite(means).any() else 0.0
    if not np.isfinite(total) or total <= 0 or not np.isfinite(means).all() or (means <= 0.05 * total).any():
        return None
    return means / total


def side_levels(fit: FittedEdge, frames: Floats, good: Bools) -> Floats:
    """Each frame's level, (n,), from the even sides alone: there an edge that has moved changes nothing."""
    model, trust = fit.model, fit.trust
    away = np.abs(fit.samples.d) > min(2.0 * fit.spread_px, 0.6 * fit.room_px)
    weight = (good & trust.keep & away) * (model / trust.deviation**2)
    return np.asarray(
        (weight * np.where(good, frames, 0.0)).sum(axis=1) / np.maximum((weight * model).sum(axis=1), 1e-300)
    )


def frame_shifts(fit: FittedEdge, frames: Floats, good: Bools) -> tuple[Floats, float]:
    """How far each frame's edge lies from the mean, (n,) px along the normal, and the u of one of them."""
    trust = fit.trust
    slope = fit.spread.slope(fit.samples.d) * (1.0 + trust.along_gradient * fit.samples.t)
    usable = good & trust.keep
    bottom = (usable * (trust.weight * slope**2)).sum(axis=1)
    top = (usable * (trust.weight * slope) * (np.where(good, frames, 0.0) - fit.model)).sum(axis=1)
    shift = -top / np.maximum(bottom, 1e-300)
    return shift - shift.mean(), float(np.sqrt(len(frames)) / np.sqrt(np.mean(bottom)))


def aligned(fit: FittedEdge, frames: Floats, good: Bools, shift: Floats) -> FittedEdge:
    """The fit with all frames' samples side by side, each at its distance from its own edge.

    The deviation of each is such that all frames together weigh what their mean weighed: pattern noise is common to
    them.
    """
    n = len(frames)
    keep = (good & fit.trust.keep).ravel()
    d = (fit.samples.d[None, :] - shift[:, None]).ravel()
    samples = Samples(d, np.tile(fit.samples.t, n), np.where(good, frames, 0.0).ravel(), keep)
    deviation = np.tile(fit.trust.deviation, n) * np.sqrt(n)
    return replace(fit, samples=samples, trust=Trust(keep, deviation, fit.trust.along_gradient))
