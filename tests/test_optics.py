"""Imaging and diffraction against published tables, closed forms and outside libraries.

Where a file of fixtures/references is used, its README names the source.
"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from prysm.coordinates import cart_to_polar, make_xy_grid
from prysm.geometry import circle
from prysm.otf import mtf_from_psf
from prysm.propagation import Wavefront
from references import diffraction_mtf, facts, table
from scipy.integrate import dblquad, quad

from sweep import optics

GEOMETRY = facts("geometry.json")


# Imaging: SPIE FG01 (2004), and the examples named in geometry.json.


def test_working_f_number():
    for row in GEOMETRY["working_f_number"]:
        given_ = row["f_number"], row["magnification"], row["pupil_magnification"]
        working = optics.working_f_number(*given_)
        assert_allclose(working, row["working_f_number"], rtol=1e-9)
        assert_allclose((working / row["f_number"]) ** 2, row["exposure_factor"], rtol=1e-9)


def test_published_exposure_factor_at_half_size():
    # Photography textbook appendix on close-up exposure, DOI 10.4324/9780080494012-22: m = 0.5 needs 2.25 times.
    assert_allclose((optics.working_f_number(8.0, 0.5) / 8.0) ** 2, 2.25, atol=0.005)


def test_distances_and_defocus_by_depth():
    for row in GEOMETRY["computed_depth"]:
        lens = {"focal_length_mm": row["focal_length_mm"], "magnification": row["magnification"]}
        assert_allclose(optics.image_distance_mm(0.0, *lens.values()), row["image_distance_mm"], rtol=1e-9)
        image = optics.image_distance_mm(row["depth_mm"], *lens.values())
        assert_allclose(image, row["image_distance_at_depth_mm"], rtol=1e-9)
        waves = optics.defocus_waves(row["depth_mm"], row["f_number"], **lens, wavelength_nm=row["wavelength_nm"])
        assert_allclose(waves, row["w020_waves"], rtol=1e-9, atol=1e-12)
        working = optics.working_f_number(row["f_number"], row["magnification"])
        cutoff = optics.cutoff_cy_mm(working, row["wavelength_nm"])
        assert_allclose(cutoff, row["cutoff_cy_per_mm_image"], rtol=1e-9)


@given(
    depth=st.floats(-50, 500),
    focus=st.floats(-20, 20),
    m=st.floats(0.01, 0.3),
    p=st.floats(0.5, 2.0),
    f=st.floats(8, 75),
    n=st.floats(1.4, 16),
)
def test_defocus_is_the_same_seen_from_either_pupil(depth, focus, m, p, f, n):
    # The wavefront's departure from a sphere does not change from the entrance to the exit pupil (Hopkins 1955);
    # on the object side the radius is f / 2 N and the distance e + d, e = f (1 / P + 1 / m) by Gaussian imaging.
    e = f * (1 / p + 1 / m)
    if min(depth, focus) < -0.5 * e:
        return
    front = (f / (2 * n)) ** 2 / 2 * (1 / (e + depth) - 1 / (e + focus)) * 1e6 / 530.0
    back = optics.defocus_waves(
        depth, n, best_focus_mm=focus, focal_length_mm=f, magnification=m, pupil_magnification=p, wavelength_nm=530.0
    )
    assert_allclose(back, front, rtol=1e-7, atol=1e-7)


def test_defocus_to_first_order():
    # delta / (8 N_w^2), delta = m^2 x depth behind the lens: Hopkins 1955, for small depths; negative beyond the focus.
    small = optics.defocus_waves(0.01, 4.0, focal_length_mm=25.0, magnification=0.1, wavelength_nm=530.0)
    first_order = -(0.1**2) * 0.01 / (8.0 * (4.0 * 1.1) ** 2) * 1e6 / 530.0
    assert_allclose(small, first_order, rtol=1e-3)


# Diffraction: Goodman; Born and Wolf.


def test_diffraction_closed_form():
    points = table("mtf_diffraction_circular.csv")
    assert_allclose(optics.otf(points.fraction_of_cutoff, 0.0, 0.0), points.mtf, atol=1e-9)
    assert_allclose(optics.otf([1.0, 1.7], 0.0, 0.0), 0.0, atol=1e-12)


def test_diffraction_at_round_modulations():
    for mtf, s in facts("diffraction.json")["fraction_of_cutoff_at_mtf"].items():
        assert_allclose(optics.otf(s, 0.0, 0.0), float(mtf), atol=1e-9)


def test_diffraction_limits():
    limits = table("diffraction_limits.csv")
    assert_allclose(optics.cutoff_cy_mm(limits.f_number, limits.wavelength_nm), limits.cutoff_cy_per_mm, rtol=1e-9)


# The aberrated pupil.


def volume(w020, w040, w060=0.0):
    """Goodman: the Strehl ratio is the integral of the OTF over that of the perfect lens, int s OTF ds = 1/8."""
    s, weight = np.polynomial.legendre.leggauss(200)
    s = (s + 1) / 2
    return 8 * np.sum(weight / 2 * s * optics.otf(s, w020, w040, w060))


def test_volume_under_the_otf_is_the_tabulated_strehl_ratio():
    for row in table("strehl.csv").itertuples():
        assert_allclose(volume(row.w020_waves, row.w040_waves), row.strehl_exact, atol=1e-8)


def test_otf_with_defocus():
    rows = table("otf_defocus.csv")
    assert_allclose(optics.otf(rows.fraction_of_cutoff, rows.w020_waves, 0.0), rows.otf, atol=1e-9)


def test_otf_with_spherical_aberration():
    rows = table("otf_spherical.csv")
    assert_allclose(optics.otf(rows.fraction_of_cutoff, rows.w020_waves, rows.w040_waves), rows.otf, atol=1e-9)


@pytest.mark.parametrize("waves", [(0.6, 0.0, 0.0), (-0.8, 1.0, 0.0), (0.3, -0.7, 0.5), (1.5, -2.0, 1.0)])
def test_otf_against_a_physical_optics_library(waves):
    # prysm: pupil, point-spread function and MTF by sampled transforms; 1024 samples are good to 1e-4.
    samples, diameter, f_number, wavelength_um = 1024, 10.0, 10.0, 0.5
    x, y = make_xy_grid(samples, diameter=diameter)
    rho, _ = cart_to_polar(x, y)
    rho = rho / (diameter / 2)
    opd_nm = sum(w * rho ** (2 * k) for k, w in enumerate(waves, start=1)) * wavelength_um * 1e3
    pupil = Wavefront.from_amp_and_phase(circle(1.0, rho), opd_nm, wavelength_um, diameter / samples)
    mtf = mtf_from_psf(pupil.focus(f_number * diameter, Q=4).intensity)
    frequency, value = mtf.slices().x
    s = np.arange(0.05, 1.0, 0.05)
    cutoff = optics.cutoff_cy_mm(f_number, wavelength_um * 1e3)
    assert_allclose(np.abs(optics.otf(s, *waves)), np.interp(s * cutoff, frequency, value), atol=1e-3)


@pytest.mark.parametrize("waves", [(0.4, 0.3, -0.5), (-2.0, 1.5, 0.8)])
@pytest.mark.parametrize("s", [0.07, 0.35, 0.8])
def test_otf_with_three_coefficients_against_adaptive_quadrature(s, waves):
    # The overlap integral of two shifted pupils as it stands (Goodman), the wavefronts subtracted, by scipy's QUADPACK.
    def difference(x, y, *coefficients):
        ahead, behind = (x + s) ** 2 + y * y, (x - s) ** 2 + y * y
        return sum(w * (ahead**k - behind**k) for k, w in enumerate(coefficients, start=1))

    def overlap(integrand):
        edge = lambda x: np.sqrt(max(0.0, 1 - (x + s) ** 2))  # noqa: E731
        return 4 / np.pi * dblquad(lambda y, x: integrand(x, y), 0, 1 - s, 0, edge, epsabs=1e-10, epsrel=1e-10)[0]

    expected = [overlap(lambda x, y: np.cos(2 * np.pi * difference(x, y, *waves)))]
    for unit in np.eye(3):
        expected.append(
            overlap(
                lambda x, y, unit=unit: (
                    -2 * np.pi * difference(x, y, *unit) * np.sin(2 * np.pi * difference(x, y, *waves))
                )
            )
        )
    assert_allclose(optics.otf(s, *waves), expected[0], atol=1e-8)
    assert_allclose(optics.otf(s, *waves, derivatives=True)[:4], expected, atol=1e-7)


@pytest.mark.parametrize("w020", [11.0, 37.0, 160.0])
@pytest.mark.parametrize("s", [0.003, 0.05, 0.4, 0.9])
def test_otf_of_strong_defocus(s, w020):
    # Hopkins 1955, the integral over the angle alone, by QUADPACK: (4/pi) int sin^2 t cos(8 pi W s (cos t - s)) dt.
    end = np.arccos(s)
    value, _ = quad(
        lambda t: np.sin(t) ** 2 * np.cos(8 * np.pi * w020 * s * (np.cos(t) - s)), 0, end, limit=4000, epsabs=1e-12
    )
    assert_allclose(optics.otf(s, w020, 0.0), 4 / np.pi * value, atol=1e-9)


SMALL = st.floats(-6, 6)
FRACTION = st.floats(0.0, 1.0)


@given(SMALL, SMALL, SMALL)
def test_volume_under_the_otf_is_the_strehl_ratio(w020, w040, w060):
    # Mahajan, J. Opt. Soc. Am. 72 (1982) 1258-1266: |int_0^1 exp(2 pi i W) d(rho^2)|^2.
    t, weight = np.polynomial.legendre.leggauss(200)
    t = (t + 1) / 2
    strehl = np.abs(np.sum(weight / 2 * np.exp(2j * np.pi * (w020 * t + w040 * t**2 + w060 * t**3)))) ** 2
    assert_allclose(volume(w020, w040, w060), strehl, atol=1e-8)


@given(FRACTION, SMALL, SMALL, SMALL)
def test_otf_never_exceeds_the_perfect_lens_and_does_not_know_the_sign_of_the_wavefront(s, w020, w040, w060):
    value = optics.otf(s, w020, w040, w060)
    assert abs(value) <= diffraction_mtf(s) + 1e-9
    assert_allclose(optics.otf(s, -w020, -w040, -w060), value, atol=1e-9)


@given(FRACTION)
def test_otf_without_aberration_is_the_closed_form(s):
    assert_allclose(optics.otf(s, 0.0, 0.0), diffraction_mtf(s), atol=1e-12)


def test_otf_broadcasts_and_ends_at_the_cutoff():
    s = np.linspace(0.0, 1.2, 13)
    value = optics.otf(s, np.array([[0.0], [0.7]]), 0.2)
    assert value.shape == (2, 13)
    assert_allclose(value[:, 0], 1.0, atol=1e-12)
    assert_allclose(value[:, s >= 1.0], 0.0, atol=1e-12)
    assert_allclose(value[1, 3], optics.otf(s[3], 0.7, 0.2), atol=1e-9)
    assert optics.otf([], 0.0, 0.0).shape == (0,)


@given(st.floats(0.02, 0.98), SMALL, SMALL, SMALL)
def test_derivatives_are_those_of_the_otf(s, w020, w040, w060):
    point = np.array([s, w020, w040, w060])
    h = 1e-4
    ahead, behind = point + h * np.eye(4), point - h * np.eye(4)
    ahead2, behind2 = point + 2 * h * np.eye(4), point - 2 * h * np.eye(4)
    # Five-point differences: error of order h^4, rounding of the values over h.
    slope = (
        (8 * (optics.otf(*ahead.T) - optics.otf(*behind.T)) - optics.otf(*ahead2.T) + optics.otf(*behind2.T)) / 12 / h
    )
    value, *slopes, by_s = optics.otf(*point, derivatives=True)
    assert_allclose(value, optics.otf(*point), atol=1e-9)
    assert_allclose([by_s, *slopes], slope, atol=5e-5)


# Times, to be compared within one run: pytest tests/test_optics.py --benchmark-only


@pytest.fixture
def a_fit_s_points():
    """What one step of a fit asks: 72 views, 5 wavelengths, 48 frequencies, up to 2 waves."""
    rng = np.random.default_rng(1)
    w020, w040 = rng.uniform(-2.0, 2.0, (72, 5, 1)), rng.uniform(0.0, 1.0, (72, 5, 1))
    return np.linspace(0.01, 0.6, 48), w020, w040


@pytest.mark.benchmark(group="otf")
def test_time_of_the_otf_with_derivatives(benchmark, a_fit_s_points):
    value, *slopes = benchmark(optics.otf, *a_fit_s_points, derivatives=True)
    assert all(np.isfinite(v).all() for v in (value, *slopes))


@pytest.mark.benchmark(group="otf")
def test_time_of_one_cosine_a_node_by_numpy(benchmark, a_fit_s_points):
    # For comparison: the cosines alone of some 12 x 6 nodes a point.
    phases = np.broadcast_to(a_fit_s_points[1], (72, 5, 48))[..., None] + np.linspace(0.0, 6.0, 72)
    assert np.isfinite(benchmark(np.cos, phases)).all()
