"""The guided run at a simulated station, with hands that do right and wrong."""

import time
from dataclasses import replace

import cv2
import numpy as np
import pytest
from guided import PLAN, STOPS, MemoryKeeper, Run, Unsteady, small_camera, small_station
from numpy.testing import assert_allclose

from sweep.cameras.simulated import Scene, exposure_for, station_truth
from sweep.cameras.simulated_camera import simulate
from sweep.capture import Action, Ask, Begin, Exposed, Live, Seen, StepDone, Taken, Trouble
from sweep.capture import live as live_module
from sweep.capture.meter import Meter
from sweep.demo import SimulatedHand, demo_station
from sweep.errors import CaptureError, StationError


def test_a_run_takes_every_stop_and_darks():
    run = Run()
    assert run.finished.taken == STOPS
    assert not run.finished.ended
    assert run.asked == [*STOPS, None]
    assert [ask.confirm for ask in run.of(Ask)] == [True, False, False, False, False]
    for stop in STOPS:
        assert len(run.shots(stop)) == PLAN.frames
    assert [shot.role for shot in run.shots(None)] == ["dark"] * PLAN.darks
    times = [shot.time_s for shot in run.keeper.shots]
    assert times == sorted(times)
    assert isinstance(run.events[0], Begin)
    assert len(run.of(Taken)) == len(run.keeper.shots)


def test_the_light_tone_comes_to_the_wanted_level_and_nothing_clips():
    run = Run()
    truth = small_camera(run.station)._sim
    for done in run.of(StepDone)[:-1]:
        assert 0.6 <= done.tone <= 0.82
        place = STOPS.index(done.stop)
        # What the simulated station needs for that level, by its own electrons; 3 % for noise, lamp and ring play.
        expected = exposure_for(run.station, truth, done.stop * truth.ring[place], done.tone)
        assert_allclose(done.exposure_ms, expected, rtol=0.03)
    assert max(int(frame.max()) for frame in run.keeper.frames.values()) < 4095


def test_the_hand_that_slips_is_led_back():
    station = small_station()
    camera = small_camera(station)
    run = Run(station=station, camera=camera, hand=SimulatedHand(camera, STOPS))
    assert "past" in run.states
    assert run.finished.taken == STOPS


def test_a_ring_that_is_not_turned_is_told_and_waited_for():
    station = small_station()
    camera = small_camera(station)
    hand = SimulatedHand(camera, STOPS, slipped=True)
    waited = []

    def user(event, events):
        if isinstance(event, Ask) and event.stop == 2.8:
            hand.stops = ()
            hand._turn = lambda stop: None  # the hand is elsewhere
        if isinstance(event, Seen) and event.view.state == "not turned":
            waited.append(event)
            if len(waited) == 20:
                del hand._turn
                hand._turn(2.8)
        return Action.NONE

    run = Run(user, station=station, camera=camera, hand=hand)
    assert len(waited) >= 20
    assert run.finished.taken == STOPS


def test_a_stop_whose_light_changes_is_taken_again():
    station = small_station()
    camera = small_camera(station)
    nudged = []

    def user(event, events):
        if isinstance(event, Taken) and event.stop == 4.0 and not nudged:
            nudged.append(event)
            camera.turn(4.6, after_s=0.0, lasts_s=0.05)
        if isinstance(event, Trouble) and nudged:
            camera.turn(4.0, after_s=0.1, lasts_s=0.3)
        return Action.NONE

    run = Run(user, station=station, camera=camera)
    assert any("light changed" in trouble.text for trouble in run.of(Trouble))
    assert len(run.shots(4.0)) == PLAN.frames
    assert run.asked.count(4.0) == 2


def test_a_picture_that_moves_is_taken_again_and_in_the_end_kept():
    station = small_station()
    run = Run(station=station, camera=small_camera(station, vibration_px=0.6))
    assert any("picture moved" in trouble.text for trouble in run.of(Trouble))
    assert run.finished.taken == STOPS


def asked_before(events):
    return [event.stop for event in events if isinstance(event, Ask)]


def test_back_takes_the_last_stop_again():
    pressed = []

    def user(event, events):
        if isinstance(event, Seen) and asked_before(events)[-1:] == [4.0] and not pressed:
            pressed.append(event)
            return Action.BACK
        return Action.NONE

    run = Run(user)
    assert run.asked == [2.0, 2.8, 4.0, 2.8, 4.0, 5.6, None]
    assert len(run.shots(2.8)) == PLAN.frames


def test_skip_leaves_a_stop_out():
    def user(event, events):
        asks = asked_before(events)
        return Action.SKIP if isinstance(event, Seen) and asks[-1:] == [2.8] else Action.NONE

    run = Run(user)
    assert run.finished.skipped == (2.8,)
    assert run.finished.taken == (2.0, 4.0, 5.6)
    assert not run.shots(2.8)


