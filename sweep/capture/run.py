"""The guided run: which stop comes next, when to take its frames, what to keep."""

import math
from collections.abc import Generator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Literal, Protocol

import numpy as np

from sweep.capture.events import Action, Ask, Begin, Event, Finished, StepDone, Taken, Trouble
from sweep.capture.live import Ended, Frame, Live
from sweep.frames import Pixels, Shot
from sweep.station import Station

MOVED_STOPS = 0.06
SHAKEN_PX = 0.2
SHAKEN_TRIES = 2  # after that, the station shakes by itself: the analysis says so
CAP_SHARE = 0.1  # of the light before; what is left may be a black level that is not known yet
CAP_LEAST = 0.002
CAPPED_FRAMES = 6

CAUTIONS = (
    "Reaching in: stop the machine, lock out its energy, and try that it stays dead, before a hand goes in.",
    "Lamps: do not stare into them. Pulsing light can trigger seizures: shield it, and warn those nearby.",
    "Lasers: read the class on the label first; 3R and up needs measures.",
    "The rules of your site and local law come before anything that is asked for here.",
)

Outcome = Literal["done", "skip", "back", "again"]
Steps = Generator[Event, Action, Outcome]


@dataclass(frozen=True, slots=True)
class Plan:
    """How much to take: frames at each stop, and darks at the end."""

    frames: int = 8
    darks: int = 8


class Keeper(Protocol):
    """What the run needs of a recording: frames go in, and a stop's frames may be taken back."""

    @property
    def folder(self) -> Path:
        """Where the frames are."""

    @property
    def shots(self) -> Sequence[Shot]:
        """What has been kept so far, earlier runs into the same folder included."""

    def add(self, pixels: Pixels, shot: Shot) -> Shot:
        """Put one frame on disk; when this returns, it counts."""

    def drop(self, shots: Sequence[Shot]) -> None:
        """Take frames back: their rows go, their files may."""


def guided_run(live: Live, recorder: Keeper, station: Station, plan: Plan) -> Generator[Event, Action, None]:
    """Ask for every stop that the recording lacks, widest first, and for darks; END ends it at any time."""
    yield from _Run(live, recorder, station, plan).steps()


