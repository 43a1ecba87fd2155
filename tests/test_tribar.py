"""Tri-bar targets against rendered ones, and against the profile of blurred bars in closed form."""

from functools import lru_cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from printed import Blur, Tribar, noisy, render, samples
from references import table
from scipy.special import ndtr

from sweep.measure.tribar import CONTRAST_FLOOR, HALF_CHANCE_AT, read_tribar
from sweep.measure.tribar_find import line_width_um

SIZE = (300, 300)
PRINT = Tribar()
GROUP = 2
# element 1 of group 2 has 4 line pairs per millimetre, a bar of 125 um: here 9 pixels
UM_PER_PX = 125.0 / 9.0
SHARP = Blur(0.5, 1.0)


@lru_cache(maxsize=16)
def the_image(target=PRINT, blur=SHARP):
    return render(target, SIZE, blur, beyond=0.05)


def read(image, near=None, *, group=GROUP, um_per_px=UM_PER_PX, quincunx=False):
    x, y, values = samples(image, quincunx)
    return read_tribar(x, y, values, None, group, um_per_px, near)


def grainy(image, seed=0, rms=4.0):
    return image + np.random.default_rng(seed).normal(0, rms, image.shape)


def truth(target):
    """Place of every set by its number and whether its bars are upright in the target's own coordinates."""
    return {(6 * GROUP + k, upright): (x, y) for k, upright, x, y, _ in target.sets()}


def last_told_apart(blur_px, contrast=0.8):
    """Number of the smallest element whose gaps are deeper than the criterion's half chance, for a Gaussian blur."""
    blur_px = np.hypot(blur_px, np.sqrt(1 / 12))
    number = 6 * GROUP
    while True:
        width = line_width_um(number) / UM_PER_PX
        s = np.linspace(-2.5, 2.5, 2001) * width
        bars = sum(
            ndtr((s - k * width + width / 2) / blur_px) - ndtr((s - k * width - width / 2) / blur_px)
            for k in (-2, 0, 2)
        )
        tone = 1 - contrast * bars
        bands = [tone[np.abs(s - k * width) < width / 4].mean() for k in (-2, -1, 0, 1, 2)]
        depth = bands[1] - (bands[0] + bands[2]) / 2
        if depth < HALF_CHANCE_AT * CONTRAST_FLOOR * np.mean(bands):
            return number - 1
        number += 1


def test_line_widths_are_those_of_the_standard():
    # MIL-STD-150A: 2^(G + (E-1)/6) line pairs per millimetre, a bar half a pair wide
    known = table("tribar_1951.csv")
    for row in known.itertuples():
        assert_allclose(line_width_um(6 * row.group + row.element - 1), row.line_width_um, rtol=1e-9)


@pytest.mark.parametrize(
    ("turn_deg", "mirrored"), [(0.0, False), (17.0, True), (45.0, False), (73.0, True), (160.0, False)]
)
def test_sets_are_found_at_any_angle(turn_deg, mirrored):
    target = Tribar(turn_deg=turn_deg, mirrored=mirrored, width_px=8.5, centre=(150.0, 145.0))
    seen = read(grainy(the_image(target)), um_per_px=125.0 / 8.5)
    assert seen.ok
    assert_allclose((seen.angle_deg - turn_deg + 45) % 90 - 45, 0, atol=0.7)
    assert_allclose(seen.um_per_px, 125.0 / 8.5, rtol=0.02)
    places = truth(target)
    numbers = {s.number for s in seen.sets}
    assert {6 * GROUP + k for k in range(1, 6)} <= numbers
    for s in seen.sets:
        apart = {key: np.hypot(x - s.centre_px[0], y - s.centre_px[1]) for key, (x, y) in places.items()}
        nearest = min(apart, key=apart.get)
        x, y = places[nearest]
        if s.seen and min(x, y, 299 - x, 299 - y) > 3.6 * s.width_px:
            assert nearest[0] == s.number
            assert apart[nearest] < 1.0


@pytest.mark.parametrize("blur_px", [1.2, 2.6, 3.6])
def test_the_smallest_element_is_that_of_the_blurred_profile(blur_px):
    seen = read(grainy(the_image(blur=Blur(2.0, 0.0, gauss_px=blur_px)), rms=1.0))
    expected = min(last_told_apart(blur_px), max(truth(PRINT))[0])
    smallest = 6 * seen.smallest.group + seen.smallest.element - 1
    assert abs(smallest - expected) <= 1
    assert_allclose(seen.smallest.line_um, line_width_um(smallest), rtol=1e-9)


def test_the_chance_falls_with_the_size_and_with_the_noise():
    blur = Blur(2.0, 0.0, gauss_px=3.0)
    sharp = read(grainy(the_image()))
    calm, rough = (read(grainy(the_image(blur=blur), rms=rms), sharp) for rms in (1.0, 60.0))
    chances = [e.chance for e in calm.elements]
    assert chances[0] > 0.99
    assert chances[-1] < 0.5
    at = {(s.number, s.across): s.chance for s in rough.sets}
    shared = [(s.chance, at[s.number, s.across]) for s in calm.sets if (s.number, s.across) in at]
    assert np.mean([b for a, b in shared if a > 0.5]) < np.mean([a for a, _ in shared if a > 0.5])
    assert all(b < 0.5 for a, b in shared if a < 0.05)


