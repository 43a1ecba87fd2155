"""The fit: certified data through its solver, derivatives, and lenses of known aberrations found again.

The profiles come from a two-dimensional pupil transform that shares no formula with the fit (tests/lenses.py).
"""

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from lenses import DEPTHS, STOPS, TRUTH, a_problem, an_edge, the_fit, the_station, true_contrast
from numpy.testing import assert_allclose

from sweep.cameras.simulated_lens import SimulatedLens
from sweep.fit import (
    AmplitudeData,
    Frequencies,
    Optics,
    Problem,
    StopLight,
    View,
    fit_lens,
    solve,
    transfer,
    transfer_slopes,
)
from sweep.fit.residuals import Residuals
from sweep.fit.solve import minimise
from sweep.lens import Bench

# Certified data: NIST StRD, higher level of difficulty (fixtures/nist_strd/README.md).

CERTIFIED = Path(__file__).parent.parent / "fixtures" / "nist_strd"
MODELS = {
    "MGH09": lambda b, x: b[0] * (x**2 + x * b[1]) / (x**2 + x * b[2] + b[3]),
    "Thurber": lambda b, x: (b[0] + b[1] * x + b[2] * x**2 + b[3] * x**3) / (1 + b[4] * x + b[5] * x**2 + b[6] * x**3),
    "BoxBOD": lambda b, x: b[0] * (1 - np.exp(-b[1] * x)),
    "Rat42": lambda b, x: b[0] / (1 + np.exp(b[1] - b[2] * x)),
    "Rat43": lambda b, x: b[0] / (1 + np.exp(b[1] - b[2] * x)) ** (1 / b[3]),
    "MGH10": lambda b, x: b[0] * np.exp(b[1] / (x + b[2])),
    "Eckerle4": lambda b, x: b[0] / b[1] * np.exp(-0.5 * ((x - b[2]) / b[1]) ** 2),
    "Bennett5": lambda b, x: b[0] * (b[1] + x) ** (-1 / b[2]),
}


def certified(name):
    """Starts (2, p), certified parameters (p,), y, x, and the residual sum of squares."""
    lines = (CERTIFIED / f"{name}.dat").read_text().splitlines()
    rows = [m.group(1).split() for line in lines if (m := re.match(r"\s+b\d+ =(.*)", line))]
    start1, start2, parameters, _ = np.array(rows, float).T
    squares = next(float(line.split()[-1]) for line in lines if line.startswith("Residual Sum of Squares"))
    first = max(i for i, line in enumerate(lines) if line.startswith("Data:")) + 1
    y, x = np.array([line.split() for line in lines[first:] if line.strip()], float).T
    return (start1, start2), parameters, y, x, squares


# From start 1 of BoxBOD the sum of squares falls towards an infinite b2: a local minimum that no descent leaves.
@pytest.mark.parametrize(
    ("name", "start"), [(name, start) for name in MODELS for start in (1, 2) if (name, start) != ("BoxBOD", 1)]
)
def test_certified_parameters(name, start, monkeypatch):
    # These starts lie far off, up to some thousand steps; those of a lens come from a grid of its own.
    monkeypatch.setattr(solve, "MOST_STEPS", 3000)
    starts, parameters, y, x, squares = certified(name)
    model, step = MODELS[name], 1e-30

    def jacobian(b):  # by complex steps, exact to rounding
        return np.stack([model(b + 1j * step * e, x + 0j).imag / step for e in np.eye(b.size)], axis=1)

    with np.errstate(over="ignore", invalid="ignore"):
        first = starts[start - 1]
        found = minimise(lambda b: model(b, x) - y, jacobian, first, np.abs(first), 1e-14)
    assert_allclose(found, parameters, rtol=1e-6)
    assert_allclose(np.sum((model(found, x) - y) ** 2), squares, rtol=1e-9)


# Derivatives.


def a_mixed_problem():
    """Two edges and a star's amplitudes at two stops and targets."""
    edges = tuple(
        an_edge(TRUTH, STOPS[k], DEPTHS[t], View(k, t, d), rng=np.random.default_rng(7))
        for k, t, d in [(1, 0, 5.0), (2, 2, 95.0)]
    )
    v = np.linspace(0.06, 0.4, 9)
    star = AmplitudeData(View(2, 1, None), v, np.exp(-6 * v), np.full(9, 0.01), 0, 0.0, 0.2)
    light = StopLight(np.array(STOPS), np.full(len(STOPS), 0.003))
    return Problem.of(Bench.of(the_station()), np.array(DEPTHS), light, edges, (star,))


