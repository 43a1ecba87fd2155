"""Readings -> lens model: one least-squares fit over the profiles of all stops, targets and patches.

Edges enter with their spread functions, stars and bars with their amplitudes, the light with each ring position's
f-number. Levels, position and light gradient of an edge are linear and are projected out (variable projection, Golub
and Pereyra, SIAM J. Numer. Anal. 10, 413-432, 1973); the scale of a star or bar print is a parameter of its own. Weak
priors keep small what is small in a sound lens. The solver is MINPACK's Levenberg-Marquardt with the derivatives given.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from sweep.lens import Bench, Pupil, lens_transfer, lens_transfer_derivatives, pixel_box
from sweep.measure.linear import Floats
from sweep.measure.mtf import Transfer

NODES = 44
HIGHEST_CY_PX = 2.0
MARK_TOLERANCE = 0.03
"""Relative standard deviation of an engraved f-number (ISO 517 tolerances are of this order; value from memory)."""


@dataclass(frozen=True, slots=True)
class View:
    """One stop seen through one patch: which stop and target, and the direction of the frequencies (None: all)."""

    stop: int
    target: int
    direction_deg: float | None


@dataclass(frozen=True, slots=True)
class EdgeData:
    """A spread function to be met: distances (px), values, u, all (m,), and the light-gradient column.

    `width_px`: (m,) of the bins; `ratio` with `ratio_u`: dark over light level of the print, common to the patch's
    stops; `transfer`: the reading's own, for a first look.
    """

    view: View
    distance_px: Floats
    width_px: Floats
    value: Floats
    u: Floats
    gradient: Floats
    ratio: float
    ratio_u: float
    transfer: Transfer


@dataclass(frozen=True, slots=True)
class AmplitudeData:
    """Modulation at frequencies (m,) cycles per pixel, up to a scale that belongs to print `scale` (an index).

    `ln_scale`, `ln_scale_u`: what is known of it beforehand.
    """

    view: View
    v_cy_px: Floats
    value: Floats
    u: Floats
    scale: int
    ln_scale: float
    ln_scale_u: float


@dataclass(frozen=True, slots=True)
class StopLight:
    """What the light says of the stops, (k,): f-numbers, the reference stop as engraved, and u of ln N."""

    f_number: Floats
    ln_u: Floats


@dataclass(frozen=True, slots=True)
class FocusStep:
    """What the data say of a focus that changes from one stop on: its size, in waves at that stop, and in its own u."""

    stop: int
    shift_mm: float
    waves: float
    z: float


@dataclass(frozen=True, slots=True)
class LensFit:
    """The fitted lens.

    `theta`: parameters by `names`, `covariance` of them (already widened where the model does not describe the data),
    `reduced_chi2` of the data, `misfit`: reduced chi-square of each data block, in the order of `views`; `rivals`:
    other solutions that fit nearly as well, each with how much its chi-square is higher.
    """

    bench: Bench
    depths_mm: Floats
    light: StopLight
    names: tuple[str, ...]
    theta: Floats
    covariance: Floats
    reduced_chi2: float
    misfit: Floats
    views: tuple[View, ...]
    focus_steps: tuple["FocusStep", ...] = ()
    rivals: tuple[tuple[float, Floats], ...] = ()

    def value(self, name: str) -> tuple[float, float]:
        """A parameter and its u."""
        i = self.names.index(name)
        return float(self.theta[i]), float(np.sqrt(self.covariance[i, i]))


FIRST_NAMES = ("focus", "w040", "w060", "blur2", "mark", "colour")


@dataclass(frozen=True, slots=True)
class Problem:
    """All data of one sweep. `names` and `prior` (mean, standard deviation) give the parameters in their order.

    focus: depth (mm) of paraxial focus; w040, w060: waves at the widest stop; blur2: sensor blur squared (px^2); mark:
    ln of the true over the engraved f-number of the reference stop; colour: waves of defocus at the widest stop for
    each standard deviation of the spectrum; ring K: what remains of ln N at stop K beside the light; shift T,
    astigmatism T: of target T's focus (mm); scale S: ln of a print's scale.
    """

    bench: Bench
    depths_mm: Floats
    light: StopLight
    edges: tuple[EdgeData, ...]
    amplitudes: tuple[AmplitudeData, ...]
    names: tuple[str, ...]
    prior: tuple[tuple[float, float], ...]

    @classmethod
    def of(
        cls,
        bench: Bench,
        depths_mm: Floats,
        light: StopLight,
        edges: Sequence[EdgeData],
        amplitudes: Sequence[AmplitudeData],
    ) -> "Problem":
        """The problem with its parameters and priors; a target's focus may wander by a part of a wave, wide open."""
        widest = float(light.f_number.min())
        step = 1e-3 * bench.focal_length_mm / bench.magnification
        at = float(np.mean(depths_mm))
        per_mm = abs(float(bench.w020_waves(np.array(widest), np.array(at + step), at)) / step)
        wander = OWN_FOCUS_WAVES / per_mm
        names = [*FIRST_NAMES]
        prior = [(at, 1e3 * wander), (0.0, 3.0), (0.0, 0.5), (0.09, 0.15), (0.0, MARK_TOLERANCE), (0.0, 0.3)]
        for k, u in enumerate(light.ln_u):
            names.append(f"ring {k}")
            prior.append((0.0, float(u)))
        for t in range(len(depths_mm)):
            names += [f"shift {t}", f"astigmatism {t}"]
            prior += [(0.0, wander), (0.0, wander)]
        for k, known in sorted({a.scale: (a.ln_scale, a.ln_scale_u) for a in amplitudes}.items()):
            names.append(f"scale {k}")
            prior.append(known)
        return cls(bench, depths_mm, light, tuple(edges), tuple(amplitudes), tuple(names), tuple(prior))

    @property
    def views(self) -> tuple[View, ...]:
        """The views of all data blocks: edges first, then amplitudes."""
        return (*(e.view for e in self.edges), *(a.view for a in self.amplitudes))


