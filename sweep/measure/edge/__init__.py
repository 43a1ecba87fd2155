"""Slanted edges: where the edge runs, its spread function, and the transfer along its normal.

    curve    where the edge runs, and a first line through it
    spread   the spread function: columns, slopes, transform
    fitted   curve and spread function fitted to the samples
    frames   the frames of a stop against each other
    figures  transfer, profile and the other figures of a fitted edge
    records  what one edge says

The edge-spread function is fitted in the space domain, at the pixels where they lie, by a cubic
spline with free levels, a light gradient, and tails that fall as 1/distance (the far diffraction
tail of any hard-edged pupil). Its Fourier transform is then known in closed form, so that there is
neither a bin nor a window to correct, and an edge that is cut short before its tails have died
away is not read too sharp. Uncertainties come from the residuals. The task and its terms (slanted
edge, region, angle, oversampling) are those of ISO 12233.
"""

from dataclasses import replace

import numpy as np

from sweep.measure.edge.curve import EdgeCurve, find_line
from sweep.measure.edge.figures import clumping_of, edge_figures
from sweep.measure.edge.fitted import fit_edge, refit
from sweep.measure.edge.frames import aligned, first_levels, frame_shifts, side_levels
from sweep.measure.edge.records import EdgeMeasure, EdgeProfile
from sweep.measure.linear import Bools, Floats

__all__ = ["ANGLE_RANGE_DEG", "EdgeCurve", "EdgeMeasure", "EdgeProfile", "read_edge"]

ANGLE_RANGE_DEG = (1.8, 12.5)
MOST_TRANSFER = 2.0
"""More than any sharpening gives: there is more than an edge in the region (common practice, no source)."""
_SHIFT_MATTERS_PX = 0.012


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
    level = first_levels(values, good)
    counts = good.sum(axis=0)
    if level is None or np.mean(counts > 0) < 0.5:
        return EdgeMeasure(False, ("edge-not-found",))
    frames = values / level[:, None]
    share = good * (np.ones(len(values)) if weights is None else weights)[:, None]
    mean = (np.where(good, frames, 0.0) * share).sum(axis=0) / np.maximum(share.sum(axis=0), 1e-300)
    mean = np.where(counts > 0, mean, np.nan)
    line = find_line(x, y, mean)
    fit = fit_edge(x, y, mean, line) if line is not None else None
    if fit is None:
        return EdgeMeasure(False, ("edge-not-found",))
    if not ANGLE_RANGE_DEG[0] <= fit.curve.angle_deg <= ANGLE_RANGE_DEG[1]:
        return EdgeMeasure(False, ("edge-angle",), angle_deg=fit.curve.angle_deg, curve=fit.curve)
    clumping = clumping_of(fit, x, y)
    side = side_levels(fit, frames, good)
    frames = frames / side[:, None]
    shift, shift_u = frame_shifts(fit, frames, good)
    if np.abs(shift).max() > _SHIFT_MATTERS_PX:
        fit = aligned(fit, frames, good, shift)
        fit = refit(fit.curve, fit.samples, fit.trust, fit.spread) or fit
    found = edge_figures(fit, shift, shift_u, clumping)
    if found.transfer is not None and np.abs(found.transfer.value).max() > MOST_TRANSFER:
        return EdgeMeasure(False, ("edge-not-found",))
    return replace(found, frame_level=side * level)