def test_pause_holds_the_run():
    paused = []

    def user(event, events):
        if isinstance(event, Seen) and asked_before(events)[-1:] == [4.0] and not paused:
            paused.append(event)
            return Action.PAUSE
        if isinstance(event, Seen) and event.paused:
            paused.append(event)
            return Action.PAUSE if len(paused) == 30 else Action.NONE
        return Action.NONE

    run = Run(user)
    assert len(paused) == 30
    assert run.finished.taken == STOPS


def test_end_keeps_what_is_there_and_a_later_run_goes_on():
    first = Run(lambda event, events: Action.END if isinstance(event, Ask) and event.stop == 4.0 else Action.NONE)
    assert first.finished.ended
    assert first.finished.taken == (2.0, 2.8)
    second = Run(keeper=first.keeper)
    assert second.asked == [4.0, 5.6, None]
    assert second.of(Ask)[0].confirm  # a new run cannot know yet where the ring stands
    times = [shot.time_s for shot in second.keeper.shots]
    assert times == sorted(times)


def test_a_stop_that_was_broken_off_is_taken_from_its_start():
    whole = Run().keeper
    torn = MemoryKeeper(whole.shots[: PLAN.frames + 1])
    run = Run(keeper=torn)
    assert run.asked == [2.8, 4.0, 5.6, None]
    assert len(run.shots(2.8)) == PLAN.frames


def test_a_camera_that_goes_and_comes_back_is_named_and_set_again():
    station = small_station()
    camera = Unsteady(small_camera(station), lost=range(60, 63))
    run = Run(station=station, camera=camera)
    lost = [trouble for trouble in run.of(Trouble) if trouble.lost]
    assert len(lost) == 3
    assert run.finished.taken == STOPS
    assert all(len(run.shots(stop)) == PLAN.frames for stop in STOPS)


def test_a_camera_that_stays_away_ends_the_run(monkeypatch):
    monkeypatch.setattr(live_module, "LOST_LIMIT_S", 5.0)
    station = small_station()
    with pytest.raises(CaptureError, match="stayed away"):
        Run(station=station, camera=Unsteady(small_camera(station), lost=range(60, 10_000)))


def test_a_lamp_that_flickers_is_told_and_borne():
    # The first stop never seems to rest; the user takes it at once.
    station = small_station()
    run = Run(first_by_hand, station=station, camera=small_camera(station, ripple=0.2, ripple_hz=103.0))
    assert any("up and down" in trouble.text for trouble in run.of(Trouble))
    assert run.finished.taken == STOPS


def first_by_hand(event, events):
    seen = sum(isinstance(e, Seen) for e in events)
    return Action.TAKE if isinstance(event, Seen) and seen == 60 else Action.NONE


def test_exposures_of_a_rippling_lamp_are_whole_periods():
    station = small_station()
    need = station.need.model_copy(update={"flicker_hz": 100.0})
    station = station.model_copy(update={"need": need})
    bright = small_camera(station)._sim
    run = Run(station=station, camera=small_camera(station, light_e_ms=bright.light_e_ms / 40, ripple=0.2))
    long = [shot.exposure_ms for shot in run.keeper.shots if shot.exposure_ms >= 10]
    assert long
    assert_allclose(np.mod(np.array(long) + 1e-6, 10), 0, atol=2e-6)


def when_told(words):
    """A user who takes the stop all the same once a trouble is told."""

    def user(event, events):
        told = any(isinstance(e, Trouble) and e.text.startswith(words) for e in events[-5:])
        return Action.TAKE if told and isinstance(event, Seen) else Action.NONE

    return user


def test_a_lamp_too_bright_is_told():
    station = small_station()
    sim = small_camera(station)._sim
    camera = small_camera(station, light_e_ms=sim.light_e_ms * 30, exposure_step_ms=0.05)
    run = Run(when_told("Too bright"), station=station, camera=camera)
    assert any(trouble.text.startswith("Too bright") for trouble in run.of(Trouble))
    assert run.finished.taken == STOPS


def test_a_lamp_too_dim_is_told():
    station = small_station()
    sim = small_camera(station)._sim
    run = Run(station=station, camera=small_camera(station, light_e_ms=sim.light_e_ms / 5000))
    assert any(trouble.text.startswith("Dim") for trouble in run.of(Trouble))


