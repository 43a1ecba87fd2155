"""Pixel values to linear light, and the sites of a patch that carry sharpness."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from sweep.measure.linear import Scale, channel_mask, crop, sharpness_sites, sharpness_values

# The sRGB curve itself is held to its table in test_references.py.


def test_black_comes_off_before_the_response_is_undone():
    # A display gamma of 2.2: light = span x ((code - black) / span)^2.2, the definition.
    scale = Scale(black_dn=16.0, full_dn=255.0, response=2.2)
    codes = np.array([16, 100, 200, 255])
    assert_allclose(scale.linear(codes), 239.0 * ((codes - 16.0) / 239.0) ** 2.2, rtol=1e-12)
    assert_allclose(scale.linear(np.array([255])), scale.span_dn)


def test_a_linear_response_takes_off_black_and_no_more():
    assert_allclose(Scale(64.0, 4095.0, "linear").linear(np.array([0, 64, 4095], np.uint16)), [-64.0, 0.0, 4031.0])


@pytest.mark.parametrize("response", ["linear", "srgb", 1.8])
def test_noise_about_black_averages_to_nothing(response):
    scale = Scale(20.0, 255.0, response)
    below, above = scale.linear(np.array([17.0, 23.0]))
    assert below == -above < 0


@given(
    st.floats(0, 100), st.sampled_from(["linear", "srgb", 0.5, 1.0, 2.2, 2.6]), st.floats(0.001, 0.999), st.booleans()
)
def test_stored_is_the_inverse_of_linear(black, response, share, deep):
    scale = Scale(black, 4095.0 if deep else 255.0, response)
    light = share * scale.span_dn
    # the two branches of sRGB meet to 3e-8 only
    assert_allclose(scale.linear(np.array([scale.stored(light)])), light, rtol=1e-6)


@pytest.mark.parametrize("response", ["linear", "srgb", 2.2])
def test_slope_is_the_light_of_one_code(response):
    scale = Scale(10.0, 255.0, response)
    codes = np.array([60.0, 128.0, 250.0])
    assert_allclose(scale.slope(codes), (scale.linear(codes + 1e-4) - scale.linear(codes - 1e-4)) / 2e-4, rtol=1e-3)


# Mosaics are named by their first two rows, from the top left corner of the frame.


@pytest.mark.parametrize("layout", ["rggb", "grbg", "gbrg", "bggr"])
@pytest.mark.parametrize("corner", [(0, 0), (3, 0), (0, 5), (7, 7)])
def test_channels_lie_where_the_layout_says(layout, corner):
    frame = np.empty((24, 24), "U1")
    frame[0::2, 0::2], frame[0::2, 1::2], frame[1::2, 0::2], frame[1::2, 1::2] = layout
    region = (*corner, 9, 8)
    patch = crop(frame, region)
    for channel in "rgb":
        assert_array_equal(channel_mask(layout, region, channel), patch == channel)


@pytest.mark.parametrize("layout", ["rggb", "grbg", "gbrg", "bggr"])
def test_a_mosaic_is_measured_on_its_green_sites_where_they_lie(layout):
    region = (5, 2, 11, 8)
    sites = sharpness_sites(layout, region)
    green = channel_mask(layout, region, "g")
    assert sites.x.size == green.sum()
    assert green[sites.y.astype(int), sites.x.astype(int)].all()
    patch = np.arange(88).reshape(8, 11)
    assert_array_equal(sharpness_values(patch, sites), patch[sites.y.astype(int), sites.x.astype(int)])


def test_colour_is_measured_on_green():
    pixels = np.zeros((10, 12, 3), np.uint8)  # blue, green, red
    pixels[..., 1] = np.arange(120).reshape(10, 12)
    region = (2, 3, 5, 4)
    sites = sharpness_sites("bgr", region)
    assert sites.x.size == 20
    assert_array_equal(sharpness_values(crop(pixels, region), sites), pixels[3:7, 2:7, 1].ravel())


def test_crop_is_x_y_width_height():
    pixels = np.arange(48).reshape(6, 8)
    assert_array_equal(crop(pixels, (2, 1, 3, 4)), pixels[1:5, 2:5])
