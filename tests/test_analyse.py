"""The whole path, from frames to the answer: against the simulated station's truth, and on sweeps of little data."""

from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest
from lenses import TRUTH
from numpy.testing import assert_allclose
from sweeps import a_lane, a_sweep, a_truth, at_exposures, scaled, shuffled, with_frames, with_shots

from sweep.analyse import analyse, places_of
from sweep.analyse.lens_fit import rebinned
from sweep.cameras.simulated import station_truth
from sweep.cameras.simulated_lens import SimulatedLens
from sweep.forecast import forecast
from sweep.measure.edge import EdgeProfile
from sweep.report.tables import result_json

STOPS = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0)


@lru_cache(maxsize=1)
def the_lane():
    return a_lane()


@lru_cache(maxsize=1)
def the_answer():
    return analyse(a_sweep(the_lane()), the_lane())


def of(result, stop):
    """One stop of a result."""
    return next(s for s in result.stops if s.stop == stop)


# Truth.


def test_every_stop_holds_the_truth():
    truth = station_truth(the_lane(), a_truth(the_lane()))
    for stop, true in zip(the_answer().stops, truth, strict=True):
        assert stop.stop == true.stop
        assert_allclose(stop.f_number_by_light, true.f_number_by_light, rtol=5e-3)
        assert abs(stop.worst_contrast - true.worst_contrast) < max(3.5 * stop.worst_contrast_u, 2e-3)
        assert_allclose(stop.exposure_needed_ms, true.exposure_ms, rtol=5e-3)
        assert_allclose(stop.snr_db, true.snr_db, atol=0.1)


def test_the_sharpest_stop_is_recommended():
    truth = station_truth(the_lane(), a_truth(the_lane()))
    recommended = the_answer().recommendation
    best = max(t.worst_contrast for t in truth)
    chosen = next(t for t in truth if t.stop == recommended.stop)
    assert chosen.worst_contrast > 0.99 * best  # within 1 % is a tie
    assert recommended.meets_need
    assert recommended.chance_best > 0.9
    assert 4.0 < recommended.optimum_f_number < 5.6
    assert recommended.shortfalls == ()


def test_the_model_stands_beside_every_reading_and_is_nearer_the_truth():
    truth = {(t.stop, p.target, p.patch): p for t in station_truth(the_lane(), a_truth(the_lane())) for p in t.patches}
    own, model = [], []
    for reading in the_answer().readings:
        if reading.kind == "edge":
            true = truth[reading.stop, reading.target, reading.patch]
            own.append(reading.mtf50_cy_px / true.mtf50_cy_px - 1.0)
            model.append(reading.model_mtf50_cy_px / true.mtf50_cy_px - 1.0)
        else:
            assert reading.model_contrast is None
    assert np.median(np.abs(model)) < min(0.003, np.median(np.abs(own)))


def test_camera_and_lens_are_told():
    sim, answer = a_truth(the_lane()), the_answer()
    assert_allclose(answer.camera.electrons_per_dn, sim.electrons_per_dn, rtol=0.02)
    assert_allclose(answer.camera.read_noise_e, sim.read_noise_e, rtol=0.05)
    assert (answer.camera.full_scale_dn, round(answer.camera.black_level_dn)) == (4095, 64)
    model = answer.model
    assert abs(model.spherical_waves - 1.0) < 3.5 * model.spherical_waves_u
    assert abs(model.blur_px - 0.3) < 3.5 * model.blur_px_u
    assert_allclose(model.best_focus_mm, 1.5, atol=1.0)
    assert_allclose(model.reduced_chi2, 1.0, atol=0.3)


def test_one_stop_halves_the_light_and_doubles_the_exposure():
    # ISO 517; marks are rounded, 4 to 5.6 is 1.96
    needed = [s.exposure_needed_ms for s in the_answer().stops]
    assert_allclose(np.divide(needed[1:], needed[:-1]), np.divide(STOPS[1:], STOPS[:-1]) ** 2, rtol=0.01)


