"""The map over depth and stop, and the smallest detectable feature."""

import math
from dataclasses import replace

import numpy as np
import pytest
from choosing import CAMERA, PlainLens, a_station, some_evidence
from numpy.testing import assert_allclose

from sweep.choose import Place, choose
from sweep.choose.depths import ROSE, contrast_to_noise, depth_map

DEPTHS = tuple(Place(f"{d:g} mm", d, 58 / 360, 58.0) for d in np.linspace(-20, 20, 41))


def a_map(lens, *, station=None, places=DEPTHS, part_contrast=1.0):
    station = station or a_station(max_exposure_ms=50.0)
    evidence = some_evidence(lens.stops, tone_at_first=2.0)
    _, stops, _ = choose(station, evidence, CAMERA, lens.outlook(station), lens)
    return depth_map(station.need, stops, lens, places, part_contrast), stops


class PerfectLens:
    """Transfer 1 at every frequency."""

    def contrast(self, stop_index, place, *, without=None, refocus_mm=0.0, pixel_scale=1.0):
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


def test_a_faint_part_needs_a_larger_feature():
    station = a_station(max_exposure_ms=50.0)
    stops = a_map(PlainLens())[1]
    place = DEPTHS[20]
    # A perfect lens: 2 c / (1 + c) x SNR x width = 5 gives the width in closed form, but never below a pixel (Nyquist).
    snr = 10 ** (stops[0].snr_db / 20)
    for part in (0.01, 0.02, 0.5):
        width_px = max(ROSE / snr * (1 + part) / (2 * part), 1.0)
        found = depth_map(station.need, stops, PerfectLens(), [place], part)
        assert_allclose(found.smallest_um[0, 0], width_px * 58, rtol=2e-3)


def test_without_noise_figures_nothing_is_said_of_the_smallest_feature():
    lens = PlainLens()
    stops = [replace(s, snr_db=None) for s in a_map(lens)[1]]
    found = depth_map(a_station().need, stops, lens, DEPTHS[:2])
    assert np.isnan(found.smallest_um).all()
    assert np.isfinite(found.contrast).all()


def test_a_part_too_faint_for_any_size_is_not_detected():
    found, _ = a_map(PlainLens(), places=DEPTHS[20:21], part_contrast=1e-5)
    assert np.isnan(found.smallest_um).all()


def test_usable_range_grows_as_the_iris_closes():
    # Common practice, no source: stopping down gives depth, until diffraction takes the contrast.
    found, _ = a_map(PlainLens(stops=(2.0, 4.0, 8.0)))
    spans = [b - a for a, b in found.usable_mm]
    assert spans == sorted(spans)


def test_usable_range_ends_where_the_contrast_falls_below_the_need():
    # This lens loses contrast as exp(-(k d / N)^2): the ends in closed form.
    lens = PlainLens(stops=(2.0,), error=0.0)
    found, _ = a_map(lens)
    best = lens.at(2.0, DEPTHS[20])
    end = math.sqrt(math.log(best / 0.2)) * 2.0 / ((58 / 360) / 0.1 * lens.defocus)
    assert_allclose(found.usable_mm[0], (-end, end), atol=0.05)


def test_no_usable_range_where_the_need_is_out_of_reach():
    found, _ = a_map(PlainLens(stops=(1.4,)), station=a_station(contrast=0.9))
    assert found.usable_mm == (None,)


def test_the_map_is_that_of_the_choice():
    station = a_station(max_exposure_ms=50.0, speed_mm_s=40.0)
    lens = PlainLens()
    places = tuple(Place(t.name, t.depth_mm, 58 / 360, 58.0) for t in station.targets)
    found, stops = a_map(lens, station=station, places=places)
    assert_allclose(found.contrast.min(axis=1), [s.worst_contrast for s in stops], rtol=1e-12)
