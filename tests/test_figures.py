"""From a curve to the figures of a reading; each expected value by the definition beside it."""

import numpy as np
import pytest
from choosing import a_station
from numpy.testing import assert_allclose
from sweeps import a_lane, a_sweep, a_truth

from sweep.cameras.simulated import station_truth
from sweep.figures import reading_of
from sweep.measure.bars import BarsContrast, BarsMeasure
from sweep.measure.edge import EdgeMeasure
from sweep.measure.linear import sharpness_sites
from sweep.measure.mtf import Transfer
from sweep.readings import Sighting, measure_sweep
from sweep.readings.sightings import PatchSite
from sweep.station import Patch

V_CY_PX = np.linspace(0.0, 1.0, 201)
OBJECT_UM = 58.0


def straight(zero_at=1.0, u=0.004):
    """A curve that falls straight from 1 at zero frequency through 0 at `zero_at` cycles per pixel."""
    return Transfer(V_CY_PX, 1.0 - V_CY_PX / zero_at, np.full(V_CY_PX.size, u))


def a_sighting(patch=None, *, target=1, why_not=(), saturated=0.001, **measures):
    patch = patch or Patch(kind="edge", region=(0, 0, 40, 60))
    site = PatchSite(target, 0, patch, sharpness_sites("mono", patch.region))
    none = np.zeros(2)
    return Sighting(
        stop=4.0,
        site=site,
        ok=not why_not,
        why_not=why_not,
        saturated_fraction=saturated,
        frames=2,
        frame_light=none,
        frame_order=none,
        tone_per_ms=None,
        exposures=none + 1.0,
        **measures,
    )


def an_edge_sighting(curve, **more):
    return a_sighting(edge=EdgeMeasure(True, transfer=curve), **more)


def test_figures_of_an_edge():
    # feature 180 um at 58 um a pixel: 58 / 360 cycles per pixel; half the period at which the curve is 0.2: 58 / 1.6 um
    station = a_station(depths=(0.0, 0.0), feature_um=180.0, contrast=0.2)
    reading = reading_of(an_edge_sighting(straight()), station)
    assert (reading.stop, reading.target, reading.patch, reading.kind) == (4.0, "step 1", 0, "edge")
    assert (reading.ok, reading.why_not, reading.reversed) == (True, (), False)
    assert reading.saturated_fraction == 0.001
    assert_allclose([reading.mtf50_cy_px, reading.mtf50_cy_px_u], [0.5, 0.004], rtol=1e-9)
    at_feature = 1.0 - OBJECT_UM / 360.0
    assert_allclose([reading.contrast_at_feature, reading.contrast_at_feature_u], [at_feature, 0.004], rtol=1e-6)
    assert reading.smallest_feature_um is None  # 0.8 cycles per pixel lie beyond Nyquist


def test_the_smallest_feature_is_half_the_period_of_the_needed_contrast_at_the_targets_own_scale():
    # f = 16 mm, m = 3.45 / 58: the entrance pupil is e = f (1 + 1/m) = 285 mm away; at depth d all is 1 + d/e larger.
    station = a_station(depths=(0.0, 20.0), contrast=0.25)
    reading = reading_of(an_edge_sighting(straight(0.4)), station)
    scale = OBJECT_UM * (1.0 + 20.0 / (16.0 * (1.0 + OBJECT_UM / 3.45)))
    assert_allclose(reading.smallest_feature_um, scale / (2.0 * 0.3), rtol=1e-9)
    # u: of the curve over its slope of 2.5, relative to the frequency of 0.3
    assert_allclose(reading.smallest_feature_um_u / reading.smallest_feature_um, 0.004 / 2.5 / 0.3, rtol=1e-6)
    assert reading.depth_mm == 20.0


def test_a_reversed_contrast_is_told_with_its_modulus():
    reading = reading_of(an_edge_sighting(straight(0.1)), a_station(depths=(0.0, 0.0)))
    assert reading.reversed
    assert_allclose(reading.contrast_at_feature, OBJECT_UM / 36.0 - 1.0, rtol=1e-6)


def test_noise_about_zero_is_not_reversal():
    curve = straight(OBJECT_UM / 360.0 - 0.001, u=0.02)
    assert not reading_of(an_edge_sighting(curve), a_station(depths=(0.0, 0.0))).reversed