@pytest.mark.parametrize(
    "camera",
    [{"layout": "rggb"}, {"layout": "bgr", "bit_depth": 8, "black_level_dn": 2, "response": 2.2}],
    ids=["rggb", "8-bit colour, gamma 2.2"],
)
def test_colour_and_gamma_come_to_the_same_answer(camera):
    station = a_lane(camera=camera)
    answer = analyse(a_sweep(station), station)
    assert answer.recommendation.stop == the_answer().recommendation.stop
    for mine, plain in zip(answer.stops, the_answer().stops, strict=True):
        assert abs(mine.worst_contrast - plain.worst_contrast) < 3.5 * np.hypot(
            mine.worst_contrast_u, plain.worst_contrast_u
        )
    assert (answer.camera.electrons_per_dn is None) == ("response" in camera)


def test_frames_of_several_exposures_are_one_sweep():
    # each stop at a half, once and three times: the last is clipped
    answer = analyse(at_exposures(the_lane(), (0.5, 0.5, 1.0, 1.0, 3.0)), the_lane())
    assert answer.recommendation.stop == the_answer().recommendation.stop
    assert_allclose(answer.camera.electrons_per_dn, a_truth(the_lane()).electrons_per_dn, rtol=0.02)
    assert all(r.ok for r in answer.readings if r.kind == "edge")


# The same source gives the same bytes.


def test_the_same_bytes_on_every_run():
    again = analyse(a_sweep(the_lane()), the_lane())
    assert result_json(again) == result_json(the_answer())


def test_the_same_bytes_when_rows_change_places():
    # The times of the frames stay; without them the rows are the order in time (test_readings.py). The simulated
    # source counts the rows into its hash, a folder does not (test_recording.py).
    answer = analyse(shuffled(a_sweep(the_lane())), the_lane())
    assert result_json(replace(answer, source=the_answer().source)) == result_json(the_answer())


# Little data.


def test_two_stops_are_enough():
    station = a_lane((2.8, 5.6))
    answer = analyse(a_sweep(station), station)
    truth = station_truth(station, a_truth(station))
    assert answer.recommendation.stop == max(truth, key=lambda t: t.worst_contrast).stop
    for stop, true in zip(answer.stops, truth, strict=True):
        assert abs(stop.worst_contrast - true.worst_contrast) < 0.01


def test_one_target_is_enough():
    station = a_lane(depths=(4.0,))
    answer = analyse(a_sweep(station), station)
    truth = station_truth(station, a_truth(station))
    chosen = next(t for t in truth if t.stop == answer.recommendation.stop)
    assert chosen.worst_contrast > 0.99 * max(t.worst_contrast for t in truth)


def test_a_stack_at_one_depth():
    station = a_lane(depths=(0.0, 0.0))
    answer = analyse(a_sweep(station), station)
    truth = station_truth(station, a_truth(station))
    chosen = next(t for t in truth if t.stop == answer.recommendation.stop)
    assert chosen.worst_contrast > 0.99 * max(t.worst_contrast for t in truth)


def clipped_but(kept):
    """Every stop overexposed twentyfold but one."""
    sweep = scaled(a_sweep(the_lane()), lambda s: 1.0 if s.stop == kept else 20.0)
    return with_shots(sweep, lambda s: s if s.stop == kept else replace(s, exposure_ms=20.0 * s.exposure_ms))


def test_every_stop_clipped_but_one():
    answer = analyse(clipped_but(5.6), the_lane())
    assert answer.recommendation.stop == 5.6
    assert answer.recommendation.meets_need
    assert [r.stop for r in answer.readings if r.ok and r.kind == "edge"] == [5.6] * 3
    assert {s.stop for s in answer.stops if "no-reading" in s.why_not} == set(STOPS) - {5.6}
    assert {n.code for n in answer.warnings} >= {"frames-saturated"}


def test_no_stop_has_the_contrast():
    # the pixel alone lets sinc(0.16) = 0.96 through, the lens at f/5.6 some 0.85 of it
    station = a_lane(contrast=0.95)
    answer = analyse(a_sweep(station), station)
    assert answer.recommendation.stop == the_answer().recommendation.stop  # the highest contrast all the same
    assert not answer.recommendation.meets_need
    assert not any(s.meets_need for s in answer.stops)
    assert all("contrast" in s.why_not for s in answer.stops)
    assert "0.95" in " ".join(answer.recommendation.shortfalls)


def test_exposure_rules_the_sharper_stops_out():
    # f/2.8 needs 0.84 ms, f/4 1.7 ms
    station = a_lane(max_exposure_ms=1.0)
    answer = analyse(a_sweep(station), station)
    assert answer.recommendation.stop == 2.8
    assert answer.recommendation.limited_by == "exposure"
    assert {s.stop for s in answer.stops if "exposure" in s.why_not} == {4.0, 5.6, 8.0}


