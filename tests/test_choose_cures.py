"""Causes, cures, the focus and the optimum between marks, with a lens in closed form."""

import math
import re
from dataclasses import replace

import numpy as np
import pytest
from choosing import CAMERA, STOPS, WAVELENGTH_UM, PlainLens, a_station, places_of, some_evidence
from numpy.testing import assert_allclose
from scipy.optimize import minimize_scalar

from sweep.choose import Place, choose
from sweep.choose.between import optimum_f_number
from sweep.choose.focus import best_refocus
from sweep.choose.wording import at_least, at_most, chance, number

GRID = np.geomspace(1.4, 16, 120)


def a_choice(lens, station, *, stops=STOPS, tone_at_first=20.0, camera=CAMERA, **outlook):
    evidence = some_evidence(stops, tone_at_first=tone_at_first)
    return choose(
        station, evidence, camera, replace(lens, stops=stops).outlook(station, **outlook), replace(lens, stops=stops)
    )


def the_number(sentences, pattern):
    """The number that `pattern` catches in the one sentence that holds it."""
    found = [m for s in sentences if (m := re.search(pattern, s))]
    assert len(found) == 1, sentences
    return float(found[0].group(1))


@pytest.mark.parametrize(
    ("lens", "depths", "cause"),
    [
        (PlainLens(defocus=0.8, error=0.0), (0.0, 12.0), "depth"),
        (PlainLens(defocus=0.0, error=9.0), (0.0, 0.0), "aberration"),
    ],
)
def test_the_cause_that_costs_most(lens, depths, cause):
    station = a_station(depths=depths, max_exposure_ms=0.2)
    found, _, _ = a_choice(lens, station, stops=(1.4, 2.0))
    assert found.limited_by == cause


def test_diffraction_costs_most_where_the_iris_is_small():
    found, _, _ = a_choice(
        PlainLens(defocus=0.0, error=0.0), a_station(feature_um=80.0), stops=(11.0, 16.0), tone_at_first=9.0
    )
    assert found.limited_by == "diffraction"
    # Contrast lost by the perfect lens in focus: 1 - MTF(s), s = lambda N v / pitch (Goodman, closed form).
    s = WAVELENGTH_UM * 11 * (58 / 160) / 3.45
    lost = 1 - 2 / math.pi * (math.acos(s) - s * math.sqrt(1 - s * s))
    assert any(f"{100 * lost:.0f} % of the contrast" in r for r in found.reasons)


def test_pixels_cost_most_where_the_lens_is_wide_and_good():
    found, _, _ = a_choice(PlainLens(defocus=0.0, error=0.0), a_station(feature_um=60.0), stops=(1.4, 2.0))
    assert found.limited_by == "sampling"


# Where to focus between two distances: 2 D d / (D + d), 10 ft for 9.8 and 10.2 ft (Photography, Basic, NAVEDTRA 14209).
def test_the_best_focus_lies_at_the_harmonic_mean_of_two_distances():
    near, far = 9.8 * 304.8, 10.2 * 304.8

    class Vergence:
        """Defocus goes as the difference of the reciprocals of the distances (thin lens)."""

        def contrast(self, stop_index, place, *, without=None, refocus_mm=0.0, pixel_scale=1.0):
            return float(np.exp(-((1e4 * (1 / (near + place.depth_mm) - 1 / (near + refocus_mm))) ** 2)))

    places = (Place("near", 0.0, 0.1, 58.0), Place("far", far - near, 0.1, 58.0))
    found = best_refocus(Vergence(), 0, 4.0, places, np.ones(2), a_station())
    assert_allclose((near + found.shift_mm) / 304.8, 9.996, atol=0.001)


def test_the_best_focus_is_found_on_the_other_side_too():
    station = a_station(depths=(-8.0, -4.0))
    found = best_refocus(PlainLens(focus_mm=3.0), 2, 2.8, places_of(station), np.ones(2), station)
    assert_allclose(found.shift_mm, -9.0, atol=0.05)  # half way between the two depths, by symmetry


def test_refocusing_as_told_meets_the_need():
    lens = PlainLens(focus_mm=-9.0)
    station = a_station(contrast=0.55, max_exposure_ms=0.5)
    found, _, _ = a_choice(lens, station)
    assert not found.meets_need
    shift = the_number(found.shortfalls, r"Move the plane of focus by ([\d.]+) mm away from the camera")
    again, _, _ = a_choice(replace(lens, focus_mm=lens.focus_mm + shift), station)
    assert again.meets_need