OWN_FOCUS_WAVES = 0.3


class Optics:
    """The pupil as the parameters say, for a list of views, with the pupil's derivatives.

    A view's target -1 stands for a depth between targets, its stop -1 for an f-number between stops; these are then
    given by `depth_mm` and `ln_f_number` (on the scale of the light), one for each view.
    """

    def __init__(
        self,
        problem_or_fit: "Problem | LensFit",
        views: Sequence[View],
        depth_mm: Floats | None = None,
        ln_f_number: Floats | None = None,
    ) -> None:
        self.bench = problem_or_fit.bench
        self.names = problem_or_fit.names
        self.stop = np.array([v.stop for v in views], dtype=int)
        self.target = np.array([v.target for v in views], dtype=int)
        direction = np.array(
            [0.0 if v.direction_deg is None else np.cos(2.0 * np.radians(v.direction_deg)) for v in views]
        )
        self.twist = direction
        self.ln_light = np.log(problem_or_fit.light.f_number)[self.stop] if ln_f_number is None else ln_f_number
        self.widest = float(problem_or_fit.light.f_number.min())
        depths = problem_or_fit.depths_mm
        self.depth = depths[self.target] if depth_mm is None else depth_mm
        self.index = {name: i for i, name in enumerate(self.names)}

    def pupil(self, theta: Floats) -> Pupil:
        """The pupil of each view at parameters theta."""
        n = np.exp(self.ln_f_number(theta))
        ratio = self.widest / n
        return Pupil(
            n,
            self.bench.w020_waves(n, self.depth + self._own_focus(theta), theta[0]),
            theta[1] * ratio**4,
            theta[2] * ratio**6,
            theta[5] * ratio**2,
        )

    def ln_f_number(self, theta: Floats) -> Floats:
        """ln of each view's true f-number."""
        ring = np.array([theta[self.index[f"ring {k}"]] if k >= 0 else 0.0 for k in self.stop])
        return np.asarray(self.ln_light + theta[4] + ring)

    def _own_focus(self, theta: Floats) -> Floats:
        shift = np.array([theta[self.index[f"shift {t}"]] if t >= 0 else 0.0 for t in self.target])
        twist = np.array([theta[self.index[f"astigmatism {t}"]] if t >= 0 else 0.0 for t in self.target])
        return np.asarray(shift + self.twist * twist)

    def slopes(self, theta: Floats, pupil: Pupil) -> dict[int, tuple[Floats, ...]]:
        """By parameter index: derivatives of (w020, w040, w060, colour, ln N) of every view, each (views,)."""
        ratio = self.widest / pupil.f_number
        none = np.zeros(len(self.stop))
        h = 1e-4 * (self.bench.focal_length_mm / self.bench.magnification)
        own = self.depth + self._own_focus(theta)
        by_depth = (self.bench.w020_waves(pupil.f_number, own + h, theta[0]) - pupil.w020) / h
        by_focus = (self.bench.w020_waves(pupil.f_number, own, theta[0] + h) - pupil.w020) / h
        by_ln = (-2.0 * pupil.w020, -4.0 * pupil.w040, -6.0 * pupil.w060, -2.0 * pupil.colour, none + 1.0)
        out: dict[int, tuple[Floats, ...]] = {
            0: (by_focus, none, none, none, none),
            1: (none, ratio**4, none, none, none),
            2: (none, none, ratio**6, none, none),
            4: by_ln,
            5: (none, none, none, ratio**2, none),
        }
        for name, i in self.index.items():
            word, _, number = name.partition(" ")
            if word == "ring":
                out[i] = tuple(np.where(self.stop == int(number), c, 0.0) for c in by_ln)
            elif word in ("shift", "astigmatism"):
                mine = np.where(self.target == int(number), by_depth, 0.0)
                out[i] = (mine if word == "shift" else mine * self.twist, none, none, none, none)
        return out


