"""Sector stars against prints rendered with transfer functions known in closed form."""

from functools import lru_cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from printed import Blur, Star, noisy, render, samples
from references import facts

from sweep.measure.star import StarMeasure, read_star
from sweep.measure.star_find import inner_radius
from sweep.measure.star_level import SQUARE_WAVE, star_curves

SIZE = (104, 104)
SHARP, MIDDLING, SOFT = Blur(0.85, 0.4), Blur(0.6, 0.8), Blur(0.42, 0.0)
DEFOCUSED = Blur(1.2, 3.2)
PRINT = Star()
RATIO = 350 / 650


@lru_cache(maxsize=32)
def the_image(star=PRINT, blur=SHARP, shift=(0.0, 0.0), size=SIZE):
    return render(star, size, blur, shift)


def read(image, cycles=36, *, quincunx=False, size=SIZE, near=None):
    """One star from images (n, height, width) or (height, width)."""
    x, y, values = samples(image, quincunx)
    return read_star(x, y, values, None, cycles, size, near)


def faint(image, seed=0, rms=0.5):
    """Hardly any noise: without any, nothing could be said of the uncertainty."""
    return image + np.random.default_rng(seed).normal(0, rms, image.shape)


def test_radius_of_the_nyquist_frequency():
    # f = cycles / (2 pi r), worked out for four stars
    for example in facts("square_wave.json")["siemens_star"]["examples"]:
        assert_allclose(inner_radius(example["cycles"]), example["radius_at_nyquist_px"], rtol=1e-9)


@pytest.mark.parametrize("cycles", [24, 36, 48])
@pytest.mark.parametrize("blur", [SHARP, MIDDLING, SOFT])
def test_rings_hold_the_known_transfer(cycles, blur):
    # a sine fitted to a square wave of half difference h reads (4 / pi) h M (Coltman 1954)
    star = Star(cycles)
    seen = read(faint(the_image(star, blur)), cycles)
    truth = blur.mean(seen.rings.v_cy_px)
    # wave fronts curve: at few cycles the innermost rings differ by up to v^3 M''' / (6 n^2)
    curved = truth > 0.1
    assert_allclose(
        (seen.rings.amplitude / (SQUARE_WAVE * star.half))[curved], truth[curved], atol=0.001 if cycles > 24 else 0.002
    )
    assert_allclose(seen.centre_px, star.centre, atol=0.01)
    assert_allclose(seen.rim_px, star.rim_px, atol=0.3)
    assert 0.45 < seen.rings.v_cy_px[-1] < 0.6


def test_green_sites_of_a_mosaic_say_the_same():
    all_sites, green = read(faint(the_image())), read(faint(the_image()), quincunx=True)
    truth = SHARP.mean(green.rings.v_cy_px)
    assert_allclose(green.rings.amplitude / (SQUARE_WAVE * Star().half), truth, atol=0.002)
    assert_allclose(green.centre_px, all_sites.centre_px, atol=0.01)


def test_frames_that_moved_are_not_blurred():
    moved = (0.31, -0.42)
    seen = read(np.stack([faint(the_image()), faint(the_image(shift=moved), 1)]))
    assert_allclose(seen.shift_px[1] - seen.shift_px[0], moved, atol=0.005)
    assert_allclose(seen.rings.amplitude / (SQUARE_WAVE * Star().half), SHARP.mean(seen.rings.v_cy_px), atol=0.001)


def test_frames_of_different_light_are_brought_to_one_level():
    bright = read(np.stack([1.03 * faint(the_image()), 0.97 * faint(the_image(), 1)]))
    assert_allclose(bright.rings.amplitude, read(faint(the_image())).rings.amplitude, rtol=0.003)


