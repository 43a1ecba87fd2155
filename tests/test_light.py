"""Light per exposure at each ring position, on sweeps whose rings, lamps and vignetting are known.

Light goes as 1 / N^2 (ISO 517).
"""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from sweeps import STOPS, a_lane, a_sweep, scaled, shuffled, with_shots

from sweep.light import light_of
from sweep.readings import measure_sweep

RING = (1.02, 0.98, 1.0, 1.03, 0.97, 1.01)


def light(sweep, station=None):
    return light_of(measure_sweep(sweep, station or a_lane()))


def test_f_numbers_follow_the_ring():
    found = light(a_sweep(ring=RING))
    truth = np.array(STOPS) * RING / RING[0]
    assert_allclose(found.f_number, truth, rtol=0.004)
    assert (np.abs(found.f_number / truth - 1.0)[1:] < 4 * found.ln_u[1:]).all()
    assert found.reference == 0
    assert found.f_number[0] == STOPS[0]
    assert_allclose(found.u, found.f_number * found.ln_u)


def test_light_at_a_stop_over_that_at_the_reference():
    found = light(a_sweep())
    # each full stop halves the light; marks are rounded: (1.4 / 2.8)^2 and so on
    assert_allclose([found.relative(k) for k in (0, 2, 4)], [1.0, 1 / 4, 1 / 16], rtol=0.01)


def test_a_lamp_that_warms_up_is_told_from_the_ring():
    # 4 % over a time constant of 60 s: 1.8 % in the 36 s that the sweep takes
    found = light(a_sweep(lamp_drift=0.04, frames=4))
    truth = 0.04 * (1.0 - np.exp(-30.15 / 60.0))
    assert abs(found.drift - truth) < 2.5 * found.drift_u
    assert_allclose(found.f_number, STOPS, rtol=0.01)
    assert (np.abs(found.f_number / STOPS - 1.0)[1:] < 4 * found.ln_u[1:]).all()


def test_a_second_visit_to_the_first_stop_pins_the_drift():
    def late(shot):
        again = shot.stop == STOPS[0] and shot.file.endswith("_2.png")
        return replace(shot, time_s=40.0) if again else shot

    sweep = with_shots(a_sweep(), late)
    drifting = scaled(sweep, lambda shot: 1.0 + 0.06 * shot.time_s / 40.0)
    found = light(drifting)
    assert_allclose(found.drift, 0.06, atol=0.005)
    assert found.drift_u < 0.006
    assert_allclose(found.f_number, STOPS, rtol=0.005)


def test_a_lamp_that_wanders_from_frame_to_frame():
    rng = np.random.default_rng(3)
    level = {shot.file: 1.0 + 0.02 * rng.standard_normal() for shot in a_sweep(frames=6).shots}
    found = light(scaled(a_sweep(frames=6), lambda shot: level[shot.file]))
    assert_allclose(found.lamp_noise, 0.02, rtol=0.35)
    off = np.array([f.ln_off for f in found.frames])
    assert_allclose(off.std(), 0.02, rtol=0.35)
    assert len(found.frames) == 36
    assert light(a_sweep(frames=6)).lamp_noise < 0.002


def test_light_that_the_corners_lose_wide_open_is_not_the_ring():
    # Vignetting of up to 10 % at the frame's corners at the two widest stops; the targets lie left, middle and right.
    sweep = a_sweep(ring=RING, frames=3)
    rows, columns = np.indices(next(iter(sweep.frames.values())).shape)
    height, width = rows.shape
    radius2 = ((columns - width / 2) ** 2 + (rows - height / 2) ** 2) / (width**2 + height**2) * 4.0
    lost = scaled(sweep, lambda shot: 1.0 - 0.1 * radius2 * (shot.stop is not None and shot.stop < 2.5))
    found, truth = light(lost), np.array(STOPS) * RING / RING[0]
    assert (np.abs(found.f_number / truth - 1.0)[1:] < 4 * found.ln_u[1:]).all()
    assert_allclose(found.f_number, truth, rtol=0.01)


def test_the_reference_is_the_widest_stop_that_is_not_clipped():
    found = light(scaled(a_sweep(ring=RING), lambda shot: 2.0 if shot.stop == STOPS[0] else 1.0))
    truth = np.array(STOPS) * RING / RING[1]
    assert found.reference == 1
    # there the even tones are not clipped and tell the light all the same
    assert_allclose(found.f_number[1:], truth[1:] * STOPS[1] / truth[1], rtol=0.004)


def test_a_stop_that_is_wholly_clipped_has_no_f_number():
    found = light(scaled(a_sweep(), lambda shot: 40.0 if shot.stop == 4.0 else 1.0))
    assert np.isnan(found.f_number[3])
    assert np.isnan(found.u[3])
    assert found.relative(3) is None
    assert np.isfinite(np.delete(found.f_number, 3)).all()


def test_all_clipped_says_nothing():
    found = light(scaled(a_sweep(), lambda shot: 40.0))
    assert found.reference is None
    assert np.isnan(found.f_number).all()
    assert (found.frames, found.lamp_noise) == ((), 0.0)
    assert found.relative(0) is None


@pytest.mark.parametrize("timed", [True, False])
def test_rows_in_another_order(timed):
    sweep = a_sweep(ring=RING, lamp_drift=0.02)
    if timed:
        one, other = light(sweep), light(shuffled(sweep))
        assert np.array_equal(one.f_number, other.f_number)
        assert np.array_equal(one.u, other.u)
    else:  # the rows are the order in time: the lamp's drift may be told otherwise, the ring hardly
        untimed = with_shots(sweep, lambda shot: replace(shot, time_s=None))
        assert_allclose(light(untimed).f_number, light(shuffled(untimed)).f_number, rtol=0.01)


def test_two_stops_are_enough():
    station = a_lane(stops=(2.8, 5.6), depths=(0.0,))
    found = light(a_sweep(station), station)
    assert_allclose(found.f_number, [2.8, 5.6], rtol=0.01)
