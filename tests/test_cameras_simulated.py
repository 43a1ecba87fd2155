"""The simulated station against closed forms, a general optics library, and the laws of photon counting."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from prysm.coordinates import cart_to_polar, make_xy_grid
from prysm.geometry import circle
from prysm.otf import mtf_from_psf
from prysm.polynomials import hopkins
from prysm.propagation import Wavefront as PrysmWavefront

from sweep.cameras.simulated import (
    Scene,
    SimulatedStation,
    exposure_for,
    lamp_at,
    light_tone,
    render_sweep,
    station_truth,
    transfer_along,
    write_sweep,
)
from sweep.cameras.simulated_draw import draw
from sweep.cameras.simulated_lens import SimulatedLens, Wavefront, pupil_transfer
from sweep.cameras.simulated_print import FINER, Optics, Print, edge_spread, half_plane, normal_deg, see_patch
from sweep.station import Patch, Station

FRACTIONS = np.linspace(0, 0.98, 50)


def test_transfer_of_a_perfect_pupil_is_the_closed_form():
    # Goodman, Introduction to Fourier Optics (1996), 6.4.2
    closed = 2 / np.pi * (np.arccos(FRACTIONS) - FRACTIONS * np.sqrt(1 - FRACTIONS**2))
    for direction in (0, 37):
        assert_allclose(pupil_transfer(Wavefront(), 0.53, FRACTIONS, direction), closed, atol=5e-4)


@pytest.mark.parametrize("waves", [0.25, 1.0, 5.0, 20.0])
def test_transfer_out_of_focus_is_hopkins_integral(waves):
    # H. H. Hopkins, The frequency response of a defocused optical system, Proc. R. Soc. Lond. A 231 (1955):
    # (4/pi) int_0^acos(s) sin^2 t cos(8 pi W s (cos t - s)) dt, here by the trapezoidal rule.
    t = np.linspace(0, 1, 8001)[None, :] * np.arccos(FRACTIONS)[:, None]
    s = FRACTIONS[:, None]
    expected = 4 / np.pi * np.trapezoid(np.sin(t) ** 2 * np.cos(8 * np.pi * waves * s * (np.cos(t) - s)), t, axis=1)
    found = pupil_transfer(Wavefront(defocus_um=waves * 0.53), 0.53, FRACTIONS)
    assert_allclose(found.real, expected, atol=1e-3)
    assert_allclose(found.imag, 0, atol=1e-9)


@pytest.mark.parametrize(
    ("defocus", "spherical4", "spherical6", "coma"),
    [(0.5, 0, 0, 0), (-0.8, 1.0, 0, 0), (0.0, 0.6, -0.4, 0), (0.2, 0.0, 0, 0.6)],
)
def test_modulus_agrees_with_a_general_optics_library(defocus, spherical4, spherical6, coma):
    # prysm (B. Dube), an independent physical-optics library, pupil to PSF to MTF, on its own grids; waves at 0.53 um.
    wavelength_um, samples, oversampling = 0.53, 512, 4
    x, y = make_xy_grid(samples, diameter=10)
    r, angle = cart_to_polar(x, y)
    rho = r / 5
    waves = defocus * hopkins(0, 2, 0, rho, angle, 0) + spherical4 * hopkins(0, 4, 0, rho, angle, 0)
    waves = waves + spherical6 * hopkins(0, 6, 0, rho, angle, 0) + coma * hopkins(1, 3, 1, rho, angle, 1)
    pupil = PrysmWavefront.from_amp_and_phase(
        circle(5, r), waves * wavelength_um * 1000, wavelength_um, x[0, 1] - x[0, 0]
    )
    mtf = mtf_from_psf(pupil.focus(40, oversampling).intensity)
    centre = mtf.data.shape[0] // 2
    cutoff = 1000 / (wavelength_um * 40 / 10)
    columns = mtf.data[centre, centre:], mtf.data[centre:, centre]
    front = Wavefront(*(v * wavelength_um for v in (defocus, spherical4, spherical6, coma)))
    for direction, column in zip((0, 90), columns, strict=True):
        fractions = np.arange(column.size) * mtf.dx / cutoff
        column, fractions = column[fractions < 0.95], fractions[fractions < 0.95]
        assert fractions.size > 50
        # The library stays within 8e-5 of exact values on such a grid.
        found = np.abs(pupil_transfer(front, wavelength_um, fractions, direction))
        assert_allclose(found, column, atol=1e-3)


def test_a_polygon_of_many_blades_is_a_circle():
    front = Wavefront(defocus_um=0.5)
    assert_allclose(
        pupil_transfer(front, 0.53, FRACTIONS, 10, blades=60), pupil_transfer(front, 0.53, FRACTIONS, 10), atol=2e-3
    )


def test_geometry_is_that_of_the_thin_lens():
    # Thin-lens algebra: the image of depth d lies at 1/(1/f - 1/u); W020 = a^2/2 (1/z_s - 1/z_i).
    lens = SimulatedLens(16.0, 3.45 / 58, 1.4, 530)
    f, m, depth, stop = 16.0, 3.45 / 58, 5.0, 2.8
    sensor = f * (1 + m)
    image = 1 / (1 / f - 1 / (f * (1 + 1 / m) + depth))
    radius = f / stop / 2
    assert_allclose(lens.wavefront(stop, depth, 530).defocus_um, 1000 * radius**2 / 2 * (1 / sensor - 1 / image))
    # Small depths: the longitudinal magnification is m^2, and W020 = -delta / (8 N_w^2).
    first_order = -1000 * m**2 * 0.01 / (8 * lens.working_f_number(stop) ** 2)
    assert_allclose(lens.wavefront(stop, 0.01, 530).defocus_um, first_order, rtol=1e-3)
    assert_allclose(lens.scale(10.0), 1 + 10.0 / (f * (1 + 1 / m)))
    assert lens.working_f_number(8.0) == pytest.approx(8.0 * (1 + m))


@settings(max_examples=30, deadline=None)
@given(st.floats(-1, 1), st.floats(0, 90))
def test_a_cell_cut_by_a_line_has_the_area_counted_on_a_fine_grid(distance, angle_deg):
    nx, ny = math.cos(math.radians(angle_deg)), math.sin(math.radians(angle_deg))
    grid = (np.arange(400) + 0.5) / 400 - 0.5
    counted = np.mean(grid[None, :] * nx + grid[:, None] * ny + distance > 0)
    assert_allclose(half_plane(np.array([distance / FINER]), nx, ny), counted, atol=3e-3)


def test_an_undercorrected_lens_is_sharper_wide_open_before_its_focus():
    # Rays from the rim focus short, so the light gathers best before the paraxial image: where an object nearer than
    # the plane of focus has its image behind the sensor (third-order aberration theory, e.g. Born and Wolf, 5.3).
    lens = SimulatedLens(16.0, 3.45 / 58, 1.4, 530, w040_waves=1.5)
    near, far = (np.abs(lens.transfer(1.4, depth, 0, np.array([60.0])))[0] for depth in (-4.0, 4.0))
    assert near > 2 * far


def test_edge_by_sum_and_edge_by_fine_cells_agree():
    lens = SimulatedLens(16, 3.45 / 58, 1.4, 530, w040_waves=1, coma_waves=0.3, coma_deg=30, blades=5)
    optics = Optics(lens, 3.45, 0.3, 2.8, 3.0)
    edge = Patch(kind="edge", region=(0, 0, 60, 80))
    # The first pair of bars that is wider than the card is an edge too.
    bars = Patch(kind="bars", region=(0, 0, 60, 80), period_um=58.0 * 1000)
    print_ = Print(tilt_deg=5.0, dark=0, light=1)
    by_sum = see_patch(edge, print_, 58.0)(optics)(0.2, 0.1)[25:-25, 25:-25]
    by_cells = see_patch(bars, print_, 58.0)(optics)(0.2, 0.1)[25:-25, 25:-25]
    assert_allclose(by_cells, by_sum, atol=1.5e-3)


def test_the_slope_of_an_edge_transforms_to_the_transfer():
    # Line spread function and transfer are a Fourier pair (Goodman 1996, 6.1).
    optics = Optics(SimulatedLens(16, 3.45 / 58, 1.4, 530, w040_waves=0.7), 3.45, 0.3, 4.0, 4.0)
    place_px, share = edge_spread(optics, 5.0)
    step = place_px[1] - place_px[0]
    frequency = np.array([0.05, 0.15, 0.3, 0.5])
    middle, line = (place_px[1:] + place_px[:-1]) / 2, np.diff(share) / step
    found = [np.sum(line * np.cos(2 * np.pi * f * middle)) * step for f in frequency]
    assert_allclose(found, optics.transfer(frequency, 5.0)[0].real, atol=2e-3)


@pytest.fixture(scope="module")
def drawn() -> tuple[Station, SimulatedStation]:
    return draw(np.random.default_rng(5))


def test_photon_transfer_returns_the_camera(drawn):
    # EMVA 1288 R4.0 (2021): variance of a pair over mean gives the gain; dark variance the read noise.
    station, sim = drawn
    scene, rng = Scene(station, sim, np.random.default_rng(1)), np.random.default_rng(2)
    stop = station.lens.stops[2]
    exposure_ms = exposure_for(station, sim, stop, 0.7)
    black = station.camera.black_level_dn

    def pair(lamp: float) -> tuple[float, float]:
        a, b = (scene.expose(stop, exposure_ms, 0.0, rng, lamp)[-40:, :].astype(float) for _ in range(2))
        return float(np.mean((a + b) / 2) - black), float(np.mean((a - b) ** 2) / 2 - 1 / 12)

    (mean, bright), (_, dark) = pair(1.0), pair(0.0)
    assert_allclose(mean / (bright - dark), sim.electrons_per_dn, rtol=0.04)
    if black * sim.electrons_per_dn > 5 * sim.read_noise_e:
        assert_allclose(math.sqrt(dark) * sim.electrons_per_dn, sim.read_noise_e, rtol=0.04)


def test_light_follows_exposure_gain_and_stop(drawn):
    station, sim = drawn
    scene, rng = Scene(station, sim, np.random.default_rng(1)), np.random.default_rng(2)
    black = station.camera.black_level_dn

    def level(f_number: float, exposure_ms: float, gain_db: float) -> float:
        return float(scene.expose(f_number, exposure_ms, gain_db, rng)[-40:, :].mean()) - black

    exposure_ms = exposure_for(station, sim, 4.0, 0.3)
    base = level(4.0, exposure_ms, 0.0)
    assert_allclose(level(4.0, 2 * exposure_ms, 0.0), 2 * base, rtol=3e-3)
    assert_allclose(level(4.0 * math.sqrt(2), exposure_ms, 0.0), base / 2, rtol=3e-3)  # one stop halves the light
    assert_allclose(level(4.0, exposure_ms, 6.0), base * 10 ** (6 / 20), rtol=3e-3)


def test_the_light_tone_reaches_the_wanted_level(drawn):
    station, sim = drawn
    sweep = render_sweep(station, sim, np.random.default_rng(3), frames=2, darks=2, level=0.65)
    assert len(sweep.shots) == 2 * len(station.lens.stops) + 2
    full, black = 2**sweep.bit_depth - 1, station.camera.black_level_dn
    for shot in sweep.shots:
        if shot.role == "target":
            tone = np.quantile(sweep.read(shot), 0.97) - black
            assert 0.55 < tone / (full - black) < 0.75
        else:
            assert sweep.read(shot).mean() == pytest.approx(black, abs=1)


def test_sharpening_adds_what_the_truth_says(drawn):
    # Unsharp masking is linear: 1 + k (1 - G), G the Gaussian's transfer.
    station, sim = drawn
    frequency = np.array([0.0, 0.2])
    plain = transfer_along(station, sim, 4.0, 0.0, frequency, 5.0)[0]
    sharp = transfer_along(station, replace(sim, sharpening=0.5), 4.0, 0.0, frequency, 5.0)[0]
    assert_allclose(sharp / plain, [1, 1 + 0.5 * (1 - math.exp(-2 * (math.pi * 0.2) ** 2))])


def test_truth_peaks_between_the_ends_and_falls_with_diffraction():
    # Common practice, no source: an uncorrected fast lens gains from the first stops down, then diffraction takes over.
    station, sim = draw(np.random.default_rng(1))
    worst = [stop.worst_contrast for stop in station_truth(station, sim)]
    best = int(np.argmax(worst))
    assert 0 < best < len(worst) - 1
    assert np.all(np.diff(worst[best:]) < 0)
    assert light_tone(sim) <= 1


def test_ripple_is_gone_over_whole_periods(drawn):
    sim = replace(drawn[1], ripple=0.2, ripple_hz=100.0, lamp_drift=0.0)
    assert lamp_at(sim, 0.123, 10.0) == pytest.approx(1.0)
    assert lamp_at(sim, 0.0, 5.0) == pytest.approx(1 + 0.2 * 2 / math.pi)


@pytest.mark.parametrize(("layout", "bit_depth"), [("mono", 8), ("bgr", 8), ("rggb", 12)])
def test_layouts(tmp_path, layout, bit_depth):
    station, sim = draw(np.random.default_rng(8), "bars", layout, bit_depth)
    sweep = render_sweep(station, sim, np.random.default_rng(3), frames=1)
    frame = sweep.read(sweep.shots[0])
    assert frame.dtype == (np.uint8 if bit_depth == 8 else np.uint16)
    assert frame.ndim == (3 if layout == "bgr" else 2)
    write_sweep(sweep, tmp_path / "folder")
    assert (tmp_path / "folder" / "shots.csv").read_text().startswith("file,stop,exposure_ms,gain_db,role")


def test_normals_follow_the_region():
    assert normal_deg(Patch(kind="edge", region=(0, 0, 60, 80)), Print(tilt_deg=5)) == 5
    assert normal_deg(Patch(kind="edge", region=(0, 0, 80, 60)), Print(tilt_deg=5)) == 95
