"""The camera as the guided run uses it: frames with their light, exposure by the camera's own linearity.

Every wait for a frame yields an event, so that a screen is never left without news; a camera that is lost is
named, waited for, and set again as it was.
"""

import math
from collections.abc import Generator, Sequence
from dataclasses import dataclass

import numpy as np

from sweep.cameras import Camera, Grab, Settings
from sweep.capture.events import Action, Event, Exposed, Score, Seen, Trouble
from sweep.capture.meter import Light, Meter
from sweep.errors import CameraError, CaptureError
from sweep.ring import Ring, RingView
from sweep.station import Station

WANTED_TONE = 0.72  # while sweeping: high for the noise, clear of clipping (common practice, no source)
TONE_RANGE = (0.6, 0.82)
GUIDE_RANGE = (0.04, 0.95)  # outside, the exposure follows while the ring is turned
LONGEST_MS = 1000.0
SEARCH_STEPS = 8
SETTLED_FRAMES = 3
SETTLED_SHARE = 0.03
UNSETTLED_FRAMES = 30
FIRST_TIMEOUT_S = 10.0
GRAB_TIMEOUT_S = 2.0
LOST_LIMIT_S = 120.0
SCORES_EVERY_S = 0.4


class Ended(Exception):
    """The user ends the run."""


@dataclass(frozen=True, slots=True)
class Frame:
    """A live frame with its light, what the ring says, and the screen's answer to it."""

    grab: Grab
    light: Light
    view: RingView
    action: Action