def test_a_better_focus_is_named_though_the_need_is_met():
    lens, station = PlainLens(focus_mm=-9.0), a_station(contrast=0.2, max_exposure_ms=0.3)
    found, stops, _ = a_choice(lens, station)
    assert found.meets_need
    shift = the_number(found.reasons, r"would serve these depths best ([\d.]+) mm farther from the camera")
    again, better, _ = a_choice(replace(lens, focus_mm=lens.focus_mm + shift), station, stops=(found.stop,))
    before = next(s for s in stops if s.stop == found.stop)
    assert better[0].worst_contrast > 1.05 * before.worst_contrast
    assert not any("would serve these depths" in r for r in again.reasons)
    assert any("The focus stands well" in r for r in again.reasons)


def test_refocusing_that_is_not_enough_is_told_as_such():
    found, _, _ = a_choice(PlainLens(), a_station(contrast=0.9))
    assert any("Not enough alone: refocusing" in s for s in found.shortfalls)


def test_a_feature_as_large_as_told_meets_the_need():
    lens = PlainLens()
    found, _, _ = a_choice(lens, a_station(contrast=0.7))
    feature = the_number(found.shortfalls, r"features of ([\d.]+) um and more")
    at_stop = (found.stop,)
    assert a_choice(lens, a_station(contrast=0.7, feature_um=feature), stops=at_stop, u=1e-6)[0].meets_need
    assert not a_choice(lens, a_station(contrast=0.7, feature_um=0.98 * feature), stops=at_stop, u=1e-6)[0].meets_need


def test_pixels_as_small_as_told_meet_the_need():
    lens = PlainLens(defocus=0.0, error=0.0)
    station = a_station(contrast=0.75, feature_um=80.0)
    found, _, _ = a_choice(lens, station)
    assert not found.meets_need
    pitch = the_number(found.shortfalls, r"Pixels of ([\d.]+) um")
    place = places_of(station)[0]
    assert lens.at(found.stop, place, pixel_scale=pitch / 3.45) >= 0.75
    assert lens.at(found.stop, place, pixel_scale=1.03 * pitch / 3.45) < 0.75


def test_a_lens_at_the_diffraction_limit_is_told():
    lens = PlainLens(defocus=0.0, error=6.0)
    station = a_station(contrast=0.85)
    found, _, _ = a_choice(lens, station)
    reached = the_number(found.shortfalls, r"at the diffraction limit reaches ([\d.]+) at f/1.4 and meets the need")
    # With neither defocus nor lens error the widest stop wins.
    assert_allclose(reached, replace(lens, error=0.0).at(1.4, places_of(station)[0]), atol=5e-4)


def test_light_as_much_as_told_meets_the_need():
    lens, station = PlainLens(), a_station(max_exposure_ms=0.4)
    found, _, _ = a_choice(lens, station, stops=(4.0, 5.6), tone_at_first=1.0)
    assert (found.meets_need, found.limited_by) == (False, "exposure")
    times = the_number(found.shortfalls, r"([\d.]+) times the light, or")
    assert a_choice(lens, station, stops=(found.stop,), tone_at_first=times * (4 / found.stop) ** 2)[0].meets_need
    gain_db = the_number(found.shortfalls, r"([\d.]+) dB of gain allowed")
    with_gain = a_station(max_exposure_ms=0.4, max_gain_db=gain_db)
    assert a_choice(lens, with_gain, stops=(found.stop,), tone_at_first=(4 / found.stop) ** 2)[0].meets_need
    longer = the_number(found.shortfalls, r"([\d.]+) ms of exposure allowed")
    with_time = a_station(max_exposure_ms=longer)
    assert a_choice(lens, with_time, stops=(found.stop,), tone_at_first=(4 / found.stop) ** 2)[0].meets_need


def test_a_line_as_slow_as_told_meets_the_exposure():
    need = {"max_exposure_ms": None, "blur_px": 0.5}
    lens = PlainLens()
    found, _, _ = a_choice(lens, a_station(speed_mm_s=250.0, **need), stops=(4.0,), tone_at_first=1.0)
    assert found.limited_by == "exposure"
    speed = the_number(found.shortfalls, r"speed of at most ([\d.]+) mm/s")
    assert_allclose(speed, 250 * 0.116 / 0.7, rtol=0.01)  # half a pixel of 58 um in the 0.7 ms that the level needs
    assert a_choice(lens, a_station(speed_mm_s=speed, **need), stops=(4.0,), tone_at_first=1.0)[0].meets_need


