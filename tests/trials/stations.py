"""Random stations for the trials: the simulated draw, without those whose targets stand half way up to the lens."""

import numpy as np

from sweep.cameras.simulated import SimulatedStation
from sweep.cameras.simulated_draw import Kind, draw
from sweep.station import Layout, Station

DEEPEST = 0.3  # depth of a target as a part of its distance from the lens


def draw_station(
    rng: np.random.Generator, kind: Kind, layout: Layout, bit_depth: int
) -> tuple[Station, SimulatedStation]:
    """One random station and the truth behind it; drawn again while a target lies too deep to be one to inspect."""
    while True:
        station, sim = draw(rng, kind, layout, bit_depth)
        distance_mm = sim.lens.focal_length_mm * (1 + 1 / sim.lens.magnification)
        if all(abs(target.depth_mm) < DEEPEST * distance_mm for target in station.targets):
            return station, sim