def test_a_need_beyond_nyquist_is_not_met():
    station = a_lane(feature_um=50.0)
    answer = analyse(a_sweep(station), station)
    assert not answer.recommendation.meets_need
    assert all("beyond-nyquist" in s.why_not for s in answer.stops)
    assert all("beyond-nyquist" in r.why_not for r in answer.readings if r.kind == "edge")


@pytest.mark.parametrize("what", ["even tone", "all clipped"])
def test_nothing_can_be_read(what):
    value = 4095 if what == "all clipped" else 2000
    rng = np.random.default_rng(2)

    def lost(shot, pixels):
        noise = 0 if what == "all clipped" else rng.integers(-9, 10, pixels.shape)
        return pixels if shot.role == "dark" else (np.full_like(pixels, value) + noise).astype(np.uint16)

    answer = analyse(with_frames(a_sweep(the_lane()), lost), the_lane())
    recommended = answer.recommendation
    assert (recommended.stop, recommended.exposure_ms, recommended.gain_db) == (None, None, None)
    assert not recommended.meets_need
    assert recommended.reasons or recommended.shortfalls
    assert all(s.worst_contrast is None and not s.meets_need for s in answer.stops)
    assert answer.model.spherical_waves is None
    assert answer.curve == ()
    result_json(answer)


def test_a_depth_range_is_answered_for_all_of_it():
    station = a_lane(depth_range_mm=[-8.0, 16.0])
    answer = analyse(a_sweep(station), station)
    # the far end lies beyond the farthest target and is worse
    assert of(answer, 2.8).worst_contrast < of(the_answer(), 2.8).worst_contrast
    assert of(answer, 2.8).worst_target == "+16 mm"


# What the trade knows of stops. Forecast and simulated sweep both show it.

FAST = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0, 11.0, 16.0)


def fast_lane():
    """One target in focus behind a fast lens; a feature near the limit of the pixels."""
    return a_lane(FAST, (0.0,), feature_um=80.0, max_exposure_ms=1000.0, contrast=0.1)


@lru_cache(maxsize=2)
def seen(how):
    """The fast lens by a sweep of an uncorrected one (2.5 waves wide open), or by the forecast."""
    if how == "forecast":
        return forecast(fast_lane())
    lens = replace(TRUTH, w040_waves=2.5, focus_offset_mm=0.0)
    return analyse(a_sweep(fast_lane(), lens=lens), fast_lane())


@pytest.mark.parametrize("how", ["forecast", "sweep"])
def test_an_uncorrected_fast_lens_gains_from_the_first_stops_down_and_peaks_about_f_4(how):
    # common practice, no source: two to three stops down, at f/2.8 to f/5.6
    contrast = [s.worst_contrast for s in seen(how).stops]
    assert contrast[1] > 1.5 * contrast[0]
    peak = int(np.argmax(contrast))
    assert FAST[peak] in (2.8, 4.0, 5.6)
    assert seen(how).recommendation.stop == FAST[peak]
    assert all(a > b for a, b in zip(contrast[peak:], contrast[peak + 1 :], strict=False))


@pytest.mark.parametrize("how", ["forecast", "sweep"])
def test_beyond_its_peak_it_follows_the_diffraction_limit(how):
    # Contrast over that of the perfect lens (Goodman, 6.4.2) is the same at f/8 and f/11: pixel and sensor's blur.
    v, pitch, wavelength = 58.0 / 160.0, 3.45, 0.53
    s = wavelength * np.array([8.0, 11.0]) * (1.0 + pitch / 58.0) * v / pitch
    perfect = 2.0 / np.pi * (np.arccos(s) - s * np.sqrt(1.0 - s * s))
    left = np.array([of(seen(how), stop).worst_contrast for stop in (8.0, 11.0)]) / perfect
    assert_allclose(left[0], left[1], rtol=0.02)
    assert_allclose(left, np.sinc(v) * np.exp(-2.0 * (np.pi * 0.3 * v) ** 2), rtol=0.03)


DEEP = (2.0, 2.8, 4.0, 5.6, 8.0, 11.0, 16.0)


