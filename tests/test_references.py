"""Parts of the pipeline against worked examples and closed forms; sources: fixtures/references/README.md."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from references import FOLDER, diffraction_mtf, facts, table
from scipy.special import erf

from sweep.choose.settings import motion_limit_ms, ripple_left, snr_db
from sweep.lens import Bench, pixel_box
from sweep.measure.edge import read_edge
from sweep.measure.linear import Scale
from sweep.measure.mtf import Transfer
from sweep.measure.noise import NoisePoint, area_noise, fit_photon_transfer
from sweep.result import CameraNoise
from sweep.station import Station

V_CY_PX = np.linspace(0.0, 1.0, 4001)


def a_station(*, lens=None, camera=None, scene=None, **need):
    """A lane with one target; whole tables or single needs may be put in."""
    return Station.model_validate(
        {
            "station": {"name": "lane"},
            "lens": lens or {"focal_length_mm": 16.0, "stops": [2.8, 5.6]},
            "camera": camera or {"pixel_pitch_um": 3.45},
            "scene": scene or {"object_um_per_px": 58.0, "wavelength_nm": 530.0},
            "targets": [{"name": "floor", "depth_mm": 0.0, "patches": [{"kind": "edge", "region": [0, 0, 80, 64]}]}],
            "need": {"feature_um": 180.0, "contrast": 0.2, "level": 0.7, **need},
        }
    )


# Transfer of pixels and blur: closed forms.


def test_pixel_box_along_a_row():
    rows = table("mtf_pixel_gauss.csv")
    assert_allclose(pixel_box(rows.cy_per_px.to_numpy(), 0.0), rows.pixel_sinc_100pct_fill, atol=1e-9)


def half_modulation(value):
    found = Transfer(V_CY_PX, value, np.zeros_like(value)).first_fall_to(0.5)
    assert found is not None
    return found[0]


def test_half_modulation_of_pixel_and_gaussian_blur():
    known = facts("mtf_pixel_gauss.json")
    box = pixel_box(V_CY_PX, 0.0)
    assert_allclose(half_modulation(box), known["pixel_mtf50_cy_px"], atol=1e-6)
    for row in known["gaussian_times_pixel_mtf50"]:
        blurred = box * np.exp(-2.0 * (np.pi * row["sigma_px"] * V_CY_PX) ** 2)
        assert_allclose(half_modulation(blurred), row["mtf50_cy_px"], atol=1e-6)


def test_half_modulation_of_pixel_and_diffraction():
    for row in facts("mtf_pixel_gauss.json")["diffraction_times_pixel_mtf50"]:
        cutoff_cy_px = row["pixel_pitch_um"] * 1e3 / (row["wavelength_nm"] * row["f_number"])
        perfect = pixel_box(V_CY_PX, 0.0) * diffraction_mtf(V_CY_PX / cutoff_cy_px)
        assert_allclose(half_modulation(perfect), row["mtf50_cy_px"], atol=1e-6)


# Geometry as the lens model has it.


def test_defocus_and_cutoff_of_the_bench():
    for row in facts("geometry.json")["computed_depth"]:
        lens = {"focal_length_mm": row["focal_length_mm"], "stops": [1.4, 16.0]}
        scene = {"object_um_per_px": row["object_um_per_px"], "wavelength_nm": row["wavelength_nm"]}
        bench = Bench.of(a_station(lens=lens, camera={"pixel_pitch_um": row["pixel_pitch_um"]}, scene=scene))
        waves = bench.w020_waves(np.array([row["f_number"]]), row["depth_mm"], 0.0)
        assert_allclose(waves, row["w020_waves"], rtol=1e-9, atol=1e-12)
        of_one = bench.of_one_wavelength()
        assert_allclose(of_one.cutoff_cy_px(row["f_number"]), row["cutoff_cy_per_px"], rtol=1e-9)


# A slanted edge of known transfer, noise-free, exactly integrated over its pixels.


@pytest.mark.parametrize("turned", [False, True])
def test_edge_of_known_transfer(turned):
    known = facts("edge_gauss_5deg.json")
    image = np.loadtxt(FOLDER / "edge_gauss_5deg.csv", delimiter=",")
    image = image.T if turned else image
    y, x = np.indices(image.shape)
    edge = read_edge(x.ravel().astype(float), y.ravel().astype(float), np.stack([image.ravel()] * 2))
    assert edge.ok
    assert edge.transfer is not None
    for row in known["mtf"]:
        if row["cy_per_px"] <= 0.5:
            found = edge.transfer.at(row["cy_per_px"])
            assert found is not None
            assert_allclose(found[0], row["mtf"], atol=0.001)
    half = edge.transfer.first_fall_to(0.5)
    assert half is not None
    assert_allclose(half[0], known["mtf50_cy_px"], rtol=0.001)
    assert_allclose(edge.angle_deg, known["edge_angle_deg"], atol=0.02)
    assert_allclose([edge.dark, edge.light], [4000.0, 60000.0], rtol=0.002)


def test_width_of_a_gaussian_edge():
    # 10 to 90 % of a Gaussian edge: 2 x 1.28155 sigma (mtf_pixel_gauss.json), here of 1.5 px, wide against the pixel.
    sigma, factor = 1.5, facts("mtf_pixel_gauss.json")["rise_factor"]
    y, x = (axis.ravel().astype(float) for axis in np.indices((80, 80)))
    tilt = np.radians(5.0)
    distance = (x - 39.4) * np.cos(tilt) + (y - 39.5) * np.sin(tilt)
    light = 1000.0 + 500.0 * (1.0 + erf(distance / sigma / np.sqrt(2.0)))
    edge = read_edge(x, y, np.stack([light] * 2))
    assert_allclose(edge.spread_px, factor * sigma, rtol=0.05)


# Photon transfer: EMVA Standard 1288, Release 4.0 Linear (2021).


def test_photon_transfer_line():
    known, rows = facts("photon_transfer.json"), table("photon_transfer.csv")
    lit = rows[rows.electrons >= 100]
    points = [
        NoisePoint(row.mean_dn - 16.0, row.temporal_variance_dn2, 1e4, 0.0, 1.0 / 12.0, (0.0, 0.0))
        for row in lit.itertuples()
    ]
    line = fit_photon_transfer(points)
    assert line is not None
    assert_allclose(line.dn_per_electron, known["inputs"]["system_gain_dn_per_e"], rtol=1e-9)
    dark_noise_dn = known["inputs"]["dark_noise_e"] * known["inputs"]["system_gain_dn_per_e"]
    assert_allclose(line.dark_noise_dn, dark_noise_dn, rtol=1e-7)
    for row in rows.itertuples():
        variance = line.variance(row.mean_dn - 16.0, 0.0, known["inputs"]["quantisation_variance_dn2"])
        assert_allclose(variance, row.temporal_variance_dn2, rtol=1e-9)


def test_signal_to_noise():
    rows = table("photon_transfer.csv")
    camera = CameraNoise(electrons_per_dn=2.5, read_noise_e=5.0, black_level_dn=16.0, full_scale_dn=4095)
    for row in rows[rows.electrons > 0].itertuples():
        level = (row.mean_dn - 16.0) / (4095 - 16.0)
        assert_allclose(snr_db(camera, level, 0.0), row.snr_db, atol=1e-9)


def test_temporal_noise_of_a_frame_pair():
    # 64 x 64 pixels: a relative standard error of 2.21 % (1,500 simulated pairs), of which four are allowed.
    known = facts("noise_frames.json")
    pair = np.stack([np.loadtxt(FOLDER / name, delimiter=",").ravel() for name in known["files"]])
    point = area_noise(pair, 0.0, 1.0 / 12.0)
    assert point is not None
    assert_allclose(point.variance_dn2, known["true_rms_temporal_noise_dn"] ** 2, rtol=4 * 0.0221)
    assert_allclose(point.variance_dn2, known["temporal_variance_mean_corrected"], rtol=0.002)
    assert_allclose(point.mean_dn, (known["mean_a"] + known["mean_b"]) / 2, rtol=1e-12)


# Exposure.


def test_motion_sets_the_longest_exposure():
    for row in facts("exposure.json")["motion_blur"]["examples"]:
        scene = {"object_um_per_px": row["object_um_per_px"], "wavelength_nm": 530.0}
        station = a_station(speed_mm_s=row["speed_mm_s"], blur_px=row["blur_px"], max_exposure_ms=1e3, scene=scene)
        assert_allclose(motion_limit_ms(station), row["exposure_ms"], rtol=1e-9)


def test_ripple_left_on_an_exposure():
    flicker = facts("exposure.json")["flicker"]
    for row in flicker["examples"]:
        left = row["ripple_amplitude"] * ripple_left(row["flicker_hz"], row["exposure_ms"])
        assert_allclose(left, row["residual"], rtol=1e-9, atol=1e-12)
    for hz, steady in flicker["steady_exposures_ms"].items():
        assert_allclose([ripple_left(float(hz), ms) for ms in steady], 0.0, atol=1e-12)


def test_srgb_is_undone():
    # IEC 61966-2-1:1999; 1e-8, since its two branches differ by 3e-8 where they meet.
    rows = table("srgb.csv")
    scale = Scale(black_dn=0.0, full_dn=255.0, response="srgb")
    assert_allclose(scale.linear(rows.code_8bit.to_numpy()) / 255.0, rows.linear, atol=1e-9)
    assert_allclose([scale.stored(255.0 * v) for v in rows.linear], rows.code_8bit, atol=1e-5)
