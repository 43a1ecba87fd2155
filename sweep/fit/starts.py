"""Where to begin: the best minima of a grid over focus and spherical aberration, by a coarse look at the data."""

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from sweep.fit.model import Optics
from sweep.fit.problem import BLUR2, COLOUR, FOCUS, OWN_FOCUS_WAVES, W040, Problem, View
from sweep.lens import lens_transfer
from sweep.measure.linear import Floats

START_W040 = (-1.5, -0.5, 0.0, 0.5, 1.0, 2.0)
MOST_STARTS = 3
HOPELESS = 8.0
"""A start this many times worse than the best by the coarse look is not tried."""
START_COLOUR = 0.1
"""Not zero: there the transfer has no slope in it."""


def starting_points(problem: Problem) -> list[Floats]:
    """Parameter vectors to begin at, the most promising first."""
    theta = np.array([mean for mean, _ in problem.prior])
    views, v, value, weight, scale = _coarse_look(problem)
    optics = Optics(problem, views)
    bench = problem.bench.of_one_wavelength()
    camera = np.exp(-2.0 * np.pi**2 * theta[BLUR2] * v**2) * np.sinc(v)
    low, high = float(problem.depths_mm.min()), float(problem.depths_mm.max())
    deep = problem.prior[problem.names.index("shift 0")][1] / OWN_FOCUS_WAVES
    reach = max(high - low, 6.0 * deep)
    focus_grid = np.linspace(low - 0.6 * reach, high + 0.6 * reach, 61)
    cost = np.zeros((len(focus_grid), len(START_W040)))
    for i, focus in enumerate(focus_grid):
        for j, w040 in enumerate(START_W040):
            theta[FOCUS], theta[W040] = focus, w040
            pupil = optics.pupil(theta)
            clipped = replace(pupil, w020=np.clip(pupil.w020, -8.0, 8.0))
            cost[i, j] = _coarse_cost(lens_transfer(bench, clipped, v) * camera, value, weight, scale)
    starts = []
    for i, j in _minima(cost):
        start = theta.copy()
        start[FOCUS], start[W040], start[COLOUR] = focus_grid[i], START_W040[j], START_COLOUR
        starts.append(start)
    return starts


def _minima(cost: Floats) -> list[tuple[int, int]]:
    """The lowest local minima of a grid, some at most, best first; none that is hopeless."""
    found: list[tuple[int, int]] = []
    for flat in np.argsort(cost, axis=None):
        i, j = (int(n) for n in np.unravel_index(flat, cost.shape))
        if len(found) == MOST_STARTS or (found and cost[i, j] > HOPELESS * cost.min()):
            break
        if cost[max(i - 1, 0) : i + 2, max(j - 1, 0) : j + 2].min() >= cost[i, j]:
            found.append((i, j))
    return found


def _coarse_look(problem: Problem) -> tuple[list[View], Floats, Floats, Floats, NDArray[np.intp]]:
    """A few frequencies of every reading: views, frequencies, values, weights (views, 6), print's scale or -1."""
    part = np.array([0.06, 0.12, 0.2, 0.3, 0.42, 0.6])
    views: list[View] = []
    rows: list[tuple[Floats, Floats, Floats, int]] = []
    for edge in problem.edges:
        v = part * min(0.5, float(problem.bench.cutoff_cy_px(problem.light.f_number[edge.view.stop])))
        at = edge.transfer
        u = np.hypot(np.interp(v, at.v_cy_px, at.u), 0.03)
        views.append(edge.view)
        rows.append((v, np.interp(v, at.v_cy_px, at.value), 1.0 / u**2, -1))
    for block in problem.amplitudes:
        pick = np.linspace(0, len(block.v_cy_px) - 1, len(part)).round().astype(int)
        views.append(block.view)
        rows.append((block.v_cy_px[pick], block.value[pick], 1.0 / np.hypot(block.u[pick], 0.03) ** 2, block.scale))
    stacked = [np.stack(c) for c in zip(*[(v, m, w) for v, m, w, _ in rows], strict=True)]
    return views, stacked[0], stacked[1], stacked[2], np.array([scale for *_, scale in rows])


def _coarse_cost(model: Floats, value: Floats, weight: Floats, scale: NDArray[np.intp]) -> float:
    """Weighted squares of readings less model, each print's scale at its best."""
    total = float(np.sum((weight * (model - value) ** 2)[scale < 0]))
    for k in np.unique(scale[scale >= 0]):
        m, y, w = model[scale == k], value[scale == k], weight[scale == k]
        factor = max(float(np.sum(w * m * y)) / max(float(np.sum(w * m * m)), 1e-12), 0.0)
        total += float(np.sum(w * (factor * m - y) ** 2))
    return total
