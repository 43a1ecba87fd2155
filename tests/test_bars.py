"""Sets of parallel bars against prints rendered with transfer functions known in closed form."""

from functools import lru_cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from printed import Bars, Blur, noisy, render, samples
from references import facts

from sweep.measure.bars import BarsMeasure, bars_contrasts, read_bars
from sweep.measure.bars_fit import SQUARE_WAVE

SIZE = (84, 56)
SHARP, SOFT = Blur(0.85, 0.4), Blur(0.42, 0.0)
PRINT = Bars()
RATIO = 350 / 650


@lru_cache(maxsize=32)
def the_image(bars=PRINT, blur=SHARP, shift=(0.0, 0.0), size=SIZE):
    return render(bars, size, blur, shift)


def read(image, period_px=7.3, *, quincunx=False, near=None):
    """Bars from images (n, height, width) or (height, width)."""
    x, y, values = samples(image, quincunx)
    return read_bars(x, y, values, None, period_px, near)


def faint(image, seed=0, rms=0.5):
    """Hardly any noise: without any, nothing could be said of the uncertainty."""
    return image + np.random.default_rng(seed).normal(0, rms, image.shape)


@pytest.mark.parametrize("blur", [SHARP, SOFT])
@pytest.mark.parametrize("direction_deg", [0.7, 3.0, 33.0, 45.0, 88.0, 135.0])
@pytest.mark.parametrize("period_px", [3.1, 5.2, 7.3, 12.6])
def test_the_fundamental_holds_the_known_transfer(period_px, direction_deg, blur):
    # a sine fitted to a square wave of half difference h reads (4 / pi) h M (Coltman 1954)
    bars = Bars(period_px, direction_deg)
    seen = read(faint(the_image(bars, blur)), period_px)
    assert_allclose(seen.v_cy_px, 1 / period_px, rtol=3e-4)
    assert_allclose((seen.direction_deg - direction_deg + 90) % 180 - 90, 0, atol=0.05)
    truth = blur.along(1 / period_px, direction_deg)
    assert_allclose(seen.harmonics[0][0] / (SQUARE_WAVE * bars.half), truth, atol=0.001)


def test_the_third_harmonic_is_a_third_of_its_own_transfer():
    # the series of a square wave: coefficients 1, -1/3, 1/5 about a bar's middle (Coltman 1954)
    terms = {t["k"]: t["coefficient"] for t in facts("square_wave.json")["forward_terms"]}
    bars = Bars(12.6, 3.0)
    seen = read(faint(the_image(bars)), 12.6)
    for (amplitude, u), k in zip(seen.harmonics, (1, 3, 5), strict=True):
        expected = SQUARE_WAVE * bars.half * abs(terms[k]) * SHARP.along(k / 12.6, 3.0)
        assert_allclose(amplitude, expected, atol=max(4 * u, 0.3))


def test_green_sites_of_a_mosaic_say_the_same():
    seen = read(faint(the_image()), quincunx=True)
    assert_allclose(seen.harmonics[0][0] / (SQUARE_WAVE * PRINT.half), SHARP.along(1 / 7.3, 3.0), atol=0.001)


def test_frames_that_moved_are_not_blurred():
    shift = (0.9, -0.4)
    seen = read(np.stack([faint(the_image()), faint(the_image(shift=shift), 1)]))
    t = np.radians(seen.direction_deg)
    moved = shift[0] * np.cos(t) + shift[1] * np.sin(t)
    assert_allclose(abs(seen.shift_px[1] - seen.shift_px[0]), abs(moved), atol=0.005)
    assert_allclose(seen.harmonics[0][0] / (SQUARE_WAVE * PRINT.half), SHARP.along(1 / 7.3, 3.0), atol=0.001)


def test_a_light_gradient_changes_nothing():
    y, x = np.mgrid[0 : SIZE[1], 0 : SIZE[0]]
    seen = read(faint(the_image() * (1 + 0.003 * (x - 41.5) - 0.002 * (y - 27.5))))
    assert_allclose(seen.relative[0] / (SQUARE_WAVE * RATIO), SHARP.along(1 / 7.3, 3.0), atol=0.005)


