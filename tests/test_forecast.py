"""What to expect before any frame: by a usual lens, and by the lens that an earlier sweep found."""

from dataclasses import fields, replace

import numpy as np
import pytest
from lenses import STOPS, TRUTH, true_contrast
from numpy.testing import assert_allclose
from references import diffraction_mtf
from sweeps import a_lane, a_truth

from sweep.cameras.simulated import station_truth
from sweep.errors import StationError
from sweep.forecast import CARRIED_FAR_SHARE, CARRIED_SHARE, forecast
from sweep.lens import Bench
from sweep.result import LensModel

# As a sweep through TRUTH would find it: 1.0 and -0.1 waves at f/1.4 (see tests/lenses.py).
FOUND = LensModel(
    best_focus_mm=-1.2,
    spherical_waves=1.0,
    blur_px=0.3,
    reduced_chi2=1.0,
    spherical_waves_u=0.02,
    blur_px_u=0.001,
    sixth_order_waves=-0.1,
    sixth_order_waves_u=0.01,
    colour_um_per_nm=0.0,
    colour_um_per_nm_u=0.01,
    widest_f_number=1.4,
    wavelength_nm=530.0,
    focal_length_mm=16.0,
    magnification=3.45 / 58.0,
    pixel_pitch_um=3.45,
)
ROUND = 1e-9


def without_u(model):
    return {f.name: getattr(model, f.name) for f in fields(model) if not f.name.endswith("_u")}


def reasons(station, earlier=None):
    return " ".join(forecast(station, earlier).recommendation.reasons)


# Whatever the lens.


def test_nothing_is_measured_and_it_is_the_same_each_time():
    found = forecast(a_lane())
    assert found.readings == ()
    assert found.source.frames == 0
    assert {s.exposure_ms for s in found.stops} == {None}
    assert found == forecast(a_lane())


def test_the_map_is_that_of_the_choice():
    # Without readings both are the model; the widest range makes its ends the worst.
    found = forecast(a_lane(depth_range_mm=[-20.0, 30.0], speed_mm_s=20.0))
    ends = [found.depth_map.depths_mm.index(d) for d in (-20.0, 30.0)]
    for stop, row in zip(found.stops, found.depth_map.stops, strict=True):
        assert_allclose(stop.worst_contrast, min(row.contrast[end] for end in ends), rtol=1e-9)
        assert set(row.smallest_detected_um) == {None}  # no noise is known yet


def test_where_to_set_the_focus_is_told():
    assert "The focus would serve these depths best" in reasons(a_lane(depths=(12.0, 2.0)))
    assert "The focus stands well for these depths" in reasons(a_lane(depths=(0.0,)))


def test_a_quarter_wave_of_defocus_is_rayleighs():
    # Depth of focus by Rayleigh's quarter wave, +-2 lambda N^2 at the image (Born and Wolf, 8.8.2; from memory).
    bench = Bench.of(a_lane())
    working = 4.0 * (1 + 3.45 / 58.0)
    assert_allclose(bench.wave_um(4.0) / 4, 2 * 0.530 * working**2, rtol=1e-12)


def test_the_spectrums_width():
    # A Gaussian's full width at half maximum is 2 sqrt(2 ln 2) standard deviations.
    assert_allclose(Bench.of(a_lane()).rms_nm, 30.0 / np.sqrt(8 * np.log(2)), rtol=1e-9)


# A lens that was found.


def test_the_same_station_keeps_the_lens_as_it_was_found():
    found, again = without_u(FOUND), without_u(forecast(a_lane(), FOUND).model)
    for key in found.keys() - {"best_focus_mm", "reduced_chi2"}:
        assert_allclose(again[key], found[key], rtol=ROUND, atol=ROUND, err_msg=key)


def test_the_found_lens_has_the_contrasts_of_the_true_one():
    # TRUTH by the simulated lens, a two-dimensional pupil transform, focused at depth 0 as a forecast assumes.
    station = a_lane()
    found = forecast(station, FOUND)
    true = replace(TRUTH, focus_offset_mm=0.0)
    for stop in found.stops:
        worst = min(
            true_contrast(true, stop.stop, t.depth_mm, station.feature_cy_px_at(t.depth_mm), 0.0)
            for t in station.targets
        )
        assert abs(stop.worst_contrast - max(worst, 0.0)) < 2 * stop.worst_contrast_u
        assert abs(stop.worst_contrast - max(worst, 0.0)) < 0.02


def test_what_was_found_is_surer_than_a_usual_lens():
    usual, known = forecast(a_lane()), forecast(a_lane(), FOUND)
    assert known.model.spherical_waves_u < 0.2 * usual.model.spherical_waves_u
    for before, after in zip(usual.stops[2:], known.stops[2:], strict=True):
        assert after.worst_contrast_u < before.worst_contrast_u


def test_aberrations_follow_the_aperture_and_the_wavelength():
    # W040 ~ aperture^4, W060 ~ aperture^6; a path difference is fewer waves of a longer wavelength.
    station = a_lane(stops=(2.8, 4.0, 8.0), scene={"wavelength_nm": 660.0, "bandwidth_nm": 30.0})
    model = forecast(station, FOUND).model
    assert_allclose(model.spherical_waves, 1.0 * (1.4 / 2.8) ** 4 * 530 / 660, rtol=1e-9)
    assert_allclose(model.sixth_order_waves, -0.1 * (1.4 / 2.8) ** 6 * 530 / 660, rtol=1e-9)
    assert (model.widest_f_number, model.wavelength_nm) == (2.8, 660.0)