def test_a_light_gradient_changes_nothing():
    y, x = np.mgrid[0 : SIZE[1], 0 : SIZE[0]]
    tilted = the_image() * (1 + 0.002 * (x - 51.3) - 0.0012 * (y - 51.8))
    seen, even = read(faint(tilted)), read(faint(the_image()))
    assert_allclose(seen.rings.amplitude, even.rings.amplitude, rtol=0.001)
    assert_allclose(seen.rings.level, even.rings.level, rtol=0.001)
    assert_allclose(star_curves([seen])[0].ratio, RATIO, rtol=0.01)


def test_a_reversed_ring_is_negative():
    seen = read(faint(the_image(blur=DEFOCUSED)))
    truth = DEFOCUSED.mean(seen.rings.v_cy_px)
    assert (truth < -0.05).any()
    assert_allclose(seen.rings.signed / (SQUARE_WAVE * Star().half), truth, atol=0.004)


def test_a_star_that_is_wholly_reversed_is_told_by_another_stop():
    # a disc of 5 px radius turns the contrast between 0.12 and 0.22 cy/px (zeros of J1 at 3.83 and 7.02)
    blurred = Blur(1.2, 5.0)
    star = Star(48)
    soft, sharp = read(faint(the_image(star, blurred)), 48), read(faint(the_image(star)), 48)
    curve = star_curves([soft, sharp])[0]
    v = 0.19
    assert blurred.mean(v)[0] < -0.04
    assert_allclose(curve.contrast(v)[0], blurred.mean(v)[0], atol=0.005)


def test_a_star_too_soft_to_be_found_is_read_where_another_stop_saw_it():
    hopeless = Blur(0.1, 0.0)
    image = faint(the_image(blur=hopeless), rms=15.0)
    assert read(image).why_not == ("pattern-not-found",)
    seen = read(image, near=read(faint(the_image())))
    assert seen.ok
    assert np.abs(seen.rings.signed / seen.rings.u).max() < 4
    assert_allclose(star_curves([read(faint(the_image())), seen])[1].contrast(0.2)[0], 0.0, atol=0.01)


def test_astigmatism_follows_the_direction():
    smeared = Blur(0.85, 0.4, smear_px=0.6)
    seen = read(faint(the_image(blur=smeared)))
    v = seen.rings.v_cy_px
    t = np.radians(np.arange(0, 360, 3.0))
    over = np.stack([smeared.along(v, d) for d in np.arange(0, 360, 3.0)])
    expected = 2 * np.mean(over * np.cos(2 * t)[:, None], axis=0)
    scale = SQUARE_WAVE * Star().half
    assert_allclose(seen.rings.astigmatic[:, 0] / scale, expected, atol=0.005)
    assert_allclose(seen.rings.astigmatic[:, 1] / scale, 0, atol=0.005)
    assert_allclose(seen.rings.amplitude / scale, smeared.mean(v), atol=0.003)


def test_hot_and_dead_pixels_are_left_out():
    rng = np.random.default_rng(3)
    image = faint(the_image())
    spoilt = image.copy()
    spoilt.ravel()[rng.choice(image.size, 40, replace=False)] = rng.choice([0.0, 4000.0], 40)
    assert_allclose(read(spoilt).rings.amplitude, read(image).rings.amplitude, atol=0.002 * SQUARE_WAVE * Star().half)


def test_a_colour_camera_that_fills_in_its_mosaic_raises_no_uncertainty():
    y, x = np.mgrid[0 : SIZE[1], 0 : SIZE[0]]
    image = the_image()
    neighbours = (np.roll(image, 1, 0) + np.roll(image, -1, 0) + np.roll(image, 1, 1) + np.roll(image, -1, 1)) / 4
    filled = faint(np.where((x + y) % 2 == 0, image, neighbours))
    seen = read(filled)
    # on average over the sites the interpolation multiplies by (1 + (cos 2 pi vx + cos 2 pi vy) / 2) / 2
    v = seen.rings.v_cy_px
    t = np.radians(np.arange(0, 360, 3.0))
    kept = np.mean(
        [0.5 + 0.25 * (np.cos(2 * np.pi * v * np.cos(a)) + np.cos(2 * np.pi * v * np.sin(a))) for a in t], axis=0
    )
    assert_allclose(seen.rings.amplitude / (SQUARE_WAVE * Star().half), kept * SHARP.mean(v), atol=0.01)
    assert seen.noise < 30