@pytest.mark.parametrize(("feature_um", "beyond"), [(57.9, True), (58.1, False)])
def test_a_feature_beyond_nyquist_is_told(feature_um, beyond):
    # a period takes two pixels of 58 um, the feature is half of a period
    reading = reading_of(an_edge_sighting(straight()), a_station(depths=(0.0, 0.0), feature_um=feature_um))
    assert reading.ok
    assert reading.why_not == (("beyond-nyquist",) if beyond else ())


def test_an_unsound_patch_has_no_figures():
    station = a_station(depths=(0.0, 0.0))
    reading = reading_of(an_edge_sighting(straight(), why_not=("frames-saturated",), saturated=0.3), station)
    assert (reading.ok, reading.why_not, reading.saturated_fraction) == (False, ("frames-saturated",), 0.3)
    assert reading.mtf50_cy_px is None
    assert reading.contrast_at_feature is None
    assert reading.smallest_feature_um is None


def test_a_flat_is_sound_and_says_nothing_of_sharpness():
    station = a_station(depths=(0.0, 0.0), feature_um=20.0)
    reading = reading_of(a_sighting(Patch(kind="flat", region=(0, 0, 40, 60))), station)
    assert (reading.ok, reading.why_not, reading.mtf50_cy_px) == (True, (), None)


# Bars speak at their own frequency.


def bars(period_um, contrast=0.6, *, told=True):
    patch = Patch(kind="bars", region=(0, 0, 40, 60), period_um=period_um)
    v = OBJECT_UM / period_um
    measure = BarsMeasure(True, v_cy_px=v, level=500.0)
    known = BarsContrast(contrast, 0.01, v, ratio=0.8, ratio_u=0.01) if told else None
    return a_sighting(patch, bars=measure, bars_contrast=known)


def test_bars_speak_at_their_own_frequency():
    reading = reading_of(bars(250.0), a_station(depths=(0.0, 0.0), feature_um=180.0))
    assert_allclose([reading.contrast_at_bars, reading.contrast_at_bars_u], [0.6, 0.01])
    assert_allclose(reading.bars_cy_px, OBJECT_UM / 250.0)
    assert reading.contrast_at_feature is None
    assert reading.mtf50_cy_px is None
    assert reading.smallest_feature_um is None


def test_bars_of_twice_the_feature_speak_for_it():
    reading = reading_of(bars(360.0), a_station(depths=(0.0, 0.0), feature_um=180.0))
    assert_allclose([reading.contrast_at_feature, reading.contrast_at_feature_u], [0.6, 0.01])


def test_reversed_bars():
    reading = reading_of(bars(360.0, -0.1), a_station(depths=(0.0, 0.0), feature_um=180.0))
    assert reading.reversed
    assert_allclose([reading.contrast_at_bars, reading.contrast_at_feature], 0.1)


def test_bars_whose_print_is_not_known_have_no_contrast():
    reading = reading_of(bars(250.0, told=False), a_station(depths=(0.0, 0.0)))
    assert reading.ok
    assert reading.contrast_at_bars is None
    assert_allclose(reading.bars_cy_px, OBJECT_UM / 250.0)


# A star from the simulated station.


def a_star(x):
    return [{"kind": "star", "region": [x, 14, 92, 92], "cycles": 24}]


def test_a_star_speaks_between_its_rim_and_its_innermost_ring():
    # rim frequency: 24 cycles on a circle of radius 44 px, 24 / (2 pi 44)
    station = a_lane(stops=(2.8, 5.6), depths=(0.0,), patches=a_star)
    truth = {s.stop: s.patches[0] for s in station_truth(station, a_truth(station))}
    for sighting in measure_sweep(a_sweep(station), station).sightings:
        reading, true = reading_of(sighting, station), truth[sighting.stop]
        assert reading.ok
        assert abs(reading.contrast_at_feature - true.contrast_at_feature) < 3.5 * reading.contrast_at_feature_u
        assert abs(reading.mtf50_cy_px - true.mtf50_cy_px) < 3.5 * reading.mtf50_cy_px_u
        assert abs(reading.astigmatic_contrast) < 5 * reading.astigmatic_contrast_u + 0.01
        rim = a_lane(stops=(2.8, 5.6), depths=(0.0,), patches=a_star, feature_um=58.0 / 2.0 / (0.5 * 24 / (88 * np.pi)))
        assert reading_of(sighting, rim).astigmatic_contrast is None
