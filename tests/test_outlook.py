"""Readings and lens model together: which counts when, and what the fitted lens says of causes and places."""

from dataclasses import replace

import numpy as np
import pytest
from lenses import DEPTHS, STOPS, TRUTH, a_known_fit, in_one_wavelength, seen_through, the_fit, true_contrast
from numpy.testing import assert_allclose
from references import diffraction_mtf
from scipy.optimize import brentq

from sweep.choose import Place
from sweep.fit import View
from sweep.lens import pixel_box
from sweep.outlook import DRAWS, MODEL_FLOOR, FittedLens, estimate, half_modulation

FEATURE = 0.16
PLACES = [Place(f"step {t}", depth, FEATURE, 58.0, t, 5.0) for t, depth in enumerate(DEPTHS)]
SHAPE = (len(STOPS), len(PLACES))


def rng():
    return np.random.default_rng(11)


def model_of(fit):
    return FittedLens(fit).at_stops(PLACES, len(STOPS))[0]


# Readings and model.


def test_readings_alone_stay_as_they_are():
    reading, u = np.full(SHAPE, 0.4), np.full(SHAPE, 0.01)
    reading[2, 1] = np.nan
    found = estimate(PLACES, reading, u, None, rng())
    assert_allclose(found.outlook.contrast, reading)
    assert_allclose(np.delete(found.outlook.draws.std(axis=0).ravel(), 7), 0.01, rtol=0.2)
    assert np.isnan(found.outlook.draws[:, 2, 1]).all()
    assert found.model is None
    assert found.outlook.curve is None


def test_the_model_of_a_fitted_lens_has_the_true_contrasts():
    found = estimate(PLACES, np.full(SHAPE, np.nan), np.full(SHAPE, np.nan), the_fit(), rng())
    truth = [[true_contrast(TRUTH, stop, p.depth_mm, FEATURE) for p in PLACES] for stop in STOPS]
    assert_allclose(found.outlook.contrast, truth, atol=1.5e-3)
    assert found.discrepancy.readings == 0


def test_readings_that_agree_leave_the_model_to_decide():
    fit = a_known_fit(w040=-0.8, blur2=0.09)
    model = model_of(fit)
    u = np.full(SHAPE, 0.01)
    found = estimate(PLACES, model + 0.01 * rng().standard_normal(SHAPE), u, fit, rng())
    assert found.discrepancy.deviation.max() < 0.3 * u[0, 0]
    assert_allclose(found.discrepancy.chi2, 1.0, atol=1.0)
    assert_allclose(found.outlook.contrast, model, atol=3e-3)
    assert found.outlook.draws.std(axis=0).max() < 0.005


def test_where_the_model_is_off_the_readings_take_over():
    fit = a_known_fit(w040=-0.8, blur2=0.09)
    model, u = model_of(fit), np.full(SHAPE, 0.002)
    reading = model + 0.05 * rng().choice([-1.0, 1.0], SHAPE)
    reading[0, 0] = np.nan
    found = estimate(PLACES, reading, u, fit, rng())
    assert_allclose(found.discrepancy.deviation, 0.05, rtol=0.35)
    there = np.isfinite(reading)
    assert_allclose(found.outlook.contrast[there], reading[there], atol=2e-3)
    spread = found.outlook.draws.std(axis=0)
    assert_allclose(spread[there], 0.002, rtol=0.3)
    # nothing was read there: the model, and as unsure as it is elsewhere
    assert_allclose(found.outlook.contrast[0, 0], model[0, 0], rtol=1e-9)
    assert_allclose(spread[0, 0], 0.05, rtol=0.4)


def test_one_stop_that_is_off_is_told_from_the_rest():
    fit = a_known_fit(w040=-0.8, blur2=0.09)
    reading = model_of(fit)
    reading[0] += [0.08, -0.08, 0.08]
    deviation = estimate(PLACES, reading, np.full(SHAPE, 0.002), fit, rng()).discrepancy.deviation
    assert np.argmax(deviation) == 0
    assert deviation[0] > 1.3 * deviation[1:].max()


