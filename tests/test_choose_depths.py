"""The map over depth and stop, and the smallest features told apart."""

import math
from dataclasses import replace

import numpy as np
import pytest
from choosing import CAMERA, PlainLens, a_station, some_evidence
from numpy.testing import assert_allclose
from scipy.stats import norm

from sweep.choose import Place, choose, depth_map
from sweep.choose.depths import DEPTHS, ROSE, contrast_to_noise

STOPS = (2.0, 4.0, 8.0)
LONG = 50.0  # ms allowed: no stop is short of light
STRAIGHT = 5e-3  # what lines between the points of a grid may be off by


def places_of(station):
    """Each target as a place, at its own scale."""
    return [
        Place(t.name, t.depth_mm, station.feature_cy_px_at(t.depth_mm), station.object_um_per_px_at(t.depth_mm), i)
        for i, t in enumerate(station.targets)
    ]


def a_map(lens, *, station=None, light=2.0):
    station = station or a_station(max_exposure_ms=LONG)
    evidence = some_evidence(lens.stops, tone_at_first=light)
    _, stops, _ = choose(station, evidence, CAMERA, lens.outlook(station), lens)
    return depth_map(station, stops, lens, places_of(station)), stops


class PerfectLens(PlainLens):
    """Transfer 1 at every frequency and depth."""

    def at(self, f_number, place, **more):
        return 1.0


# Rose (J. Opt. Soc. Am. 38, 196, 1948; value from memory): a contrast of C in an area of N photons is seen from
# C sqrt(N) = 5 on. With photon noise alone a pixel of n electrons has an SNR of sqrt(n), and w x w pixels hold w^2 n.
@pytest.mark.parametrize(
    ("contrast", "electrons", "width_px"), [(0.05, 10_000, 1.0), (0.005, 10_000, 10.0), (1.0, 25, 1.0)]
)
def test_rose_criterion(contrast, electrons, width_px):
    assert_allclose(contrast * math.sqrt(electrons * width_px**2), ROSE)
    # a bar of the part contrast c differs from its light side by 2 c / (1 + c)
    part = contrast / (2 - contrast)
    assert_allclose(contrast_to_noise(1.0, 10 * math.log10(electrons), width_px, part), ROSE, rtol=1e-12)


@pytest.mark.parametrize("part", [0.01, 0.02, 0.5])
def test_a_faint_part_needs_a_larger_feature(part):
    # A perfect lens: 2 c / (1 + c) x SNR x width = 5 gives the width in closed form, but never below a pixel (Nyquist).
    station = a_station(max_exposure_ms=LONG, part_contrast=part)
    found, stops = a_map(PerfectLens(stops=STOPS), station=station)
    width_px = max(ROSE / 10 ** (stops[0].snr_db / 20) * (1 + part) / (2 * part), 1.0)
    scale = [station.object_um_per_px_at(d) for d in found.depths_mm]
    assert_allclose(found.stops[0].smallest_detected_um, width_px * np.array(scale), rtol=2e-3)
    assert found.part_contrast == part


def test_without_noise_figures_nothing_is_said_of_detection():
    station = a_station()
    lens = PlainLens(stops=STOPS)
    stops = [replace(s, snr_db=None) for s in a_map(lens)[1]]
    row = depth_map(station, stops, lens, places_of(station)).stops[1]
    assert set(row.smallest_detected_um) == {None}
    assert {t.smallest_detected_um for t in row.targets} == {None}
    assert all(row.contrast)
    assert all(row.smallest_at_need_um)


def test_a_part_too_faint_for_any_size_is_not_detected():
    found, _ = a_map(PlainLens(stops=STOPS), station=a_station(max_exposure_ms=LONG, part_contrast=1e-5))
    assert {value for row in found.stops for value in row.smallest_detected_um} == {None}


def test_the_smallest_at_the_need_keeps_just_that_contrast():
    lens = PlainLens(stops=STOPS)
    found, _ = a_map(lens)
    station = a_station()
    for stop, row in zip(lens.stops, found.stops, strict=True):
        for place, told in zip(places_of(station), row.targets, strict=True):
            wide = told.smallest_at_need_um
            assert told.target == place.name
            at_wide = lens.at(stop, replace(place, feature_cy_px=place.object_um_per_px / (2 * wide)))
            if wide > 1.001 * place.object_um_per_px:
                assert_allclose(at_wide, station.need.contrast, rtol=STRAIGHT)
            else:  # a pixel: the contrast of the need is kept beyond Nyquist
                assert at_wide >= station.need.contrast * (1 - STRAIGHT)


def test_a_target_is_as_good_as_its_worst_patch():
    station = a_station(max_exposure_ms=LONG)
    lens = PlainLens(stops=STOPS)
    stops = a_map(lens)[1]
    near, _, far = places_of(station)
    found = depth_map(station, stops, lens, [replace(far, target=0, name="one"), replace(near, target=0, name="one")])
    alone = depth_map(station, stops, lens, [replace(far, target=0, name="one")])
    assert [row.targets for row in found.stops] == [row.targets for row in alone.stops]


def test_depths_reach_a_quarter_of_their_span_beyond():
    found, _ = a_map(PlainLens(stops=STOPS))  # targets at 0, 6 and 12 mm
    assert_allclose(found.depths_mm, np.linspace(-3, 15, DEPTHS))
    found, _ = a_map(PlainLens(stops=STOPS), station=a_station(max_exposure_ms=LONG, depth_range_mm=[-4.0, 4.0]))
    assert_allclose(found.depths_mm, np.linspace(-6, 6, DEPTHS))