class Frequencies:
    """Frequencies (views, n) in cycles per pixel, and the pixel box there."""

    def __init__(self, views: Sequence[View], v_cy_px: Floats) -> None:
        self.v = v_cy_px
        self.box = np.stack([pixel_box(v, view.direction_deg) for v, view in zip(v_cy_px, views, strict=True)])


class Nodes(Frequencies):
    """Chebyshev nodes in frequency for each view, and what the camera does there."""

    def __init__(self, bench: Bench, views: Sequence[View], f_number: Floats, count: int = NODES) -> None:
        grid = 0.5 * (1.0 - np.cos(np.pi * np.arange(count) / (count - 1)))
        top = np.minimum(HIGHEST_CY_PX, 1.03 * bench.cutoff_cy_px(f_number))
        self.top = top
        super().__init__(views, top[:, None] * grid)
        basis = np.polynomial.chebyshev.chebvander(2.0 * grid - 1.0, count - 1)
        self.to_coefficients = np.linalg.inv(basis)

    def interpolation(self, row: int, v: Floats) -> Floats:
        """Matrix (m, nodes): values at frequencies v from those at view `row`'s nodes; nothing beyond the last."""
        inside = np.clip(2.0 * v / self.top[row] - 1.0, -1.0, 1.0)
        matrix = np.polynomial.chebyshev.chebvander(inside, self.v.shape[1] - 1) @ self.to_coefficients
        return np.asarray(np.where((v <= self.top[row])[:, None], matrix, 0.0))


def transfer(optics: Optics, nodes: Frequencies, theta: Floats) -> Floats:
    """Signed transfer of lens and camera (views, nodes)."""
    blur = np.exp(-2.0 * np.pi**2 * theta[3] * nodes.v**2)
    return np.asarray(lens_transfer(optics.bench, optics.pupil(theta), nodes.v) * nodes.box * blur)