def test_draws_follow_the_covariance_of_the_fit():
    # A known deviation of the blur alone: u(contrast) = |dM/d(s^2)| u(s^2), with M ~ exp(-2 pi^2 s^2 v^2).
    fit = a_known_fit(blur2=0.09)
    covariance = np.zeros_like(fit.covariance)
    covariance[3, 3] = 0.02**2
    found = estimate(PLACES, np.full(SHAPE, np.nan), np.full(SHAPE, np.nan), replace(fit, covariance=covariance), rng())
    expected = 2.0 * np.pi**2 * FEATURE**2 * np.abs(model_of(fit)) * 0.02
    assert_allclose(found.model_u, np.hypot(expected, MODEL_FLOOR), rtol=1e-6)
    assert_allclose(found.outlook.draws.std(axis=0), found.model_u, rtol=4 / np.sqrt(2 * DRAWS))


def test_rivals_have_their_share_of_the_draws():
    fit = a_known_fit(focus=6.0)
    other = fit.theta.copy()
    other[0] = -6.0
    nothing = np.full(SHAPE, np.nan)
    equal = estimate(PLACES, nothing, nothing, replace(fit, rivals=((0.0, other),)), rng())
    mine, theirs = model_of(fit), model_of(replace(fit, theta=other))
    draws = equal.outlook.draws[:, 0, 2]
    share = np.mean(np.abs(draws - theirs[0, 2]) < np.abs(draws - mine[0, 2]))
    # binomial: 400 draws of 1/2, four standard deviations
    assert_allclose(share, 0.5, atol=4 * 0.5 / np.sqrt(DRAWS))
    _, u = FittedLens(replace(fit, rivals=((0.0, other),))).at_feature(0, PLACES[2:])
    assert u[0] > 0.5 * abs(mine[0, 2] - theirs[0, 2])


def test_the_curve_between_the_stops_passes_through_them():
    fit = a_known_fit(w040=-0.8, blur2=0.09)
    between = FittedLens(fit).between(PLACES, np.array(STOPS))[0]
    assert_allclose(between, model_of(fit), atol=1e-9)
    nothing = np.full(SHAPE, np.nan)
    outlook = estimate(PLACES, nothing, nothing, fit, rng()).outlook
    assert outlook.curve_f_numbers[0] < STOPS[0] < STOPS[-1] < outlook.curve_f_numbers[-1]
    assert outlook.curve.shape == (len(outlook.curve_f_numbers), len(PLACES))


def test_the_same_seed_gives_the_same_draws():
    fit, nothing = the_fit(), np.full(SHAPE, np.nan)
    one, two = (estimate(PLACES, nothing, nothing, fit, np.random.default_rng(3)).outlook.draws for _ in range(2))
    assert np.array_equal(one, two)


# The fitted lens as the choice asks it.


@pytest.mark.parametrize("stop", [0, 3, 5])
def test_the_factors_of_a_perfect_lens_in_focus(stop):
    fit = in_one_wavelength(a_known_fit(blur2=0.09))
    lens, place = FittedLens(fit), PLACES[1]
    perfect = float(diffraction_mtf(FEATURE / fit.bench.cutoff_cy_px(STOPS[stop])))
    camera = float(pixel_box(np.array([FEATURE]), 5.0)[0] * np.exp(-2.0 * np.pi**2 * 0.09 * FEATURE**2))
    assert_allclose(lens.contrast(stop, place), perfect * camera, atol=1e-8)
    assert_allclose(lens.contrast(stop, place, without="sampling"), perfect, atol=1e-8)
    assert_allclose(lens.contrast(stop, place, without="diffraction"), camera, atol=1e-8)
    assert_allclose(lens.contrast(stop, place, without="depth"), perfect * camera, atol=1e-6)
    assert_allclose(lens.contrast(stop, place, without="aberration"), perfect * camera, atol=1e-8)
    # half the pixel at the same magnification: the lens is as it was, box and blur shrink
    finer = lens.contrast(stop, place, pixel_scale=0.5) / perfect
    half = float(pixel_box(np.array([FEATURE / 2]), 5.0)[0] * np.exp(-2.0 * np.pi**2 * 0.09 * (FEATURE / 2) ** 2))
    assert_allclose(finer, half, rtol=1e-7)