def deep_lane():
    """25 mm, targets in focus and 50 and 100 mm beyond."""
    scene = {"object_um_per_px": 69.0, "wavelength_nm": 530.0, "bandwidth_nm": 30.0}
    lens = {"focal_length_mm": 25.0}
    return a_lane(DEEP, (0.0, 50.0, 100.0), lens=lens, scene=scene, feature_um=300.0, max_exposure_ms=1000.0)


@lru_cache(maxsize=2)
def deep(how):
    if how == "forecast":
        return forecast(deep_lane())
    lens = SimulatedLens(25.0, 3.45 / 69.0, DEEP[0], 530.0, bandwidth_nm=30.0, w040_waves=0.6)
    return analyse(a_sweep(deep_lane(), lens=lens), deep_lane())


def contrast_of(result, target, stop):
    """Contrast at the feature by the model, between marks of the curve; 0 where it is reversed."""
    points = [(p.f_number, p.contrast) for p in result.curve if p.target == target]
    return float(np.interp(stop, *np.transpose(points)))


@pytest.mark.parametrize("how", ["forecast", "sweep"])
def test_depths_that_are_lost_wide_open_come_back_as_the_iris_closes(how):
    # common practice, no source: 25 mm at f/2, 50 and 100 mm beyond the plane of focus
    result = deep(how)
    floor, rim, top = (t.name for t in deep_lane().targets)
    assert contrast_of(result, floor, 2.0) > 0.6
    assert contrast_of(result, rim, 2.0) < 0.05
    assert contrast_of(result, top, 2.0) < 0.05
    assert contrast_of(result, rim, 8.0) > 0.5
    assert contrast_of(result, top, 8.0) > 0.2
    assert contrast_of(result, top, 16.0) > 0.4
    # and the depth in focus pays for it
    assert contrast_of(result, floor, 16.0) < 0.75 * contrast_of(result, floor, 4.0)
    assert [s.stop for s in result.stops if s.meets_need] == [8.0, 11.0, 16.0]
    assert result.recommendation.stop in (11.0, 16.0)


def test_the_smallest_feature_comes_back_likewise():
    sizes = {(r.stop, r.target): r.smallest_feature_um for r in deep("sweep").readings if r.kind == "edge"}
    _, rim, top = (t.name for t in deep_lane().targets)
    assert sizes[2.8, rim] > 1.5 * sizes[4.0, rim] > 1.5 * sizes[8.0, rim]
    assert sizes[4.0, top] > 1.5 * sizes[8.0, top] > sizes[16.0, top]


# Parts.


def test_places_are_the_sharpness_patches_each_with_its_direction():
    station = a_lane(depths=(10.0, 0.0))
    places = places_of(station, {(0, 0): 5.0, (1, 0): 95.0})
    assert [(p.name, p.depth_mm, p.target, p.direction_deg) for p in places] == [
        ("tray floor", 10.0, 0, 5.0),
        ("cap rim", 0.0, 1, 95.0),
    ]
    # at depth 10 of e = 16 (1 + 58 / 3.45) mm an object pixel is larger, a feature finer
    scale = 1.0 + 10.0 / (16.0 * (1.0 + 58.0 / 3.45))
    assert_allclose([p.feature_cy_px for p in places], [58.0 * scale / 360.0, 58.0 / 360.0])


def test_a_star_is_a_place_for_all_directions():
    star = a_lane(depths=(0.0,), patches=lambda x: [{"kind": "star", "region": [x, 14, 92, 92], "cycles": 24}])
    assert places_of(star, {})[0].direction_deg is None


def test_wider_bins_far_from_the_edge_keep_light_and_weight():
    rng = np.random.default_rng(1)
    d = np.sort(rng.uniform(-20, 20, 640))
    u = rng.uniform(1.0, 2.0, d.size)
    profile = EdgeProfile(d, 100.0 + d, u, d * 100.0)
    distance, width, value, value_u, gradient = rebinned(profile, 2.0)
    assert (np.diff(distance) > 0).all()
    assert set(width) <= {0.125, 0.5, 1.0}
    assert np.abs(distance[width == 0.125]).max() < 4.0 <= np.abs(distance[width > 0.2]).min()
    # weighted means of a straight line lie on it, and no weight is lost
    assert_allclose(value, 100.0 + distance, rtol=1e-9)
    assert_allclose(gradient, 100.0 * distance, rtol=1e-9, atol=1e-9)
    assert_allclose(np.sum(1.0 / value_u**2), np.sum(1.0 / u**2), rtol=1e-9)