@pytest.mark.parametrize("direction_deg", [3.0, 62.0])
def test_a_set_of_few_bars_is_read_within_its_ends(direction_deg):
    few = Bars(7.3, direction_deg, count=6, length_px=38.0)
    seen = read(faint(the_image(few, size=(84, 84), blur=SHARP)))
    # next to the surround a bar reads another contrast; inside five of six bars 2 % are left of it
    assert_allclose(seen.harmonics[0][0] / (SQUARE_WAVE * few.half), SHARP.along(1 / 7.3, direction_deg), rtol=0.02)


@pytest.mark.parametrize("period_px", [4.0, 3.0, 6.0])
def test_bars_that_fall_in_with_the_pixels_say_how_little_they_know(period_px):
    # along an axis the third harmonic of four pixels a period folds onto the fundamental
    bars = Bars(period_px, 0.0)
    seen = read(faint(the_image(bars)), period_px)
    assert seen.ok
    amplitude, u = seen.harmonics[0]
    truth = SQUARE_WAVE * bars.half * SHARP.along(1 / period_px, 0.0)
    assert abs(amplitude - truth) < 3 * u + 0.002 * truth


def test_contrast_with_the_stated_modulation():
    stops = [read(faint(the_image(blur=blur))) for blur in (SHARP, SOFT)]
    told = bars_contrasts([*stops, None], modulation=RATIO)
    assert told[2] is None
    for contrast, blur in zip(told[:2], (SHARP, SOFT), strict=True):
        assert_allclose(contrast.contrast, blur.along(1 / 7.3, 3.0), atol=0.004)
        assert_allclose(contrast.bars_cy_px, 1 / 7.3, rtol=1e-3)
        assert contrast.contrast_u > 0


@pytest.mark.parametrize("period_px", [9.3, 14.0, 20.0])
def test_contrast_without_it_is_as_sure_as_the_harmonics_allow(period_px):
    bars = Bars(period_px)
    stops = [read(faint(the_image(bars, blur), rms=5.0), period_px) for blur in (SHARP, Blur(1.2, 0.0), SOFT)]
    contrast = bars_contrasts(stops)[0]
    assert abs(contrast.contrast - SHARP.along(1 / period_px, 3.0)) < 2 * contrast.contrast_u


def test_without_any_hint_of_the_print_there_is_no_contrast():
    # four pixels a period: no higher harmonic is left
    assert bars_contrasts([read(faint(the_image(Bars(4.1), SOFT), rms=5.0), 4.1)]) == [None]


def test_reversed_bars_are_negative():
    # a disc of 5 px radius reverses from 0.122 to 0.223 cy/px (zeros of J1 at 3.83 and 7.02)
    turned = Blur(1.2, 5.0)
    truth = turned.along(1 / 6.0, 3.0)
    assert truth < -0.05
    bars = Bars(6.0)
    sharp, soft = (read(faint(the_image(bars, blur)), 6.0) for blur in (SHARP, turned))
    assert_allclose(bars_contrasts([soft, sharp], RATIO)[0].contrast, truth, atol=0.003)


def test_bars_too_soft_to_be_found_are_read_where_another_stop_saw_them():
    image = faint(the_image(blur=Blur(0.1, 0.0)), rms=20.0)
    assert read(image).why_not == ("pattern-not-found",)
    sharp = read(faint(the_image()))
    seen = read(image, near=sharp)
    assert seen.ok
    assert abs(seen.harmonics[0][0]) < 4 * seen.harmonics[0][1]
    assert abs(bars_contrasts([seen, sharp], RATIO)[0].contrast) < 0.02