class _Run:
    def __init__(self, live: Live, recorder: Keeper, station: Station, plan: Plan) -> None:
        self._live = live
        self._recorder = recorder
        self._stops = tuple(sorted(station.lens.stops))
        self._plan = plan
        self._skipped: list[float] = []
        self._leaving: float | None = None
        self._shaken = 0  # how often the present stop was taken again for its picture's unrest
        self._offset_s = 1.0 + max((shot.time_s or 0.0 for shot in recorder.shots), default=-1.0)
        self._start_s: float | None = None
        self._of = len(self._stops) + (1 if plan.darks else 0)

    def steps(self) -> Generator[Event, Action, None]:
        ended = False
        try:
            yield from self._begin()
            yield from self._sweep()
            if len(self._shots(None)) < self._plan.darks:
                yield from self._darks()
        except Ended:
            ended = True
        taken = tuple(stop for stop in self._stops if self._complete(stop))
        yield Finished(self._recorder.folder, taken, tuple(self._skipped), ended)

    def _begin(self) -> Generator[Event, Action, None]:
        while True:
            action = yield Begin(CAUTIONS, self._stops)
            if action is Action.END:
                raise Ended
            if action is Action.TAKE:
                return

    def _sweep(self) -> Generator[Event, Action, None]:
        place = 0
        while place < len(self._stops):
            stop = self._stops[place]
            if self._complete(stop):
                place += 1
                continue
            outcome = yield from self._stop(stop, place)
            if outcome == "done":
                self._leaving = stop
            elif outcome == "skip":
                self._skipped.append(stop)
            elif outcome == "back":
                earlier = [other for other in self._stops[:place] if self._complete(other)]
                if earlier:
                    place = self._stops.index(earlier[-1])
                    self._drop(earlier[-1])
                continue
            elif outcome == "again":
                continue
            place += 1

    def _stop(self, stop: float, place: int) -> Steps:
        """One stop, from asking for it to its last frame."""
        self._drop(stop)
        self._live.ask(stop)
        yield from self._told(Ask(stop, place + 1, self._of, not self._live.ring.known, self._leaving))
        while True:
            action = yield from self._arrival()
            if action in (Action.SKIP, Action.BACK):
                return "skip" if action is Action.SKIP else "back"
            frame = yield from self._live.search()
            # The hand may have gone on turning while the exposure was set.
            if action is Action.TAKE or frame.view.state == "arrived":
                return (yield from self._frames(stop, frame))

    def _arrival(self) -> Generator[Event, Action, Action]:
        """Wait until the ring rests at the mark, or the screen says TAKE, SKIP or BACK."""
        while True:
            frame = yield from self._live.frame(scored=True)
            if frame.action is not Action.NONE:
                return frame.action
            if frame.view.state == "arrived":
                return Action.NONE
            yield from self._live.follow(frame)

    def _frames(self, stop: float, settled: Frame) -> Steps:
        """All frames of a stop; those of a stop that moves meanwhile are dropped, and it is waited for again."""
        tones: list[float] = []
        for number in range(self._plan.frames):
            frame = yield from self._live.frame()
            if frame.action in (Action.BACK, Action.SKIP):
                self._drop(stop)
                return "again" if frame.action is Action.BACK else "skip"
            trouble = self._unfit(frame, settled)
            if trouble is not None:
                yield from self._told(Trouble(trouble))
                return "again"
            self._keep(frame, stop)
            tones.append(frame.light.tone)
            yield from self._told(Taken(stop, number + 1, self._plan.frames))
        self._live.ring.taken(stop)
        self._shaken = 0
        yield from self._told(StepDone(stop, self._live.exposure_ms, float(np.mean(tones))))
        return "done"

    def _unfit(self, frame: Frame, settled: Frame) -> str | None:
        """Why a frame must not be kept, None where nothing is wrong with it."""
        changed = abs(math.log2(max(frame.light.mean, 1e-6) / max(settled.light.mean, 1e-6)))
        if changed > max(MOVED_STOPS, 4 * self._live.unrest_stops):
            return "The light changed while frames were taken. Leave the ring alone; this stop is taken again."
        if frame.light.clipped and not settled.light.clipped:
            return "The light tone clips now. This stop is taken again."
        shift_px = self._live.meter.shift_px(frame.grab.pixels, settled.grab.pixels)
        if shift_px > SHAKEN_PX and self._shaken < SHAKEN_TRIES:
            self._shaken += 1
            return f"The picture moved by {shift_px:.1f} px. Hold camera and parts still; this stop is taken again."
        return None

    def _darks(self) -> Generator[Event, Action, None]:
        """Frames with the lens capped; SKIP leaves them out."""
        yield from self._told(Ask(None, self._of, self._of, False, self._leaving))
        dark = 0
        while dark < CAPPED_FRAMES:
            frame = yield from self._live.frame()
            if frame.action is Action.SKIP:
                return
            if frame.action is Action.TAKE:
                break
            dark = dark + 1 if frame.light.mean < max(CAP_LEAST, CAP_SHARE * self._live.lit) else 0
        for number in range(len(self._shots(None)), self._plan.darks):
            frame = yield from self._live.frame()
            self._keep(frame, None)
            yield from self._told(Taken(None, number + 1, self._plan.darks))
        yield from self._told(StepDone(None, self._live.exposure_ms, 0.0))

    def _keep(self, frame: Frame, stop: float | None) -> None:
        """Write one frame; it counts from now on."""
        if self._start_s is None:
            self._start_s = frame.grab.arrived_s - self._offset_s
        shot = Shot(
            file="",  # the recording names it
            stop=stop,
            exposure_ms=self._live.exposure_ms,
            gain_db=self._live.gain_db,
            role="dark" if stop is None else "target",
            order=len(self._recorder.shots),
            time_s=round(frame.grab.arrived_s - self._start_s, 4),
        )
        self._recorder.add(frame.grab.pixels, shot)

    def _shots(self, stop: float | None) -> list[Shot]:
        return [shot for shot in self._recorder.shots if shot.stop == stop]

    def _complete(self, stop: float) -> bool:
        return len(self._shots(stop)) >= self._plan.frames

    def _drop(self, stop: float) -> None:
        """Take a stop's frames back, so that it can be taken anew."""
        shots = self._shots(stop)
        if shots:
            self._recorder.drop(shots)
            self._live.ring.forget(stop)

    def _told(self, event: Event) -> Generator[Event, Action, None]:
        """Tell something that needs no answer; END is heard all the same."""
        if (yield event) is Action.END:
            raise Ended
