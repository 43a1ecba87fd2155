"""One guided run of the tests' small station into the folder named; run as a program, so that it can be killed."""

import sys
from pathlib import Path

import tomlkit
from guided import STOPS, small_camera, small_station

from sweep.capture import Action
from sweep.demo import SimulatedHand, with_hand
from sweep.record import record
from sweep.station import Station


def station_text(station: Station) -> str:
    """The station as its file."""
    return tomlkit.dumps(station.model_dump(mode="json", exclude_unset=True))


if __name__ == "__main__":
    small = small_station()
    camera = small_camera(small)
    hand = SimulatedHand(camera, STOPS)
    record(camera, small, station_text(small), Path(sys.argv[1]), with_hand(hand, lambda event: Action.NONE))
