"""Cameras by name, and the thread that owns a device, with a scripted device that fails on left-over script."""

import threading
import time

import numpy as np
import pytest

from sweep.cameras import open_camera
from sweep.cameras.owner import OwnedCamera
from sweep.demo import demo_station
from sweep.errors import CameraError


def picture(value: int) -> np.ndarray:
    return np.arange(12, dtype=np.uint8).reshape(3, 4) + np.uint8(value)


class Scripted:
    """A device that reads what it was given: frames, None for a loss, an error to raise; then it blocks a little."""

    name = "The scripted camera"

    def __init__(self, *script, opens=(None,)):
        self.script, self.opens = list(script), list(opens)
        self.applied, self.threads, self.closed = [], set(), 0

    def _step(self):
        self.threads.add(threading.current_thread().name)

    def open(self):
        self._step()
        fault = self.opens.pop(0) if self.opens else None
        if fault is not None:
            raise fault

    def read(self):
        self._step()
        if not self.script:
            time.sleep(0.02)
            return picture(int(time.monotonic() * 1000) % 200)
        step = self.script.pop(0)
        if isinstance(step, float):
            time.sleep(step)
            return picture(99)
        return step

    def apply(self, exposure_ms, gain_db):
        self._step()
        self.applied.append((exposure_ms, gain_db))
        return exposure_ms, 0.0

    def facts(self):
        return {"device": self.name}

    def close(self):
        self._step()
        self.closed += 1


def test_frames_come_once_each_in_order():
    device = Scripted(picture(1), picture(2), 0.3)
    with OwnedCamera(device) as camera:
        first, second = camera.grab(1), camera.grab(1)
        assert (first.pixels[0, 0], second.pixels[0, 0]) == (1, 2)
        assert second.arrived_s >= first.arrived_s
    assert device.closed == 1
    assert device.threads == {"camera The scripted camera"}


def test_a_repeated_frame_is_not_handed_over_but_counted():
    device = Scripted(picture(1), picture(1), picture(1), picture(2), 0.3)
    with OwnedCamera(device) as camera:
        assert [int(camera.grab(1).pixels[0, 0]) for _ in range(2)] == [1, 2]
        assert camera.facts()["frames_repeated"] == 2


def test_frames_of_one_value_may_repeat():
    # A capped 8-bit camera with its black level at zero delivers nothing else.
    dark = np.zeros((3, 4), np.uint8)
    with OwnedCamera(Scripted(dark, dark, dark, 0.3)) as camera:
        assert [int(camera.grab(1).pixels.max()) for _ in range(3)] == [0, 0, 0]


def test_a_caller_that_is_late_gets_the_latest_few_and_the_loss_is_counted():
    device = Scripted(*(picture(i) for i in range(8)), 0.5)
    with OwnedCamera(device) as camera:
        time.sleep(0.2)
        assert int(camera.grab(1).pixels[0, 0]) == 5
        assert camera.facts()["frames_overrun"] == 5


def test_a_lost_device_is_named_and_opened_again():
    device = Scripted(picture(1), None, picture(2), 0.3, opens=(None, CameraError("still away"), None))
    with OwnedCamera(device) as camera:
        assert camera.grab(1).pixels[0, 0] == 1
        with pytest.raises(CameraError, match=r"sends no picture|still away"):
            camera.grab(0.3)
        assert camera.grab(3).pixels[0, 0] == 2
        assert camera.facts()["times_lost"] == 2


def test_a_device_that_does_not_open_says_why():
    with pytest.raises(CameraError, match="in use"):
        OwnedCamera(Scripted(opens=(CameraError("It is in use."),)))


class Frozen(Scripted):
    """A device that sends its first picture for ever."""

    def read(self):
        time.sleep(0.01)
        return picture(1)


def test_a_frozen_picture_is_named():
    with OwnedCamera(Frozen()) as camera:
        camera.grab(1)
        with pytest.raises(CameraError, match="repeats its last picture"):
            camera.grab(0.3)


def test_settings_are_read_back_and_dated():
    device = Scripted()
    with OwnedCamera(device) as camera:
        before = time.monotonic()
        settings = camera.set(exposure_ms=3.0, gain_db=0.0)
        assert (settings.exposure_ms, settings.gain_db) == (3.0, 0.0)
        assert settings.at_s >= before
    assert device.applied == [(3.0, 0.0)]


@pytest.mark.parametrize(
    ("name", "words"), [("nothing", "no camera"), ("folder:/not/there", "no folder"), ("/not/there.mkv", "no camera")]
)
def test_what_is_not_there_is_named(name, words):
    with pytest.raises(CameraError, match=words):
        open_camera(name, demo_station())


def test_the_simulated_camera_opens_by_name():
    with open_camera("simulated", demo_station()) as camera:
        assert camera.set(exposure_ms=0.123).exposure_ms == 0.12  # in steps of camera.exposure_step_ms
        first, second = camera.grab(1), camera.grab(1)
        assert second.arrived_s > first.arrived_s
        assert not np.array_equal(first.pixels, second.pixels)
        assert camera.facts()["bit_depth"] == 12