def transfer_slopes(optics: Optics, nodes: Frequencies, theta: Floats) -> tuple[Floats, Floats]:
    """The transfer (views, nodes) and its derivatives (parameters, views, nodes)."""
    pupil = optics.pupil(theta)
    value, *by = lens_transfer_derivatives(optics.bench, pupil, nodes.v)
    camera = nodes.box * np.exp(-2.0 * np.pi**2 * theta[3] * nodes.v**2)
    slopes = np.zeros((len(theta), *value.shape))
    for i, factors in optics.slopes(theta, pupil).items():
        for slope, factor in zip(by, factors, strict=True):
            if factor.any():
                slopes[i] += slope * factor[:, None]
    slopes *= camera
    slopes[3] = -2.0 * np.pi**2 * nodes.v**2 * value * camera
    return value * camera, slopes


class _Residuals:
    """Residuals and Jacobian of the whole problem, evaluated once for each parameter vector."""

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
        return self.evaluate(theta)[0]

    def jacobian(self, theta: Floats) -> Floats:
        return self.evaluate(theta)[1]

    def forget(self) -> None:
        """To be called after `widen` has changed."""
        self._at = None

    def evaluate(self, theta: Floats) -> tuple[Floats, Floats, list[slice]]:
        """Residuals, Jacobian, and the rows of each view's data."""
        if self._at is not None and np.array_equal(self._at, theta):
            return self._kept
        value, slopes = transfer_slopes(self.optics, self.nodes, theta)
        rows: list[Floats] = []
        jacobians: list[Floats] = []
        blocks: list[slice] = []
        start = 0
        for i, edge in enumerate(self.problem.edges):
            r, j = _edge_rows(edge, self.edge_matrices[i], value[i], slopes[:, i].T, self.widen[i])
            rows.append(r)
            jacobians.append(j)
            blocks.append(slice(start, start + len(r)))
            start += len(r)
        first = len(self.problem.edges)
        for i, block in enumerate(self.problem.amplitudes):
            matrix = self.amplitude_matrices[i]
            at = self.optics.index[f"scale {block.scale}"]
            scale, u = np.exp(theta[at]), block.u * self.widen[first + i]
            model = scale * (matrix @ value[first + i])
            j = scale * (matrix @ slopes[:, first + i].T)
            j[:, at] += model
            rows.append((model - block.value) / u)
            jacobians.append(j / u[:, None])
            blocks.append(slice(start, start + len(u)))
            start += len(u)
        mean, deviation = np.array(self.problem.prior).T
        rows.append((theta - mean) / deviation)
        jacobians.append(np.diag(1.0 / deviation))
        self._at = theta.copy()
        self._kept = (np.concatenate(rows), np.vstack(jacobians), blocks)
        return self._kept


@lru_cache(maxsize=128)
def _panels(count: int) -> tuple[Floats, Floats]:
    """Nodes and weights on 0 to 1: Gauss-Legendre of 12 points in each of `count` panels."""
    x, w = np.polynomial.legendre.leggauss(12)
    nodes = (np.arange(count)[:, None] + 0.5 * (x + 1.0)) / count
    return nodes.ravel(), np.tile(0.5 * w / count, count)


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
    change[-1] = 0.0
    return q @ part - data, change - q @ (q.T @ change)


def fit_lens(problem: Problem) -> LensFit:
    """Fit the lens to all data at once, from the best of several starts.

    Raises ValueError with no data. The covariance is widened by the reduced chi-square where that exceeds 1.
    """
    if not problem.views:
        raise ValueError("nothing to fit: no edge and no amplitude")
    residuals = _Residuals(problem)
    rough = sorted((_rough(residuals, start) for start in _starts(problem)), key=lambda pair: pair[0])
    near = [theta for cost, theta in rough if cost - rough[0][0] < RIVAL_CHI2]
    distinct = [t for i, t in enumerate(near) if all(np.abs(t - near[j]).max() > 1e-3 for j in range(i))]
    finished = [_finish(residuals, theta) for theta in distinct[:2]]
    (best, best_chi2), *others = sorted(finished, key=lambda pair: pair[1])
    rivals = tuple((chi2 - best_chi2, f.theta) for f, chi2 in others if chi2 - best_chi2 < 6.0 and _differs(best, f))
    return replace(best, rivals=rivals)