def some_parameters(problem):
    """A point in the midst: nothing is zero."""
    rng = np.random.default_rng(3)
    mean, deviation = np.array(problem.prior).T
    theta = mean + 0.3 * np.minimum(deviation, 1.0) * rng.uniform(0.5, 1.0, mean.size)
    theta[:4] = 1.2, -0.8, 0.1, 0.09
    return theta


def test_slopes_of_the_transfer():
    problem = a_mixed_problem()
    optics, theta = Optics(problem, problem.views), some_parameters(problem)
    at = Frequencies(problem.views, np.tile([0.05, 0.15, 0.3], (3, 1)))
    value, slopes = transfer_slopes(optics, at, theta)
    assert_allclose(value, transfer(optics, at, theta), atol=1e-9)
    for i, name in enumerate(problem.names):
        h = 1e-4 * np.eye(theta.size)[i]
        expected = (transfer(optics, at, theta + h) - transfer(optics, at, theta - h)) / 2e-4
        assert_allclose(slopes[i], expected, atol=3e-4, err_msg=name)


def test_gradient_of_the_sum_of_squares():
    # Kaufman's Jacobian gives the exact gradient (BIT 15, 1975); that of the position column is left out here.
    problem = a_mixed_problem()
    residuals, theta = Residuals(problem), some_parameters(problem)
    theta = minimise(residuals, residuals.jacobian, theta, np.full(theta.size, 0.3), 1e-8)
    theta[:4] += 0.02, 0.02, 0.01, 0.003
    gradient = 2.0 * residuals.jacobian(theta).T @ residuals(theta)

    def squares(at):
        return float(np.sum(residuals(at) ** 2))

    for i in (0, 1, 2, 3, 5):
        h = 1e-5 * np.eye(theta.size)[i]
        assert_allclose(gradient[i], (squares(theta + h) - squares(theta - h)) / 2e-5, rtol=0.03)


# A lens found again.


def test_aberrations_focus_and_blur_of_a_known_lens():
    # TRUTH: +1 wave undercorrected is -1 of a wavefront that lags at the rim.
    fit = the_fit()
    assert_allclose(fit.value("w040")[0], -1.0, atol=0.01)
    assert_allclose(fit.value("w060")[0], 0.1, atol=0.01)
    assert_allclose(fit.value("focus")[0], 1.5, atol=0.05)
    assert_allclose(fit.value("blur2")[0], 0.3**2, atol=5e-4)
    assert_allclose(fit.value("mark")[0], 0.0, atol=1e-3)
    assert fit.reduced_chi2 < 0.01
    assert fit.misfit.shape == (len(STOPS) * len(DEPTHS),)
    assert fit.rivals == ()


def test_the_fitted_lens_has_the_contrasts_of_the_true_one():
    fit = the_fit()
    for k, stop in enumerate(STOPS):
        for t, depth in enumerate(DEPTHS):
            view = [View(k, t, 5.0)]
            v = np.array([[0.05, 0.16, 0.3]])
            found = transfer(Optics(fit, view), Frequencies(view, v), fit.theta)[0]
            assert_allclose(found, [true_contrast(TRUTH, stop, depth, f) for f in v[0]], atol=1.5e-3)


def test_under_noise_the_truth_lies_within_the_uncertainty():
    # 4 sweeps x 4 figures: one of 16 lies beyond 3.3 u once in 60 trials (normal distribution).
    off, chi2 = [], []
    for seed in range(4):
        fit = fit_lens(a_problem(stops=STOPS[::2], depths=DEPTHS[:2], relative_u=4e-3, rng=np.random.default_rng(seed)))
        truth = {"w040": -1.0, "w060": 0.1, "focus": 1.5, "blur2": 0.09}
        off += [(fit.value(name)[0] - value) / fit.value(name)[1] for name, value in truth.items()]
        chi2.append(fit.reduced_chi2)
    assert np.abs(off).max() < 3.3
    assert_allclose(chi2, 1.0, atol=0.2)


