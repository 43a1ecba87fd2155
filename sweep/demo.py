"""The demo: a guided run at the simulated station, its ring turned by a simulated hand.

The invented scene: a lane that inspects vial caps. One camera looks down on the caps; what must be told apart lies
on the tray floor, on the cap's rim and on its top.
"""

from dataclasses import dataclass

import numpy as np

from sweep.cameras.simulated_camera import SimulatedCamera, simulate
from sweep.capture import Action, Ask, Begin, Event, Seen, Show
from sweep.station import Station, parse_station

DEMO_STATION = """\
# An invented station: a lane that inspects vial caps.
[station]
name = "Vial cap lane, simulated"

[lens]
focal_length_mm = 16.0
stops = [1.4, 2, 2.8, 4, 5.6, 8, 11, 16]

[camera]
source = "simulated"
pixel_pitch_um = 3.45
bit_depth = 12
layout = "mono"
black_level_dn = 64
exposure_step_ms = 0.01

[scene]
object_um_per_px = 58.0
wavelength_nm = 530
bandwidth_nm = 30

[[targets]]
name = "tray floor"
depth_mm = 10
patches = [
  { kind = "edge", region = [32, 28, 88, 116] },
  { kind = "edge", region = [32, 176, 116, 88] },
  { kind = "flat", region = [32, 296, 64, 64] },
]

[[targets]]
name = "cap rim"
depth_mm = 0
patches = [
  { kind = "edge", region = [232, 28, 88, 116] },
  { kind = "edge", region = [232, 176, 116, 88] },
  { kind = "flat", region = [232, 296, 64, 64] },
]

[[targets]]
name = "cap top"
depth_mm = -8
patches = [
  { kind = "edge", region = [432, 28, 88, 116] },
  { kind = "edge", region = [432, 176, 116, 88] },
  { kind = "flat", region = [432, 296, 64, 64] },
]

[need]
feature_um = 180
contrast = 0.50
level = 0.70
max_exposure_ms = 4.0
min_snr_db = 30.0
"""

REACTION_S = 0.4
TURN_S = 0.8
SLIP_AT = 4.0  # the stop at which the hand turns one mark too far, once


@dataclass
class SimulatedHand:
    """A hand that does what it is asked, on the second try where it slips."""

    camera: SimulatedCamera
    stops: tuple[float, ...]
    asked: float | None = None
    confirm: bool = False
    slipped: bool = False
    turning: bool = False

    def __call__(self, event: Event) -> Action:
        """Answer one event, as a person at the ring would."""
        match event:
            case Begin():
                return Action.TAKE
            case Ask(stop=None):
                self.camera.cap(True)
            case Ask(stop=float(stop), confirm=confirm):
                self.asked, self.confirm = stop, confirm
                self._turn(stop)
            case Seen(view=view) if self.confirm and view.state == "resting":
                self.confirm = False
                return Action.TAKE
            case Seen(view=view) if view.state == "turning":
                self.turning = False
            case Seen(view=view) if view.state in ("past", "between") and self.asked is not None and not self.turning:
                self._turn(self.asked)
            case _:
                pass
        return Action.NONE

    def _turn(self, stop: float) -> None:
        goal = stop
        if stop == SLIP_AT and not self.slipped and not self.confirm:  # at its word, a slip would go unseen
            self.slipped = True
            goal = self.stops[min(self.stops.index(stop) + 1, len(self.stops) - 1)]
        self.turning = True
        self.camera.turn(goal, after_s=REACTION_S, lasts_s=TURN_S)


def demo_station() -> Station:
    """The station of the demo."""
    return parse_station(DEMO_STATION, "the demo's station")


def demo_camera(seed: int) -> tuple[SimulatedCamera, SimulatedHand]:
    """The simulated camera of the demo, and the hand on its ring; the same for the same seed."""
    station, rng = demo_station(), np.random.default_rng(seed)
    camera = SimulatedCamera(station, simulate(station, rng), rng)
    return camera, SimulatedHand(camera, station.lens.stops)


def with_hand(hand: SimulatedHand, show: Show, *, begins: bool = True) -> Show:
    """A screen that is watched while the simulated hand does the work; the screen's own answers come first.

    begins: the hand also begins the run, which is else left to the screen.
    """

    def both(event: Event) -> Action:
        answer = show(event)
        done = Action.NONE if isinstance(event, Begin) and not begins else hand(event)
        return done if answer is Action.NONE else answer

    return both
