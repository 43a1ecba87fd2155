"""Model less data: residuals and Jacobian of the whole problem, what is linear projected out."""

from functools import lru_cache
from itertools import pairwise

import numpy as np

from sweep.fit.model import Nodes, Optics, transfer_slopes
from sweep.fit.problem import EdgeData, Problem
from sweep.measure.linear import Floats


class Residuals:
    """Residuals and Jacobian of the whole problem, evaluated once for each parameter vector.

    `widen`: (views,) by what factor the u of each view's data is taken to be larger than stated.
    """

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        views = problem.views
        self.optics = Optics(problem, views)
        self.nodes = Nodes(problem.bench, views, np.exp(self.optics.ln_light))
        self.edge_matrices = [self._edge_matrix(i, e) for i, e in enumerate(problem.edges)]
        first = len(problem.edges)
        self.amplitude_matrices = [
            self.nodes.interpolation(first + i, a.v_cy_px) for i, a in enumerate(problem.amplitudes)
        ]
        self.widen = np.ones(len(views))
        self._at: Floats | None = None
        self._kept: tuple[Floats, Floats, list[slice]] = (np.zeros(0), np.zeros((0, 0)), [])

    def _edge_matrix(self, row: int, edge: EdgeData) -> Floats:
        """Matrix (m, nodes), transfer to spread function less one half: the integral of M sin(2 pi v d) / (pi v)."""
        reach = float(np.abs(edge.distance_px).max())
        x, w = _panels(int(np.ceil(4.0 + 0.4 * self.nodes.top[row] * reach)))
        v = x * self.nodes.top[row]
        weight = w * self.nodes.top[row] / (np.pi * v)
        wave = np.sin(2.0 * np.pi * np.outer(edge.distance_px, v)) * np.sinc(np.outer(edge.width_px, v)) * weight
        return np.asarray(wave @ self.nodes.interpolation(row, v))

    def __call__(self, theta: Floats) -> Floats:
        """Residuals (m,) at parameters theta: the data's, then the priors'."""
        return self.evaluate(theta)[0]

    def jacobian(self, theta: Floats) -> Floats:
        """Their derivatives (m, parameters)."""
        return self.evaluate(theta)[1]

    def forget(self) -> None:
        """To be called after `widen` has changed."""
        self._at = None

    def evaluate(self, theta: Floats) -> tuple[Floats, Floats, list[slice]]:
        """Residuals, Jacobian, and the rows of each view's data."""
        if self._at is not None and np.array_equal(self._at, theta):
            return self._kept
        value, slopes = transfer_slopes(self.optics, self.nodes, theta)
        found = [
            _edge_rows(edge, self.edge_matrices[i], value[i], slopes[:, i].T, self.widen[i])
            for i, edge in enumerate(self.problem.edges)
        ]
        for i, block in enumerate(self.problem.amplitudes, start=len(found)):
            matrix = self.amplitude_matrices[i - len(self.problem.edges)]
            at = self.optics.index[f"scale {block.scale}"]
            scale, u = np.exp(theta[at]), block.u * self.widen[i]
            model = scale * (matrix @ value[i])
            slope = scale * (matrix @ slopes[:, i].T)
            slope[:, at] += model
            found.append(((model - block.value) / u, slope / u[:, None]))
        ends = np.cumsum([0, *(len(r) for r, _ in found)])
        mean, deviation = np.array(self.problem.prior).T
        found.append(((theta - mean) / deviation, np.diag(1.0 / deviation)))
        blocks = [slice(int(a), int(b)) for a, b in pairwise(ends)]
        self._at = theta.copy()
        self._kept = (np.concatenate([r for r, _ in found]), np.vstack([j for _, j in found]), blocks)
        return self._kept


def _edge_rows(edge: EdgeData, matrix: Floats, value: Floats, slopes: Floats, widen: float) -> tuple[Floats, Floats]:
    """Residuals (m + 1,) and Jacobian (m + 1, parameters) of one edge, levels, position and gradient projected out.

    The last row holds the print's dark over light ratio. The Jacobian is Kaufman's (BIT 15, 49-57, 1975).
    """
    u = edge.u * widen
    rise = matrix @ value
    columns = (
        np.column_stack([np.ones_like(rise), rise, np.gradient(rise, edge.distance_px), edge.gradient]) / u[:, None]
    )
    light = float(edge.value.max())
    tie = np.array([1.0 - edge.ratio, -0.5 * (1.0 + edge.ratio), 0.0, 0.0]) / (edge.ratio_u * light)
    stacked = np.vstack([columns, tie])
    norm = np.linalg.norm(stacked, axis=0)
    q, r = np.linalg.qr(stacked / norm)
    data = np.append(edge.value / u, 0.0)
    part = q.T @ data
    solved = np.linalg.solve(r, part) / norm
    change = np.vstack([solved[1] * (matrix @ slopes) / u[:, None], np.zeros(slopes.shape[1])])
    return q @ part - data, change - q @ (q.T @ change)


@lru_cache(maxsize=128)
def _panels(count: int) -> tuple[Floats, Floats]:
    """Nodes and weights on 0 to 1: Gauss-Legendre of 12 points in each of `count` panels."""
    x, w = np.polynomial.legendre.leggauss(12)
    nodes = (np.arange(count)[:, None] + 0.5 * (x + 1.0)) / count
    return nodes.ravel(), np.tile(0.5 * w / count, count)
