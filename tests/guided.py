"""For the tests of the guided run: a small simulated station, a keeper in memory, and hands that can be scripted."""

import tempfile
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np

from sweep.cameras import Settings
from sweep.cameras.simulated import SimulatedStation
from sweep.cameras.simulated_camera import SimulatedCamera, simulate
from sweep.capture import Action, Ask, Event, Live, Plan, Seen, conduct
from sweep.demo import SimulatedHand, demo_station, with_hand
from sweep.errors import CameraError
from sweep.frames import Pixels, Shot
from sweep.station import Patch, Station, Target

ADDRESS = "127.0.0.1"  # the one address at which the library's simulated camera can be served
STOPS = (2.0, 2.8, 4.0, 5.6)
PLAN = Plan(frames=3, darks=2)


@contextmanager
def address_to_itself() -> Iterator[None]:
    """Wait until no other test run on this machine serves a camera at ADDRESS."""
    import fcntl  # not on every system; nor is the library

    with (Path(tempfile.gettempdir()) / "aperture-sweep-gige.lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        yield


def small_station(**camera: object) -> Station:
    """Two targets in a small frame, four stops."""
    station = demo_station()
    targets = tuple(
        Target(
            name=name,
            depth_mm=depth_mm,
            patches=(
                Patch(kind="edge", region=(left, 14, 48, 56)),
                Patch(kind="edge", region=(left, 94, 56, 48)),
            ),
        )
        for name, depth_mm, left in (("tray floor", 6.0, 16), ("cap top", -4.0, 104))
    )
    lens = station.lens.model_copy(update={"stops": STOPS})
    own = station.camera.model_copy(update=camera)
    return station.model_copy(update={"lens": lens, "targets": targets, "camera": own})


def small_camera(station: Station, seed: int = 3, **changes: object) -> SimulatedCamera:
    """A camera over it, with whatever should be different."""
    rng = np.random.default_rng(seed)
    sim: SimulatedStation = replace(simulate(station, rng), **changes)
    return SimulatedCamera(station, sim, rng)


class MemoryKeeper:
    """Keeps frames in memory, as a recording does on disk."""

    def __init__(self, shots: Iterable[Shot] = ()) -> None:
        self.folder = Path("kept")
        self.frames: dict[str, Pixels] = {}
        self._shots = list(shots)
        self._number = 0

    @property
    def shots(self) -> Sequence[Shot]:
        return tuple(self._shots)

    def add(self, pixels: Pixels, shot: Shot) -> Shot:
        self._number += 1
        kept = replace(shot, file=f"{self._number}.png")
        self._shots.append(kept)
        self.frames[kept.file] = pixels
        return kept

    def drop(self, shots: Iterable[Shot]) -> None:
        gone = {shot.file for shot in shots}
        self._shots = [shot for shot in self._shots if shot.file not in gone]


class Run:
    """One guided run with a simulated hand; `user(event, events so far)` stands for the person at the screen."""

    def __init__(
        self,
        user: Callable[[Event, list[Event]], Action] = lambda event, events: Action.NONE,
        keeper: MemoryKeeper | None = None,
        camera: object | None = None,
        station: Station | None = None,
        hand: SimulatedHand | None = None,
        fixed_ms: float | None = None,
    ) -> None:
        self.station = station or small_station()
        self.camera = camera or small_camera(self.station)
        self.keeper = keeper or MemoryKeeper()
        self.hand = hand or SimulatedHand(self.camera, STOPS, slipped=True)
        self.events: list[Event] = []
        self._user = user
        self.live = Live(self.camera, self.station, fixed_ms)
        self.finished = conduct(self.live, self.keeper, self.station, PLAN, with_hand(self.hand, self._show))

    def _show(self, event: Event) -> Action:
        self.events.append(event)
        assert len(self.events) < 4000, "the run does not end"
        return self._user(event, self.events)

    def of(self, kind: type) -> list:
        return [event for event in self.events if isinstance(event, kind)]

    @property
    def asked(self) -> list[float | None]:
        return [event.stop for event in self.of(Ask)]

    @property
    def states(self) -> set[str]:
        return {event.view.state for event in self.of(Seen)}

    def shots(self, stop: float | None) -> list[Shot]:
        return [shot for shot in self.keeper.shots if shot.stop == stop]


class Unsteady:
    """A camera that loses its connection for some grabs, or that takes no settings."""

    def __init__(self, camera: SimulatedCamera, lost: range = range(0), settable: bool = True) -> None:
        self._camera, self._lost, self._settable = camera, lost, settable
        self.grabs = 0
        self.sets: list[float | None] = []

    def __getattr__(self, name: str) -> object:
        return getattr(self._camera, name)

    def grab(self, timeout_s: float) -> object:
        self.grabs += 1
        if self.grabs in self._lost:
            raise CameraError("The camera sends no picture any more.")
        return self._camera.grab(timeout_s)

    def set(self, *, exposure_ms: float | None = None, gain_db: float | None = None) -> Settings:
        self.sets.append(exposure_ms)
        if self._settable:
            return self._camera.set(exposure_ms=exposure_ms, gain_db=gain_db)
        return Settings(None, None, self._camera.set().at_s)
