"""Worst contrast as a minimum of correlated quantities, and the chances that follow."""

import math

import numpy as np
import pytest
from choosing import a_station, an_outlook, normal_draws, places_of, some_evidence
from numpy.testing import assert_allclose
from scipy.stats import norm

from sweep.choose import Outlook
from sweep.choose.chances import TIE, Worst, chance_meets, chances_best, motion_transfer, worst_at
from sweep.choose.settings import setting_for
from sweep.result import CameraNoise

N = 20_001
QUANTILES = norm.ppf((np.arange(N) + 0.5) / N)  # a normal distribution without the scatter of random draws
STILL = np.ones(3)


def a_worst(mean, u):
    return Worst(0, mean, u, mean + u * QUANTILES)


def kept_setting(**need):
    station = a_station(**need)
    evidence = some_evidence((4.0,), tone_at_first=0.7)[0]
    return setting_for(evidence, station, CameraNoise(2.5, 5.0, 16.0, 4095)), station.need


# JCGM 106:2012, one-sided lower limit: conformance probability Phi((y - T) / u). Computed from the normal distribution.
@pytest.mark.parametrize(
    ("measured", "u", "probability"),
    [
        (0.23, 0.01, 0.9986501019683699),
        (0.2165, 0.01, 0.9505285319663519),
        (0.22, 0.01, 0.977249868052),
        (0.2, 0.01, 0.5),
    ],
)
def test_conformance_probability(measured, u, probability):
    setting, need = kept_setting(contrast=0.2)
    assert_allclose(chance_meets(a_worst(measured, u), setting, need, 4.0, False), probability, atol=1 / N)


# P(a > b) of two independent normals: Phi((a - b) / hypot(ua, ub)). Computed from the normal distribution.
@pytest.mark.parametrize(
    ("a", "ua", "b", "ub", "probability"),
    [
        (0.42, 0.01, 0.40, 0.01, 0.9213503964748571),
        (0.42, 0.005, 0.40, 0.004, 0.9991063554815064),
        (0.40, 0.01, 0.40, 0.02, 0.5),
        (0.35, 0.02, 0.40, 0.02, 0.03854993587177073),
    ],
)
def test_chance_to_be_the_best_of_two(a, ua, b, ub, probability):
    rng = np.random.default_rng(7)
    draws_a = a + ua * rng.permutation(QUANTILES)
    # The tie is taken out of the second by its own factor, so that the plain comparison of the source remains.
    draws_b = (b + ub * rng.permutation(QUANTILES)) / (1 - TIE)
    found = chances_best([Worst(0, a, ua, draws_a), Worst(0, b, ub, draws_b)], [0, 1])
    assert_allclose(found[0], probability, atol=4 * math.sqrt(0.25 / N))


def test_stops_within_a_tie_are_both_the_best():
    found = chances_best([a_worst(0.5, 0.0), a_worst(0.496, 0.0), a_worst(0.49, 0.0)], [0, 1, 2])
    assert found == {0: 1.0, 1: 1.0, 2: 0.0}


def test_worst_contrast_is_the_minimum_in_each_draw():
    # Two alike places: the mean of the smaller of two independent normals is mu - u / sqrt(pi), their spread
    # u sqrt(1 - 1/pi) (order statistics of the normal distribution, closed form).
    station = a_station(depths=(0.0, 6.0))
    contrast = np.array([[0.4, 0.4]])
    outlook = Outlook(places_of(station), contrast, normal_draws(contrast, 0.02, n=40_000))
    worst = worst_at(0, outlook, np.ones(2))
    assert worst.contrast == 0.4
    assert_allclose(worst.by_draw.mean(), 0.4 - 0.02 / math.sqrt(math.pi), atol=4 * 0.02 / 200)
    assert_allclose(worst.u, 0.02 * math.sqrt(1 - 1 / math.pi), rtol=0.02)


def test_errors_in_common_do_not_lower_the_minimum():
    station = a_station(depths=(0.0, 6.0))
    contrast = np.array([[0.4, 0.4]])
    outlook = Outlook(places_of(station), contrast, normal_draws(contrast, 0.02, n=40_000, shared=1.0))
    assert_allclose(worst_at(0, outlook, np.ones(2)).by_draw.mean(), 0.4, atol=4 * 0.02 / 200)


def test_reversed_contrast_counts_as_nothing():
    outlook = an_outlook(a_station(), [[0.5, -0.3, 0.4]])
    worst = worst_at(0, outlook, STILL)
    assert (worst.place, worst.contrast) == (1, 0.0)


def test_a_place_of_which_nothing_is_known_leaves_the_worst_unknown():
    outlook = an_outlook(a_station(), [[0.5, math.nan, 0.4]])
    worst = worst_at(0, outlook, STILL)
    assert (worst.place, worst.contrast, worst.u) == (None, None, None)


def test_motion_takes_the_transfer_of_a_box():
    # A box of b pixels has the transfer |sin(pi b v) / (pi b v)|: closed form (Fourier transform of a rectangle).
    station = a_station(speed_mm_s=250.0)
    place = places_of(station)[0]
    blur = motion_transfer(station.need, 0.464, [place])
    b, v = 250 * 0.464 / 58, 58 / 360
    assert_allclose(blur, abs(math.sin(math.pi * b * v) / (math.pi * b * v)), rtol=1e-12)
    assert_allclose(motion_transfer(a_station().need, 4.0, [place]), 1.0)


def test_exposure_close_to_its_limit_counts_in_the_chance():
    # Needed light at its limit, known to 2 %: half the time it is too much.
    station = a_station(max_exposure_ms=1.0)
    evidence = some_evidence((4.0,), tone_at_first=0.7, tone_per_ms_u=0.014)[0]
    setting = setting_for(evidence, station, CameraNoise(2.5, 5.0, 16.0, 4095))
    assert_allclose(chance_meets(a_worst(0.5, 0.01), setting, station.need, 1.0, False), 0.5)
    expected = norm.cdf(math.log(1.04) / 0.02)
    assert_allclose(chance_meets(a_worst(0.5, 0.01), setting, station.need, 1.04, False), expected, rtol=1e-9)