def test_uneven_light_and_dust_change_an_element_at_most():
    clean = grainy(the_image())
    y, x = np.mgrid[0 : SIZE[1], 0 : SIZE[0]]
    dirty = clean * (1 + 0.25 * np.sin(x / 90.0) + 0.0008 * (y - 150))
    for cx, cy, r in ((60, 250, 5), (200, 40, 4), (240, 120, 3), (130, 120, 3)):
        dirty = np.where(np.hypot(x - cx, y - cy) < r, 0.4 * dirty, dirty)
    first, second = read(clean).smallest, read(dirty).smallest
    assert abs(6 * first.group + first.element - 6 * second.group - second.element) <= 1


def test_light_bars_on_a_dark_ground():
    seen = read(grainy(the_image(Tribar(light=200.0, dark=1000.0))))
    assert seen.light_bars
    dark = read(grainy(the_image()))
    assert abs(seen.smallest.line_um / dark.smallest.line_um - 1) < 0.13


def test_green_sites_of_a_mosaic():
    seen = read(grainy(the_image()), quincunx=True)
    assert abs(seen.smallest.line_um / read(grainy(the_image())).smallest.line_um - 1) < 0.13


def test_without_a_scale_the_largest_set_is_element_1():
    assert_allclose(read(grainy(the_image()), um_per_px=None).um_per_px, UM_PER_PX, rtol=0.02)


def test_another_stop_tells_where_the_sets_of_a_soft_one_are():
    soft = grainy(the_image(blur=Blur(2.0, 0.0, gauss_px=4.0)))
    seen = read(soft, read(grainy(the_image())))
    expected = last_told_apart(4.0)
    assert seen.ok
    if expected >= 6 * GROUP:
        assert abs(6 * seen.smallest.group + seen.smallest.element - 1 - expected) <= 1
    else:
        assert seen.smallest is None


def test_reversed_bars_do_not_count():
    # a disc of 4 px radius reverses from 0.152 to 0.279 cy/px (zeros of J1): bars of 3.3 to 1.8 px width
    seen = read(grainy(the_image(blur=Blur(2.0, 4.0)), rms=1.0), read(grainy(the_image())))
    turned = [s for s in seen.sets if 1.9 < s.width_px < 2.9]
    assert turned
    assert seen.smallest is not None
    assert seen.smallest.line_um / UM_PER_PX > 3.0


def bad_patches():
    rng = np.random.default_rng(5)
    yield "noise", rng.normal(500, 20, (120, 120)), "pattern-not-found"
    yield "even tone", np.full((120, 120), 500.0), "pattern-not-found"
    yield "edge", np.where(np.arange(120) > 50, 900.0, 100.0) * np.ones((120, 1)), "pattern-not-found"
    yield "dark", rng.normal(-4, 3, (120, 120)), "low-signal"
    yield "tiny", np.ones((5, 5)), "pattern-not-found"


@pytest.mark.parametrize(("what", "image", "code"), [pytest.param(*b, id=b[0]) for b in bad_patches()])
def test_a_bad_patch_gets_a_code_and_no_number(what, image, code):
    seen = read(image)
    assert not seen.ok
    assert seen.why_not == (code,)
    assert seen.smallest is None


def test_saturated_pixels_are_told():
    x, y, values = samples(grainy(the_image()))
    assert read_tribar(x, y, values, values < 900, GROUP, UM_PER_PX).why_not == ("frames-saturated",)


def test_several_frames_are_read_together():
    frames = noisy(the_image(), 4, np.random.default_rng(1), electrons_per_dn=0.05)
    assert read(frames).smallest.line_um <= read(frames[:1]).smallest.line_um


@given(
    seed=st.integers(0, 2**32 - 1),
    width=st.integers(3, 50),
    height=st.integers(3, 50),
    frames=st.integers(1, 3),
    group=st.integers(-2, 9),
    um_per_px=st.one_of(st.none(), st.floats(0.1, 100)),
    kind=st.sampled_from(["noise", "huge", "few codes", "zeros", "not numbers", "stripes"]),
    quincunx=st.booleans(),
)
@settings(max_examples=80)
def test_whatever_the_pixels_there_is_neither_an_exception_nor_a_number_that_is_none(
    seed, width, height, frames, group, um_per_px, kind, quincunx
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
    elif kind == "stripes":
        values = values + 80 * np.sign(np.sin(np.arange(width) * rng.uniform(0.3, 1.5)))
    x, y, scattered = samples(values, quincunx)
    valid = rng.random(scattered.shape) > rng.choice([0, 0.005, 0.5])
    seen = read_tribar(x, y, scattered, valid, group, um_per_px)
    again = read_tribar(x, y, scattered, valid, group, um_per_px, near=seen)
    for measure in (seen, again):
        assert measure.ok == (not measure.why_not)
        for s in measure.sets:
            assert np.isfinite([s.depth, s.depth_u, s.width_px, *s.centre_px]).all()
            assert s.depth_u >= 0
            assert 0 <= s.chance <= 1
