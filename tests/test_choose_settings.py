"""Exposure, gain, ripple and signal-to-noise of one stop."""

import math

import pytest
from choosing import CAMERA, a_station, some_evidence
from numpy.testing import assert_allclose

from sweep.choose import StopEvidence
from sweep.choose.settings import exposure_limit_ms, ripple_left, setting_for, snr_db
from sweep.result import CameraNoise


def setting(tone_per_ms, *, camera=CAMERA, step=None, **need):
    evidence = StopEvidence(4.0, 4.0, 0.01, tone_per_ms, True)
    return setting_for(evidence, a_station(exposure_step_ms=step, **need), camera)


# Exposure arithmetic t2 = t1 (N2 / N1)^2: closed form, from the definition of the f-number (ISO 517:2008).
@pytest.mark.parametrize(
    ("n1", "n2", "t2_ms"),
    [(2.8, 4, 2.0408163265306123), (2.8, 5.6, 4.0), (4, 11, 7.5625), (1.4, 16, 130.6122448979592)],
)
def test_exposure_grows_with_the_square_of_the_f_number(n1, n2, t2_ms):
    # 1 ms at the first stop reaches the level, so the second needs t2.
    evidence = some_evidence((n1, n2), tone_at_first=0.7)[1]
    found = setting_for(evidence, a_station(stops=(n1, n2), max_exposure_ms=1000.0), CAMERA)
    assert_allclose(found.exposure_ms, t2_ms, rtol=1e-9)
    assert found.gain_db == 0


# Gain dB = 20 log10(factor), 6.0206 dB a stop: the definition of the decibel for amplitudes.
@pytest.mark.parametrize(
    ("factor", "gain_db"),
    [(1.1220184543019633, 1), (1.4125375446227544, 3), (2, 6.020599913279624), (3.9810717055349722, 12)],
)
def test_gain_makes_up_for_what_the_limit_leaves_out(factor, gain_db):
    found = setting(0.7 / (4.0 * factor), max_gain_db=24.0)
    assert_allclose(found.exposure_ms, 4.0)
    assert_allclose(found.gain_db, gain_db, rtol=1e-6)
    assert_allclose(found.level, 0.7)
    assert not found.fails_exposure


def test_a_level_beyond_exposure_and_gain_fails():
    found = setting(0.7 / 9.0, max_gain_db=6.0)
    assert found.fails_exposure
    assert (found.exposure_ms, found.gain_db) == (4.0, 6.0)
    assert_allclose(found.level, 0.7 * 4 * 10 ** (6 / 20) / 9)


def test_gain_is_not_spent_to_make_up_for_the_camera_s_step():
    found = setting(0.7 / 1.239, step=0.01, max_gain_db=12.0)
    assert (found.exposure_ms, found.gain_db) == (1.23, 0.0)


def test_an_exposure_that_is_a_whole_number_of_steps_stays():
    assert setting(0.7 / 0.3, step=0.1).exposure_ms == 0.3


def test_a_light_too_strong_for_the_shortest_exposure_fails():
    found = setting(0.7 / 0.004, step=0.01)
    assert found.fails_exposure
    assert found.exposure_ms is None


# Blur px = speed x exposure / object pixel: 250 mm/s, 58 um and half a pixel give 0.116 ms (by the definition).
def test_motion_limits_the_exposure():
    assert_allclose(exposure_limit_ms(a_station(speed_mm_s=250.0, blur_px=0.5)), 0.116, rtol=1e-9)
    assert exposure_limit_ms(a_station(speed_mm_s=250.0, blur_px=50.0)) == 4.0
    assert exposure_limit_ms(a_station(speed_mm_s=0.0, blur_px=0.5)) == 4.0
    assert exposure_limit_ms(a_station(max_exposure_ms=None)) == math.inf