def test_a_slower_line_as_told_keeps_the_contrast():
    lens = PlainLens(defocus=0.0, error=0.0)
    fast = {"contrast": 0.6, "max_exposure_ms": 2.0}
    found, _, _ = a_choice(lens, a_station(speed_mm_s=300.0, **fast), stops=(4.0,), tone_at_first=0.7, u=1e-6)
    speed = the_number(found.shortfalls, r"At ([\d.]+) mm/s \(now 300\)")
    slower = a_station(speed_mm_s=speed, **fast)
    assert a_choice(lens, slower, stops=(4.0,), tone_at_first=0.7, u=1e-6)[0].meets_need


def test_light_that_cures_noise():
    lens, station = PlainLens(), a_station(max_exposure_ms=0.7, max_gain_db=24.0, min_snr_db=36.0)
    found, _, _ = a_choice(lens, station, stops=(5.6,), tone_at_first=0.3)
    assert found.limited_by == "noise"
    times = the_number(found.shortfalls, r"([\d.]+) times the light, or")
    assert a_choice(lens, station, stops=(5.6,), tone_at_first=0.3 * times)[0].meets_need
    assert not a_choice(lens, station, stops=(5.6,), tone_at_first=0.3 * times * 0.97)[0].meets_need


def test_light_that_frees_a_stop_that_meets_the_contrast():
    station = a_station(contrast=0.45, max_exposure_ms=1.0)
    lens = PlainLens()
    found, _, _ = a_choice(lens, station, stops=(2.0, 4.0), tone_at_first=1.0)
    assert (found.stop, found.limited_by) == (2.0, "exposure")
    times = the_number(found.shortfalls, r"With ([\d.]+) times the light f/4 can be used")
    assert a_choice(lens, station, stops=(2.0, 4.0), tone_at_first=times)[0].meets_need


def test_the_optimum_lies_where_the_worst_place_peaks():
    lens, station = PlainLens(), a_station()
    places = places_of(station)
    peak = minimize_scalar(lambda x: -min(lens.at(math.exp(x), p) for p in places), bounds=(0.5, 2.5), method="bounded")
    assert_allclose(optimum_f_number(lens.outlook(station, grid=GRID)), math.exp(peak.x), rtol=2e-3)
    assert_allclose(optimum_f_number(lens.outlook(station, grid=GRID[::-1])), math.exp(peak.x), rtol=2e-3)


def test_without_a_curve_there_is_no_optimum():
    assert optimum_f_number(PlainLens().outlook(a_station())) is None


def test_a_position_between_marks_that_beats_them_is_told():
    lens, station = PlainLens(), a_station(max_exposure_ms=50.0)
    found, _, _ = a_choice(lens, station, stops=(2.0, 11.0), grid=GRID)
    told = next(r for r in found.reasons if "between marks" in r)
    f_number = float(re.search(r"\(f/([\d.]+)", told).group(1))
    assert_allclose(f_number, found.optimum_f_number, rtol=0.03)
    # Light goes as 1 / N^2 (ISO 517:2008).
    assert_allclose(float(re.search(r"([\d.]+) of the light at f/2", told).group(1)), (2 / f_number) ** 2, atol=0.006)
    assert re.search(r"of the way from f/2 to f/11", told) or "half way from f/2 to f/11" in told


def test_a_position_between_marks_must_keep_the_exposure():
    lens = PlainLens()
    found, _, _ = a_choice(lens, a_station(max_exposure_ms=0.036), stops=(2.0, 11.0), grid=GRID)
    assert found.stop == 2.0
    told = [r for r in found.reasons if "between marks" in r]
    light = float(re.search(r"([\d.]+) of the light at f/2", told[0]).group(1)) if told else 1.0
    assert light >= 0.7 / 20 / 0.036 - 0.006


def test_marks_close_to_the_optimum_need_no_place_between():
    # The worst place of this lens peaks near f/6.8, where no ring has a mark; this one has.
    found, _, _ = a_choice(PlainLens(), a_station(max_exposure_ms=50.0), stops=(4.0, 6.8, 11.0), grid=GRID)
    assert found.stop == 6.8
    assert not any("between marks" in r for r in found.reasons)


def test_numbers_are_short_and_rounded_to_the_safe_side():
    assert (number(0.00123456), number(3.14159), number(123456.0), number(2.30)) == ("0.00123", "3.14", "123456", "2.3")
    assert (at_least(1.0021), at_most(1.0099), at_least(2.3), at_most(2.3)) == ("1.01", "1", "2.3", "2.3")
    assert (chance(0.9999), chance(0.001), chance(0.5), chance(None)) == ("over 0.99", "under 0.01", "0.50", "unknown")
