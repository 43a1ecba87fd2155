"""The lens model against a sampled pupil, a physical-optics library, and closed forms.

The quadrature below it is held to its references in test_optics.py.
"""

import numpy as np
import pytest
from choosing import a_station
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from prysm.coordinates import cart_to_polar, make_xy_grid
from prysm.geometry import circle
from prysm.otf import mtf_from_psf
from prysm.propagation import Wavefront
from references import diffraction_mtf

from sweep.lens import Bench, Pupil, lens_transfer, lens_transfer_derivatives, pixel_box

PITCH_UM, FOCAL_MM, OBJECT_UM, WAVELENGTH_NM = 3.45, 16.0, 58.0, 530.0
V_CY_PX = np.linspace(0.0, 0.6, 61)


def a_bench(bandwidth_nm=None):
    station = a_station()
    scene = station.scene if bandwidth_nm is None else station.scene.model_copy(update={"bandwidth_nm": bandwidth_nm})
    return Bench.of(station.model_copy(update={"scene": scene}))


def pupil_of(f_number, w020=0.0, w040=0.0, w060=0.0, colour=0.0):
    return Pupil(*(np.array([v], float) for v in (f_number, w020, w040, w060, colour)))


def sampled_transfer(waves, fractions, samples=400):
    """OTF along x by autocorrelation of a pupil sampled at waves(rho^2) (Goodman, Fourier Optics, 6.3)."""
    step = 2.0 / samples
    x = (np.arange(samples) + 0.5) * step - 1.0
    rho2 = x[None, :] ** 2 + x[:, None] ** 2
    cover = np.clip((1.0 - np.sqrt(rho2)) / step + 0.5, 0.0, 1.0)  # the rim, softened over one sample
    field = cover * np.exp(2j * np.pi * waves(rho2))
    power = np.abs(np.fft.fft(field, 2 * samples, axis=1)) ** 2
    correlation = np.fft.ifft(power.sum(axis=0))[:samples]
    correlation[0] = cover.sum()  # the softened rim would count squared
    return np.interp(fractions, np.arange(samples) * step / 2.0, correlation.real / correlation[0].real, right=0.0)


# The light.


def test_the_spectrum_has_the_stated_width():
    # A Gaussian's full width at half maximum is 2 sqrt(2 ln 2) standard deviations.
    bench = a_bench(30.0)
    mean = bench.weights @ bench.wavelengths_nm
    assert_allclose([bench.weights.sum(), mean], [1.0, WAVELENGTH_NM])
    rms = np.sqrt(bench.weights @ (bench.wavelengths_nm - mean) ** 2)
    assert_allclose(rms, 30.0 / (2.0 * np.sqrt(2.0 * np.log(2.0))), rtol=1e-9)
    assert_allclose(bench.spread, (bench.wavelengths_nm - mean) / rms, rtol=1e-9, atol=1e-12)


def test_working_f_number_and_cutoff():
    # N (1 + m / P); 1 / (wavelength N_w) for the shortest wavelength (Goodman, 6.4.2).
    bench = a_bench(30.0)
    working = 1.0 + PITCH_UM / OBJECT_UM
    assert_allclose(bench.working, working)
    shortest_um = bench.wavelengths_nm.min() * 1e-3
    assert_allclose(bench.cutoff_cy_px(8.0), PITCH_UM / (shortest_um * 8.0 * working))


def test_defocus_of_the_bench_is_that_of_the_thin_lens():
    # Pupils in the lens: image distance by 1/z = 1/f - 1/s, defocus a^2/2 (1/z_focus - 1/z_depth), a = f / (2 N).
    m, depth, focus, stop = PITCH_UM / OBJECT_UM, 6.0, -1.5, 2.8
    per_mm = [1.0 / FOCAL_MM - 1.0 / (FOCAL_MM * (1.0 + 1.0 / m) + at_mm) for at_mm in (focus, depth)]
    waves = (FOCAL_MM / stop / 2.0) ** 2 / 2.0 * (per_mm[0] - per_mm[1]) / (WAVELENGTH_NM * 1e-6)
    assert_allclose(a_bench().w020_waves(np.array(stop), depth, focus), waves, rtol=1e-9)


# The pixel.


@pytest.mark.parametrize("direction_deg", [0.0, 5.0, 45.0, 90.0, 137.0])
def test_the_pixel_box_along_any_direction(direction_deg):
    # The Fourier transform of a unit square.
    t = np.radians(direction_deg)
    x = (np.arange(400) + 0.5) / 400 - 0.5
    for v in (0.1, 0.37, 0.8):
        wave = np.exp(-2j * np.pi * v * (x[None, :] * np.cos(t) + x[:, None] * np.sin(t)))
        assert_allclose(pixel_box(np.array([v]), direction_deg), wave.mean().real, atol=1e-5)


def test_the_pixel_box_as_the_mean_over_directions():
    every = [pixel_box(V_CY_PX, d) for d in np.arange(0.25, 180.0, 0.5)]
    assert_allclose(pixel_box(V_CY_PX, None), np.mean(every, axis=0), atol=1e-4)


# The lens.