def test_a_camera_that_cannot_be_set_needs_its_exposure_said():
    station = small_station()
    with pytest.raises(CaptureError, match="cannot be set from here"):
        Run(station=station, camera=Unsteady(small_camera(station), settable=False))
    camera = small_camera(station)
    camera.set(exposure_ms=0.2)
    run = Run(station=station, camera=Unsteady(camera, settable=False), fixed_ms=0.2)
    assert {shot.exposure_ms for shot in run.keeper.shots} == {0.2}
    assert not run.of(Exposed)


def test_a_patch_outside_of_the_frame_is_named_before_anything_is_asked():
    station = small_station()
    smaller = small_camera(station, size_px=(100, 100))
    with pytest.raises(StationError, match="outside"):
        Live(smaller, station)


def test_colour_frames_need_a_colour_layout():
    with pytest.raises(CaptureError, match="layout"):
        Meter(small_station()).light(np.zeros((400, 400, 3), np.uint8))


@pytest.mark.parametrize("shift", [(0.3, 0.0), (0.0, -0.4), (0.25, 0.25)])
def test_shift_of_the_whole_picture(shift):
    station = small_station()
    sim = simulate(station, np.random.default_rng(3))
    scene, rng = Scene(station, sim, np.random.default_rng(1)), np.random.default_rng(2)
    exposure_ms = exposure_for(station, sim, 4.0, 0.7)
    still, again = (scene.expose(4.0, exposure_ms, 0.0, rng) for _ in range(2))
    moved = scene.expose(4.0, exposure_ms, 0.0, rng, shift_px=shift)
    meter = Meter(station)
    assert meter.shift_px(again, still) < 0.05
    assert_allclose(meter.shift_px(moved, still), np.hypot(*shift), atol=0.06)


def test_the_live_score_is_the_contrast_at_the_feature():
    station = small_station()
    sim = simulate(station, np.random.default_rng(3))
    scene, rng = Scene(station, sim, np.random.default_rng(1)), np.random.default_rng(2)
    truth = station_truth(station, replace(sim, ring=(1.0,) * 4))[2]  # f/4
    frame = scene.expose(4.0, exposure_for(station, sim, 4.0, 0.7), 0.0, rng)
    meter = Meter(station)
    meter.light(frame)
    for place, target in enumerate(station.targets):
        score = meter.score(place, frame)
        true = next(patch for patch in truth.patches if patch.target == target.name and patch.patch == 0)
        assert score.target == target.name
        assert_allclose(score.contrast, true.contrast_at_feature, atol=0.03)  # one frame, with its noise


def test_samples_that_fill_the_word_from_the_top_are_measured_alike():
    station = small_station()
    sim = simulate(station, np.random.default_rng(3))
    frame = Scene(station, sim, np.random.default_rng(1)).expose(4.0, 1.0, 0.0, np.random.default_rng(2))
    low, high = Meter(station).light(frame), Meter(station).light(frame << 4)
    assert_allclose(high.tone, low.tone)
    assert high.clipped == low.clipped


def test_live_work_on_five_megapixels_is_small_beside_one_pass_over_the_frame():
    # A ratio within one run: the patches' light and shift against one Laplacian of the whole frame.
    station = demo_station()
    frame = np.random.default_rng(1).integers(200, 3000, (1944, 2592)).astype(np.uint16)
    meter = Meter(station)
    meter.light(frame)

    def median_s(work):
        times = []
        for _ in range(9):
            began = time.perf_counter()
            work()
            times.append(time.perf_counter() - began)
        return np.median(times)

    live = median_s(lambda: (meter.light(frame), meter.shift_px(frame, frame)))
    assert live < 0.25 * median_s(lambda: cv2.Laplacian(frame, cv2.CV_64F).var())


def test_darks_wait_for_the_cap_even_where_the_black_level_is_not_known():
    # The station file says 0, the camera has 64.
    told, untold = small_station(), small_station(black_level_dn=0)
    capped = []

    def user(event, events):
        if isinstance(event, Ask) and event.stop is None:
            hand.camera.cap(False)
        if isinstance(event, Seen) and asked_before(events)[-1:] == [None]:
            capped.append(event)
            if len(capped) == 15:
                hand.camera.cap(True)
        return Action.NONE

    camera = small_camera(told)
    hand = SimulatedHand(camera, STOPS, slipped=True)
    real_cap = camera.cap
    camera.cap = lambda on: real_cap(on) if len(capped) >= 15 or not on else None
    run = Run(user, station=untold, camera=camera, hand=hand)
    darks = [run.keeper.frames[shot.file].mean() for shot in run.shots(None)]
    assert len(darks) == PLAN.darks
    assert_allclose(darks, 64, atol=1)


def test_darks_that_were_broken_off_are_made_up():
    whole = Run().keeper
    run = Run(keeper=MemoryKeeper(whole.shots[:-1]))
    assert run.asked == [None]
    assert len(run.shots(None)) == PLAN.darks