@pytest.mark.parametrize("depths", [(3.0,), (3.0, 3.0), (2.9, 3.0)])
def test_a_flat_station_is_mapped_as_far_as_blur_alone_takes_to_lose_the_feature(depths):
    station = a_station(max_exposure_ms=LONG, depths=depths)
    found, _ = a_map(PlainLens(stops=STOPS), station=station)
    # Similar triangles: a cone from the entrance pupil, D wide and e away, is |d| D / e wide at a distance d from where
    # it meets; a disc has its first zero at 1.22 / its diameter (Airy's pattern, first zero of J1).
    disc_mm = 1.22 * 2 * 0.18
    reach = disc_mm * station.pupil_distance_mm / (16.0 / 4.0)
    assert_allclose((found.depths_mm[0], found.depths_mm[-1]), (min(depths) - reach, max(depths) + reach))


def test_nothing_is_looked_at_behind_the_lens():
    station = a_station(max_exposure_ms=LONG, depth_range_mm=[-280.0, 900.0])
    assert station.pupil_distance_mm > 280
    found, _ = a_map(PlainLens(stops=STOPS), station=station)
    assert found.depths_mm[0] == -280.0


def test_usable_range_grows_as_the_iris_closes():
    # Common practice, no source: stopping down gives depth, until diffraction takes the contrast.
    station = a_station(max_exposure_ms=LONG, depth_range_mm=[-40.0, 40.0])
    found, _ = a_map(PlainLens(stops=STOPS), station=station)
    spans = [row.usable_mm[1] - row.usable_mm[0] for row in found.stops]
    assert spans == sorted(spans)


class SharpInFocus(PlainLens):
    """Loses contrast by defocus alone, as exp(-(k d / N)^2), whatever the frequency."""

    def at(self, f_number, place, **more):
        return float(np.exp(-((0.2 * place.depth_mm / f_number) ** 2)))


@pytest.mark.parametrize(("u", "confidence"), [(0.0, 0.95), (0.01, 0.95), (0.02, 0.6)])
def test_usable_range_ends_where_the_need_is_no_longer_sure(u, confidence):
    # In closed form: contrast - z u = need, z the one-sided normal quantile (JCGM 106:2012, 8.3.2: a guard band).
    station = a_station(max_exposure_ms=LONG, confidence=confidence, contrast=0.3, depth_range_mm=[-12.0, 12.0])
    found, _ = a_map(SharpInFocus(stops=(2.0,), u=u), station=station)
    end = math.sqrt(-math.log(0.3 + norm.ppf(confidence) * u)) * 2.0 / 0.2
    assert_allclose(found.stops[0].usable_mm, (-end, end), rtol=STRAIGHT)


def test_an_end_beyond_what_the_sweep_can_tell_is_left_open():
    # Searched is as far beyond the targets, 0 to 12 mm, as blur takes to lose the feature at f/2.8: 1.22 of its periods
    # wide, |d| D / e (similar triangles).
    station = a_station(max_exposure_ms=LONG)
    found, _ = a_map(SharpInFocus(stops=(2.0, 2.8, 16.0)), station=station)
    _, slim, wide = (row.usable_mm for row in found.stops)
    reach = 1.22 * 2 * 0.18 * station.pupil_distance_mm / (16.0 / 2.8)
    end = math.sqrt(-math.log(0.2)) * 2.8 / 0.2
    assert end < reach < math.sqrt(-math.log(0.2)) * 16.0 / 0.2
    assert_allclose(slim, (-end, end), rtol=STRAIGHT)
    assert wide == (None, None)


def test_no_usable_range_where_the_need_is_out_of_reach():
    found, _ = a_map(PlainLens(stops=(1.4,)), station=a_station(max_exposure_ms=LONG, contrast=0.9))
    assert found.stops[0].usable_mm is None


def test_depths_where_the_feature_is_beyond_nyquist_are_not_usable():
    # The image of a feature at depth d is 1 + d / e times smaller than at the plane of focus.
    station = a_station(max_exposure_ms=LONG, feature_um=60.0, depth_range_mm=[-12.0, 24.0])
    found, _ = a_map(PerfectLens(stops=STOPS), station=station)
    end = (60.0 / 58.0 - 1) * station.pupil_distance_mm
    assert found.stops[0].usable_mm[0] is None
    assert 0 <= end - found.stops[0].usable_mm[1] < 0.3


def test_the_map_is_at_the_settings_of_the_choice():
    station = a_station(max_exposure_ms=LONG, speed_mm_s=40.0, depth_range_mm=[0.0, 12.0])
    lens = PlainLens(stops=STOPS)
    found, stops = a_map(lens, station=station)
    near, _, far = places_of(station)
    for place in (near, far):
        at = found.depths_mm.index(place.depth_mm)
        for stop, row in zip(stops, found.stops, strict=True):
            way_px = 40.0 * stop.exposure_ms / place.object_um_per_px
            wanted = lens.at(stop.stop, place) * abs(np.sinc(way_px * place.feature_cy_px))
            assert_allclose(row.contrast[at], wanted, rtol=1e-12)


def test_without_light_the_longest_exposure_allowed_blurs():
    station = a_station(max_exposure_ms=3.0, speed_mm_s=40.0)
    lens = PlainLens(stops=STOPS)
    stops = a_map(lens, station=station)[1]
    dark = depth_map(station, [replace(s, exposure_ms=None) for s in stops], lens, places_of(station))
    longest = depth_map(station, [replace(s, exposure_ms=3.0) for s in stops], lens, places_of(station))
    assert [row.contrast for row in dark.stops] == [row.contrast for row in longest.stops]


def test_a_reversed_contrast_counts_as_nothing():
    class Reversed(PlainLens):
        def at(self, f_number, place, **more):
            return -0.3

    found, _ = a_map(Reversed(stops=STOPS))
    assert {value for row in found.stops for value in row.contrast} == {0.0}
    assert found.stops[0].usable_mm is None