@pytest.mark.parametrize("f_number", [1.4, 5.6, 16.0])
def test_a_perfect_lens_in_focus(f_number):
    bench = a_bench().of_one_wavelength()
    closed = diffraction_mtf(V_CY_PX / bench.cutoff_cy_px(f_number))
    assert_allclose(lens_transfer(bench, pupil_of(f_number), V_CY_PX[None, :])[0], closed, atol=1e-9)


GENERAL = [(0.6, 0.0, 0.0), (-1.4, 1.1, 0.0), (0.5, -0.8, 0.4), (2.5, 0.3, -0.2)]


@pytest.mark.parametrize("waves", GENERAL)
def test_one_wavelength_against_a_sampled_pupil(waves):
    bench, f_number = a_bench().of_one_wavelength(), 4.0
    w2, w4, w6 = waves
    expected = sampled_transfer(
        lambda rho2: w2 * rho2 + w4 * rho2**2 + w6 * rho2**3, V_CY_PX / bench.cutoff_cy_px(f_number)
    )
    assert_allclose(lens_transfer(bench, pupil_of(f_number, *waves), V_CY_PX[None, :])[0], expected, atol=1e-3)


def test_a_spectrum_with_colour_against_sampled_pupils():
    # Path differences stay, so that waves go as 1 / wavelength; longitudinal colour adds to the defocus.
    bench, f_number, colour = a_bench(60.0), 2.8, 0.5
    w2, w4, w6 = -0.7, 0.9, -0.15
    expected = np.zeros(V_CY_PX.size)
    for wavelength, weight in zip(bench.wavelengths_nm, bench.weights, strict=True):
        ratio = WAVELENGTH_NM / wavelength
        off = (wavelength - WAVELENGTH_NM) / (60.0 / (2.0 * np.sqrt(2.0 * np.log(2.0))))
        fractions = V_CY_PX * f_number * bench.working * wavelength * 1e-3 / PITCH_UM
        a, b, c = (w2 + off * colour) * ratio, w4 * ratio, w6 * ratio
        expected += weight * sampled_transfer(
            lambda rho2, a=a, b=b, c=c: a * rho2 + b * rho2**2 + c * rho2**3, fractions
        )
    found = lens_transfer(bench, pupil_of(f_number, w2, w4, w6, colour), V_CY_PX[None, :])[0]
    assert_allclose(found, expected, atol=1e-3)


@pytest.mark.parametrize("waves", GENERAL[:3])
def test_one_wavelength_against_a_physical_optics_library(waves):
    # prysm (B. Dube): pupil to point spread to MTF in its own units, cycles/mm in the image plane.
    bench, f_number, wide = a_bench().of_one_wavelength(), 4.0, 10.0
    x, y = make_xy_grid(512, diameter=wide)
    r, _ = cart_to_polar(x, y)
    rho2 = (2.0 * r / wide) ** 2
    nm = WAVELENGTH_NM * (waves[0] * rho2 + waves[1] * rho2**2 + waves[2] * rho2**3)
    front = Wavefront.from_amp_and_phase(circle(wide / 2, r), nm, WAVELENGTH_NM * 1e-3, x[0, 1] - x[0, 0])
    mtf = mtf_from_psf(front.focus(wide * f_number * bench.working, 4).intensity)
    centre = mtf.data.shape[0] // 2
    v = np.arange(mtf.data.shape[1] - centre) * mtf.dx * PITCH_UM * 1e-3
    keep = v < 0.6
    assert keep.sum() > 40
    found = np.abs(lens_transfer(bench, pupil_of(f_number, *waves), v[keep][None, :])[0])
    assert_allclose(found, mtf.data[centre, centre:][keep], atol=1e-3)


@given(
    w020=st.floats(-2.0, 2.0),
    w040=st.floats(-1.5, 1.5),
    w060=st.floats(-0.4, 0.4),
    colour=st.floats(-0.5, 0.5),
    f_number=st.floats(1.4, 11.0),
)
@settings(max_examples=25)
def test_derivatives_are_those_of_the_transfer(w020, w040, w060, colour, f_number):
    bench, at = a_bench(40.0), np.array([w020, w040, w060, colour])
    v = np.array([[0.05, 0.17, 0.3]])

    def value(waves, ln_n):
        return lens_transfer(bench, pupil_of(np.exp(ln_n), *waves), v)[0]

    found = lens_transfer_derivatives(bench, pupil_of(f_number, *at), v)
    ln_n, h = np.log(f_number), 1e-4
    assert_allclose(found[0][0], value(at, ln_n), atol=1e-9)
    for k in range(4):
        step = h * np.eye(4)[k]
        assert_allclose(found[k + 1][0], (value(at + step, ln_n) - value(at - step, ln_n)) / (2 * h), atol=2e-4)
    # beyond the cutoff of one wavelength and not of another the slope is not smooth
    smooth = v[0] < 0.9 * bench.cutoff_cy_px(f_number)
    by_ln = (value(at, ln_n + h) - value(at, ln_n - h)) / (2 * h)
    assert_allclose(found[5][0][smooth], by_ln[smooth], atol=5e-4)
