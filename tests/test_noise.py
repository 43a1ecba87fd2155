"""Temporal noise and photon transfer on simulated photons; the standard's worked example is in test_references.py.

Quantities: EMVA Standard 1288, Release 4.0 Linear (2021). The relative standard deviation of a variance from n
independent values is sqrt(2 / (n - 1)) (normal distribution); five of it are allowed.
"""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from sweep.measure.noise import NoisePoint, PhotonTransfer, area_noise, fit_photon_transfer, noise_growth

K, READ_E = 0.4, 5.0  # DN per electron, electrons
PIXELS = 64 * 64


def frames_of(
    electrons, rng, *, n=4, gain_db=0.0, k=K, read_e=READ_E, pattern=0.0, lamp=None, rounded=True, pixels=PIXELS
):
    """n frames of an even area, (n, pixels) DN above black."""
    g = 10.0 ** (gain_db / 20.0)
    light = electrons * (1.0 + pattern * rng.standard_normal(pixels))
    levels = np.ones(n) if lamp is None else np.asarray(lamp)
    dn = np.array([g * k * (rng.poisson(light * level) + read_e * rng.standard_normal(pixels)) for level in levels])
    return np.rint(dn) if rounded else dn


def true_variance(electrons, gain_db=0.0):
    g = 10.0 ** (gain_db / 20.0)
    return (g * K) ** 2 * (electrons + READ_E**2) + 1.0 / 12.0


def point_of(frames, gain_db=0.0, grid=None):
    point = area_noise(frames, gain_db, 1.0 / 12.0, grid)
    assert point is not None
    return point


# One area.


@pytest.mark.parametrize("gain_db", [0.0, 12.0])
@pytest.mark.parametrize("electrons", [20, 500, 8000])
@pytest.mark.parametrize("n", [2, 8])
def test_variance_of_one_pixel(electrons, gain_db, n):
    point = point_of(frames_of(electrons, np.random.default_rng(1), n=n, gain_db=gain_db), gain_db)
    assert_allclose(point.dof, (n - 1) * PIXELS, rtol=0.01)
    assert_allclose(point.variance_dn2, true_variance(electrons, gain_db), rtol=5 * np.sqrt(2.0 / point.dof))


def test_neither_pixel_pattern_nor_an_unsteady_lamp_is_noise():
    rng = np.random.default_rng(2)
    point = point_of(frames_of(4000, rng, pattern=0.02, lamp=[0.96, 1.0, 1.03, 1.01], pixels=40_000))
    assert_allclose(point.variance_dn2, true_variance(4000), rtol=0.03)
    # what is left over the pixels' means is the pattern: 2 % of 1600 DN
    assert_allclose(np.sqrt(point.pattern_dn2), 0.02 * K * 4000, rtol=0.05)


def test_a_pixel_that_jumps_does_not_count():
    rng = np.random.default_rng(3)
    frames = frames_of(1000, rng, n=6)
    spoilt = frames.copy()
    spoilt[rng.integers(6, size=20), rng.choice(PIXELS, 20, replace=False)] += 500.0
    assert_allclose(point_of(spoilt).variance_dn2, point_of(frames).variance_dn2, rtol=0.02)
    assert point_of(spoilt).dof <= 5 * (PIXELS - 20)


@pytest.mark.parametrize("quincunx", [False, True])
def test_noise_that_neighbours_share(quincunx):
    # White noise averaged over two neighbours has a correlation of 1/2 along that axis (stationary processes).
    rng = np.random.default_rng(4)
    white = rng.normal(0.0, 5.0, (4, 65, 64)) + 1000.0
    rows, columns = np.mgrid[0:64, 0:64]
    keep = (rows + columns) % 2 == 0 if quincunx else np.ones((64, 64), bool)
    grid = columns[keep].astype(float), rows[keep].astype(float)
    step = 2 if quincunx else 1
    smooth = 0.5 * (white[:, :-1] + np.roll(white, -step, axis=1)[:, :-1])
    along_x, along_y = point_of(smooth[:, keep], grid=grid).correlation
    assert_allclose([along_x, along_y], [0.0, 0.5], atol=0.05)
    assert_allclose(point_of(white[:, :64][:, keep], grid=grid).correlation, 0.0, atol=0.05)


def test_bands_of_a_rippling_lamp_are_not_noise_that_neighbours_share():
    rng = np.random.default_rng(5)
    rows, columns = np.mgrid[0:64, 0:40]
    bands = 1.0 + 0.02 * np.sin(2 * np.pi * rows / 20.0 + rng.uniform(0, 6, 6)[:, None, None])
    frames = rng.normal(1000.0, 5.0, (6, 64, 40)) * bands
    grid = columns.ravel().astype(float), rows.ravel().astype(float)
    assert_allclose(point_of(frames.reshape(6, -1), grid=grid).correlation, 0.0, atol=0.05)


@pytest.mark.parametrize("shape", [(1, 4096), (5, 29)])
def test_too_little_to_tell_noise(shape):
    assert area_noise(np.full(shape, 100.0), 0.0, 1.0 / 12.0) is None