def bad_patches():
    rng = np.random.default_rng(5)
    shape = SIZE[::-1]
    yield "noise", rng.normal(500, 20, shape), 7.3, "pattern-not-found"
    yield "even tone", np.full(shape, 500.0), 7.3, "pattern-not-found"
    yield "edge", np.where(np.arange(84) > 40, 900.0, 100.0) * np.ones((56, 1)), 7.3, "pattern-not-found"
    yield "dark", rng.normal(-5, 3, shape), 7.3, "low-signal"
    yield "other period", faint(the_image()), 10.5, "pattern-not-found"
    yield "finer than two pixels", faint(the_image()), 1.9, "pattern-not-found"
    yield "tiny", np.ones((5, 5)), 7.3, "pattern-not-found"


@pytest.mark.parametrize(("what", "image", "period_px", "code"), [pytest.param(*b, id=b[0]) for b in bad_patches()])
def test_a_bad_patch_gets_a_code_and_no_number(what, image, period_px, code):
    seen = read(image, period_px)
    assert not seen.ok
    assert seen.why_not == (code,)
    assert bars_contrasts([seen]) == [None]


def test_saturated_pixels_are_told():
    x, y, values = samples(faint(the_image()))
    assert read_bars(x, y, values, values < 900, 7.3).why_not == ("frames-saturated",)


def test_twice_the_uncertainty_holds_the_truth():
    # 160 sets: 95 % inside; fewer than 86 % or more than 100 % once in 1,000 trials (binomial)
    rng = np.random.default_rng(2)
    deviations = []
    for _ in range(40):
        pattern = rng.normal(0, 0.007, SIZE[::-1])
        for bars, blur in ((PRINT, SHARP), (PRINT, SOFT), (Bars(4.3, 88.0), SHARP), (Bars(11.0, 20.0), SOFT)):
            seen = read(noisy(the_image(bars, blur), 2, rng, pattern=pattern), bars.period_px)
            amplitude, u = seen.harmonics[0]
            level = seen.level / 650
            truth = SQUARE_WAVE * bars.half * blur.along(1 / bars.period_px, bars.direction_deg)
            deviations.append((amplitude / level - truth) / u)
    assert np.mean(np.abs(deviations) < 2) > 0.86
    assert 0.8 < np.sqrt(np.mean(np.square(deviations))) < 1.2


@given(
    seed=st.integers(0, 2**32 - 1),
    width=st.integers(3, 60),
    height=st.integers(3, 60),
    frames=st.integers(1, 3),
    period_px=st.floats(0.1, 100),
    kind=st.sampled_from(["noise", "huge", "few codes", "zeros", "not numbers", "bars"]),
    quincunx=st.booleans(),
)
@settings(max_examples=200)
def test_whatever_the_pixels_there_is_neither_an_exception_nor_a_number_that_is_none(
    seed, width, height, frames, period_px, kind, quincunx
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
    elif kind == "bars":
        y, x = np.mgrid[0:height, 0:width]
        wave = np.sign(np.cos(2 * np.pi * (x * np.cos(seed) + y * np.sin(seed)) / period_px))
        values = 100 + 50 * wave + rng.normal(0, rng.choice([0, 3]), values.shape)
    x, y, scattered = samples(values, quincunx)
    valid = rng.random(scattered.shape) > rng.choice([0, 0.005, 0.5])
    seen = read_bars(x, y, scattered, valid, period_px)
    again = read_bars(x, y, scattered, valid, period_px, near=seen)
    for bars in (seen, again):
        assert bars.ok == (not bars.why_not)
        if bars.ok:
            assert np.isfinite([bars.v_cy_px, bars.level, bars.phase_rad, bars.harmonics[0][1]]).all()
            assert np.isfinite([a for a, _ in bars.harmonics]).all()
            assert np.isfinite(bars.shift_px).all()
            assert all(u >= 0 for _, u in bars.harmonics)
    for told in bars_contrasts([seen, again]):
        if told is not None:
            assert np.isfinite([told.contrast, told.contrast_u]).all()
            assert told.contrast_u >= 0


def test_no_bars_no_contrast():
    assert bars_contrasts([None, BarsMeasure(False, ("pattern-not-found",))]) == [None, None]