def test_the_level_at_zero_frequency_comes_from_the_surround():
    stars = [read(faint(the_image(blur=blur), rms=8.0)) for blur in (SHARP, MIDDLING, SOFT)]
    curves = star_curves(stars)
    # print: 1000 and 300, so that half difference over mean is 350 / 650
    assert_allclose(curves[0].ratio, RATIO, rtol=0.01)
    for curve, blur in zip(curves, (SHARP, MIDDLING, SOFT), strict=True):
        for v in (0.05, 0.1, 0.15, 0.2, 0.3, 0.4):
            contrast, u = curve.contrast(v)
            assert_allclose(contrast, blur.mean(v)[0], atol=0.008)
            assert 0 < u < 0.012
    grid = np.linspace(0.01, 0.6, 5901)
    for curve, blur in zip(curves[:2], (SHARP, MIDDLING), strict=True):
        half = grid[np.flatnonzero(blur.mean(grid) < 0.5)[0]]
        assert_allclose(curve.mtf50()[0], half, rtol=0.01)


def test_half_modulation_below_the_rim_is_not_told():
    soft = Blur(0.3, 0.0)
    grid = np.linspace(0.01, 0.6, 5901)
    assert grid[np.flatnonzero(soft.mean(grid) < 0.5)[0]] < 36 / (2 * np.pi * 47.8)
    assert star_curves([read(faint(the_image(blur=soft)))])[0].mtf50() is None


def test_without_a_surround_nothing_is_told_below_the_rim():
    # the region ends inside of the star
    inside = faint(the_image())[14:90, 14:90]
    seen = read(inside, size=(76, 76))
    assert seen.ok
    assert seen.rim_px is None
    stated = star_curves([seen], modulation=RATIO)[0]
    assert stated.contrast(0.1) is None
    assert_allclose(stated.contrast(0.25)[0], SHARP.mean(0.25)[0], rtol=0.02)
    unstated = star_curves([seen])[0]
    contrast, u = unstated.contrast(0.25)
    assert abs(contrast - SHARP.mean(0.25)[0]) < 2 * u


def test_nothing_is_said_beyond_the_innermost_ring():
    assert star_curves([read(faint(the_image()))])[0].contrast(0.51) is None


def test_no_star_no_curve():
    assert star_curves([None, StarMeasure(False, ("pattern-not-found",))]) == [None, None]


def bad_patches():
    image = faint(the_image())
    rng = np.random.default_rng(5)
    yield "noise", rng.normal(500, 20, SIZE), "pattern-not-found"
    yield "even tone", np.full(SIZE, 500.0), "pattern-not-found"
    yield "edge", np.where(np.arange(104) > 50, 900.0, 100.0) * np.ones((104, 1)), "pattern-not-found"
    yield "black", rng.normal(0, 3, SIZE), "low-signal"
    yield "off its region", np.roll(image, 45, axis=1), "pattern-not-found"
    yield "mostly noise", np.maximum(image * 1e-3, 0) + rng.normal(0, 5, (2, 104, 104)) + 1, "low-signal"


@pytest.mark.parametrize(("what", "image", "code"), [pytest.param(*b, id=b[0]) for b in bad_patches()])
def test_a_bad_patch_gets_a_code_and_no_number(what, image, code):
    seen = read(image)
    assert not seen.ok
    assert seen.why_not == (code,)
    assert seen.rings is None


@pytest.mark.parametrize("cycles", [12, 18, 24, 30, 35, 37, 40, 72, 108])
def test_wrong_cycles_are_told(cycles):
    assert read(faint(the_image()), cycles).why_not == ("pattern-not-found",)