@pytest.mark.parametrize(
    ("needed_ms", "limit_ms", "exposure_ms"),
    [
        (13.61, 13.9, 10.0),  # the next below
        (19.2, 50.0, 20.0),  # the next above is 4.2 % longer
        (19.2, 19.9, 10.0),  # but not within the limit
        (18.9, 50.0, 10.0),  # the next above is 5.8 % longer
        (10.0, 50.0, 10.0),
        (35.0, 25.0, 20.0),  # the limit first, then whole periods
        (9.7, 50.0, 9.7),  # shorter than a period: stays, and is warned of
    ],
)
def test_ripple_moves_the_exposure_to_whole_periods(needed_ms, limit_ms, exposure_ms):
    found = setting(0.7 / needed_ms, flicker_hz=100, max_exposure_ms=limit_ms, max_gain_db=24.0)
    assert_allclose(found.exposure_ms, exposure_ms)
    if exposure_ms <= needed_ms:
        assert_allclose(found.gain_db, 20 * math.log10(needed_ms / exposure_ms), atol=1e-9)
        assert_allclose(found.level, 0.7)
    else:
        assert found.gain_db == 0


def test_a_level_that_gives_way_to_ripple_is_no_failed_need():
    found = setting(0.7 / 18.0, flicker_hz=100, max_exposure_ms=18.5)
    assert_allclose(found.level, 0.7 * 10 / 18)
    assert found.by_ripple
    assert not found.fails_exposure


def test_whole_periods_do_not_push_the_light_tone_into_the_top():
    assert_allclose(setting(0.97 / 19.2, level=0.97, flicker_hz=100, max_exposure_ms=50.0).exposure_ms, 10.0)


# M |sin(pi f t) / (pi f t)|: the mean of a sinusoid over the exposure, closed form; here over M = 0.3.
@pytest.mark.parametrize(
    ("hz", "exposure_ms", "left"),
    [(100, 1, 0.2950894929250398), (100, 4, 0.2270480185921971), (100, 10, 0.0), (120, 10, 0.046774464189431944)],
)
def test_ripple_that_an_exposure_leaves(hz, exposure_ms, left):
    assert_allclose(0.3 * ripple_left(hz, exposure_ms), left, rtol=1e-9, atol=1e-12)


# EMVA Standard 1288, Release 4.0 Linear (2021): SNR = mu_e / sqrt(sigma_d^2 + sigma_q^2 / K^2 + mu_e); K = 0.4 DN/e,
# 5 e of dark noise, black 16 DN. The values were computed from that equation apart from this project.
@pytest.mark.parametrize(("electrons", "expected_db"), [(1, -14.2358716628), (10, 4.49516854047)])
def test_signal_to_noise_by_photon_transfer(electrons, expected_db):
    level = electrons / 2.5 / (4095 - 16)
    assert_allclose(snr_db(CAMERA, level, 0.0), expected_db, rtol=1e-9)


def test_gain_leaves_fewer_electrons_for_the_same_level():
    # With photon noise alone the ratio goes as the root of the electrons: 3.0103 dB for half of them (Poisson).
    quiet = CameraNoise(electrons_per_dn=1000.0, read_noise_e=0.0, black_level_dn=0.0, full_scale_dn=10**9)
    lost = snr_db(quiet, 0.5, 0.0) - snr_db(quiet, 0.5, 20 * math.log10(2))
    assert_allclose(lost, 10 * math.log10(2), rtol=1e-3)


def test_signal_to_noise_is_unknown_without_camera_figures():
    unknown = CameraNoise(None, None, 0.0, 255)
    found = setting(0.7 / 2.0, camera=unknown, min_snr_db=30.0)
    assert found.snr_db is None
    assert not found.fails_noise


def test_noise_of_the_sweep_s_own_frames_serves_where_the_camera_has_no_figures():
    evidence = StopEvidence(4.0, 4.0, 0.01, 0.35, True, snr_swept_db=40.0, exposure_swept_ms=4.0)
    found = setting_for(evidence, a_station(), CameraNoise(None, None, 0.0, 255))
    assert_allclose(found.snr_db, 40 - 10 * math.log10(2), rtol=1e-9)  # half the electrons, Poisson


def test_too_much_noise_fails():
    assert setting(0.7 / 2.0, min_snr_db=50.0).fails_noise
    assert not setting(0.7 / 2.0, min_snr_db=30.0).fails_noise


def test_light_that_is_unknown_gives_no_setting():
    found = setting(None)
    assert (found.exposure_ms, found.gain_db, found.snr_db) == (None, None, None)