def test_stars_find_the_lens_and_their_print():
    scale, v = 0.8, np.linspace(0.06, 0.42, 20)
    blocks = []
    for k, stop in enumerate(STOPS[1:5], start=1):
        for t, depth in enumerate(DEPTHS):
            value = np.mean([[true_contrast(TRUTH, stop, depth, f, d) for f in v] for d in (0.0, 22.5, 45.0)], axis=0)
            blocks.append(AmplitudeData(View(k, t, None), v, scale * value, np.full(v.size, 1e-3), t, 0.0, 0.5))
    light = StopLight(np.array(STOPS), np.full(len(STOPS), 0.003))
    fit = fit_lens(Problem.of(Bench.of(the_station()), np.array(DEPTHS), light, (), blocks))
    for t in range(3):
        assert_allclose(np.exp(fit.value(f"scale {t}")[0]), scale, rtol=0.01)
    assert_allclose(fit.value("w040")[0], -1.0, atol=0.1)


def test_a_stack_at_one_depth_cannot_tell_the_sign_of_defocus():
    # Without spherical aberration the transfer is even in the defocus (Hopkins 1955).
    plain = SimulatedLens(16.0, TRUTH.magnification, STOPS[0], 530.0, bandwidth_nm=30.0, focus_offset_mm=5.0)
    fit = fit_lens(a_problem(plain, depths=(0.0,), relative_u=4e-3, rng=np.random.default_rng(2)))
    (cost, other), *_ = fit.rivals
    assert 0 <= cost < 6
    assert_allclose(sorted([fit.theta[0], other[0]]), [-5.0, 5.0], atol=1.0)


def test_targets_at_several_depths_can():
    plain = SimulatedLens(16.0, TRUTH.magnification, STOPS[0], 530.0, bandwidth_nm=30.0, focus_offset_mm=5.0)
    fit = fit_lens(a_problem(plain, stops=STOPS[::2], depths=(0.0, 8.0), relative_u=4e-3, rng=np.random.default_rng(2)))
    assert fit.rivals == ()
    assert_allclose(fit.theta[0], 5.0, atol=1.0)


def test_a_focus_that_was_touched_midway_is_told():
    later = (3, replace(TRUTH, focus_offset_mm=4.5))
    noise = {"relative_u": 4e-3, "rng": np.random.default_rng(5)}
    steps = fit_lens(a_problem(later=later, **noise)).focus_steps
    told = max(steps, key=lambda s: abs(s.z))
    assert STOPS[told.stop] == 4.0
    assert told.z > 10
    assert_allclose(told.shift_mm, 3.0, rtol=0.5)
    assert max(abs(s.z) for s in fit_lens(a_problem(**noise)).focus_steps) < 5


def test_a_lens_that_the_model_does_not_hold_is_less_sure():
    # Coma of half a wave wide open is not in the model.
    comatic = replace(TRUTH, coma_waves=0.5, coma_deg=5.0)
    noise = {"relative_u": 1e-3, "stops": STOPS[::2], "depths": DEPTHS[:2]}
    sound = fit_lens(a_problem(rng=np.random.default_rng(1), **noise))
    off = fit_lens(a_problem(comatic, rng=np.random.default_rng(1), **noise))
    assert off.reduced_chi2 > 2 * sound.reduced_chi2
    assert off.value("blur2")[1] > 1.3 * sound.value("blur2")[1]
    worst = off.views[int(np.argmax(off.misfit))]
    assert STOPS[::2][worst.stop] == 1.4


def test_light_alone_holds_the_f_numbers():
    fit = fit_lens(a_problem(stops=STOPS[::2], depths=DEPTHS[:2], ln_u=1e-4))
    for k in range(3):
        value, u = fit.value(f"ring {k}")
        assert abs(value) < 2e-4
        assert u <= 1e-4


def test_nothing_to_fit():
    light = StopLight(np.array(STOPS), np.full(len(STOPS), 0.003))
    with pytest.raises(ValueError, match="nothing to fit"):
        fit_lens(Problem.of(Bench.of(the_station()), np.array(DEPTHS), light, (), ()))
