"""The least-squares fit itself: from several starts, widened where the model does not describe the data."""

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
from scipy.optimize import least_squares

from sweep.fit.fitted import FocusStep, LensFit
from sweep.fit.problem import FOCUS, Problem
from sweep.fit.residuals import Residuals
from sweep.fit.starts import starting_points
from sweep.measure.linear import Floats

RIVAL_CHI2 = 25.0
"""A rough solution this much worse (in units of the best one's reduced chi-square) is not looked at again."""
MOST_STEPS = 40
ROUGH, FINE = 1e-3, 1e-5
TURNS = 3


def fit_lens(problem: Problem) -> LensFit:
    """Fit the lens to all data at once, from the best of several starts.

    Raises ValueError with no data. The covariance is widened by the reduced chi-square where that exceeds 1.
    """
    if not problem.views:
        raise ValueError("nothing to fit: no edge and no amplitude")
    residuals = Residuals(problem)
    rough = sorted((_rough(residuals, start) for start in starting_points(problem)), key=lambda pair: pair[0])
    near = [theta for cost, theta in rough if cost - rough[0][0] < RIVAL_CHI2]
    distinct = [t for i, t in enumerate(near) if all(np.abs(t - near[j]).max() > 1e-3 for j in range(i))]
    finished = [_finish(residuals, theta) for theta in distinct[:2]]
    (best, best_chi2), *others = sorted(finished, key=lambda pair: pair[1])
    rivals = tuple((chi2 - best_chi2, f.theta) for f, chi2 in others if chi2 - best_chi2 < 6.0 and _differs(best, f))
    return replace(best, rivals=rivals)


def _differs(one: LensFit, other: LensFit) -> bool:
    return bool(abs(one.theta[FOCUS] - other.theta[FOCUS]) > 2.0 * np.sqrt(one.covariance[FOCUS, FOCUS]))


def _rough(residuals: Residuals, start: Floats) -> tuple[float, Floats]:
    """A rough solution from one start, and its sum of squares over its reduced chi-square where that is above 1."""
    theta = minimise(residuals, residuals.jacobian, start, _typical(residuals.problem), ROUGH)
    total = float(np.sum(residuals(theta) ** 2))
    return total / max(1.0, total / len(residuals(theta))), theta


def _finish(residuals: Residuals, start: Floats) -> tuple[LensFit, float]:
    """The fit from a rough solution, with its chi-square.

    Where the model does not describe the data their uncertainties are widened until it does, blocks that fit far worse
    than the rest further than these, so that the priors and the light keep their say.
    """
    problem, theta = residuals.problem, start
    for turn in range(TURNS):
        r, jacobian, blocks = residuals.evaluate(theta)
        misfit, chi2 = _misfit(r, blocks, residuals.widen, 4 * len(problem.edges) + 6)
        if turn > 0 and (turn == TURNS - 1 or np.allclose(_widening(misfit, chi2), residuals.widen, rtol=0.1)):
            break
        residuals.widen = _widening(misfit, chi2)
        residuals.forget()
        last = turn > 0 or chi2 < 2.0
        theta = minimise(residuals, residuals.jacobian, theta, _typical(problem), FINE if last else ROUGH)
    r, jacobian, blocks = residuals.evaluate(theta)
    rows = blocks[-1].stop
    data, prior = jacobian[:rows], jacobian[rows:]
    covariance = np.asarray(np.linalg.inv(data.T @ data + prior.T @ prior), dtype=np.float64)
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
        _focus_steps(residuals, theta),
    )
    return fitted, float(np.sum(r**2))


def _misfit(r: Floats, blocks: Sequence[slice], widen: Floats, fitted: int) -> tuple[Floats, float]:
    """Reduced chi-square of each block and of all, by the data's own u; `fitted` parameters went into them."""
    squares = np.array([float(np.sum(r[b] ** 2)) * w**2 for b, w in zip(blocks, widen, strict=True)])
    free = np.array([max(b.stop - b.start - 4, 1) for b in blocks])
    return squares / free, float(squares.sum()) / max(blocks[-1].stop - fitted, 1)


def _widening(misfit: Floats, chi2: float) -> Floats:
    """By what factor the u of each block must grow."""
    return np.sqrt(np.maximum(max(1.0, chi2), misfit / 2.5))


def _typical(problem: Problem) -> Floats:
    return np.asarray(np.minimum(np.array(problem.prior)[:, 1], 1.0))


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


def _focus_steps(residuals: Residuals, theta: Floats) -> tuple[FocusStep, ...]:
    """Score test (Rao) of one more parameter: a focus that is another from stop k on, for each k."""
    problem = residuals.problem
    stops = np.array([v.stop for v in problem.views])
    r, jacobian, blocks = residuals.evaluate(theta)
    q, _ = np.linalg.qr(jacobian)
    pupil = residuals.optics.pupil(theta)
    by_focus = residuals.optics.slopes(theta, pupil)[FOCUS][0]
    out = []
    for k in np.unique(stops)[1:]:
        column = jacobian[:, FOCUS].copy()
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
