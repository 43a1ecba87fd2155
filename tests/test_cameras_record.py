"""Guided runs over cameras that are real to the program: the GigE Vision protocol, and a watched folder."""

import os
import shutil
import subprocess
import sys
import threading
import time
from pathlib import Path

import cv2
import numpy as np
import pytest
from guided import ADDRESS, PLAN, STOPS, MemoryKeeper, address_to_itself, small_camera, small_station

from sweep.cameras import open_camera
from sweep.cameras.simulated import exposure_for
from sweep.capture import Action, Ask, Begin, Event, Live, Seen, Trouble, conduct

HERE = Path(__file__).parent


class Hand:
    """A hand in another place: it does what is asked by sending words, with the mistakes it is told to make."""

    def __init__(self, send, mistakes=()):
        self._send = send
        self._mistakes = dict(mistakes)
        self._asked: float | None = None
        self._confirm = False
        self.events: list[Event] = []

    def __call__(self, event: Event) -> Action:
        self.events.append(event)
        match event:
            case Begin():
                return Action.TAKE
            case Ask(stop=None):
                self._send("cap on")
            case Ask(stop=float(stop), confirm=confirm):
                self._asked, self._confirm = stop, confirm
                self._send(f"turn {self._mistakes.pop(stop, stop)}")
            case Seen(view=view) if self._confirm and view.state == "resting":
                self._confirm = False
                return Action.TAKE
            case Seen(view=view) if view.state in ("past", "between", "wrong way"):
                if self._asked is not None:
                    self._send(f"turn {self._asked}")
                    self._asked = None
        return Action.NONE


@pytest.fixture
def gige():
    """The simulated station served over GigE Vision; what sends it words, and what ends it."""
    if shutil.which("arv-fake-gv-camera-0.8") is None:
        pytest.skip("the library aravis is not installed (Debian package aravis-tools)")
    servers = []

    def serve():
        command = [sys.executable, str(HERE / "gige_station.py"), ADDRESS]
        path = {"PYTHONPATH": os.pathsep.join([str(HERE.parent), str(HERE)])}
        server = subprocess.Popen(
            command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=os.environ | path
        )
        servers.append(server)
        assert server.stdout.readline() == "ready\n"
        return server

    with address_to_itself():
        yield serve
        for server in servers:
            server.kill()
            server.communicate()


def told(server):
    def send(words: str) -> None:
        server.stdin.write(words + "\n")
        server.stdin.flush()

    return send


def test_a_run_over_gige_vision_with_mistakes(gige):
    server = gige()
    station, keeper = small_station(), MemoryKeeper()
    # Once too far, once not far enough, once the wrong way.
    hand = Hand(told(server), {2.8: 4.0, 4.0: 3.4, 5.6: 3.0})
    with open_camera(f"genicam:{ADDRESS}", station) as camera:
        finished = conduct(Live(camera, station), keeper, station, PLAN, hand)
    assert finished.taken == STOPS
    assert [shot.role for shot in keeper.shots].count("dark") == PLAN.darks
    states = {event.view.state for event in hand.events if isinstance(event, Seen)}
    assert {"past", "between", "wrong way", "arrived"} <= states
    truth = small_camera(station)._sim
    for place, stop in enumerate(STOPS):
        shots = [shot for shot in keeper.shots if shot.stop == stop]
        assert len(shots) == PLAN.frames
        # The tone is that of the exposure that was read back: no frame from before the change was kept.
        frame = keeper.frames[shots[-1].file].astype(float)
        tone = np.quantile(frame[14:70, 16:64], 0.9) - 64
        expected = shots[-1].exposure_ms / exposure_for(station, truth, stop * truth.ring[place], 1.0) * (4095 - 64)
        np.testing.assert_allclose(tone, expected, rtol=0.05)


def test_a_camera_unplugged_in_the_middle(gige):
    server = gige()
    station, keeper = small_station(), MemoryKeeper()
    send = told(server)
    hand = Hand(lambda words: send(words))
    unplugged = []

    def show(event: Event) -> Action:
        nonlocal send
        if isinstance(event, Ask) and event.stop == 4.0 and not unplugged:
            server.kill()
            server.wait()
            unplugged.append(time.monotonic())
        elif isinstance(event, Trouble) and event.lost and len(unplugged) == 1:
            unplugged.append(time.monotonic())
            send = told(gige())
            send("turn 4.0")
        elif unplugged[1:] or not isinstance(event, Ask) or event.stop != 4.0:
            return hand(event)
        return Action.NONE

    with open_camera(f"genicam:{ADDRESS}", station) as camera:
        finished = conduct(Live(camera, station), keeper, station, PLAN, show)
    assert finished.taken == STOPS
    named_after_s = unplugged[1] - unplugged[0]
    assert named_after_s < 3.5  # waits for a frame for 2 s, and some more under load


def test_a_run_over_a_watched_folder(tmp_path):
    station, keeper = small_station(), MemoryKeeper()
    source = small_camera(station, exposure_step_ms=0.01)
    source.set(exposure_ms=0.2)
    lock, stop = threading.Lock(), threading.Event()

    def drop_files() -> None:
        number = 0
        while not stop.wait(0.03):
            with lock:
                frame = source.grab(1).pixels
            number += 1
            part = tmp_path / f"{number:06d}.part"
            part.write_bytes(cv2.imencode(".png", frame)[1].tobytes())
            part.rename(tmp_path / f"{number:06d}.png")

    def send(words: str) -> None:
        what, value = words.split()
        with lock:
            source.turn(float(value), after_s=0.1, lasts_s=0.4) if what == "turn" else source.cap(value == "on")

    writer = threading.Thread(target=drop_files)
    writer.start()
    try:
        with open_camera(f"folder:{tmp_path}", station) as camera:
            finished = conduct(Live(camera, station, fixed_ms=0.2), keeper, station, PLAN, Hand(send))
    finally:
        stop.set()
        writer.join()
    assert finished.taken == STOPS
    assert {shot.exposure_ms for shot in keeper.shots} == {0.2}