def test_colour_does_not_depend_on_the_stop_or_the_spectrum():
    coloured = replace(FOUND, colour_um_per_nm=0.4)
    station = a_lane(stops=(2.0, 4.0), scene={"bandwidth_nm": 90.0})
    assert_allclose(forecast(station, coloured).model.colour_um_per_nm, 0.4, rtol=1e-9)


@pytest.mark.parametrize(
    ("change", "share"),
    [({}, CARRIED_SHARE), ({"scene": {"object_um_per_px": 80.0}}, CARRIED_FAR_SHARE)],
)
def test_another_mounting_or_distance_makes_it_less_sure(change, share):
    model = forecast(a_lane(**change), FOUND).model
    assert_allclose(model.spherical_waves_u, np.hypot(0.02, share * 1.0), rtol=1e-6)
    assert ("at another distance" in reasons(a_lane(**change), FOUND)) == bool(change)


def test_stops_wider_than_were_swept_are_told_and_less_sure():
    swept = replace(FOUND, widest_f_number=2.8, spherical_waves=0.0625, sixth_order_waves=None)
    station = a_lane(stops=STOPS)
    model = forecast(station, swept).model
    assert_allclose(model.spherical_waves, 1.0, rtol=1e-9)
    assert model.spherical_waves_u > 0.5
    assert "wider than f/2.8 are extrapolated" in reasons(station, swept)
    assert "extrapolated" not in reasons(station, FOUND)


def test_the_sensors_blur_goes_with_the_sensor():
    other = replace(FOUND, pixel_pitch_um=2.4, blur_px=0.6)
    assert_allclose(forecast(a_lane(), other).model.blur_px, forecast(a_lane()).model.blur_px)
    assert "other pixels" in reasons(a_lane(), other)


def test_an_earlier_result_that_says_less_is_filled_up():
    # Keys that a result of an earlier version lacks are null.
    bare = LensModel(-1.2, 1.0, 0.3, 1.0, None, 0.02, 0.001)
    model = forecast(a_lane(), bare).model
    assert_allclose(model.spherical_waves, 1.0)
    assert model.sixth_order_waves == 0.0
    assert_allclose(model.sixth_order_waves_u, forecast(a_lane()).model.sixth_order_waves_u)


@pytest.mark.parametrize(
    ("earlier", "told"),
    [
        (replace(FOUND, focal_length_mm=25.0), "a lens of 25 mm, but lens.focal_length_mm is 16"),
        (LensModel(None, None, None, None), "without a lens model"),
    ],
)
def test_another_lens_is_refused(earlier, told):
    with pytest.raises(StationError, match=told):
        forecast(a_lane(), earlier)


# A usual lens. What the trade expects of one is in test_analyse.py, beside a sweep of one.


def worst(result):
    """Worst contrast by stop."""
    return {s.stop: s.worst_contrast for s in result.stops}


def test_stopped_down_it_is_like_any_lens():
    # From f/4 on lens errors hardly count: what is left is geometry, diffraction and pixels.
    station = a_lane()
    sim = a_truth(station, lens=replace(TRUTH, focus_offset_mm=0.0))
    truth = {t.stop: t.worst_contrast for t in station_truth(station, sim)}
    for stop, contrast in worst(forecast(station)).items():
        if stop >= 4.0:
            assert_allclose(contrast, truth[stop], atol=0.02)


def test_in_focus_at_a_small_stop_only_diffraction_and_the_sensor_are_left():
    # The closed form at s = wavelength N (1 + m) v / pitch (Goodman, 6.4.2), the pixel, a blur of 0.3 px.
    v, station = 58.0 / 360.0, a_lane((1.4, 8.0, 11.0), (0.0,))
    s = 0.53 * np.array([8.0, 11.0]) * (1.0 + 3.45 / 58.0) * v / 3.45
    expected = diffraction_mtf(s) * np.sinc(v) * np.exp(-2.0 * (np.pi * 0.3 * v) ** 2)
    found = worst(forecast(station))
    assert_allclose([found[8.0], found[11.0]], expected, rtol=0.01)


def test_what_is_assumed_is_said():
    told = reasons(a_lane())
    assert "Assumed: a usual lens with 1.2 waves" in told
    # light goes as 1 / N^2: (8 / 1.4)^2 = 32.7
    assert "f/8 needs 33 times that of f/1.4" in told


def test_the_need_is_met_by_contrast_alone():
    easy, hard = forecast(a_lane(contrast=0.2)).recommendation, forecast(a_lane(contrast=0.9)).recommendation
    assert easy.meets_need
    assert easy.shortfalls == ()
    assert not hard.meets_need
    assert "0.9" in " ".join(hard.shortfalls)


def test_a_feature_beyond_nyquist():
    found = forecast(a_lane(feature_um=50.0))
    assert not found.recommendation.meets_need
    assert all("beyond-nyquist" in s.why_not for s in found.stops)


def test_a_depth_range_counts_like_targets():
    near, far = forecast(a_lane(depths=(0.0,))), forecast(a_lane(depths=(0.0,), depth_range_mm=[0.0, 30.0]))
    assert worst(far)[1.4] < 0.1 < worst(near)[1.4]