RIVAL_CHI2 = 25.0
"""A rough solution this much worse (in units of the best one's reduced chi-square) is not looked at again."""


def _differs(one: LensFit, other: LensFit) -> bool:
    return bool(abs(one.theta[0] - other.theta[0]) > 2.0 * np.sqrt(one.covariance[0, 0]))


def minimise(
    residuals: Callable[[Floats], Floats],
    jacobian: Callable[[Floats], Floats],
    start: Floats,
    scale: Floats,
    tolerance: float,
) -> Floats:
    """Parameters (p,) of the least sum of squares, by MINPACK's Levenberg-Marquardt with the derivatives given.

    residuals: (p,) -> (m,), m >= p; jacobian: (p,) -> (m, p); scale: (p,) typical size of each parameter; tolerance:
    relative change of the sum and of the parameters at which it stops.
    """

    def scaled(x: Floats) -> Floats:
        return residuals(x * scale)

    def slopes(x: Floats) -> Floats:
        return jacobian(x * scale) * scale

    found = least_squares(
        scaled,
        start / scale,
        jac=slopes,
        method="lm",
        ftol=tolerance,
        xtol=tolerance,
        gtol=1e-12,
        max_nfev=MOST_STEPS,
    )
    solved: Floats = np.asarray(found.x * scale, dtype=np.float64)
    return solved


MOST_STEPS = 40
ROUGH, FINE = 1e-3, 1e-5


def _typical(problem: Problem) -> Floats:
    return np.asarray(np.minimum(np.array(problem.prior)[:, 1], 1.0))


def _rough(residuals: _Residuals, start: Floats) -> tuple[float, Floats]:
    """A rough solution from one start, and its sum of squares over its reduced chi-square where that is above 1."""
    theta = minimise(residuals, residuals.jacobian, start, _typical(residuals.problem), ROUGH)
    total = float(np.sum(residuals(theta) ** 2))
    return total / max(1.0, total / len(residuals(theta))), theta


def _finish(residuals: _Residuals, start: Floats) -> tuple[LensFit, float]:
    """The fit from a rough solution, with its chi-square.

    Where the model does not describe the data their uncertainties are widened until it does, blocks that fit far worse
    than the rest further than these, so that the priors and the light keep their say.
    """
    problem, theta = residuals.problem, start
    for turn in range(TURNS):
        r, jacobian, blocks = residuals.evaluate(theta)
        rows = blocks[-1].stop
        misfit, chi2 = _misfit(r, blocks, residuals.widen, 4 * len(problem.edges) + 6)
        if turn > 0 and (turn == TURNS - 1 or np.allclose(_widening(misfit, chi2), residuals.widen, rtol=0.1)):
            break
        residuals.widen = _widening(misfit, chi2)
        residuals.forget()
        last = turn > 0 or chi2 < 2.0
        theta = minimise(residuals, residuals.jacobian, theta, _typical(problem), FINE if last else ROUGH)
    r, jacobian, blocks = residuals.evaluate(theta)
    data, prior = jacobian[:rows], jacobian[rows:]
    covariance = np.asarray(np.linalg.inv(data.T @ data + prior.T @ prior), dtype=np.float64)
    steps = _focus_steps(residuals, theta, r, jacobian)
    fitted = LensFit(
        problem.bench,
        problem.depths_mm,
        problem.light,
        problem.names,
        theta,
        covariance,
        chi2,
        misfit,
        problem.views,
        steps,
    )
    return fitted, float(np.sum(r**2))


TURNS = 3