@given(st.integers(0, 2**32 - 1), st.integers(2, 5), st.integers(30, 90), st.sampled_from(["zeros", "few", "negative"]))
@settings(max_examples=60)
def test_whatever_the_pixels_the_noise_is_a_number(seed, n, k, kind):
    rng = np.random.default_rng(seed)
    frames = np.zeros((n, k)) if kind == "zeros" else rng.integers(0, 2, (n, k)).astype(float)
    frames = -50.0 * frames if kind == "negative" else frames
    grid = (np.arange(k) % 9).astype(float), (np.arange(k) // 9).astype(float)
    point = area_noise(frames, 0.0, 1.0 / 12.0, grid)
    assert np.isfinite([point.mean_dn, point.variance_dn2, point.dof, point.pattern_dn2, *point.correlation]).all()
    assert point.variance_dn2 >= 0
    assert point.dof >= 0


# Many areas: the photon transfer.

LEVELS = (30, 200, 800, 2500, 6000, 9000)


def transfer_of(rng, *, gains=(0.0,), levels=LEVELS, **more):
    points = [point_of(frames_of(e, rng, gain_db=g, **more), g) for g in gains for e in levels]
    return fit_photon_transfer(points)


@pytest.mark.parametrize("gains", [(0.0,), (0.0, 6.0, 18.0)])
def test_gain_and_dark_noise_lie_within_their_uncertainty(gains):
    # Of 20 readings one lies outside of 3.5 u once in 100 trials (normal distribution).
    k_off, dark_off = [], []
    for seed in range(20):
        found = transfer_of(np.random.default_rng(seed), gains=gains, pixels=1024)
        k_off.append((found.dn_per_electron - K) / found.dn_per_electron_u)
        dark_off.append((found.dark_variance_dn2 - (K * READ_E) ** 2) / found.dark_variance_dn2_u)
    for off in (k_off, dark_off):
        assert np.abs(off).max() < 3.5
        assert 0.5 < np.sqrt(np.mean(np.square(off))) < 1.5
    assert_allclose(found.dark_noise_dn, K * READ_E, rtol=0.2)


def test_variance_follows_the_equation():
    # sigma^2 = g K mean + g^2 r^2 + 1/12 (EMVA 1288), with g = 10^(dB / 20).
    camera = PhotonTransfer(0.4, 0.0, 4.0, 0.0, 1.0, 9)
    assert_allclose(camera.variance(1000.0, 20.0 * np.log10(2.0), 1.0 / 12.0), 2 * 400.0 + 4 * 4.0 + 1.0 / 12.0)


def test_dark_noise_that_rounding_hides_is_not_told():
    found = transfer_of(np.random.default_rng(6), k=0.05, read_e=2.0)  # 0.1 DN
    assert_allclose(found.dn_per_electron, 0.05, rtol=0.05)
    assert found.dark_noise_dn is None


def test_one_unsteady_area_does_not_spoil_the_gain():
    rng = np.random.default_rng(7)
    points = [point_of(frames_of(e, rng)) for e in LEVELS for _ in range(3)]
    spoilt = [*points[:-1], replace(points[-1], variance_dn2=5.0 * points[-1].variance_dn2)]
    sound, found = fit_photon_transfer(points), fit_photon_transfer(spoilt)
    assert abs(found.dn_per_electron / sound.dn_per_electron - 1.0) < 0.02


def test_under_a_display_gamma_noise_falls_with_the_level_and_there_is_no_gain():
    # Codes = full (light / full)^(1 / 2.2) taken for light: their noise goes as sqrt(light) times the curve's slope.
    rng, full = np.random.default_rng(8), 4000.0
    light = [np.maximum(frames_of(e, rng, rounded=False), 0.0) / full for e in (200, 800, 2000, 5000, 9000)]
    bent = [point_of(np.rint(full * part ** (1.0 / 2.2))) for part in light]
    assert all(a.variance_dn2 > b.variance_dn2 for a, b in pairwise(bent))
    assert fit_photon_transfer(bent) is None


def test_a_straight_line_is_not_bent():
    found = transfer_of(np.random.default_rng(8), levels=(200, 500, 1000, 2000, 3500, 5000, 7000, 9000))
    assert abs(found.bend[0]) < 4 * found.bend[1] < 0.2


@pytest.mark.parametrize(("gamma", "growth"), [(1.0, 0.98), (2.2, -0.2), (1.0 / 2.2, 1.55)])
def test_noise_grows_as_the_response_has_it(gamma, growth):
    # Photon noise: variance ~ light. Codes ~ light^(1/gamma) taken for light have a variance ~ light^(2/gamma - 1),
    # that is codes^(2 - gamma); dark noise takes a little off.
    rng, full = np.random.default_rng(9), 4000.0
    taken = [full * (np.maximum(frames_of(e, rng, rounded=False), 0.0) / full) ** (1 / gamma) for e in LEVELS[2:]]
    found, u = noise_growth([point_of(f) for f in taken])
    assert_allclose(found, growth, atol=0.06)
    assert u < 0.03


@pytest.mark.parametrize("levels", [(100, 110, 120, 130), (100, 1000, 3000)], ids=["one level", "three areas"])
def test_growth_without_a_range_is_not_told(levels):
    rng = np.random.default_rng(9)
    assert noise_growth([point_of(frames_of(e, rng)) for e in levels]) is None


def a_point(mean, variance, rounding=1.0 / 12.0):
    return NoisePoint(mean, variance, 1e4, 0.0, rounding, (0.0, 0.0))


@pytest.mark.parametrize(
    "points",
    [
        [],
        [a_point(100.0, 44.0), a_point(500.0, 204.0)],
        [a_point(500.0, 204.0), a_point(501.0, 205.0), a_point(502.0, 203.0)],
        [a_point(m, 0.1) for m in (10.0, 100.0, 1000.0)],
        [a_point(m, 900.0 - 0.5 * m) for m in (10.0, 400.0, 1000.0, 1600.0)],
    ],
    ids=["none", "two", "one level", "hidden by rounding", "falling"],
)
def test_no_photon_transfer(points):
    assert fit_photon_transfer(points) is None