class Live:
    """A camera with its meter and ring; every method that waits is a generator of events."""

    def __init__(self, camera: Camera, station: Station, fixed_ms: float | None = None) -> None:
        """Sets the camera, and looks at one frame to see that the patches are in it.

        fixed_ms: the exposure that was set by hand on a camera that cannot be set from here.
        Raises CaptureError for the camera, StationError where a patch lies outside of the frame.
        """
        self.meter = Meter(station)
        self.ring = Ring(station.lens.stops)
        self._camera = camera
        self._station = station
        self._fixed_ms = fixed_ms
        self._paused = False
        self._scores = [Score(target.name, None) for target in station.targets]
        self._next_score = 0
        self._scored_s = -math.inf
        self._last_s = -math.inf
        self._period_s = 0.05
        self._lost = False
        self._told_bright = False
        self.unrest_stops = 0.0  # of the light at rest, rms, as last settled
        self.exposure_ms, self.gain_db = fixed_ms or 10.0, 0.0
        self._settings = self._apply(self.exposure_ms)
        self.lit = self.meter.light(camera.grab(FIRST_TIMEOUT_S).pixels).mean  # the patches' light, as last settled

    def ask(self, stop: float) -> None:
        """The hand is sent to a stop."""
        self.ring.ask(stop)
        self._told_bright = False

    def frame(self, *, scored: bool = False) -> Generator[Event, Action, Frame]:
        """The next frame, shown. Raises Ended at the answer END, CaptureError where the camera stays away."""
        while True:
            grab = yield from self._grabbed()
            light = self.meter.light(grab.pixels)
            view = RingView("waiting")
            if not light.clipped and grab.arrived_s > self._fresh_s():
                view = self.ring.see(grab.arrived_s, light.mean / (self.exposure_ms * 10 ** (self.gain_db / 20)))
            if scored and grab.arrived_s - self._scored_s > SCORES_EVERY_S:
                # One target at a time, so that no frame waits for all of them.
                self._scores[self._next_score] = self.meter.score(self._next_score, grab.pixels)
                self._next_score, self._scored_s = (self._next_score + 1) % len(self._scores), grab.arrived_s
            seen = Seen(
                grab.pixels,
                view,
                light.tone,
                WANTED_TONE,
                light.clipped,
                self.exposure_ms,
                self.gain_db,
                self._paused,
                tuple(self._scores),
            )
            action = _obeyed((yield seen))
            if action is Action.PAUSE or (self._paused and action is Action.TAKE):
                self._paused = not self._paused
                action = Action.NONE
            if not self._paused:
                return Frame(grab, light, view, action)

    def follow(self, frame: Frame) -> Generator[Event, Action, None]:
        """Keep the light in range while the ring turns, without waiting for it to settle."""
        light, before_ms = frame.light, self.exposure_ms
        if self._last_s < self._fresh_s() or frame.view.state == "dark":
            return
        if light.clipped or light.tone > GUIDE_RANGE[1]:
            yield from self._expose(before_ms / 4)
            if light.clipped and self.exposure_ms >= 0.99 * before_ms and not self._told_bright:
                yield Trouble(_out_of_reach(light, self.exposure_ms))
                self._told_bright = True
        elif light.tone < GUIDE_RANGE[0] and before_ms < LONGEST_MS:
            yield from self._expose(min(LONGEST_MS, before_ms * min(8.0, WANTED_TONE / max(light.tone, 0.01))))
        self._told_bright = self._told_bright and light.clipped

    def search(self) -> Generator[Event, Action, Frame]:
        """Set the exposure that brings the light tone to where it is wanted; the first settled frame there.

        Where the camera cannot reach it, the nearest that it can; the trouble is told.
        """
        frame = yield from self.settled()
        for _ in range(SEARCH_STEPS):
            light = frame.light
            if not light.clipped and TONE_RANGE[0] <= light.tone <= TONE_RANGE[1]:
                break
            aim_ms = self.exposure_ms / 4 if light.clipped else self.exposure_ms * WANTED_TONE / max(light.tone, 0.02)
            whole_ms = self._whole_periods(min(LONGEST_MS, aim_ms))
            if whole_ms == self.exposure_ms and whole_ms < aim_ms < LONGEST_MS:
                break  # as near as whole periods of the ripple come
            aim_ms, before_ms = whole_ms, self.exposure_ms
            yield from self._expose(aim_ms)
            if math.isclose(self.exposure_ms, before_ms, rel_tol=1e-3):
                yield Trouble(_out_of_reach(light, self.exposure_ms))
                break
            frame = yield from self.settled()
        return frame

    def settled(self) -> Generator[Event, Action, Frame]:
        """The first frame after the last change of settings at which a few in a row agree.

        A lamp that flickers never settles: after some frames its unrest is taken as it is, and told.
        """
        row: list[float] = []
        while True:
            frame = yield from self.frame()
            if frame.grab.arrived_s <= self._fresh_s():
                continue
            row.append(frame.light.mean)
            last = row[-SETTLED_FRAMES:]
            if len(last) == SETTLED_FRAMES and max(last) - min(last) <= SETTLED_SHARE * max(*last, 0.02):
                self.unrest_stops, self.lit = _unrest(last), frame.light.mean
                return frame
            if len(row) >= UNSETTLED_FRAMES and frame.view.state != "turning":
                self.unrest_stops = _unrest(row[-UNSETTLED_FRAMES:])
                unrest = max(row) / max(min(row), 1e-6) - 1
                yield Trouble(
                    f"The light goes up and down by {unrest:.0%} from frame to frame. Use a steady lamp, or state "
                    "need.flicker_hz."
                )
                return frame

    def _fresh_s(self) -> float:
        """Frames that arrived before this may still have been exposed as it was set before."""
        return self._settings.at_s + self.exposure_ms / 1000 + 2 * self._period_s

    def _grabbed(self) -> Generator[Event, Action, Grab]:
        waited_s = 0.0
        timeout_s = GRAB_TIMEOUT_S + 2 * self.exposure_ms / 1000
        while True:
            try:
                grab = self._camera.grab(timeout_s)
                if self._lost:
                    # A camera that was re-opened has forgotten its settings.
                    self._settings = self._apply(self.exposure_ms)
                    self._lost = False
                    continue
            except CameraError as error:
                self._lost = True
                waited_s += timeout_s
                if waited_s > LOST_LIMIT_S:
                    raise CaptureError(
                        f"{error} It stayed away for {LOST_LIMIT_S:.0f} s; the run stops here."
                    ) from None
                _obeyed((yield Trouble(str(error), lost=True)))
                continue
            if self._last_s > -math.inf:
                self._period_s += 0.2 * (min(grab.arrived_s - self._last_s, 1.0) - self._period_s)
            self._last_s = grab.arrived_s
            return grab

    def _expose(self, exposure_ms: float) -> Generator[Event, Action, None]:
        if self._fixed_ms is not None:
            return
        self._settings = self._apply(exposure_ms)
        _obeyed((yield Exposed(self.exposure_ms, self.gain_db)))

    def _apply(self, exposure_ms: float) -> Settings:
        """Set the exposure, gain at its least; take over what is read back."""
        settings = (
            self._camera.set() if self._fixed_ms is not None else self._camera.set(exposure_ms=exposure_ms, gain_db=0.0)
        )
        if settings.exposure_ms is None and self._fixed_ms is None:
            raise CaptureError(
                "The exposure of this camera cannot be set from here. Fix it on the camera, so that the widest stop "
                "does not clip, and say it with --exposure-ms."
            )
        self.exposure_ms = self._fixed_ms or settings.exposure_ms or exposure_ms
        self.gain_db = settings.gain_db or 0.0
        return settings

    def _whole_periods(self, exposure_ms: float) -> float:
        """On a rippling lamp: whole periods of the ripple, where the exposure holds one."""
        ripple_hz = self._station.need.flicker_hz
        if ripple_hz == 0 or exposure_ms < 1000 / ripple_hz:
            return exposure_ms
        return math.floor(exposure_ms * ripple_hz / 1000) * 1000 / ripple_hz


def _obeyed(action: Action) -> Action:
    if action is Action.END:
        raise Ended
    return action


def _out_of_reach(light: Light, exposure_ms: float) -> str:
    if light.clipped or light.tone > TONE_RANGE[1]:
        return f"Too bright: the light tone is at {light.tone:.0%} at {exposure_ms:g} ms. Less light is needed."
    return f"Dim: the light tone reaches only {light.tone:.0%} of full scale at {exposure_ms:g} ms. More light helps."


def _unrest(means: Sequence[float]) -> float:
    """The rms of some light levels, in stops."""
    return float(np.std(np.log2(np.maximum(means, 1e-6))))