def _misfit(r: Floats, blocks: Sequence[slice], widen: Floats, fitted: int) -> tuple[Floats, float]:
    """Reduced chi-square of each block and of all, by the data's own u; `fitted` parameters went into them."""
    squares = np.array([float(np.sum(r[b] ** 2)) * w**2 for b, w in zip(blocks, widen, strict=True)])
    free = np.array([max(b.stop - b.start - 4, 1) for b in blocks])
    return squares / free, float(squares.sum()) / max(blocks[-1].stop - fitted, 1)


def _widening(misfit: Floats, chi2: float) -> Floats:
    """By what factor the u of each block must grow."""
    return np.sqrt(np.maximum(max(1.0, chi2), misfit / 2.5))


def _focus_steps(residuals: _Residuals, theta: Floats, r: Floats, jacobian: Floats) -> tuple[FocusStep, ...]:
    """Score test (Rao) of one more parameter: a focus that is another from stop k on, for each k."""
    problem = residuals.problem
    stops = np.array([v.stop for v in problem.views])
    blocks = residuals.evaluate(theta)[2]
    q, _ = np.linalg.qr(jacobian)
    pupil = residuals.optics.pupil(theta)
    by_focus = residuals.optics.slopes(theta, pupil)[0][0]
    out = []
    for k in np.unique(stops)[1:]:
        column = jacobian[:, 0].copy()
        for block, stop in zip(blocks, stops, strict=True):
            if stop < k:
                column[block] = 0.0
        column[blocks[-1].stop :] = 0.0
        free = column - q @ (q.T @ column)
        strength = float(free @ free)
        if strength <= 1e-9 * float(column @ column):
            continue
        shift = -float(free @ r) / strength
        z = shift * np.sqrt(strength)
        out.append(FocusStep(int(k), shift, shift * float(np.abs(by_focus[stops == k]).max()), float(z)))
    return tuple(out)


def _starts(problem: Problem) -> list[Floats]:
    """Starting points: the best minima of a grid over focus and spherical aberration, by a coarse look."""
    theta = np.array([mean for mean, _ in problem.prior])
    views, v, value, weight, scale = _coarse_look(problem)
    optics = Optics(problem, views)
    bench = problem.bench.of_one_wavelength()
    camera = np.exp(-2.0 * np.pi**2 * theta[3] * v**2) * np.sinc(v)
    low, high = float(problem.depths_mm.min()), float(problem.depths_mm.max())
    deep = problem.prior[problem.names.index("shift 0")][1] / OWN_FOCUS_WAVES
    reach = max(high - low, 6.0 * deep)
    focus_grid = np.linspace(low - 0.6 * reach, high + 0.6 * reach, 61)
    cost = np.zeros((len(focus_grid), len(START_W040)))
    for i, focus in enumerate(focus_grid):
        for j, w040 in enumerate(START_W040):
            theta[0], theta[1] = focus, w040
            pupil = optics.pupil(theta)
            clipped = replace(pupil, w020=np.clip(pupil.w020, -8.0, 8.0))
            cost[i, j] = _coarse_cost(lens_transfer(bench, clipped, v) * camera, value, weight, scale)
    order = np.argsort(cost, axis=None)
    starts: list[Floats] = []
    for flat in order:
        i, j = np.unravel_index(flat, cost.shape)
        if starts and cost[i, j] > HOPELESS * cost.min():
            break
        lower = cost[max(i - 1, 0) : i + 2, max(j - 1, 0) : j + 2].min() >= cost[i, j]
        if lower:
            start = theta.copy()
            start[0], start[1], start[5] = focus_grid[i], START_W040[j], START_COLOUR
            starts.append(start)
        if len(starts) == MOST_STARTS:
            break
    return starts


START_W040 = (-1.5, -0.5, 0.0, 0.5, 1.0, 2.0)
MOST_STARTS = 3
HOPELESS = 8.0
"""A start this many times worse than the best by the coarse look is not tried."""
START_COLOUR = 0.1
"""Not zero: there the transfer has no slope in it."""


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