def test_saturated_pixels_are_told():
    image = faint(the_image())
    x, y, values = samples(image)
    assert read_star(x, y, values, values < 900, 36, SIZE).why_not == ("frames-saturated",)


def test_a_tiny_region_is_told():
    assert read(np.ones((5, 5)), size=(5, 5)).why_not == ("pattern-not-found",)


def test_twice_the_uncertainty_holds_the_truth():
    # 12 sweeps of 3 stops, 6 frequencies: at 95 % some 11 of 216 lie outside. A sweep's readings share the error of
    # their level and count as 5 independent ones, of which more than 10 in 60 lie outside once in 1,000 trials
    rng = np.random.default_rng(11)
    blurs = (SHARP, MIDDLING, SOFT)
    deviations = []
    for _ in range(12):
        pattern = rng.normal(0, 0.007, SIZE)
        stars = [read(moved_frames(blur, rng, pattern)) for blur in blurs]
        for curve, blur in zip(star_curves(stars), blurs, strict=True):
            for v in (0.06, 0.12, 0.18, 0.25, 0.33, 0.42):
                contrast, u = curve.contrast(v)
                deviations.append((contrast - blur.mean(v)[0]) / u)
    assert np.mean(np.abs(deviations) > 2) < 10 / 60
    assert 0.6 < np.sqrt(np.mean(np.square(deviations))) < 1.3


def moved_frames(blur, rng, pattern):
    """Two noisy frames, the second moved."""
    return np.concatenate(
        [noisy(the_image(blur=blur, shift=s), 1, rng, pattern=pattern) for s in ((0, 0), (0.2, -0.1))]
    )


@given(
    seed=st.integers(0, 2**32 - 1),
    width=st.integers(3, 60),
    height=st.integers(3, 60),
    frames=st.integers(1, 3),
    cycles=st.integers(1, 80),
    kind=st.sampled_from(["noise", "huge", "few codes", "zeros", "not numbers", "small star"]),
    quincunx=st.booleans(),
)
@settings(max_examples=150)
def test_whatever_the_pixels_there_is_neither_an_exception_nor_a_number_that_is_none(
    seed, width, height, frames, cycles, kind, quincunx
):
    rng = np.random.default_rng(seed)
    values = rng.normal(100, 30, (frames, height, width))
    if kind == "huge":
        values = values * 10.0 ** rng.integers(-200, 200)
    elif kind == "few codes":
        values = rng.integers(0, 3, values.shape).astype(float)
    elif kind == "zeros":
        values = np.zeros_like(values)
    elif kind == "not numbers":
        values[rng.random(values.shape) < 0.02] = rng.choice([np.nan, np.inf, -np.inf])
    elif kind == "small star":
        y, x = np.mgrid[0:height, 0:width]
        angle = np.arctan2(y - height / 2, x - width / 2)
        values = 100 + 50 * np.sign(np.cos(cycles * angle)) + rng.normal(0, rng.choice([0, 3]), values.shape)
    x, y, scattered = samples(values, quincunx)
    valid = rng.random(scattered.shape) > rng.choice([0, 0.005, 0.5])
    seen = read_star(x, y, scattered, valid, cycles, (width, height))
    assert seen.ok == (not seen.why_not)
    again = read_star(x, y, scattered, valid, cycles, (width, height), near=seen)
    for star in (seen, again):
        if star.ok:
            rings = star.rings
            for part in (rings.amplitude, rings.signed, rings.level, rings.astigmatic, star.shift_px):
                assert np.isfinite(part).all()
            assert (rings.u >= 0).all()
    for curve in star_curves([seen, again]):
        if curve is not None:
            assert np.isfinite(curve.transfer.value).all()
            assert (curve.transfer.u >= 0).all()
            assert np.isfinite(curve.ratio)