def test_without_aberration_the_defocus_stays():
    aberrated, plain = FittedLens(a_known_fit(w040=-1.2, w060=0.2)), FittedLens(a_known_fit())
    for place in PLACES:
        assert_allclose(aberrated.contrast(0, place, without="aberration"), plain.contrast(0, place), atol=1e-9)


def test_without_depth_the_best_focus_is_found_again():
    # The best focus by a dense search with the place's own depth.
    fit = a_known_fit(w040=-0.8)
    lens = FittedLens(fit)
    searched = max(lens.contrast(0, PLACES[2], refocus_mm=mm) for mm in np.linspace(-2.0, 22.0, 481))
    assert_allclose(lens.contrast(0, PLACES[2], without="depth"), searched, rtol=3e-3)
    assert lens.contrast(0, PLACES[2]) < 0.3 * searched


def test_refocusing_moves_the_sharp_depth_away_from_the_camera():
    lens = FittedLens(a_known_fit())
    assert_allclose(lens.contrast(1, PLACES[2], refocus_mm=10.0), lens.contrast(1, PLACES[1]), rtol=0.02)
    assert lens.contrast(1, PLACES[2], refocus_mm=-3.0) < lens.contrast(1, PLACES[2])


def test_the_sharpest_depth_of_a_plain_lens_is_its_focus():
    lens = FittedLens(a_known_fit(focus=2.0))
    for stop in (0, 3):
        assert_allclose(lens.best_depth_mm(stop, PLACES), 2.0, atol=0.3)


def test_undercorrected_spherical_aberration_moves_the_focus_as_the_iris_closes():
    # Marginal rays focus short: wide open the sharp depth is nearer than the paraxial one (e.g. Born and Wolf, 5.3).
    lens = FittedLens(a_known_fit(w040=-1.0))
    wide, closed = lens.best_depth_mm(0, PLACES), lens.best_depth_mm(4, PLACES)
    assert wide < -0.5
    assert abs(closed) < abs(wide)


def test_over_frequency_is_the_transfer_of_every_place():
    fit = the_fit()
    v = np.array([0.0, 0.1, 0.25])
    found = FittedLens(fit).over_frequency(2, PLACES, v)
    for row, place in zip(found, PLACES, strict=True):
        assert_allclose(row, [true_contrast(TRUTH, STOPS[2], place.depth_mm, f) for f in v], atol=1.5e-3)


def test_a_depth_between_targets_is_as_unsure_as_their_own_focus():
    # A target found s off the common focus changes the contrast as a shift of the focus by s does (first order).
    s = 0.2
    fit = a_known_fit(deviation=1e-9, **{"shift 0": s, "shift 1": -s, "shift 2": s})
    lens, between = FittedLens(fit), replace(PLACES[2], target=-1)
    value, u = lens.at_feature(1, [between])
    moved = lens.contrast(1, between, refocus_mm=0.01) - lens.contrast(1, between, refocus_mm=-0.01)
    assert_allclose(u[0], np.hypot(s * moved / 0.02, MODEL_FLOOR), rtol=1e-3)
    _, known = lens.at_feature(1, PLACES[2:])
    assert_allclose(known[0], MODEL_FLOOR, rtol=1e-3)


# Half modulation.


def test_half_modulation_is_where_the_true_curve_falls():
    fit = the_fit()
    views = [View(k, t, 5.0) for k in range(len(STOPS)) for t in range(len(DEPTHS))]
    depths = np.array([DEPTHS[v.target] for v in views])
    for view, found in zip(views, half_modulation(fit, views, depths), strict=True):
        optics = seen_through(TRUTH, STOPS[view.stop], DEPTHS[view.target])
        grid = np.linspace(0.0, 1.0, 201)
        first = int(np.argmax(optics.transfer(grid, 5.0)[0].real < 0.5))
        truth = brentq(lambda f, o=optics: o.transfer(np.array([f]), 5.0)[0, 0].real - 0.5, *grid[[first - 1, first]])
        assert_allclose(found[0], truth, rtol=3e-3)
        assert found[1] > 0
